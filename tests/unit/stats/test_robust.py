from __future__ import annotations

import itertools
import warnings

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from sklearn.covariance import MinCovDet

from service.errors import IllConditionedError, NotPositiveDefiniteError
from service.stats import mcd, outliers, robust, robust_laws
from service.stats.arrays import Matrix
from service.stats.robust_table import robust_table
from tests.unit.stats import batches


def _by_sklearn(rows: Matrix) -> MinCovDet:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return MinCovDet(random_state=0).fit(rows)


@pytest.mark.parametrize("seed", range(4))
def test_contaminated_batches_show_the_same_units_as_in_scikit_learn(seed: int) -> None:
    rows = batches.with_cluster(50, 3, seed, units=15, shift=12.0, spread=1.0)
    ours = robust.robust_estimate(rows).squared_distances
    theirs = _by_sklearn(rows).dist_
    limit = stats.chi2.isf(0.001, 3)
    assert set(range(35, 50)) <= set(np.flatnonzero(ours > limit))
    assert set(range(35, 50)) <= set(np.flatnonzero(theirs > limit))
    assert ours[35:].min() > ours[:35].max()


@pytest.mark.parametrize("seed", range(4))
def test_clean_batches_have_centre_and_scatter_near_those_of_scikit_learn(seed: int) -> None:
    rows = batches.clean(300, 3, seed)
    ours, theirs = robust.robust_estimate(rows), _by_sklearn(rows)
    np.testing.assert_allclose(ours.centre, theirs.location_, atol=0.1)
    np.testing.assert_allclose(ours.covariance.matrix, theirs.covariance_, atol=0.2)


def test_subset_is_at_least_as_good_as_that_of_scikit_learn() -> None:
    for seed in range(5):
        rows = batches.with_cluster(40, 4, seed, units=8, shift=4.0, spread=1.0)
        ours = np.linalg.slogdet(np.cov(rows[robust.robust_estimate(rows).members].T))[1]
        theirs = np.linalg.slogdet(np.cov(rows[_by_sklearn(rows).raw_support_].T))[1]
        assert ours <= theirs + 0.1


def test_forty_in_a_hundred_units_apart_are_found_where_classical_distances_see_none() -> None:
    rows = batches.with_cluster(50, 3, 3, units=20, shift=16.0, spread=1.0)
    found = robust.outlying(batches.moments(rows), robust_table(50, 3), 0.01)
    assert set(range(30, 50)) <= set(found.units)
    assert found.p_value <= 0.003
    assert outliers.within_batch(batches.moments(rows), batches.table(50, 3), 0.01).units == ()


@given(st.integers(0, 500))
def test_estimate_follows_origin_and_units_of_measurement(seed: int) -> None:
    rows, scale = batches.clean(25, 3, seed), np.array([1e-3, 7.0, 2e4])
    one, other = robust.robust_estimate(rows), robust.robust_estimate(rows * scale + np.array([5.0, -3.0, 1e4]))
    assert other.members.tolist() == one.members.tolist()
    np.testing.assert_allclose(other.squared_distances, one.squared_distances, rtol=1e-7)
    np.testing.assert_allclose(other.raw_covariance, one.raw_covariance * np.outer(scale, scale), rtol=1e-7)


@pytest.mark.parametrize("seed", range(3))
def test_exact_estimate_follows_every_affine_map(seed: int) -> None:
    rows, map_ = batches.clean(14, 3, seed), batches.affine(3, seed)
    one, other = robust.robust_estimate(rows), robust.robust_estimate(rows @ map_ + 4.0)
    assert (one.exact, other.exact) == (True, True)
    assert other.members.tolist() == one.members.tolist()
    np.testing.assert_allclose(other.squared_distances, one.squared_distances, rtol=1e-8)


def test_exact_subset_has_the_smallest_determinant_of_all() -> None:
    rows = batches.clean(11, 2, 5)
    smallest = min(
        itertools.combinations(range(11), mcd.half(11, 2)), key=lambda units: np.linalg.det(np.cov(rows[list(units)].T))
    )
    assert robust.robust_estimate(rows).members.tolist() == list(smallest)


def test_one_characteristic_is_always_exact() -> None:
    rows = batches.clean(41, 1, 6)
    found, ordered = robust.robust_estimate(rows), np.sort(rows[:, 0])
    h = mcd.half(41, 1)
    smallest = min(ordered[i : i + h].var() for i in range(41 - h + 1))
    assert found.exact
    assert rows[found.members].var() == pytest.approx(smallest, rel=1e-12)


def test_same_batch_always_gives_the_same_answer() -> None:
    rows = batches.clean(40, 4, 7)
    one, other = robust.robust_estimate(rows), robust.robust_estimate(rows.copy())
    assert one.squared_distances.tobytes() == other.squared_distances.tobytes()


def test_characteristic_with_half_its_values_alike_is_refused_with_the_reason() -> None:
    rows = batches.clean(20, 2, 8)
    rows[:13, 1] = 4.0
    with pytest.raises(NotPositiveDefiniteError, match="alike"):
        robust.robust_estimate(rows)
    found = robust.outlying(batches.moments(rows), None, 0.01)
    assert not found.applicable
    assert "alike" in found.why


def test_more_than_half_the_units_in_a_plane_are_refused() -> None:
    rows = batches.clean(30, 3, 9)
    rows[:22, 2] = rows[:22, 0] - rows[:22, 1]
    with pytest.raises((NotPositiveDefiniteError, IllConditionedError)):
        robust.robust_estimate(rows)


def test_few_units_for_the_characteristics_are_not_applicable() -> None:
    found = robust.outlying(batches.moments(batches.clean(14, 3, 1)), None, 0.01)
    assert not found.applicable
    assert "need 15 units" in found.why


def test_f_law_stands_in_where_there_is_no_table() -> None:
    rows = batches.with_cluster(150, 5, 2, units=2, shift=12.0)
    assert robust_table(150, 5) is None
    found = robust.outlying(batches.moments(rows), None, 0.01)
    assert found.law == "asymptotic"
    assert found.units == (148, 149)
    assert found.detail["limit"] < found.statistic


def test_f_law_stands_in_where_the_table_has_too_few_draws_for_the_level() -> None:
    rows = batches.moments(batches.clean(30, 2, 2))
    assert robust.outlying(rows, robust_table(30, 2), 0.01).law == "monte-carlo"
    assert robust.outlying(rows, robust_table(30, 2), 0.0005).law == "asymptotic"


@pytest.mark.parametrize(("n", "p"), [(15, 3), (30, 5)])
def test_table_keeps_the_level(n: int, p: int) -> None:
    rng, draws = np.random.default_rng(3), 400
    found = [robust.outlying(batches.moments(rng.normal(size=(n, p))), robust_table(n, p), 0.05) for _ in range(draws)]
    rejected = sum(result.p_value <= 0.05 for result in found)
    # The table's own sampling error adds to that of this simulation.
    assert abs(rejected / draws - 0.05) < 3 * np.sqrt(0.05 * 0.95 * (1 / draws + 1 / 1000))


@pytest.mark.parametrize(("n", "p", "within"), [(20, 1, 0.15), (20, 2, 0.06), (30, 4, 0.04), (50, 5, 0.04)])
def test_small_sample_factor_takes_away_the_bias_of_the_raw_determinant(n: int, p: int, within: float) -> None:
    rng, roots = np.random.default_rng(4), []
    for _ in range(400):
        raw = robust.robust_estimate(rng.normal(size=(n, p))).raw_covariance
        roots.append(np.linalg.det(raw) ** (1 / p))
    assert np.mean(roots) == pytest.approx(1.0, abs=within)
    assert np.mean(roots) / robust_laws.small_sample(n, p) < 0.9


def test_consistency_factor_is_the_ratio_of_a_truncated_normal_variance() -> None:
    z = stats.norm.ppf(0.75)
    variance = 1 - 2 * z * stats.norm.pdf(z) / 0.5
    assert robust_laws.consistency(1, 0.5) == pytest.approx(1 / variance, rel=1e-12)
    assert robust_laws.consistency(3, 1.0) == 1.0


def test_robust_limit_and_p_value_of_the_f_law_agree() -> None:
    law = robust_laws.hardin_rocke(80, 4)
    assert law.p_value(law.limit(0.02)) == pytest.approx(0.02, rel=1e-10)
    assert law.p_value(0.0) == 1.0
