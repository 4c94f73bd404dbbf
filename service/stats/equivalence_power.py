"""What an equivalence test can settle: operating characteristic, and how many units it takes."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from service.stats.arrays import Vector
from service.stats.noncentral import ShiftedLaw
from service.stats.power import Plan, fewest

LIKELY = 0.80
"""Probability that counts as likely to settle the question."""

MOST_MORE = 10_000
"""More units than this are not worth proposing."""


def chance_close(plan: Plan, n: int, delta: float, shift: float) -> float:
    """Return the probability of showing closeness.

    Parameters
    ----------
    plan : Plan
        The test; its alpha is the level of each of the two questions.
    n : int
        Number of units.
    delta : float
        Largest Mahalanobis shift that does not matter.
    shift : float
        True Mahalanobis shift of the mean.
    """
    law, k = plan.law(n), plan.effective_units(n)
    below = ShiftedLaw(law, k * delta * delta).quantile(plan.alpha)
    return ShiftedLaw(law, k * shift * shift).lower(below)


def chance_departed(plan: Plan, n: int, delta: float, shift: float) -> float:
    """Return the probability of showing departure; parameters as `chance_close`."""
    law, k = plan.law(n), plan.effective_units(n)
    above = ShiftedLaw(law, k * delta * delta).quantile(1.0 - plan.alpha)
    return ShiftedLaw(law, k * shift * shift).upper(above)


def equivalence_curve(plan: Plan, n: int, delta: float, shifts: npt.ArrayLike) -> Vector:
    """Return the operating characteristic of the equivalence question.

    Parameters
    ----------
    plan : Plan
        The test.
    n : int
        Number of units.
    delta : float
        Largest Mahalanobis shift that does not matter.
    shifts : array_like, shape (m,)
        Mahalanobis shifts of the mean.

    Returns
    -------
    ndarray, shape (m,)
        P(closeness is shown) at each shift: falling, alpha at delta.
    """
    return np.array([chance_close(plan, n, delta, shift) for shift in np.asarray(shifts).tolist()])


def units_for_closeness(plan: Plan, delta: float, shift: float, wanted: float) -> int | None:
    """Return the smallest number of units with which closeness is shown with probability `wanted`.

    Parameters
    ----------
    plan : Plan
        The test.
    delta : float
        Largest Mahalanobis shift that does not matter.
    shift : float
        True Mahalanobis shift, 0 for a mean on target.
    wanted : float
        Probability, in (0, 1).

    Returns
    -------
    int or None
        None where no number of units up to `power.MOST_UNITS` reaches it.
    """
    if shift >= delta:
        return None
    return fewest(lambda n: chance_close(plan, n, delta, shift) >= wanted, plan.fewest_units())


def units_to_settle(plan: Plan, units: int, delta: float, shift: float) -> int | None:
    """Return how many more units would be likely to settle an inconclusive test.

    Parameters
    ----------
    plan : Plan
        The test.
    units : int
        Number of units that left it inconclusive.
    delta : float
        Largest Mahalanobis shift that does not matter.
    shift : float
        The Mahalanobis distance of the observed mean, taken for the true one.

    Returns
    -------
    int or None
        Units beyond `units`, so that the conclusion on the side where the mean was
        seen has probability `LIKELY`.  None where `MOST_MORE` do not reach that, as
        when the mean was seen at delta itself.
    """
    if math.isclose(shift, delta, rel_tol=1e-9):
        return None
    chance = chance_close if shift < delta else chance_departed
    start = max(units + 1, plan.fewest_units())
    total = fewest(lambda n: chance(plan, n, delta, shift) >= LIKELY, start, most=units + MOST_MORE)
    return None if total is None else total - units
