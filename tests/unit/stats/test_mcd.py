from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from service.stats import mcd, starts
from service.stats.arrays import Matrix
from tests.unit.stats import batches


def _standardised(n: int, p: int, seed: int, many: int = 1) -> Matrix:
    rows = np.random.default_rng(seed).normal(size=(many, n, p))
    return (rows - np.median(rows, axis=1, keepdims=True)) / starts.robust_scale(rows)[:, None, :]


@pytest.mark.parametrize(("n", "constant"), [(10, 2.21914), (17, 2.21914)])
def test_scale_is_the_order_statistic_of_all_differences(n: int, constant: float) -> None:
    values = batches.clean(n, 1, 1)
    differences = sorted(abs(values[i, 0] - values[j, 0]) for i in range(n) for j in range(i))
    half = n // 2 + 1
    assert starts.robust_scale(values)[0] == pytest.approx(constant * differences[half * (half - 1) // 2 - 1])


@pytest.mark.parametrize("n", [800, 1500])
def test_scale_is_consistent_for_the_normal_law(n: int) -> None:
    values = 3.0 * np.random.default_rng(2).normal(size=(n, 20))
    assert starts.robust_scale(values).mean() == pytest.approx(3.0, rel=0.03)


def test_ranks_of_tied_values_are_those_of_scipy() -> None:
    values = np.random.default_rng(3).integers(0, 6, size=(2, 25, 3)).astype(float)
    np.testing.assert_array_equal(starts.average_ranks(values), stats.rankdata(values, axis=1))


def test_six_guesses_are_near_the_correlation_of_a_large_normal_batch() -> None:
    correlation = np.array([[1.0, 0.6], [0.6, 1.0]])
    rows = np.random.default_rng(4).normal(size=(1, 900, 2)) @ np.linalg.cholesky(correlation).T
    axes = np.linalg.eigh(starts.six_guesses(rows)[0])[1]
    np.testing.assert_allclose(np.abs(axes[:, :, 1]), np.sqrt(0.5), atol=0.06)


def test_concentration_never_raises_the_determinant_and_stops_at_its_own_neighbours() -> None:
    z = _standardised(40, 3, 5)
    begun = mcd.measure(z, np.arange(mcd.half(40, 3))[None])
    ended = mcd.concentrate(z, begun.members)
    assert ended.log_determinant[0] <= begun.log_determinant[0]
    assert mcd.nearest(mcd.distances(z, ended), mcd.half(40, 3)).tolist() == ended.members.tolist()


def test_no_exchange_of_two_units_lowers_the_determinant_of_what_is_found() -> None:
    z = _standardised(16, 2, 6)
    found = mcd.deterministic(z)
    members = found.members[0].tolist()
    for out in members:
        for into in sorted(set(range(16)) - set(members)):
            other = np.array(sorted({*members, into} - {out}))
            assert mcd.measure(z, other[None]).log_determinant[0] > found.log_determinant[0] - 1e-9


def test_exchanges_bring_the_search_nearer_to_the_best_subset() -> None:
    z = _standardised(15, 3, 7, many=40)
    best = np.array([mcd.exhaustive(batch[None]).log_determinant[0] for batch in z])
    with_, without = (mcd.deterministic(z, exchanging=flag).log_determinant for flag in (True, False))
    assert (with_ >= best - 1e-9).all()
    assert (with_ - best).mean() < 0.5 * (without - best).mean()


def test_search_from_many_beginnings_nearly_always_finds_the_best_subset() -> None:
    z = _standardised(13, 2, 8, many=60)
    best = np.array([mcd.exhaustive(batch[None]).log_determinant[0] for batch in z])
    assert (mcd.searched(z).log_determinant < best + 1e-9).mean() > 0.9


def test_many_batches_at_once_find_what_each_finds_alone() -> None:
    z = _standardised(30, 4, 9, many=6)
    together = mcd.deterministic(z)
    for batch, members in zip(z, together.members, strict=True):
        assert mcd.deterministic(batch[None]).members[0].tolist() == members.tolist()
