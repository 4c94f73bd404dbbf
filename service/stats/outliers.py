"""Does a unit lie apart?  Squared distances against the specification, and within the batch.

Units are suspected here, never removed.

References
----------
.. [1] N. D. Tracy, J. C. Young and R. L. Mason, "Multivariate control charts for
   individual observations", Journal of Quality Technology 24 (1992) 88-95.
.. [2] R. Gnanadesikan and J. R. Kettenring, "Robust estimates, residuals, and
   outlier detection with multiresponse data", Biometrics 28 (1972) 81-124.
.. [3] S. S. Wilks, "Multivariate statistical outliers", Sankhya A 25 (1963)
   407-426.
.. [4] C. Caroni and P. Prescott, "Sequential application of Wilks's multivariate
   outlier test", Applied Statistics 41 (1992) 355-364.
"""

from __future__ import annotations

import math
from typing import Protocol

import numpy as np
from scipy import special

from service.stats.covariance import Covariance
from service.stats.deletion import MAXIMUM, SEQUENTIAL, Stages, delete_in_turn, most_deleted
from service.stats.laws import QuadraticLaw, quadratic_law
from service.stats.moments import Moments, sample_moments
from service.stats.screen import ScreenStatistic, not_applicable


def against_specification(
    moments: Moments, sigma0: Covariance, level: float, target_units: float = math.inf
) -> ScreenStatistic:
    """Look for units outlying against the specification.

    Parameters
    ----------
    moments : Moments
        Of n units about the target.
    sigma0 : Covariance
        Reference covariance, known or with nu degrees of freedom.
    level : float
        Level for the batch as a whole, shared among its units by Sidak's rule.
    target_units : float, optional
        Units m behind an estimated target.

    Returns
    -------
    ScreenStatistic
        The largest ``D2 = (y - mu0)' Sigma0^-1 (y - mu0)``.  Each is chi-square(p), or
        ``D2 m/(m+1) (nu-p+1)/(nu p)`` is F(p, nu-p+1) [1]_; p-value ``1 - (1 - p_i)^n``.
        That is exact for a known covariance and a fixed target.  Where either is
        estimated, units share its error and the p-value is at most too large: given the
        estimate the distances are independent, and a mean of nth powers is no less than
        the nth power of the mean.
    """
    p, n = sigma0.dimension, moments.units
    if sigma0.degrees_of_freedom < p:
        return not_applicable(f"the reference covariance has fewer than {p} degrees of freedom")
    law = quadratic_law(p, sigma0.degrees_of_freedom)
    k = 1.0 if math.isinf(target_units) else target_units / (target_units + 1)
    squared = sigma0.squared_distances(moments.deviations)
    largest = float(squared.max())
    single = law.tail(k * largest).p_value
    limit = law.critical_value(-math.expm1(math.log1p(-level) / n)) / k
    detail = {"squared_distances": squared.tolist(), "limit": limit}
    units = tuple(int(i) for i in np.flatnonzero(squared >= limit)) if largest >= limit else ()
    return ScreenStatistic(largest, sidak(single, n), "exact", units=units, detail=detail)


def sidak(single: float, n: int) -> float:
    """Return ``1 - (1 - single)^n``, the chance that any of n independent p-values is as small."""
    return 1.0 if single >= 1 else -math.expm1(n * math.log1p(-single))


class MaximumLaw(Protocol):
    """What the screen asks of a table of null laws."""

    def upper(self, name: str, observed: float) -> float:
        """Return the upper-tail p-value."""
        ...

    def critical_value(self, name: str, level: float) -> float:
        """Return the value beyond which the p-value is at most `level`."""
        ...


def within_batch(moments: Moments, table: MaximumLaw | None, level: float) -> ScreenStatistic:
    """Look for units outlying within the batch, a group that hides itself included.

    The most outlying unit is deleted ``floor(n/10) + 1`` times, at most 21, each stage
    measuring the units that remain.  Every stage has Wilks' p-value [3]_; the
    statistic is the strongest evidence of any stage, referred to its own null law, so
    that looking more than once costs no level.  All units up to the last significant
    stage are suspected, those of earlier stages that were masked too [4]_, unless they
    turn out not to lie apart from the units that remain.

    Parameters
    ----------
    moments : Moments
        Of n > p + 1 units.
    table : NullTable or None
        Exact null laws at (n, p); Bonferroni's bound over units and stages where None.
    level : float
        Level for the batch as a whole.

    Returns
    -------
    ScreenStatistic
        ``-log10`` of the smallest Wilks p-value.  In detail: the squared distances
        ``D2 = (y - ybar)' S^-1 (y - ybar)``, which never exceed ``(n-1)^2/n``; the `limit`
        beyond which a single one is significant; the largest with its p-value; and the stages.
    """
    n, p = moments.units, moments.dimension
    if n <= p + 1:
        return not_applicable(f"{n} units of {p} characteristics all lie equally far out; at least {p + 2} are needed")
    if moments.whitened is None or moments.squared_distances is None:
        return not_applicable(str(moments.obstacle))
    squared = moments.squared_distances
    stages = delete_in_turn(moments.whitened, squared)
    p_value = _p_value_of(stages.strongest, stages.size, table)
    units = _suspected(moments, stages, table, level) if p_value <= level else ()
    detail = {
        "squared_distances": squared.tolist(),
        "limit": _limit(n, p, level, table),
        "stages": stages.to_list(),
    }
    return ScreenStatistic(
        stages.strongest,
        p_value,
        "asymptotic" if table is None else "monte-carlo",
        _p_value_of(stages.strongest, stages.size, None),
        units,
        detail,
    )


def _p_value_of(evidence: float, stages: int, table: MaximumLaw | None) -> float:
    """Return the p-value of the strongest evidence, by its table and by Bonferroni's bound over stages."""
    bound = min(1.0, stages * 10**-evidence)
    # A table cannot speak below 1/(draws + 1); there the bound can.
    return bound if table is None else min(bound, table.upper(SEQUENTIAL, evidence))


def _suspected(moments: Moments, stages: Stages, table: MaximumLaw | None, level: float) -> tuple[int, ...]:
    """Return the units deleted up to the last stage that is significant by itself, those of them that are far out."""
    last = 1
    for s in range(stages.size, 1, -1):
        if _p_value_of(float(stages.evidence[s - 1]), stages.size, table) <= level:
            last = s
            break
    return _confirmed(moments, list(stages.units[:last]), level)


def _confirmed(moments: Moments, deleted: list[int], level: float) -> tuple[int, ...]:
    """Return the deleted units that lie apart from those that remain.

    A sound unit may be deleted first, while a group still hides itself.  Each is taken as a new
    observation beside the m units that remain: ``D2 m/(m+1) (m-p)/(p(m-1))`` is F(p, m-p) [1]_,
    at level/n; the farthest always stays.
    """
    kept = np.delete(moments.deviations, deleted, axis=0)
    rest = sample_moments(kept, kept[0])
    if rest.covariance is None:
        return tuple(sorted(deleted))
    m = rest.units
    squared = rest.covariance.squared_distances(moments.deviations[deleted] - kept[0] - rest.difference)
    limit = QuadraticLaw(rest.dimension, m - 1.0).critical_value(level / moments.units) * (m + 1) / m
    limit = min(limit, float(squared.max()))
    return tuple(sorted(unit for unit, distance in zip(deleted, squared, strict=True) if distance >= limit))


def _limit(n: int, p: int, level: float, table: MaximumLaw | None) -> float:
    """Return the squared distance beyond which one unit is significant, had it been the only one to stand out."""
    stages = most_deleted(n, p)
    evidence = -math.log10(level / stages)
    if table is not None:
        evidence = min(evidence, table.critical_value(SEQUENTIAL, level))
    return maximum_limit(n, p, 10**-evidence)


def maximum_p_value(largest: float, n: int, p: int, table: MaximumLaw | None = None) -> float:
    """Return the p-value of the largest squared distance within a batch.

    Parameters
    ----------
    largest : float
        Largest of the n squared distances.
    n, p : int
        Units and characteristics.
    table : NullTable, optional
        Exact null laws at (n, p).

    Returns
    -------
    float
        Wilks' bound ``n P(Beta(p/2, (n-p-1)/2) > n D2/(n-1)^2)`` [2]_ [3]_, or the table's
        p-value where that is smaller.  The bound is exact where two units cannot both lie that
        far out: for p = 1 from ``D2 = (n-1)/2`` on.
    """
    share = min(n * largest / (n - 1) ** 2, 1.0)
    bound = min(1.0, n * float(special.betaincc(p / 2, (n - p - 1) / 2, share)))
    return bound if table is None else min(bound, table.upper(MAXIMUM, largest))


def maximum_limit(n: int, p: int, level: float) -> float:
    """Return the squared distance that has Wilks' bound equal to `level`; Wilks 1963 [3]_."""
    return float((n - 1) ** 2 / n * special.betainccinv(p / 2, (n - p - 1) / 2, level / n))
