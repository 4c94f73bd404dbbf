from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.stats.closed_testing import closed_test, subset_p_values, subset_statistics
from service.stats.location import LocationResult
from service.stats.terms import statistic_over
from tests.unit.stats import lots

Set = tuple[int, ...]


def by_brute_force(result: LocationResult, alpha: float) -> tuple[list[float], set[Set]]:
    p = result.law.dimension
    sets = [c for size in range(1, p + 1) for c in itertools.combinations(range(p), size)]
    single = {c: statistic_over(result, list(c), alpha).p_value for c in sets}
    adjusted = {c: max(single[s] for s in sets if set(c) <= set(s)) for c in sets}
    incriminated = {c for c in sets if adjusted[c] <= alpha}
    minimal = {c for c in incriminated if not any(set(s) < set(c) for s in incriminated)}
    return [adjusted[(j,)] for j in range(p)], minimal


@pytest.mark.parametrize("dof", [math.inf, 29.0, 6.0])
@pytest.mark.parametrize("p", [1, 2, 3, 5, 6])
@pytest.mark.parametrize("seed", [0, 1, 2, 3])
def test_closed_testing_agrees_with_brute_force(p: int, dof: float, seed: int) -> None:
    result = lots.result(p, seed, dof, size=0.45)
    closed = closed_test(result, 0.05)
    assert closed is not None
    adjusted, minimal = by_brute_force(result, 0.05)
    np.testing.assert_allclose(closed.adjusted_p_value, adjusted, rtol=1e-10)
    assert set(closed.minimal_sets) == minimal
    assert len(closed.minimal_sets) == len(minimal)


def test_brute_force_cases_cover_singles_pairs_larger_sets_and_none() -> None:
    sizes = {
        max((len(s) for s in by_brute_force(lots.result(5, seed, 29.0, size=0.45), 0.05)[1]), default=0)
        for seed in range(40)
    }
    assert {0, 1, 2, 3} <= sizes


def test_subset_statistics_agree_with_a_solve_for_each_subset() -> None:
    result = lots.result(7, 3, 40.0)
    statistics = subset_statistics(result)
    matrix = result.covariance.matrix
    for mask in range(1, 1 << 7):
        index = [j for j in range(7) if mask >> j & 1]
        d = result.difference[index]
        expected = result.effective_units * d @ np.linalg.solve(matrix[np.ix_(index, index)], d)
        assert statistics[mask] == pytest.approx(expected, rel=1e-10)
    assert statistics[0] == 0.0


def test_pair_is_named_where_only_a_relation_broke() -> None:
    sigma = lots.factor_covariance(np.array([[1.0, 0.95, 0.0], [0.95, 1.0, 0.0], [0.0, 0.0, 1.0]]))
    closed = closed_test(lots.mean_test(np.array([0.3, -0.3, 0.05]), sigma, 12.0, 0.05), 0.05)
    assert closed is not None
    assert closed.minimal_sets == ((0, 1),)
    assert closed.minimal_p_values[0] < 1e-6
    assert (closed.adjusted_p_value > 0.05).all()


@given(seed=st.integers(0, 10_000), p=st.integers(1, 6), dof=lots.KINDS, alpha=st.sampled_from([0.01, 0.05, 0.2]))
def test_something_is_incriminated_exactly_when_the_joint_test_rejects(
    seed: int, p: int, dof: float, alpha: float
) -> None:
    result = lots.result(p, seed, dof, size=0.4)
    closed = closed_test(result, alpha)
    assert closed is not None
    assert bool(closed.minimal_sets) == (result.p_value <= alpha)
    assert (closed.adjusted_p_value >= result.p_value).all()
    named = {s[0] for s in closed.minimal_sets if len(s) == 1}
    assert named == set(np.flatnonzero(closed.adjusted_p_value <= alpha).tolist())


@given(seed=st.integers(0, 10_000), dof=lots.KINDS, exponents=st.lists(st.floats(-9, 9), min_size=5, max_size=5))
def test_closed_testing_does_not_depend_on_units_of_measurement(seed: int, dof: float, exponents: list[float]) -> None:
    result = lots.result(5, seed, dof)
    there = subset_p_values(lots.rescaled(result, 10.0 ** np.array(exponents)))
    np.testing.assert_allclose(there, subset_p_values(result), rtol=1e-9)


@given(seed=st.integers(0, 10_000), dof=lots.KINDS, order=st.permutations(range(5)))
def test_closed_testing_follows_the_order_of_characteristics(seed: int, dof: float, order: list[int]) -> None:
    result = lots.result(5, seed, dof)
    here, there = closed_test(result, 0.05), closed_test(lots.permuted(result, np.array(order)), 0.05)
    assert here is not None
    assert there is not None
    np.testing.assert_allclose(there.adjusted_p_value, here.adjusted_p_value[order], rtol=1e-9)
    assert {tuple(sorted(order[j] for j in s)) for s in there.minimal_sets} == set(here.minimal_sets)


def test_more_than_twelve_characteristics_are_left_to_holm() -> None:
    assert closed_test(lots.result(13, 0), 0.05) is None
    assert closed_test(lots.result(12, 0), 0.05) is not None


@pytest.mark.parametrize("dof", [math.inf, 14.0])
def test_family_wise_error_is_held_where_one_mean_moved(dof: float) -> None:
    rng, false = np.random.default_rng(5), 0
    correlation = np.full((3, 3), 0.6) + 0.4 * np.eye(3)
    known, root = lots.factor_covariance(correlation), np.linalg.cholesky(correlation)
    for _ in range(1500):
        x = rng.normal(size=(15, 3)) @ root.T + [1.0, 0.0, 0.0]
        sigma = known if math.isinf(dof) else lots.factor_covariance(np.cov(x.T), dof)
        closed = closed_test(lots.mean_test(x.mean(axis=0), sigma, 15.0, 0.05), 0.05)
        assert closed is not None
        false += any(0 not in s for s in closed.minimal_sets)
    # Three standard errors above the nominal 75.
    assert false <= 75 + 3 * math.sqrt(1500 * 0.05 * 0.95)
