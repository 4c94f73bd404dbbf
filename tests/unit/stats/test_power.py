from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.power import FTestPower, TTestPower

from service.errors import TooFewUnitsError
from service.stats.laws import QuadraticLaw
from service.stats.power import (
    Plan,
    acceptance_curve,
    noncentrality_for,
    power,
    shift_of,
    smallest_shift,
    smallest_units,
)
from tests.unit.stats import lots
from tests.unit.stats.by_mpmath import noncentral_chi_square, noncentral_f

PLANS = [
    Plan("known", 5, 0.05),
    Plan("known", 3, 0.01, target_units=40),
    Plan("reference", 5, 0.05, 29.0, 30),
    Plan("pooled", 4, 0.05, 12.0),
    Plan("batch", 5, 0.05),
]


@pytest.mark.parametrize("shift", [0.2, 0.6, 1.1])
def test_power_agrees_with_mpmath_to_ten_digits(shift: float) -> None:
    known, batch = QuadraticLaw(5, math.inf), QuadraticLaw(5, 29.0)
    noncentrality = 30 * shift * shift
    expected = noncentral_chi_square(known.critical_value(0.05), 5, noncentrality, upper=True)
    assert power(known, 0.05, noncentrality) == pytest.approx(expected, abs=1e-10)
    expected = noncentral_f(batch.critical_value(0.05) * batch.factor, 5, 25, noncentrality, upper=True)
    assert power(batch, 0.05, noncentrality) == pytest.approx(expected, abs=1e-10)


@pytest.mark.parametrize(("dof1", "dof2", "f2"), [(5, 89, 0.1), (3, 17, 0.3), (12, 60, 0.05)])
def test_power_agrees_with_statsmodels(dof1: int, dof2: int, f2: float) -> None:
    # statsmodels calls the denominator's degrees of freedom df_num, and takes ncc = 1 for n = u + v + 1.
    expected = FTestPower().power(math.sqrt(f2), dof2, dof1, 0.05, ncc=1)
    computed = power(QuadraticLaw(dof1, dof1 + dof2 - 1.0), 0.05, f2 * (dof1 + dof2 + 1))
    assert computed == pytest.approx(expected, abs=1e-10)


def test_one_characteristic_has_the_power_of_the_t_test() -> None:
    for n in (5, 12, 40):
        expected = TTestPower().power(0.5, n, 0.05)
        assert power(Plan("batch", 1, 0.05).law(n), 0.05, n * 0.25) == pytest.approx(expected, abs=1e-9)


def test_power_without_a_shift_is_alpha() -> None:
    for plan in PLANS:
        assert power(plan.law(20), plan.alpha, 0.0) == pytest.approx(plan.alpha, rel=1e-12)


def test_shift_of_a_vector_is_its_mahalanobis_length() -> None:
    sigma = lots.covariance(4, 3)
    vector = np.array([0.3, -2.0, 0.1, 4.0])
    expected = math.sqrt(vector @ np.linalg.solve(sigma.matrix, vector))
    assert shift_of(vector, sigma) == pytest.approx(expected, rel=1e-12)


@given(
    law=st.sampled_from([plan.law(20) for plan in PLANS]),
    alpha=st.sampled_from([0.001, 0.01, 0.05, 0.2]),
    wanted=st.floats(0.25, 0.999999),
)
def test_noncentrality_gives_the_wanted_power_back(law: QuadraticLaw, alpha: float, wanted: float) -> None:
    assert power(law, alpha, noncentrality_for(law, alpha, wanted)) == pytest.approx(wanted, abs=1e-13)


def test_no_shift_is_needed_for_a_power_up_to_alpha() -> None:
    assert noncentrality_for(QuadraticLaw(3, math.inf), 0.05, 0.05) == 0.0


def test_smallest_shift_falls_with_the_root_of_the_units() -> None:
    law = QuadraticLaw(5, math.inf)
    assert smallest_shift(law, 0.05, 40.0, 0.8) == pytest.approx(smallest_shift(law, 0.05, 10.0, 0.8) / 2, rel=1e-14)


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
@pytest.mark.parametrize("shift", [0.8, 1.0, 2.5])
def test_smallest_number_of_units_is_just_enough(plan: Plan, shift: float) -> None:
    n = smallest_units(plan, shift, 0.8)
    assert n is not None
    assert power(plan.law(n), plan.alpha, plan.effective_units(n) * shift**2) >= 0.8
    if n > plan.fewest_units():
        assert power(plan.law(n - 1), plan.alpha, plan.effective_units(n - 1) * shift**2) < 0.8


def test_target_estimated_from_few_units_sets_a_floor_that_no_number_of_units_lowers() -> None:
    assert smallest_units(Plan("known", 5, 0.05, target_units=4), 0.5, 0.8) is None


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
def test_fewest_units_are_those_for_which_the_law_exists(plan: Plan) -> None:
    fewest = plan.fewest_units()
    plan.law(fewest)
    if fewest > 1:
        with pytest.raises(TooFewUnitsError):
            plan.law(fewest - 1)


def test_pooling_with_a_small_reference_needs_units_of_its_own() -> None:
    plan = Plan("pooled", 6, 0.05, 2.0)
    assert plan.fewest_units() == 5
    assert plan.law(5).degrees_of_freedom == 6.0


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
def test_acceptance_curve_falls_from_one_less_alpha(plan: Plan) -> None:
    curve = acceptance_curve(plan, 20, np.linspace(0, 3, 31))
    assert curve[0] == pytest.approx(1 - plan.alpha, rel=1e-12)
    assert (np.diff(curve) < 0).all()
    assert curve[10] == pytest.approx(1 - power(plan.law(20), plan.alpha, plan.effective_units(20)), abs=1e-13)


def _rejections(plan: Plan, n: int, vector: np.ndarray, trials: int) -> int:
    """Count rejections of simulated batches, the covariance estimated as the plan says."""
    rng, p = np.random.default_rng(17), plan.dimension
    law, k = plan.law(n), plan.effective_units(n)
    means = vector + rng.standard_normal((trials, p)) / math.sqrt(k)
    if law.is_chi_square:
        statistics = k * np.square(means).sum(axis=1)
    else:
        wishart = stats.wishart(law.degrees_of_freedom, np.eye(p)).rvs(trials, random_state=rng)
        solved = np.linalg.solve(wishart / law.degrees_of_freedom, means[:, :, None])[:, :, 0]
        statistics = k * (means * solved).sum(axis=1)
    return int((statistics > law.critical_value(plan.alpha)).sum())


def _check_by_simulation(plan: Plan, trials: int) -> None:
    vector = np.linspace(0.1, 0.5, plan.dimension)
    expected = power(plan.law(15), plan.alpha, plan.effective_units(15) * float(vector @ vector))
    rejected = _rejections(plan, 15, vector, trials)
    assert abs(rejected / trials - expected) < 4 * math.sqrt(expected * (1 - expected) / trials)


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
def test_power_agrees_with_simulated_batches(plan: Plan) -> None:
    _check_by_simulation(plan, 10_000)


@pytest.mark.slow
@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.covariance)
def test_power_agrees_with_many_simulated_batches(plan: Plan) -> None:
    _check_by_simulation(plan, 300_000)
