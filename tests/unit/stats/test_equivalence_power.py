from __future__ import annotations

import numpy as np
import pytest

from service.stats.equivalence_power import (
    MOST_MORE,
    chance_close,
    chance_departed,
    equivalence_curve,
    units_for_closeness,
    units_to_settle,
)
from service.stats.power import Plan

PLANS = [Plan("known", 5, 0.05), Plan("reference", 3, 0.05, 40.0), Plan("batch", 4, 0.05)]


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
def test_curve_falls_and_passes_alpha_at_delta(plan: Plan) -> None:
    curve = equivalence_curve(plan, 25, 0.8, np.linspace(0, 1.6, 17))
    assert (np.diff(curve) < 0).all()
    assert curve[8] == pytest.approx(0.05, rel=1e-10)


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
def test_departure_has_probability_alpha_at_delta_and_grows_beyond(plan: Plan) -> None:
    chances = [chance_departed(plan, 25, 0.8, shift) for shift in (0.8, 1.0, 1.5, 2.5)]
    assert chances[0] == pytest.approx(0.05, rel=1e-10)
    assert chances == sorted(chances)


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
def test_number_of_units_for_closeness_is_just_enough(plan: Plan) -> None:
    n = units_for_closeness(plan, 0.8, 0.2, 0.9)
    assert n is not None
    assert chance_close(plan, n, 0.8, 0.2) >= 0.9
    assert chance_close(plan, n - 1, 0.8, 0.2) < 0.9


def test_closeness_of_a_mean_beyond_delta_cannot_be_planned() -> None:
    assert units_for_closeness(PLANS[0], 0.8, 0.8, 0.9) is None


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
@pytest.mark.parametrize(("shift", "chance"), [(0.5, chance_close), (1.2, chance_departed)])
def test_more_units_settle_the_question_on_the_side_where_the_mean_was_seen(plan: Plan, shift: float, chance) -> None:
    more = units_to_settle(plan, 12, 0.8, shift)
    assert more is not None
    assert more > 0
    assert chance(plan, 12 + more, 0.8, shift) >= 0.8
    if more > 1:
        assert chance(plan, 11 + more, 0.8, shift) < 0.8


def test_mean_seen_at_delta_cannot_be_settled() -> None:
    assert units_to_settle(PLANS[0], 12, 0.8, 0.8) is None
    assert units_to_settle(PLANS[0], 12, 0.8, 0.8 - 1e-4) is None
    more = units_to_settle(PLANS[0], 12, 0.8, 0.75)
    assert more is not None
    assert more <= MOST_MORE
