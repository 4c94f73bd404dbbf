from __future__ import annotations

from functools import lru_cache

import numpy as np
import pytest
from scipy import stats

from tests.simulation.sizes import TESTS, as_if_known, bounds, p_values

SIZES = [(8, 3), (12, 5), (30, 5), (60, 10)]
QUICK, FULL = 1_500, 40_000

drawn = lru_cache(maxsize=None)(p_values)


def _rejections(n: int, p: int, lots: int, test: str, level: float) -> int:
    return int((drawn(n, p, lots)[:, TESTS.index(test)] <= level).sum())


@pytest.mark.parametrize("level", [0.05, 0.01])
@pytest.mark.parametrize("test", TESTS)
@pytest.mark.parametrize(("n", "p"), SIZES)
def test_size_is_the_nominal_level(n: int, p: int, test: str, level: float) -> None:
    low, high = bounds(level, QUICK)
    assert low <= _rejections(n, p, QUICK, test, level) <= high


@pytest.mark.slow
@pytest.mark.parametrize("level", [0.05, 0.01])
@pytest.mark.parametrize("test", TESTS)
@pytest.mark.parametrize(("n", "p"), SIZES)
def test_size_is_the_nominal_level_in_many_lots(n: int, p: int, test: str, level: float) -> None:
    low, high = bounds(level, FULL)
    assert low <= _rejections(n, p, FULL, test, level) <= high


@pytest.mark.slow
@pytest.mark.parametrize("test", TESTS)
@pytest.mark.parametrize(("n", "p"), SIZES)
def test_p_values_of_agreeing_lots_are_uniform(n: int, p: int, test: str) -> None:
    assert stats.kstest(drawn(n, p, FULL)[:, TESTS.index(test)], "uniform").pvalue > 1e-3


def test_an_estimated_covariance_taken_as_known_rejects_more_than_twice_as_often() -> None:
    # By the law of T-squared the size is 0.129 at 29 degrees of freedom.
    low, high = stats.binom.interval(0.999, QUICK, 0.129)
    assert low <= as_if_known(12, 5, QUICK, 29, 0.05) * QUICK <= high
    assert low > bounds(0.05, QUICK)[1]


def test_the_simulated_lots_are_the_same_every_time() -> None:
    np.testing.assert_array_equal(p_values(8, 3, 20), drawn(8, 3, QUICK)[:20])
