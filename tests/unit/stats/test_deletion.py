from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from service.stats.arrays import Matrix
from service.stats.deletion import Stages, delete_in_turn, most_deleted, sequential_maxima
from tests.unit.stats import batches


def _stages(rows: Matrix) -> Stages:
    whitened = batches.moments(rows).whitened
    assert whitened is not None
    return delete_in_turn(whitened, np.square(whitened).sum(axis=1))


def _by_hand(rows: Matrix, stages: int) -> tuple[list[int], list[float]]:
    """Delete by measuring what remains afresh each time."""
    kept, units, distances = list(range(rows.shape[0])), [], []
    for _ in range(stages):
        part = rows[kept] - rows[kept].mean(axis=0)
        squared = np.einsum("ij,ij->i", part @ np.linalg.inv(np.cov(part.T)), part)
        units.append(kept.pop(int(squared.argmax())))
        distances.append(float(squared.max()))
    return units, distances


@pytest.mark.parametrize(("n", "p"), [(8, 3), (12, 5), (30, 5), (60, 10)])
def test_stages_are_what_measuring_afresh_gives(n: int, p: int) -> None:
    rows = batches.clean(n, p, n)
    stages = _stages(rows)
    units, distances = _by_hand(rows, most_deleted(n, p))
    assert list(stages.units) == units
    np.testing.assert_allclose(stages.squared_distances, distances, rtol=1e-11)


def test_p_values_are_wilks_bound_on_the_units_that_remain() -> None:
    stages = _stages(batches.clean(30, 5, 3))
    for s, (squared, p_value) in enumerate(zip(stages.squared_distances, stages.p_values, strict=True)):
        m = 30 - s
        expected = m * stats.beta.sf(m * squared / (m - 1) ** 2, 5 / 2, (m - 6) / 2)
        assert p_value == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("shift", [1e5, 1e8])
def test_a_very_far_unit_takes_no_digits_from_the_stages_after_it(shift: float) -> None:
    rows = batches.with_cluster(20, 3, 8, units=1, shift=shift)
    stages = _stages(rows)
    units, distances = _by_hand(rows[:-1], 2)
    assert stages.units == (19, *units)
    np.testing.assert_allclose(stages.squared_distances[1:], distances, rtol=1e-7)


def test_deletion_stops_where_the_units_that_remain_are_collinear() -> None:
    rows = batches.clean(20, 2, 9)
    rows[:, 1] = rows[:, 0]
    rows[4, 1] += 1.0
    assert _stages(rows).units == (4,)


def test_many_batches_at_once_give_what_each_gives_alone() -> None:
    many = np.random.default_rng(1).normal(size=(7, 30, 5))
    whitened = np.stack([batches.moments(rows).whitened for rows in many])
    found = sequential_maxima(whitened)
    alone = [_stages(rows) for rows in many]
    np.testing.assert_allclose(found["within-maximum"], [s.squared_distances[0] for s in alone], rtol=1e-12)
    np.testing.assert_allclose(found["within-sequential"], [s.strongest for s in alone], rtol=1e-10)


@pytest.mark.parametrize(
    ("n", "p", "stages"), [(5, 4, 0), (6, 4, 1), (19, 3, 2), (20, 3, 3), (12, 9, 2), (1000, 3, 21)]
)
def test_number_of_stages_leaves_enough_units_to_measure(n: int, p: int, stages: int) -> None:
    assert most_deleted(n, p) == stages


def test_later_stages_of_sound_batches_reject_less_often_than_their_bound_says() -> None:
    rng, hits = np.random.default_rng(2), np.zeros(4)
    for _ in range(1500):
        hits += _stages(rng.normal(size=(30, 5))).p_values <= 0.05
    assert (hits[1:] < 0.05 * 1500).all()


def test_no_stage_is_possible_where_all_units_lie_equally_far_out() -> None:
    assert _stages(batches.clean(5, 4, 1)).units == ()
