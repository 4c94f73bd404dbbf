"""The statistic taken apart: over some characteristics, given others, and along a combination.

References
----------
.. [1] R. L. Mason, N. D. Tracy and J. C. Young, "Decomposition of T2 for
   multivariate control chart interpretation", Journal of Quality Technology 27
   (1995) 99-108.
.. [2] A. C. Rencher and W. F. Christensen, Methods of Multivariate Analysis,
   3rd ed., Wiley 2012, section 5.9.
.. [3] R. A. Johnson and D. W. Wichern, Applied Multivariate Statistical
   Analysis, 6th ed., Prentice Hall 2007, result 5.3.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.stats import tails
from service.stats.arrays import Matrix, Vector
from service.stats.covariance import factor_covariance
from service.stats.location import LocationResult, mean_test


@dataclass(frozen=True, slots=True)
class PartialResult:
    """What some characteristics add to the statistic of others.

    Parameters
    ----------
    statistic : float
        Chi-square with q degrees of freedom where the covariance is known;
        else the partial T-squared ``(nu - r) (T2 - T2_r)/(nu + T2_r)`` of q
        characteristics given r others.
    scaled_statistic : float
        The statistic itself, or its F equivalent with q and nu - r - q + 1
        degrees of freedom.
    p_value, log10_p_value : float
        Upper tail, where the q have no mean difference that the r others do not explain.
    """

    statistic: float
    scaled_statistic: float
    p_value: float
    log10_p_value: float


def statistic_over(result: LocationResult, chosen: Sequence[int], alpha: float) -> LocationResult:
    """Return the same mean test over some of the characteristics.

    Parameters
    ----------
    result : LocationResult
        A mean test over p characteristics.
    chosen : sequence of int
        Indices of the characteristics to keep, at least one.
    alpha : float
        Significance level.
    """
    index = np.asarray(chosen)
    part = factor_covariance(result.covariance.matrix[np.ix_(index, index)], result.covariance.degrees_of_freedom)
    return mean_test(result.difference[index], part, result.effective_units, alpha)


def given(result: LocationResult, others: Sequence[int], alpha: float) -> PartialResult:
    """Test the remaining characteristics given some others.

    Parameters
    ----------
    result : LocationResult
        A mean test over p characteristics.
    others : sequence of int
        Indices of the r characteristics that are given, 1 <= r < p.
    alpha : float
        Significance level.

    Returns
    -------
    PartialResult
        Rencher and Christensen 2012, section 5.9.
    """
    base = statistic_over(result, others, alpha)
    added, r = result.statistic - base.statistic, base.law.dimension
    q, nu = result.law.dimension - r, result.law.degrees_of_freedom
    if result.law.is_chi_square:
        tail = tails.chi_square_tail(added, q)
        return PartialResult(added, added, tail.p_value, tail.log10_p_value)
    partial = (nu - r) * added / (nu + base.statistic)
    scaled = partial * (nu - r - q + 1) / (q * (nu - r))
    tail = tails.f_tail(scaled, q, nu - r - q + 1)
    return PartialResult(partial, scaled, tail.p_value, tail.log10_p_value)


def sequential_terms(result: LocationResult) -> Vector:
    """Return what each characteristic adds to those before it, shape (p,); they sum to the statistic."""
    whitened = result.covariance.whiten(result.difference)
    return np.asarray(result.effective_units * whitened * whitened)


def combination_intervals(result: LocationResult, weights: Matrix, alpha: float) -> tuple[Vector, Vector]:
    """Return simultaneous T-squared intervals of linear combinations of the mean difference.

    Parameters
    ----------
    result : LocationResult
        A mean test over p characteristics.
    weights : ndarray, shape (m, p)
        One combination a row, in reciprocal units of measurement.
    alpha : float
        Significance level; all combinations together are covered with ``1 - alpha``.

    Returns
    -------
    centres, half_widths : ndarray, shape (m,)
        Johnson and Wichern 2007, result 5.3.
    """
    lengths = np.linalg.norm((weights * result.covariance.scale) @ result.covariance.factor, axis=1)
    factor = math.sqrt(result.law.critical_value(alpha) / result.effective_units)
    return weights @ result.difference, factor * lengths
