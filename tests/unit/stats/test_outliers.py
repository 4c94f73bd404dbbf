from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from service.stats import outliers
from service.stats.covariance import factor_covariance
from tests.unit.stats import batches, lots


def test_distance_from_a_known_specification_is_chi_square_and_shared_by_sidak() -> None:
    sigma, rows = lots.covariance(3, 1), batches.clean(9, 3, 2)
    found = outliers.against_specification(batches.moments(rows * sigma.scale), sigma, 0.01)
    squared = [row @ np.linalg.solve(sigma.matrix, row) for row in rows * sigma.scale]
    np.testing.assert_allclose(found.detail["squared_distances"], squared, rtol=1e-10)
    single = stats.chi2.sf(max(squared), 3)
    assert found.p_value == pytest.approx(1 - (1 - single) ** 9, rel=1e-10)


def test_distance_from_an_estimated_specification_is_f_of_a_new_unit() -> None:
    sigma, rows = lots.covariance(3, 1, 20.0), batches.clean(6, 3, 2)
    found = outliers.against_specification(batches.moments(rows * sigma.scale), sigma, 0.01, 21.0)
    single = stats.f.sf(found.statistic * 21 / 22 * 18 / (20 * 3), 3, 18)
    assert found.p_value == pytest.approx(-math.expm1(6 * math.log1p(-single)), rel=1e-10)


def test_limit_is_the_distance_at_which_the_p_value_is_the_level() -> None:
    sigma = lots.covariance(2, 3, 15.0)
    limit = outliers.against_specification(batches.moments(batches.clean(5, 2, 1)), sigma, 0.02, 16.0).detail["limit"]
    rows = np.zeros((5, 2))
    rows[3] = sigma.matrix @ np.array([1.0, 0.0]) * math.sqrt(limit / sigma.matrix[0, 0])
    for factor, units in ((1 - 1e-9, ()), (1 + 1e-9, (3,))):
        found = outliers.against_specification(batches.moments(rows * factor), sigma, 0.02, 16.0)
        assert found.units == units
        assert found.p_value == pytest.approx(0.02, rel=1e-6)


def test_batch_exactly_on_target_is_no_evidence_at_all() -> None:
    found = outliers.against_specification(batches.moments(np.zeros((4, 2))), factor_covariance(np.eye(2)), 0.01)
    assert (found.statistic, found.p_value, found.units) == (0.0, 1.0, ())


def test_specification_with_too_few_degrees_of_freedom_is_not_applicable() -> None:
    found = outliers.against_specification(
        batches.moments(batches.clean(5, 3, 1)), factor_covariance(np.eye(3), 2.0), 0.01
    )
    assert not found.applicable
    assert "3 degrees of freedom" in found.why


@pytest.mark.parametrize("level", [0.05, 0.01])
def test_largest_distance_of_one_characteristic_has_the_critical_value_of_grubbs(level: float) -> None:
    n = 15
    t = stats.t.isf(level / (2 * n), n - 2)
    grubbs = (n - 1) / math.sqrt(n) * math.sqrt(t**2 / (n - 2 + t**2))
    assert outliers.maximum_limit(n, 1, level) == pytest.approx(grubbs**2, rel=1e-12)
    assert outliers.maximum_p_value(grubbs**2, n, 1) == pytest.approx(level, rel=1e-10)


def test_table_gives_a_p_value_below_the_bound_where_two_units_can_both_be_far() -> None:
    bound = outliers.maximum_p_value(11.0, 30, 5)
    assert outliers.maximum_p_value(11.0, 30, 5, batches.table(30, 5)) < bound


def test_distances_never_exceed_their_bound_however_far_the_unit() -> None:
    rows = batches.with_cluster(12, 3, 4, units=1, shift=1e6)
    found = outliers.within_batch(batches.moments(rows), None, 0.01)
    assert max(found.detail["squared_distances"]) <= 11**2 / 12 * (1 + 1e-12)
    assert found.units == (11,)


@pytest.mark.parametrize("n", [3, 4])
def test_too_few_units_are_not_applicable(n: int) -> None:
    found = outliers.within_batch(batches.moments(batches.clean(n, 3, 1)), None, 0.01)
    assert not found.applicable
    assert "at least 5" in found.why


def test_collinear_characteristics_are_not_applicable_with_the_reason() -> None:
    rows = batches.clean(12, 3, 5)
    rows[:, 2] = rows[:, 0] + rows[:, 1]
    found = outliers.within_batch(batches.moments(rows), None, 0.01)
    assert not found.applicable
    assert "singular" in found.why


@pytest.mark.parametrize("seed", [1, 2, 4])
def test_two_units_together_hide_from_the_largest_distance_but_not_from_deletion(seed: int) -> None:
    rows = batches.with_cluster(20, 3, seed, units=2, shift=8.0)
    found = outliers.within_batch(batches.moments(rows), batches.table(20, 3), 0.01)
    largest = max(found.detail["squared_distances"])
    assert outliers.maximum_p_value(largest, 20, 3, batches.table(20, 3)) > 0.05
    assert found.units == (18, 19)


def test_units_of_earlier_stages_are_suspected_with_the_last_significant_one() -> None:
    rows = batches.with_cluster(20, 3, 1, units=2, shift=8.0)
    stages = outliers.within_batch(batches.moments(rows), batches.table(20, 3), 0.01).detail["stages"]
    assert stages[0]["p_value"] > 0.1
    assert stages[1]["p_value"] < 0.002


def test_limit_is_where_a_single_unit_becomes_significant() -> None:
    table, n, p = batches.table(20, 3), 20, 3
    found = outliers.within_batch(batches.moments(batches.clean(n, p, 7)), table, 0.01)
    w = 1 - n * found.detail["limit"] / (n - 1) ** 2
    evidence = -math.log10(n * stats.beta.cdf(w, (n - p - 1) / 2, p / 2))
    assert evidence == pytest.approx(table.critical_value("within-sequential", 0.01), rel=1e-9)


def test_p_values_go_below_what_the_table_can_say() -> None:
    rows = batches.with_cluster(30, 5, 2, units=1, shift=30.0)
    found = outliers.within_batch(batches.moments(rows), batches.table(30, 5), 1e-6)
    assert found.p_value < 1e-6
    assert found.units == (29,)


@given(st.integers(0, 1000))
def test_within_batch_does_not_change_under_affine_maps(seed: int) -> None:
    rows = batches.with_cluster(16, 3, seed, units=2, shift=5.0)
    one = outliers.within_batch(batches.moments(rows), None, 0.05)
    other = outliers.within_batch(batches.moments(rows @ batches.affine(3, seed) + 7.0), None, 0.05)
    assert other.units == one.units
    assert other.statistic == pytest.approx(one.statistic, rel=1e-8, abs=1e-9)


@pytest.mark.parametrize(("n", "p"), [(8, 3), (12, 5), (30, 5)])
def test_within_batch_keeps_its_level_over_all_stages(n: int, p: int) -> None:
    rng, draws, table = np.random.default_rng(5), 1500, batches.table(n, p)
    rejected = sum(
        outliers.within_batch(batches.moments(rng.normal(size=(n, p))), table, 0.05).units != () for _ in range(draws)
    )
    assert stats.binomtest(rejected, draws, 0.05).pvalue > 0.01


def test_one_outlying_unit_seldom_draws_a_sound_one_after_it() -> None:
    rng, draws, table = np.random.default_rng(6), 1200, batches.table(20, 3)
    shifted = np.zeros((20, 3))
    shifted[0, 0] = 12.0
    found = [
        outliers.within_batch(batches.moments(rng.normal(size=(20, 3)) + shifted), table, 0.05).units
        for _ in range(draws)
    ]
    assert stats.binomtest(sum(len(units) > 1 for units in found), draws, 0.05, alternative="greater").pvalue > 0.01
    assert sum(0 in units for units in found) > 0.99 * draws


def test_estimated_reference_keeps_the_level_for_units_that_share_its_error() -> None:
    rng, draws, rejected = np.random.default_rng(7), 1500, 0
    for _ in range(draws):
        reference = rng.normal(size=(21, 3))
        sigma = factor_covariance(np.cov(reference.T), 20.0)
        rows = batches.moments(rng.normal(size=(12, 3)) - reference.mean(axis=0))
        rejected += outliers.against_specification(rows, sigma, 0.05, 21.0).p_value <= 0.05
    assert stats.binomtest(rejected, draws, 0.05, alternative="greater").pvalue > 0.01


def test_sound_unit_deleted_while_a_pair_hides_is_not_suspected_with_it() -> None:
    found = [
        outliers.within_batch(
            batches.moments(batches.with_cluster(20, 3, seed, units=2, shift=15.0)), batches.table(20, 3), 0.01
        )
        for seed in range(60)
    ]
    first = [result.detail["stages"][0]["unit"] < 18 for result in found]
    assert sum(first) > 5
    assert sum(result.units == (18, 19) for result in found) >= 56


def test_last_units_suspected_are_kept_where_those_that_remain_are_collinear() -> None:
    rows = batches.clean(20, 2, 3)
    rows[:, 1] = rows[:, 0]
    rows[7, 1] += 2.0
    assert outliers.within_batch(batches.moments(rows), None, 0.01).units == (7,)
