from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import optimize, stats
from statsmodels.stats import multivariate

from service.stats import dispersion
from service.stats.arrays import Matrix
from service.stats.covariance import factor_covariance
from service.stats.screen import ScreenStatistic
from tests.unit.stats import batches, lots


def _against(rows: Matrix, matrix: Matrix, dof: float = math.inf, level: float = 0.05) -> ScreenStatistic:
    return dispersion.against_reference(batches.moments(rows), factor_covariance(matrix, dof), None, level)


def test_likelihood_ratio_agrees_with_statsmodels() -> None:
    rows, sigma = batches.clean(25, 4, 1), lots.covariance(4, 2)
    found = _against(rows * sigma.scale, sigma.matrix)
    other = multivariate.test_cov(np.cov((rows * sigma.scale).T), 25, sigma.matrix)
    assert found.statistic == pytest.approx(other.statistic, rel=1e-10)
    assert found.p_value == pytest.approx(other.pvalue, rel=1e-9)
    assert found.law == "asymptotic"


def _first_correction(p: int, f1: float, f2: float) -> float:
    return (1 / f1 + 1 / f2 - 1 / (f1 + f2)) * (2 * p * p + 3 * p - 1) / (6 * (p + 1))


def test_box_m_becomes_the_likelihood_ratio_as_the_reference_becomes_known() -> None:
    values = np.array([0.4, 1.1, 2.5])
    ratio = 14 * float((values - np.log(values) - 1).sum())
    assert dispersion.box_m(values, 14.0, 1e10) == pytest.approx(ratio, rel=1e-7)


@pytest.mark.parametrize(("p", "n1", "n2"), [(2, 7, 41), (3, 14, 30), (6, 9, 10)])
def test_box_m_agrees_with_statsmodels(p: int, n1: int, n2: int) -> None:
    one, other = batches.clean(n1, p, 1), batches.clean(n2, p, 2)
    covariances = [np.cov(one.T).reshape(p, p), np.cov(other.T).reshape(p, p)]
    found = _against(one, covariances[1], n2 - 1.0)
    second = multivariate.test_cov_oneway(covariances, [n1, n2])
    assert found.p_value == pytest.approx(second.pvalue_f, rel=1e-9)
    chi_square = found.statistic * (1 - _first_correction(p, n1 - 1, n2 - 1))
    assert chi_square == pytest.approx(second.statistic_chi2, rel=1e-9)


@pytest.mark.parametrize("m", [1.0, 4.0, 8.0])
def test_box_m_of_two_variances_is_near_its_exact_law_by_their_ratio(m: float) -> None:
    # The branch of the F law for p = 1; statsmodels has the sign of its last term reversed.
    ends = [
        optimize.brentq(lambda ratio: dispersion.box_m(np.array([ratio]), 29.0, 8.0) - m, *bracket)
        for bracket in ((1e-12, 1.0), (1.0, 1e9))
    ]
    exact = stats.f.cdf(ends[0], 29, 8) + stats.f.sf(ends[1], 29, 8)
    assert dispersion.box_tail(m, 1, 29.0, 8.0) == pytest.approx(exact, rel=2e-3)


def test_box_tail_is_zero_beyond_the_end_of_its_law() -> None:
    assert dispersion.box_tail(1e9, 1, 9.0, 12.0) == 0.0


def test_ledoit_and_wolf_is_the_formula_of_traces() -> None:
    rows = batches.clean(4, 6, 3)
    found, v = _against(rows, np.eye(6)), np.cov(rows.T)
    w = np.trace((v - np.eye(6)) @ (v - np.eye(6))) / 6 - 6 / 3 * (np.trace(v) / 6) ** 2 + 6 / 3
    assert found.statistic == pytest.approx(3 * 6 * w / 2, rel=1e-10)
    assert found.detail["method"] == "Ledoit-Wolf"


@pytest.mark.parametrize(("n", "p"), [(12, 3), (4, 6)])
def test_many_draws_at_once_give_what_each_gives_alone(n: int, p: int) -> None:
    many = np.random.default_rng(2).normal(size=(5, n, p))
    alone = [_against(rows, np.eye(p)).statistic for rows in many]
    np.testing.assert_allclose(dispersion.statistics_of_many(many)["dispersion"], alone, rtol=1e-10)


@pytest.mark.parametrize(("n", "p"), [(8, 3), (12, 5), (4, 6)])
def test_table_keeps_the_level(n: int, p: int) -> None:
    rng, draws, sigma, table = np.random.default_rng(4), 1500, factor_covariance(np.eye(p)), batches.table(n, p)
    found = [
        dispersion.against_reference(batches.moments(rng.normal(size=(n, p))), sigma, table, 0.05) for _ in range(draws)
    ]
    rejected = sum(result.p_value <= 0.05 for result in found)
    assert {result.law for result in found} == {"monte-carlo"}
    assert stats.binomtest(rejected, draws, 0.05).pvalue > 0.01


def test_box_m_keeps_its_level_at_few_units() -> None:
    rng, draws = np.random.default_rng(5), 1500
    rejected = sum(
        _against(rng.normal(size=(10, 3)), np.cov(rng.normal(size=(21, 3)).T), 20.0).p_value <= 0.05
        for _ in range(draws)
    )
    assert stats.binomtest(rejected, draws, 0.05).pvalue > 0.01


@given(st.integers(0, 1000), st.sampled_from([math.inf, 20.0]))
def test_difference_of_spread_does_not_change_under_affine_maps(seed: int, dof: float) -> None:
    rows, map_ = batches.clean(14, 3, seed) * 1.7, batches.affine(3, seed)
    sigma = lots.covariance(3, seed).correlation
    one, other = _against(rows, sigma, dof), _against(rows @ map_, map_.T @ sigma @ map_, dof)
    assert other.statistic == pytest.approx(one.statistic, rel=1e-7)
    assert other.detail.get("direction") == one.detail.get("direction")


def test_constant_characteristic_gives_a_large_finite_number() -> None:
    rows = batches.clean(15, 3, 6)
    rows[:, 1] = 2.0
    found = _against(rows, np.eye(3))
    assert found.p_value < 1e-50
    assert math.isfinite(found.statistic)
    assert found.detail["direction"] == "narrower"


def test_one_unit_is_not_applicable() -> None:
    assert not _against(batches.clean(1, 3, 1), np.eye(3)).applicable


def test_estimated_reference_needs_more_units_than_characteristics() -> None:
    found = _against(batches.clean(3, 3, 1), np.eye(3), 20.0)
    assert not found.applicable
    assert "more than 3 units" in found.why


def test_difference_is_described_only_where_significant() -> None:
    assert "direction" not in _against(batches.clean(20, 3, 3), np.eye(3), level=1e-6).detail


@pytest.mark.parametrize("size", [1e3, 1e50, 1e100])
def test_one_wild_value_among_few_units_is_significant_however_wild(size: float) -> None:
    rows = np.zeros((3, 5))
    rows[1, 1] = size
    found = _against(rows, np.eye(5))
    assert found.statistic is not None
    assert math.isfinite(found.statistic)
    assert found.p_value == pytest.approx(0.0, abs=1e-12)


def test_a_statistic_below_zero_has_a_large_sample_p_value_of_one() -> None:
    # Three units on an equilateral triangle: both eigenvalues are 10.
    radius = math.sqrt(20 / 1.5)
    rows = np.zeros((3, 5))
    rows[:, :2] = radius * np.array([[1.0, 0.0], [-0.5, math.sqrt(0.75)], [-0.5, -math.sqrt(0.75)]])
    found = _against(rows, np.eye(5), level=1e-12)
    assert found.statistic == pytest.approx(-22.5, rel=1e-12)
    assert found.p_value == 1.0


@pytest.mark.parametrize("spread", [1e-3, 1.0, 1e3])
def test_two_units_of_several_characteristics_are_too_few(spread: float) -> None:
    found = _against(np.array([[0.0, 0.0], [spread, -spread]]), np.eye(2))
    assert not found.applicable
    assert "two units" in found.why
