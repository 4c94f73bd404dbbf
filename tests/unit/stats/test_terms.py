from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from service.stats.follow_up import follow_up
from service.stats.terms import combination_intervals, given, sequential_terms, statistic_over
from tests.unit.stats import lots


@pytest.mark.parametrize("order", [[0, 1, 2, 3], [3, 1, 0, 2], [2, 3, 1, 0]])
def test_sequential_terms_sum_to_the_statistic_in_every_order(order: list[int]) -> None:
    result = lots.permuted(lots.result(4, 5, 29.0), np.array(order))
    terms = sequential_terms(result)
    assert terms.sum() == pytest.approx(result.statistic, rel=1e-12)
    pair = statistic_over(result, [0, 1], 0.05).statistic
    assert terms[:2].sum() == pytest.approx(pair, rel=1e-11)


def test_partial_test_of_a_known_covariance_is_the_difference_of_two_chi_squares() -> None:
    result = lots.result(4, 6)
    partial = given(result, [1, 3], 0.05)
    added = result.statistic - statistic_over(result, [1, 3], 0.05).statistic
    assert partial.statistic == pytest.approx(added, rel=1e-12)
    assert partial.p_value == pytest.approx(stats.chi2.sf(added, 2), rel=1e-10)


def test_partial_test_keeps_its_level_where_only_the_given_characteristic_moved() -> None:
    rng, rejected = np.random.default_rng(11), 0
    for _ in range(1500):
        x = rng.normal(size=(10, 3))
        x[:, 0] += 1.0
        x[:, 1:] += x[:, :1]
        moments = lots.factor_covariance(np.cov(x.T), 9.0)
        rejected += given(lots.mean_test(x.mean(axis=0), moments, 10.0, 0.05), [0], 0.05).p_value <= 0.05
    assert stats.binomtest(rejected, 1500, 0.05).pvalue > 0.01


def test_combinations_that_pick_single_characteristics_have_their_scheffe_intervals() -> None:
    result = lots.result(4, 7, 29.0)
    centre, half = combination_intervals(result, np.eye(4), 0.05)
    followed = follow_up(result, 0.05)
    np.testing.assert_allclose(centre, result.difference, rtol=1e-14)
    np.testing.assert_allclose(half, followed.t_squared_half_width, rtol=1e-12)


def test_interval_along_the_discriminant_touches_zero_exactly_at_the_critical_value() -> None:
    result = lots.result(3, 8)
    centre, half = combination_intervals(result, result.direction[None, :], 0.05)
    assert centre[0] / half[0] == pytest.approx(math.sqrt(result.statistic / result.critical_value), rel=1e-12)
