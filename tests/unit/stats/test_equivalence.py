from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from statsmodels.stats.weightstats import DescrStatsW

from service.stats.equivalence import (
    Conclusion,
    box_equivalence,
    ellipsoid_equivalence,
    equivalence_limits,
    shift_interval,
)
from service.stats.laws import QuadraticLaw
from service.stats.location import hotelling_test
from service.stats.moments import sample_moments
from tests.unit.stats import lots


def at_distance(distance: float, n: float = 20.0, dof: float = math.inf) -> lots.LocationResult:
    sigma = lots.factor_covariance(np.eye(3), dof)
    return lots.mean_test(np.array([distance, 0.0, 0.0]), sigma, n, 0.05)


@pytest.mark.parametrize("dof", [math.inf, 29.0])
@pytest.mark.parametrize(
    ("distance", "conclusion"),
    [(0.1, Conclusion.CLOSE), (1.0, Conclusion.INCONCLUSIVE), (2.5, Conclusion.DEPARTED)],
)
def test_ellipsoid_answers_three_ways(distance: float, conclusion: Conclusion, dof: float) -> None:
    assert ellipsoid_equivalence(at_distance(distance, dof=dof), 1.0, 0.05).conclusion is conclusion


@given(distance=st.floats(0, 4), delta=st.floats(0.05, 3), dof=lots.KINDS, alpha=st.sampled_from([0.01, 0.05, 0.1]))
def test_ellipsoid_conclusion_limits_and_p_values_agree(
    distance: float, delta: float, dof: float, alpha: float
) -> None:
    found = ellipsoid_equivalence(at_distance(distance, dof=dof), delta, alpha)
    assert found.close_below < found.departed_above
    if abs(found.closeness_p_value - alpha) > 1e-12:
        assert (found.conclusion is Conclusion.CLOSE) == (found.closeness_p_value < alpha)
    if abs(found.departure_p_value - alpha) > 1e-12:
        assert (found.conclusion is Conclusion.DEPARTED) == (found.departure_p_value < alpha)
    assert found.closeness_p_value + found.departure_p_value == pytest.approx(1.0, abs=1e-12)


def test_ellipsoid_of_one_characteristic_with_known_spread_is_that_of_a_folded_normal() -> None:
    below, above = equivalence_limits(QuadraticLaw(1, math.inf), 0.05, 9.0)
    folded = stats.foldnorm(3.0)
    assert math.sqrt(below) == pytest.approx(folded.ppf(0.05), rel=1e-9)
    assert math.sqrt(above) == pytest.approx(folded.ppf(0.95), rel=1e-9)


def test_conclusive_difference_can_still_be_close() -> None:
    result = at_distance(0.15, n=1000.0)
    assert result.p_value < 0.001
    assert ellipsoid_equivalence(result, 0.5, 0.05).conclusion is Conclusion.CLOSE


@given(distance=st.floats(0.0, 3), dof=lots.KINDS, n=st.sampled_from([5.0, 20.0, 60.0]))
def test_shift_interval_is_dual_to_the_ellipsoid_test(distance: float, dof: float, n: float) -> None:
    result = at_distance(distance, n, dof)
    low, high = shift_interval(result, 0.05)
    assert low <= distance <= max(high, distance)
    if high > 0:
        assert ellipsoid_equivalence(result, high, 0.05).closeness_p_value == pytest.approx(0.05, rel=1e-9)
    if low > 0:
        assert ellipsoid_equivalence(result, low, 0.05).departure_p_value == pytest.approx(0.05, rel=1e-9)


def test_box_agrees_with_two_one_sided_tests_of_statsmodels() -> None:
    x = np.random.default_rng(6).normal([0.1, -0.3], [1.0, 2.0], size=(25, 2))
    found = box_equivalence(hotelling_test(sample_moments(x, np.zeros(2)), 0.05), np.array([0.8, 1.5]), 0.05)
    for j, tolerance in enumerate((0.8, 1.5)):
        expected = DescrStatsW(x[:, j]).ttost_mean(-tolerance, tolerance)[0]
        assert found.closeness_p_values[j] == pytest.approx(expected, rel=1e-10)


@given(seed=st.integers(0, 300), dof=lots.KINDS, room=st.floats(0.2, 4))
def test_box_conclusion_is_that_of_its_intervals(seed: int, dof: float, room: float) -> None:
    result = lots.result(3, seed, dof)
    tolerance = room * result.covariance.scale / 2
    found = box_equivalence(result, tolerance, 0.05)
    size = np.abs(result.difference)
    assert (found.closeness_p_value <= 0.05) == bool((size + found.closeness_half_width <= tolerance).all())
    assert (found.departure_p_value <= 0.05) == bool((size - found.departure_half_width >= tolerance).any())
    expected = Conclusion.CLOSE if found.closeness_p_value <= 0.05 else Conclusion.INCONCLUSIVE
    assert found.conclusion is (Conclusion.DEPARTED if found.departure_p_value <= 0.05 else expected)


@given(seed=st.integers(0, 300), dof=lots.KINDS, exponents=st.lists(st.floats(-9, 9), min_size=3, max_size=3))
def test_box_does_not_depend_on_units_of_measurement(seed: int, dof: float, exponents: list[float]) -> None:
    result, factors = lots.result(3, seed, dof), 10.0 ** np.array(exponents)
    here = box_equivalence(result, result.covariance.scale, 0.05)
    there = box_equivalence(lots.rescaled(result, factors), result.covariance.scale * factors, 0.05)
    np.testing.assert_allclose(there.closeness_p_values, here.closeness_p_values, rtol=1e-9)
    np.testing.assert_allclose(there.departure_p_values, here.departure_p_values, rtol=1e-9)


@pytest.mark.parametrize("dof", [math.inf, 29.0])
def test_mean_at_the_limit_is_called_close_with_probability_alpha(dof: float) -> None:
    rng, trials = np.random.default_rng(2), 20_000
    law, n = QuadraticLaw(3, dof), 20
    means = np.array([0.7, 0.0, 0.0]) + rng.standard_normal((trials, 3)) / math.sqrt(n)
    sigma = np.eye(3) if law.is_chi_square else stats.wishart(dof, np.eye(3) / dof).rvs(trials, random_state=rng)
    statistics = n * (means * np.linalg.solve(sigma, means[:, :, None])[:, :, 0]).sum(axis=1)
    below, above = equivalence_limits(law, 0.05, n * 0.49)
    for count in (int((statistics <= below).sum()), int((statistics >= above).sum())):
        assert stats.binomtest(count, trials, 0.05).pvalue > 0.001
