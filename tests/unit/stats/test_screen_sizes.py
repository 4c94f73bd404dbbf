"""Simulated size and power of the screens with their exact laws."""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np
import pytest

from service.stats import normality
from service.stats.arrays import Matrix
from service.stats.moments import Moments, sample_moments
from service.stats.null_laws import NullLaws
from service.stats.ordering import order_dependence
from service.stats.screen import NullLaw, ScreenStatistic

LAWS = NullLaws()
LEVELS = (0.01, 0.05)

SCREENS: dict[str, Callable[[Moments, NullLaw | None], ScreenStatistic]] = {
    "skewness": normality.skewness,
    "kurtosis": normality.kurtosis,
    "henze-zirkler": normality.henze_zirkler,
    "order": lambda moments, law: order_dependence(moments, np.arange(float(moments.units)), law),
}


def _batches(n: int, p: int, runs: int) -> Iterator[Matrix]:
    rng = np.random.default_rng([20, n, p])
    mixing = rng.standard_normal((p, p))
    for _ in range(runs):
        yield rng.standard_normal((n, p)) @ mixing + 100


def _p_values(n: int, p: int, batches: Iterator[Matrix]) -> dict[str, Matrix]:
    found: dict[str, list[float]] = {name: [] for name in SCREENS}
    law = LAWS.get(n, p)
    for x in batches:
        moments = sample_moments(x, np.full(p, 100.0))
        for name, screen in SCREENS.items():
            p_value = screen(moments, law).p_value
            assert p_value is not None
            found[name].append(p_value)
    return {name: np.array(values) for name, values in found.items()}


def _assert_sizes(n: int, p: int, runs: int) -> None:
    for name, p_values in _p_values(n, p, _batches(n, p, runs)).items():
        for level in LEVELS:
            size = (p_values <= level).mean()
            # Both the runs and the draws of the table leave it uncertain.
            error = np.sqrt(level * (1 - level) * (1 / runs + 1 / 20_000))
            assert abs(size - level) < 4 * error, f"{name} at n={n}, p={p}: {size} at level {level}"


def test_exact_laws_keep_the_level_at_twelve_units_of_five_characteristics() -> None:
    _assert_sizes(12, 5, 8_000)


@pytest.mark.slow
@pytest.mark.parametrize(("n", "p"), [(4, 1), (8, 3), (7, 5), (30, 5), (60, 10)])
def test_exact_laws_keep_the_level_at_every_size(n: int, p: int) -> None:
    _assert_sizes(n, p, 40_000)


@pytest.mark.parametrize(("n", "p", "share"), [(12, 5, 0.1), (30, 5, 0.9), (60, 10, 0.99)])
def test_skewed_batches_are_found_more_often_the_more_units_there_are(n: int, p: int, share: float) -> None:
    rng = np.random.default_rng([21, n])
    found = _p_values(n, p, (np.exp(rng.standard_normal((n, p))) + 100 for _ in range(300)))
    for name in ("skewness", "henze-zirkler"):
        assert (found[name] <= 0.01).mean() >= share
