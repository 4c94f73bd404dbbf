from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from service.stats.follow_up import follow_up, one_at_a_time
from service.stats.location import hotelling_test
from service.stats.moments import sample_moments
from service.stats.terms import given as given_others
from service.stats.terms import statistic_over
from tests.unit.stats import lots


def test_each_characteristic_has_the_t_test_of_scipy() -> None:
    x = np.random.default_rng(3).normal(size=(30, 5)) * [1, 10, 0.1, 3, 5] + 0.4
    followed = follow_up(hotelling_test(sample_moments(x, np.zeros(5)), 0.05), 0.05)
    expected = stats.ttest_1samp(x, 0.0)
    np.testing.assert_allclose(followed.ratio, expected.statistic, rtol=1e-12)
    np.testing.assert_allclose(followed.p_value, expected.pvalue, rtol=1e-11)
    low, high = expected.confidence_interval(0.95)
    np.testing.assert_allclose(followed.difference - followed.separate_half_width, low, rtol=1e-10, atol=1e-13)
    np.testing.assert_allclose(followed.difference + followed.separate_half_width, high, rtol=1e-10, atol=1e-13)


@pytest.mark.parametrize("dof", [math.inf, 29.0])
def test_terms_agree_with_leaving_each_characteristic_out(dof: float) -> None:
    result = lots.result(5, 1, dof)
    followed = follow_up(result, 0.05)
    for j in range(5):
        others = [i for i in range(5) if i != j]
        added = result.statistic - statistic_over(result, others, 0.05).statistic
        assert followed.term_given_others[j] == pytest.approx(added, rel=1e-10)
        assert followed.p_value_given_others[j] == pytest.approx(given_others(result, others, 0.05).p_value, rel=1e-10)
        alone = statistic_over(result, [j], 0.05)
        assert followed.term_alone[j] == pytest.approx(alone.statistic, rel=1e-12)
        assert followed.p_value[j] == pytest.approx(alone.p_value, rel=1e-11)


def test_broken_relation_shows_as_a_large_conditional_term_beside_small_ones_alone() -> None:
    sigma = lots.factor_covariance(np.array([[1.0, 0.99], [0.99, 1.0]]))
    followed = follow_up(lots.mean_test(np.array([0.2, -0.2]), sigma, 20.0, 0.05), 0.05)
    assert followed.term_alone.max() < 1.0
    assert followed.term_given_others.min() > 70.0


@given(seed=st.integers(0, 200), dof=lots.KINDS, exponents=st.lists(st.floats(-9, 9), min_size=4, max_size=4))
def test_follow_up_does_not_depend_on_units_of_measurement(seed: int, dof: float, exponents: list[float]) -> None:
    result, factors = lots.result(4, seed, dof), 10.0 ** np.array(exponents)
    here, there = follow_up(result, 0.05), follow_up(lots.rescaled(result, factors), 0.05)
    for name in ("ratio", "p_value", "holm_p_value", "term_alone", "term_given_others", "p_value_given_others"):
        np.testing.assert_allclose(getattr(there, name), getattr(here, name), rtol=1e-9, err_msg=name)
    np.testing.assert_allclose(there.t_squared_half_width, here.t_squared_half_width * factors, rtol=1e-9)


def test_joint_intervals_are_wider_than_separate_ones_and_one_characteristic_makes_them_equal() -> None:
    followed = follow_up(lots.result(5, 2, 29.0), 0.05)
    assert (followed.t_squared_half_width > followed.bonferroni_half_width).all()
    assert (followed.bonferroni_half_width > followed.separate_half_width).all()
    single = follow_up(lots.result(1, 2, 29.0), 0.05)
    np.testing.assert_allclose(single.t_squared_half_width, single.separate_half_width, rtol=1e-12)
    np.testing.assert_allclose(single.term_given_others, single.term_alone, rtol=1e-12)


def test_no_difference_gives_probabilities_of_one() -> None:
    result = lots.mean_test(np.zeros(3), lots.covariance(3, 0, 20.0), 10.0, 0.05)
    followed = follow_up(result, 0.05)
    np.testing.assert_array_equal(followed.p_value, 1.0)
    np.testing.assert_array_equal(followed.log10_p_value, 0.0)
    np.testing.assert_array_equal(followed.p_value_given_others, 1.0)


def test_deep_differences_keep_their_logarithm() -> None:
    result = lots.mean_test(np.array([60.0, 0.1]), lots.factor_covariance(np.eye(2)), 1.0, 0.05)
    followed = follow_up(result, 0.05)
    assert followed.p_value[0] == 0.0
    expected = float(mp.log10(mp.erfc(60 / mp.sqrt(2))))
    assert followed.log10_p_value[0] == pytest.approx(expected, rel=1e-13)


def test_one_at_a_time_reports_what_separate_checks_would_conclude() -> None:
    separate = one_at_a_time(np.array([0.03, 0.2, 0.009, 0.9, 0.6]), 0.05)
    assert separate.rejects.tolist() == [True, False, True, False, False]
    assert separate.rejects_bonferroni.tolist() == [False, False, True, False, False]
    assert separate.any_rejects
    assert separate.any_rejects_bonferroni
    assert separate.family_wise_error == pytest.approx(1 - 0.95**5, rel=1e-14)
    assert separate.family_wise_error_bonferroni == pytest.approx(1 - 0.99**5, rel=1e-13)


def test_conditional_p_values_are_uniform_where_the_mean_agrees() -> None:
    rng = np.random.default_rng(8)
    p_values = []
    for _ in range(1500):
        x = rng.normal(size=(12, 3))
        x[:, 1] += 2 * x[:, 0]
        p_values.append(follow_up(hotelling_test(sample_moments(x, np.zeros(3)), 0.05), 0.05).p_value_given_others[1])
    assert stats.kstest(p_values, "uniform").pvalue > 0.01
