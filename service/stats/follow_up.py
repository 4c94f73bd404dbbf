"""What moved: each characteristic's own difference, beside the joint test.

Computed whether or not the joint test rejects.  The unconditional term of a
characteristic is the statistic of it alone; its conditional term is what it
adds to the statistic of all the others.  A large conditional beside a small
unconditional term means that a relation between characteristics broke, not a
level.

References
----------
.. [1] R. L. Mason, N. D. Tracy and J. C. Young, "Decomposition of T2 for
   multivariate control chart interpretation", Journal of Quality Technology 27
   (1995) 99-108.
.. [2] R. A. Johnson and D. W. Wichern, Applied Multivariate Statistical
   Analysis, 6th ed., Prentice Hall 2007, section 5.4, equations 5-24 and 5-29.
.. [3] A. C. Rencher and W. F. Christensen, Methods of Multivariate Analysis,
   3rd ed., Wiley 2012, section 5.9: the F law of a conditional term.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property, lru_cache
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.linalg import lapack

from service.stats import tails
from service.stats.arrays import Matrix, Vector
from service.stats.laws import QuadraticLaw
from service.stats.location import LocationResult
from service.stats.multiplicity import holm


@dataclass(frozen=True, eq=False)
class FollowUp:
    """The mean difference of each characteristic, shapes (p,) throughout.

    An interval of a mean is the target plus the interval of its difference,
    ``difference -/+ half-width``.

    Parameters
    ----------
    result : LocationResult
        The mean test that is followed up.
    difference : ndarray
        ``d = xbar - mu0``, in units of measurement.
    standard_error : ndarray
        ``sqrt(s_jj / k)``, in units of measurement.
    ratio : ndarray
        ``d_j`` in standard errors: standard normal where the covariance is known,
        else Student's t with nu degrees of freedom, where the mean agrees.
    p_value : ndarray
        Two-sided, of each characteristic alone.
    holm_p_value : ndarray
        Adjusted for the p characteristics.
    t_squared_half_width : ndarray
        Of the simultaneous T-squared (Scheffe) interval at level ``1 - alpha``.
    bonferroni_half_width : ndarray
        Of the simultaneous Bonferroni interval at level ``1 - alpha``.
    separate_half_width : ndarray
        Of the separate interval at level ``1 - alpha``, with no regard to the others.
    term_alone : ndarray
        ``k d_j^2 / s_jj``, the statistic of the characteristic alone.
    term_given_others : ndarray
        ``k (Sigma^-1 d)_j^2 / (Sigma^-1)_jj``, what it adds to the others' statistic.
    """

    result: LocationResult
    difference: Vector
    standard_error: Vector
    ratio: Vector
    p_value: Vector
    holm_p_value: Vector
    t_squared_half_width: Vector
    bonferroni_half_width: Vector
    separate_half_width: Vector
    term_alone: Vector
    term_given_others: Vector

    @cached_property
    def log10_p_value(self) -> Vector:
        """Decimal logarithm of `p_value`, also where that underflows."""
        return tails.t_two_sided_log10(self.ratio, self.result.law.degrees_of_freedom)

    @cached_property
    def p_value_given_others(self) -> Vector:
        """P-value of each conditional term.

        It is chi-square(1) where the covariance is known, else
        ``term (nu - p + 1)/(nu + T2 of the others)`` is F(1, nu - p + 1); Rencher and Christensen
        2012, section 5.9.
        """
        return _conditional_p_values(self.result, self.term_given_others)


@dataclass(frozen=True, slots=True, eq=False)
class OneAtATime:
    """What checking each characteristic by itself would have concluded.

    Parameters
    ----------
    rejects, rejects_bonferroni : ndarray of bool, shape (p,)
        Which separate tests reject at alpha, and at alpha/p.
    any_rejects, any_rejects_bonferroni : bool
        Whether one of them does.
    family_wise_error, family_wise_error_bonferroni : float
        Probability that some separate test rejects where every mean agrees, were
        the characteristics independent: ``1 - (1 - a)^p`` with a = alpha and alpha/p.
    """

    rejects: npt.NDArray[np.bool_]
    rejects_bonferroni: npt.NDArray[np.bool_]
    any_rejects: bool
    any_rejects_bonferroni: bool
    family_wise_error: float
    family_wise_error_bonferroni: float


class _Widths(NamedTuple):
    """Standard errors and half-widths, which the mean itself does not change."""

    standard_error: Vector
    t_squared: Vector
    bonferroni: Vector
    separate: Vector


def follow_up(result: LocationResult, alpha: float) -> FollowUp:
    """Return each characteristic's difference with its tests, intervals and terms.

    Parameters
    ----------
    result : LocationResult
        A mean test.
    alpha : float
        Significance level; intervals have (joint) confidence ``1 - alpha``.

    Returns
    -------
    FollowUp
        Johnson and Wichern 2007, equations 5-24 (T-squared) and 5-29 (Bonferroni).
    """
    dof = result.law.degrees_of_freedom
    key = ("widths", result.law, result.effective_units, alpha)
    widths = result.covariance.keep(key, lambda: _widths(result, alpha))
    ratio = result.difference / widths.standard_error
    p_value = tails.t_two_sided(ratio, dof)
    return FollowUp(
        result=result,
        difference=result.difference,
        standard_error=widths.standard_error,
        ratio=ratio,
        p_value=p_value,
        holm_p_value=holm(p_value),
        t_squared_half_width=widths.t_squared,
        bonferroni_half_width=widths.bonferroni,
        separate_half_width=widths.separate,
        term_alone=ratio * ratio,
        term_given_others=_terms_given_others(result),
    )


def one_at_a_time(p_values: Vector, alpha: float) -> OneAtATime:
    """Return what the separate tests conclude at alpha and at alpha/p.

    Parameters
    ----------
    p_values : ndarray, shape (p,)
        Unadjusted, one for each characteristic.
    alpha : float
        Significance level.

    Returns
    -------
    OneAtATime
        With the family-wise error that independence would give;
        `service.stats.rectangle.family_wise_error` gives it under the
        specification's own correlations.
    """
    p = p_values.shape[0]
    rejects, strict = p_values <= alpha, p_values <= alpha / p
    return OneAtATime(
        rejects=rejects,
        rejects_bonferroni=strict,
        any_rejects=bool(rejects.any()),
        any_rejects_bonferroni=bool(strict.any()),
        family_wise_error=-math.expm1(p * math.log1p(-alpha)),
        family_wise_error_bonferroni=-math.expm1(p * math.log1p(-alpha / p)),
    )


def _terms_given_others(result: LocationResult) -> Vector:
    """Return ``k (R^-1 z)_j^2 / (R^-1)_jj``; the scale of measurement cancels."""
    factor = result.covariance.factor
    diagonal = result.covariance.keep("inverse diagonal", lambda: _inverse_diagonal(factor))
    solved = result.direction * result.covariance.scale * result.mahalanobis_distance
    return np.asarray(result.effective_units * solved * solved / diagonal)


def _inverse_diagonal(factor: Matrix) -> Vector:
    """Return (R^-1)_jj, the squared length of column j of L^-1, as R^-1 = L^-T L^-1."""
    inverse_factor, _ = lapack.dtrtri(factor, lower=1)
    return np.asarray(np.einsum("ij,ij->j", inverse_factor, inverse_factor))


def _conditional_p_values(result: LocationResult, terms: Vector) -> Vector:
    law = result.law
    if law.is_chi_square:
        return tails.t_two_sided(np.sqrt(terms), math.inf)
    dof = law.degrees_of_freedom - law.dimension + 1
    others = np.maximum(result.statistic - terms, 0.0)
    return tails.t_two_sided(np.sqrt(terms * dof / (law.degrees_of_freedom + others)), dof)


def _widths(result: LocationResult, alpha: float) -> _Widths:
    error = result.covariance.scale / math.sqrt(result.effective_units)
    t_squared, bonferroni, separate = _multipliers(result.law, alpha)
    return _Widths(error, t_squared * error, bonferroni * error, separate * error)


@lru_cache(maxsize=1024)
def _multipliers(law: QuadraticLaw, alpha: float) -> tuple[float, float, float]:
    """Return the half-widths of the three intervals, in standard errors."""
    dof = law.degrees_of_freedom
    bonferroni = tails.t_critical(alpha / law.dimension, dof)
    return math.sqrt(law.critical_value(alpha)), bonferroni, tails.t_critical(alpha, dof)
