"""Does a unit lie apart?  Squared distances against the specification, and within the batch.

References
----------
.. [1] N. D. Tracy, J. C. Young and R. L. Mason, "Multivariate control charts for
   individual observations", Journal of Quality Technology 24 (1992) 88-95.
.. [2] R. Gnanadesikan and J. R. Kettenring, "Robust estimates, residuals, and
   outlier detection with multiresponse data", Biometrics 28 (1972) 81-124.
.. [3] S. S. Wilks, "Multivariate statistical outliers", Sankhya A 25 (1963)
   407-426.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Protocol

import numpy as np
from scipy import special

from service.stats.arrays import Matrix, Vector
from service.stats.covariance import Covariance
from service.stats.laws import QuadraticLaw
from service.stats.moments import Moments
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
    """
    p, n = sigma0.dimension, moments.units
    if sigma0.degrees_of_freedom < p:
        return not_applicable(f"the reference covariance has fewer than {p} degrees of freedom")
    law = QuadraticLaw(p, sigma0.degrees_of_freedom)
    k = 1.0 if math.isinf(target_units) else target_units / (target_units + 1)
    squared = sigma0.squared_distances(moments.deviations)
    largest = float(squared.max())
    single = law.tail(k * largest).p_value
    limit = law.critical_value(-math.expm1(math.log1p(-level) / n)) / k
    detail = {"squared_distances": squared.tolist(), "limit": limit}
    units = tuple(int(i) for i in np.flatnonzero(squared >= limit))
    return ScreenStatistic(largest, -math.expm1(n * math.log1p(-single)), "exact", units=units, detail=detail)


def within_batch(moments: Moments, table: MaximumLaw | None, level: float) -> ScreenStatistic:
    """Look for units outlying within the batch.

    Parameters
    ----------
    moments : Moments
        Of n > p + 1 units.
    table : NullTable or None
        Exact null law of the largest distance at (n, p); Wilks' bound where None.
    level : float
        Level for the batch as a whole.

    Returns
    -------
    ScreenStatistic
        The largest ``D2 = (y - ybar)' S^-1 (y - ybar)``, which never exceeds ``(n-1)^2/n``.
    """
    n, p = moments.units, moments.dimension
    if n <= p + 1:
        return not_applicable(f"{n} units of {p} characteristics all lie equally far out; at least {p + 2} are needed")
    if moments.whitened is None:
        return not_applicable(str(moments.obstacle))
    squared = np.einsum("ij,ij->i", moments.whitened, moments.whitened)
    largest = float(squared.max())
    bound = bonferroni_of_maximum(largest, n, p)
    limit = bonferroni_limit(n, p, level) if table is None else table.critical_value("within-maximum", level)
    units = tuple(int(i) for i in np.flatnonzero(squared >= limit))
    detail = {"squared_distances": squared.tolist(), "limit": limit}
    if table is None:
        return ScreenStatistic(largest, bound, "asymptotic", units=units, detail=detail)
    p_value = table.upper("within-maximum", largest)
    return ScreenStatistic(largest, p_value, "monte-carlo", bound, units, detail)


class MaximumLaw(Protocol):
    """What the screen asks of a table of null laws."""

    def upper(self, name: str, observed: float) -> float:
        """Return the upper-tail p-value."""
        ...

    def critical_value(self, name: str, level: float) -> float:
        """Return the value beyond which the p-value is at most `level`."""
        ...


def maximum_of_many(whitened: Matrix) -> Mapping[str, Vector]:
    """Return the largest within-batch squared distance of many batches, shape (b,) from (b, n, p)."""
    return {"within-maximum": np.einsum("bij,bij->bi", whitened, whitened).max(axis=1)}


def bonferroni_of_maximum(largest: float, n: int, p: int) -> float:
    """Return Wilks' bound for the largest within-batch squared distance, at most 1.

    ``n D2/(n-1)^2`` of one unit is Beta(p/2, (n-p-1)/2) [2]_; the bound is exact
    where two units cannot both lie that far out.
    """
    share = min(n * largest / (n - 1) ** 2, 1.0)
    return min(1.0, n * float(special.betaincc(p / 2, (n - p - 1) / 2, share)))


def bonferroni_limit(n: int, p: int, level: float) -> float:
    """Return the squared distance that has `bonferroni_of_maximum` equal to `level`."""
    return float((n - 1) ** 2 / n * special.betainccinv(p / 2, (n - p - 1) / 2, level / n))
