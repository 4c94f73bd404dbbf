"""What a mean test can find: power, sample size, smallest shift, operating characteristic.

All of it depends on the true mean through its Mahalanobis shift alone,
``delta = sqrt((mu - mu0)' Sigma^-1 (mu - mu0))``: the noncentrality is ``k delta^2``.

References
----------
.. [1] T. W. Anderson, An Introduction to Multivariate Statistical Analysis,
   3rd ed., Wiley 2003, sections 3.3.3 and 5.2.2.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
import numpy.typing as npt

from service.stats.arrays import Vector
from service.stats.covariance import Covariance
from service.stats.laws import QuadraticLaw
from service.stats.location import effective_units
from service.stats.noncentral import ShiftedLaw
from service.stats.roots import increasing_root, upper_bracket

MOST_UNITS = 1_000_000
"""No plan asks for more units than this."""

CovarianceKind = Literal["known", "reference", "pooled", "batch"]


@dataclass(frozen=True, slots=True)
class Plan:
    """A mean test before its data: all that its power depends on, but for n and the shift.

    Parameters
    ----------
    covariance : {"known", "reference", "pooled", "batch"}
        Where the covariance of the test comes from.
    dimension : int
        Number p of characteristics.
    alpha : float
        Significance level, in (0, 1).
    degrees_of_freedom : float, optional
        Degrees of freedom nu of the reference covariance; used by "reference" and "pooled".
    target_units : float, optional
        Units m behind an estimated target; infinite for a fixed requirement.
    """

    covariance: CovarianceKind
    dimension: int
    alpha: float
    degrees_of_freedom: float = math.inf
    target_units: float = math.inf

    def law(self, n: int) -> QuadraticLaw:
        """Return the null law of the test with n units.

        Raises
        ------
        TooFewUnitsError
            Where n units, with the reference, give fewer than p degrees of freedom.
        """
        dof = {
            "known": math.inf,
            "reference": self.degrees_of_freedom,
            "pooled": self.degrees_of_freedom + n - 1,
            "batch": n - 1.0,
        }[self.covariance]
        return QuadraticLaw(self.dimension, dof)

    def effective_units(self, n: int) -> float:
        """Return the factor k of the quadratic form with n units."""
        return effective_units(n, self.target_units)

    def fewest_units(self) -> int:
        """Return the smallest n for which the test exists."""
        if self.covariance == "batch":
            return self.dimension + 1
        if self.covariance == "pooled":
            return max(1, math.ceil(self.dimension + 1 - self.degrees_of_freedom))
        return 1


def shift_of(vector: Vector, covariance: Covariance) -> float:
    """Return the Mahalanobis shift of a mean that is off its target by a vector.

    Parameters
    ----------
    vector : ndarray, shape (p,)
        ``mu - mu0``, in units of measurement.
    covariance : Covariance
        Covariance of a single unit.

    Returns
    -------
    float
        ``sqrt(v' Sigma^-1 v)``, in standard deviations of a single unit.
    """
    return math.sqrt(float(covariance.squared_distances(vector[None, :])[0]))


def power(law: QuadraticLaw, alpha: float, noncentrality: float) -> float:
    """Return the probability that a mean test rejects.

    Parameters
    ----------
    law : QuadraticLaw
        Null law of the test.
    alpha : float
        Significance level.
    noncentrality : float
        ``k delta^2``.

    Returns
    -------
    float
        Upper tail of the noncentral law at the critical value, right to 1e-10 absolute.
    """
    return ShiftedLaw(law, noncentrality).upper(_critical_value(law, alpha))


@lru_cache(maxsize=4096)
def noncentrality_for(law: QuadraticLaw, alpha: float, wanted: float) -> float:
    """Return the noncentrality at which a mean test rejects with probability `wanted`.

    Parameters
    ----------
    law : QuadraticLaw
        Null law of the test.
    alpha : float
        Significance level.
    wanted : float
        Power, in (0, 1).

    Returns
    -------
    float
        0 where `wanted` is not above `alpha`.
    """
    if wanted <= alpha:
        return 0.0

    # Both sides of the law are compared on the side that is small.
    def excess(root: float) -> float:
        shifted = ShiftedLaw(law, root * root)
        critical = _critical_value(law, alpha)
        return shifted.upper(critical) - wanted if wanted <= 0.5 else 1.0 - wanted - shifted.lower(critical)

    return increasing_root(excess, 0.0, upper_bracket(excess, math.sqrt(law.dimension + 8.0))) ** 2


def smallest_shift(law: QuadraticLaw, alpha: float, k: float, wanted: float) -> float:
    """Return the smallest Mahalanobis shift that a mean test finds with probability `wanted`.

    Parameters
    ----------
    law : QuadraticLaw
        Null law of the test.
    alpha : float
        Significance level.
    k : float
        Effective number of units.
    wanted : float
        Power, in (0, 1).

    Returns
    -------
    float
        In standard deviations of a single unit.
    """
    return math.sqrt(noncentrality_for(law, alpha, wanted) / k)


def smallest_units(plan: Plan, shift: float, wanted: float) -> int | None:
    """Return the smallest number of units with which a plan finds a shift.

    Parameters
    ----------
    plan : Plan
        The test.
    shift : float
        Mahalanobis shift of the mean, positive.
    wanted : float
        Power, in (0, 1).

    Returns
    -------
    int or None
        None where `MOST_UNITS` are too few, as they can be where the target is estimated.
    """
    return fewest(
        lambda n: power(plan.law(n), plan.alpha, plan.effective_units(n) * shift * shift) >= wanted,
        plan.fewest_units(),
    )


def acceptance_curve(plan: Plan, n: int, shifts: npt.ArrayLike) -> Vector:
    """Return the operating characteristic of the difference question.

    Parameters
    ----------
    plan : Plan
        The test.
    n : int
        Number of units.
    shifts : array_like, shape (m,)
        Mahalanobis shifts of the mean.

    Returns
    -------
    ndarray, shape (m,)
        P(not rejected) at each shift: ``1 - alpha`` at 0, falling.
    """
    law, k = plan.law(n), plan.effective_units(n)
    critical = _critical_value(law, plan.alpha)
    return np.array([ShiftedLaw(law, k * shift * shift).lower(critical) for shift in np.asarray(shifts).tolist()])


def fewest(enough: Callable[[int], bool], start: int, *, most: int = MOST_UNITS) -> int | None:
    """Return the smallest n from `start` on that is enough, where more is never worse.

    Parameters
    ----------
    enough : callable
        From a number of units to whether they are enough; monotone.
    start : int
        The smallest number to try.
    most : int, optional
        The largest number to try.

    Returns
    -------
    int or None
        None where `most` are not enough.
    """
    low, high = start - 1, start
    while not enough(high):
        if high >= most:
            return None
        low, high = high, min(2 * high, most)
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if enough(middle) else (middle, high)
    return high


@lru_cache(maxsize=4096)
def _critical_value(law: QuadraticLaw, alpha: float) -> float:
    return law.critical_value(alpha)
