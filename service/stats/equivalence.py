"""Is the mean close enough?  A three-way answer: close, departed, or not settled.

A difference that is not significant is no evidence of conformity.  Here the
burden is turned round: closeness has to be shown, and so has departure.

References
----------
.. [1] S. Wellek, Testing Statistical Hypotheses of Equivalence and
   Noninferiority, 2nd ed., Chapman & Hall/CRC 2010, chapter 8.
.. [2] R. L. Berger and J. C. Hsu, "Bioequivalence trials, intersection-union tests
   and equivalence confidence sets", Statistical Science 11 (1996) 283-319.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np

from service.stats import tails
from service.stats.arrays import Vector
from service.stats.laws import QuadraticLaw
from service.stats.location import LocationResult
from service.stats.multiplicity import holm
from service.stats.noncentral import ShiftedLaw
from service.stats.roots import increasing_root, upper_bracket


class Conclusion(StrEnum):
    """What an equivalence test shows."""

    CLOSE = "close"
    DEPARTED = "departed"
    INCONCLUSIVE = "inconclusive"


@dataclass(frozen=True, slots=True)
class EllipsoidResult:
    """Test of the Mahalanobis shift against the largest one that does not matter.

    Parameters
    ----------
    conclusion : Conclusion
        Close where the statistic is at or below `close_below`, departed where it is
        at or above `departed_above`.
    delta : float
        Largest Mahalanobis shift that does not matter.
    noncentrality : float
        ``k delta^2``.
    statistic : float
        ``T2`` (or chi-square).
    close_below, departed_above : float
        Quantiles alpha and 1 - alpha of the noncentral law, in units of `statistic`.
    closeness_p_value : float
        P(statistic <= observed) where the shift is delta: small shows closeness.
    departure_p_value : float
        P(statistic >= observed) where the shift is delta: small shows departure.
    """

    conclusion: Conclusion
    delta: float
    noncentrality: float
    statistic: float
    close_below: float
    departed_above: float
    closeness_p_value: float
    departure_p_value: float


@dataclass(frozen=True, slots=True, eq=False)
class BoxResult:
    """Test of each mean difference against its own tolerance.

    Parameters
    ----------
    conclusion : Conclusion
        Close where every ``1 - 2 alpha`` interval lies within its tolerance, departed
        where some simultaneous interval lies wholly outside.
    tolerance : ndarray, shape (p,)
        Largest differences that do not matter, either way, in units of measurement.
    closeness_half_width : ndarray, shape (p,)
        Of the ``1 - 2 alpha`` intervals about the differences, in units of measurement.
    departure_half_width : ndarray, shape (p,)
        Of the simultaneous ``1 - alpha`` intervals that the first of Holm's steps uses.
    closeness_p_values : ndarray, shape (p,)
        The larger one-sided p-value of each characteristic's two.
    departure_p_values : ndarray, shape (p,)
        Two-sided, for a mean at the nearer edge of its tolerance, adjusted by Holm.
    closeness_p_value, departure_p_value : float
        The largest closeness and the smallest departure p-value.
    """

    conclusion: Conclusion
    tolerance: Vector
    closeness_half_width: Vector
    departure_half_width: Vector
    closeness_p_values: Vector
    departure_p_values: Vector
    closeness_p_value: float
    departure_p_value: float


def equivalence_limits(law: QuadraticLaw, alpha: float, noncentrality: float) -> tuple[float, float]:
    """Return the statistic up to which closeness, and from which departure, is shown.

    Parameters
    ----------
    law : QuadraticLaw
        Null law of the mean test.
    alpha : float
        Level of each of the two tests, in (0, 0.5).
    noncentrality : float
        ``k delta^2``, positive.

    Returns
    -------
    tuple of float
        Quantiles alpha and 1 - alpha of the noncentral law, in units of ``T2``.
    """
    shifted = ShiftedLaw(law, noncentrality)
    return shifted.quantile(alpha), shifted.quantile(1.0 - alpha)


def ellipsoid_equivalence(result: LocationResult, delta: float, alpha: float) -> EllipsoidResult:
    """Test whether the mean's Mahalanobis shift is below delta, or above it.

    Parameters
    ----------
    result : LocationResult
        A mean test; its statistic is judged by the noncentral law at delta.
    delta : float
        Largest Mahalanobis shift that does not matter, positive.
    alpha : float
        Level of each of the two tests, in (0, 0.5).

    Returns
    -------
    EllipsoidResult
        Wellek 2010, chapter 8; for a known covariance the noncentral chi-square in
        place of F.
    """
    noncentrality = result.effective_units * delta * delta
    below, above = equivalence_limits(result.law, alpha, noncentrality)
    shifted = ShiftedLaw(result.law, noncentrality)
    return EllipsoidResult(
        conclusion=_conclude(result.statistic <= below, result.statistic >= above),
        delta=delta,
        noncentrality=noncentrality,
        statistic=result.statistic,
        close_below=below,
        departed_above=above,
        closeness_p_value=shifted.lower(result.statistic),
        departure_p_value=shifted.upper(result.statistic),
    )


def box_equivalence(result: LocationResult, tolerance: Vector, alpha: float) -> BoxResult:
    """Test whether every mean difference is within its tolerance, or some is beyond.

    Parameters
    ----------
    result : LocationResult
        A mean test; only its differences, standard deviations and degrees of freedom count.
    tolerance : ndarray, shape (p,)
        Largest differences that do not matter, positive, in units of measurement.
    alpha : float
        Level of each of the two questions, in (0, 0.5).

    Returns
    -------
    BoxResult
        Intersection-union of two one-sided tests for each characteristic (Berger and
        Hsu 1996, section 3), which needs no adjustment; departure adjusted by Holm.
    """
    dof, p = result.law.degrees_of_freedom, result.law.dimension
    error = result.covariance.scale / math.sqrt(result.effective_units)
    room = (tolerance - np.abs(result.difference)) / error
    closeness = tails.t_upper(room, dof)
    departure = holm(np.minimum(2.0 * tails.t_upper(-room, dof), 1.0))
    largest, smallest = float(closeness.max()), float(departure.min())
    return BoxResult(
        conclusion=_conclude(largest <= alpha, smallest <= alpha),
        tolerance=tolerance,
        closeness_half_width=tails.t_critical(2.0 * alpha, dof) * error,
        departure_half_width=tails.t_critical(alpha / p, dof) * error,
        closeness_p_values=closeness,
        departure_p_values=departure,
        closeness_p_value=largest,
        departure_p_value=smallest,
    )


def shift_interval(result: LocationResult, alpha: float) -> tuple[float, float]:
    """Return one-sided confidence bounds of the Mahalanobis shift of the mean.

    Parameters
    ----------
    result : LocationResult
        A mean test.
    alpha : float
        Level of each bound.

    Returns
    -------
    tuple of float
        Lower and upper bound, each with confidence ``1 - alpha``.  The ellipsoid test
        concludes close where the upper bound is at most delta, departed where the
        lower one is at least delta.
    """
    law, statistic = result.law, result.statistic

    def above(root: float) -> float:
        return alpha - ShiftedLaw(law, root * root).lower(statistic)

    def below(root: float) -> float:
        return ShiftedLaw(law, root * root).upper(statistic) - alpha

    start = math.sqrt(statistic + law.dimension)
    low = increasing_root(below, 0.0, upper_bracket(below, start))
    high = increasing_root(above, 0.0, upper_bracket(above, start))
    return low / math.sqrt(result.effective_units), high / math.sqrt(result.effective_units)


def _conclude(close: bool, departed: bool) -> Conclusion:
    if close:
        return Conclusion.CLOSE
    return Conclusion.DEPARTED if departed else Conclusion.INCONCLUSIVE
