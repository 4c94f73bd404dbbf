"""Which units lie apart from the bulk of the batch, however many they are.

The minimum covariance determinant measures distances with the units that lie
closest together, so that up to ``n - h`` outlying units, nearly half, cannot
hide one another.

References
----------
.. [1] M. Hubert, P. J. Rousseeuw and T. Verdonck, "A deterministic algorithm for
   robust location and scatter", Journal of Computational and Graphical
   Statistics 21 (2012) 618-637.
.. [2] C. Croux and G. Haesbroeck, "Influence function and efficiency of the
   minimum covariance determinant scatter matrix estimator", Journal of
   Multivariate Analysis 71 (1999) 161-190.
.. [3] G. Pison, S. Van Aelst and G. Willems, "Small sample corrections for LTS and
   MCD", Metrika 55 (2002) 111-123.
.. [4] J. Hardin and D. M. Rocke, "The distribution of robust distances", Journal of
   Computational and Graphical Statistics 14 (2005) 928-946.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from service.errors import IllConditionedError, NotPositiveDefiniteError
from service.stats import mcd, robust_laws
from service.stats.arrays import Matrix, Vector
from service.stats.covariance import Covariance, factor_covariance
from service.stats.moments import Moments
from service.stats.robust_laws import reweight
from service.stats.screen import ScreenStatistic, not_applicable
from service.stats.starts import robust_scale

MAXIMUM = "robust-maximum"
"""Name of the null law of the largest reweighted squared distance."""

_FAR = 1e300
FEWEST_UNITS_EACH = 5
"""Units for each characteristic below which half of them say too little about a covariance."""


@dataclass(frozen=True, slots=True, eq=False)
class RobustEstimate:
    """Location and scatter of the bulk of a batch.

    Parameters
    ----------
    members : ndarray of int, shape (h,)
        Units of the subset of smallest covariance determinant, from 0.
    exact : bool
        Whether all subsets were tried; else no better one was found from six fixed beginnings.
    raw_centre, raw_covariance : ndarray, shapes (p,) and (p, p)
        Mean and covariance of the subset, made consistent [2]_ and corrected for few units [3]_.
    raw_squared_distances : ndarray, shape (n,)
        Under the raw estimates.
    weights : ndarray of bool, shape (n,)
        Units whose raw squared distance is at most the 0.975 quantile of chi-square(p).
    centre : ndarray, shape (p,)
        Mean of the units with weight.
    covariance : Covariance
        Of the units with weight, made consistent and corrected.
    squared_distances : ndarray, shape (n,)
        Under the reweighted estimates.
    """

    members: mcd.Indices
    exact: bool
    raw_centre: Vector
    raw_covariance: Matrix
    raw_squared_distances: Vector
    weights: np.ndarray[tuple[int], np.dtype[np.bool_]]
    centre: Vector
    covariance: Covariance
    squared_distances: Vector


class MaximumLaw(Protocol):
    """What the screen asks of a table of null laws."""

    def upper(self, name: str, observed: float) -> float:
        """Return the upper-tail p-value."""
        ...

    def critical_value(self, name: str, level: float) -> float:
        """Return the value beyond which the p-value is at most `level`."""
        ...


def robust_estimate(rows: Matrix) -> RobustEstimate:
    """Return the reweighted minimum covariance determinant estimate.

    All subsets of ``h = floor((n + p + 1)/2)`` units are tried where there are at most 100,000, and
    for one characteristic always; else the deterministic algorithm [1]_, its result improved by
    exchanges, which does not prove that no better subset exists.  It commutes with
    changes of origin and of units of measurement, and where `exact` with every affine map.

    Parameters
    ----------
    rows : ndarray, shape (n, p)
        n > p units, finite.

    Returns
    -------
    RobustEstimate
        The same for the same rows, always.

    Raises
    ------
    NotPositiveDefiniteError
        Where half the values of a characteristic are alike, or h units lie in a plane.
    IllConditionedError
        Where h units nearly lie in a plane.
    """
    n, p = rows.shape
    middle = np.median(rows, axis=0)
    scale = robust_scale(rows)
    if not (scale > 0).all():
        raise NotPositiveDefiniteError("about half the values of a characteristic are alike")
    z = ((rows - middle) / scale)[None]
    exact = mcd.all_can_be_tried(n, p)
    subsets = mcd.exhaustive(z) if exact else mcd.deterministic(z)
    # Refuses half the units in a plane before anything divides by their determinant.
    factor_covariance(subsets.scatter[0])
    again = reweight(z, subsets)
    unscaled = np.outer(scale, scale)
    return RobustEstimate(
        members=subsets.members[0],
        exact=exact,
        raw_centre=middle + scale * subsets.centre[0],
        raw_covariance=again.raw_scatter[0] * unscaled,
        raw_squared_distances=again.raw_squared[0],
        weights=again.weights[0],
        centre=middle + scale * again.centre[0],
        covariance=factor_covariance(again.scatter[0] * unscaled),
        squared_distances=again.squared[0],
    )


def maxima_of_many(batches: Matrix) -> Mapping[str, Vector]:
    """Return the largest reweighted squared distance of many batches.

    Parameters
    ----------
    batches : ndarray, shape (b, n, p)
        Drawn from a continuous law.

    Returns
    -------
    mapping of str to ndarray, shape (b,)
        ``robust-maximum``.  Where `robust_estimate` tries all subsets, a search from
        many beginnings stands in, which misses the best subset about once in a hundred times.
    """
    n, p = batches.shape[1:]
    z = (batches - np.median(batches, axis=1, keepdims=True)) / robust_scale(batches)[:, None, :]
    search = mcd.searched if mcd.all_can_be_tried(n, p) else mcd.deterministic
    return {MAXIMUM: reweight(z, search(z)).squared.max(axis=1)}


def outlying(moments: Moments, table: MaximumLaw | None, level: float) -> ScreenStatistic:
    """Look for units apart from the bulk of the batch.

    Parameters
    ----------
    moments : Moments
        Of n >= 5p units.
    table : NullTable or None
        Law of ``robust-maximum`` at (n, p); where None, or where it has too few draws for
        `level`, the F law of Hardin and Rocke [4]_ with Sidak's rule over the units.
    level : float
        Level for the batch as a whole.

    Returns
    -------
    ScreenStatistic
        The largest reweighted squared distance, or with the F law the largest raw one.  In
        detail: both kinds of squared distances, `exact`, `limit` and the units of the subset.
    """
    n, p = moments.units, moments.dimension
    if n < FEWEST_UNITS_EACH * p:
        return not_applicable(f"robust distances of {p} characteristics need {FEWEST_UNITS_EACH * p} units")
    try:
        estimate = robust_estimate(moments.deviations)
    except (NotPositiveDefiniteError, IllConditionedError) as error:
        return not_applicable(error.detail)
    if table is not None and table.upper(MAXIMUM, _FAR) <= level:
        return _by_table(estimate, table, level)
    return _by_f_law(estimate, level)


def _by_table(estimate: RobustEstimate, table: MaximumLaw, level: float) -> ScreenStatistic:
    squared = estimate.squared_distances
    largest = float(squared.max())
    bound = table.critical_value(MAXIMUM, level)
    return ScreenStatistic(
        largest,
        table.upper(MAXIMUM, largest),
        "monte-carlo",
        units=_beyond(squared, bound),
        detail=_detail(estimate, bound),
    )


def _by_f_law(estimate: RobustEstimate, level: float) -> ScreenStatistic:
    squared = estimate.raw_squared_distances
    n, p = squared.size, estimate.centre.size
    law = robust_laws.hardin_rocke(n, p)
    if law.denominator <= 0:
        return not_applicable(f"no law of robust distances is known for {n} units of {p} characteristics")
    largest = float(squared.max())
    bound = law.limit(level)
    return ScreenStatistic(
        largest, law.p_value(largest), "asymptotic", units=_beyond(squared, bound), detail=_detail(estimate, bound)
    )


def _beyond(squared: Vector, limit: float) -> tuple[int, ...]:
    return tuple(int(i) for i in np.flatnonzero(squared > limit))


def _detail(estimate: RobustEstimate, limit: float) -> dict[str, object]:
    return {
        "squared_distances": estimate.squared_distances.tolist(),
        "raw_squared_distances": estimate.raw_squared_distances.tolist(),
        "limit": limit,
        "exact": estimate.exact,
        "subset": estimate.members.tolist(),
    }
