from __future__ import annotations

import itertools
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.stats import sign_flip
from service.stats.arrays import Matrix
from service.stats.covariance import Covariance, factor_covariance
from service.stats.location import chi_square_test, hotelling_test, pooled_test
from service.stats.moments import Moments, sample_moments
from service.stats.screen import ScreenStatistic
from service.stats.sign_flip import batch_sign_flip, every_pattern, pooled_sign_flip, reference_sign_flip

SIGMA0 = factor_covariance(np.array([[2.0, 0.6, 0.1], [0.6, 1.0, -0.2], [0.1, -0.2, 0.5]]), 12.0)

Check = Callable[[Moments, Covariance], ScreenStatistic]
KINDS: dict[str, tuple[Check, Callable[[Moments], float]]] = {
    "reference": (reference_sign_flip, lambda m: chi_square_test(m, SIGMA0, 0.05).statistic),
    "batch": (lambda m, _: batch_sign_flip(m), lambda m: hotelling_test(m, 0.05).statistic),
    "pooled": (pooled_sign_flip, lambda m: pooled_test(m, SIGMA0, 0.05).statistic),
}


def _moments(x: Matrix) -> Moments:
    return sample_moments(x, np.zeros(x.shape[1]))


def _batch(n: int, seed: int = 1) -> Matrix:
    return np.random.default_rng([seed, n]).standard_normal((n, 3)) + 0.4


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("n", [4, 8])
def test_full_enumeration_agrees_with_a_test_of_every_pattern(kind: str, n: int) -> None:
    check, statistic = KINDS[kind]
    x = _batch(n)
    every = [statistic(_moments(x * np.array(s)[:, None])) for s in itertools.product([1, -1], repeat=n)]
    share = np.mean([value >= every[0] * (1 - 1e-9) for value in every])
    result = check(_moments(x), SIGMA0)
    assert result.law == "exact"
    assert result.statistic == pytest.approx(every[0], rel=1e-12)
    assert result.p_value == pytest.approx(share, abs=1e-15)


@pytest.mark.parametrize("kind", KINDS)
def test_drawn_patterns_agree_with_full_enumeration(kind: str, monkeypatch: pytest.MonkeyPatch) -> None:
    check, _ = KINDS[kind]
    exact = check(_moments(_batch(12)), SIGMA0)
    monkeypatch.setattr(sign_flip, "MOST_UNITS_IN_FULL", 11)
    drawn = check(_moments(_batch(12)), SIGMA0)
    assert (exact.law, drawn.law) == ("exact", "monte-carlo")
    assert exact.p_value is not None
    assert drawn.p_value is not None
    assert abs(drawn.p_value - exact.p_value) < 4 * np.sqrt(exact.p_value * (1 - exact.p_value) / 10_000)


def test_every_pattern_is_there_once_and_the_first_is_the_observed_one() -> None:
    patterns = every_pattern(5)
    assert (patterns[0] == 1).all()
    assert (patterns[:, 0] == 1).all()
    assert len({tuple(row) for row in patterns.tolist()}) == 16


def test_drawn_patterns_are_the_same_on_every_call_and_counted_with_the_observed_one() -> None:
    first, second = (reference_sign_flip(_moments(_batch(30)), SIGMA0) for _ in range(2))
    assert first == second
    assert first.detail == {"patterns": 10_000, "smallest_p_value": 1e-4}


def test_more_units_than_are_kept_in_memory_give_a_p_value_too() -> None:
    x = _batch(230) - 0.4
    result = reference_sign_flip(_moments(x + 0.2), SIGMA0)
    assert result.p_value == 1e-4
    assert reference_sign_flip(_moments(x - x.mean(axis=0)), SIGMA0).p_value == 1.0


@given(scale=st.lists(st.floats(-9, 9), min_size=3, max_size=3))
def test_p_value_does_not_change_with_units_of_measurement(scale: list[float]) -> None:
    x, factors = _batch(10), 10.0 ** np.array(scale)
    assert batch_sign_flip(_moments(x * factors)).p_value == batch_sign_flip(_moments(x)).p_value


@pytest.mark.parametrize("kind", KINDS)
def test_tied_patterns_all_count(kind: str) -> None:
    check, _ = KINDS[kind]
    x = np.repeat(_batch(5), 2, axis=0)
    swapped = x.copy()
    swapped[[1, 2]] = swapped[[2, 1]]
    assert check(_moments(swapped), SIGMA0).p_value == check(_moments(x), SIGMA0).p_value


def test_a_single_unit_cannot_speak_against_its_target() -> None:
    result = reference_sign_flip(_moments(_batch(1) + 50), SIGMA0)
    assert (result.p_value, result.detail["patterns"]) == (1.0, 1)


def test_a_shift_of_a_million_standard_deviations_has_the_smallest_p_value() -> None:
    for result in (batch_sign_flip(_moments(_batch(12) + 1e6)), batch_sign_flip(_moments(_batch(40) + 1e6))):
        assert result.p_value == result.detail["smallest_p_value"]


def test_a_batch_without_a_covariance_has_no_check_with_it() -> None:
    result = batch_sign_flip(_moments(_batch(3)))
    assert not result.applicable
    assert "at least 4 units" in result.why


def test_its_size_is_the_level_for_symmetric_heavy_tails() -> None:
    rng, level, runs = np.random.default_rng(8), 0.05, 3_000
    # Cauchy units: every test by a normal law is wrong here.
    batches = rng.standard_normal((runs, 8, 3)) / np.abs(rng.standard_normal((runs, 8, 1)))
    p = np.array([batch_sign_flip(_moments(x)).p_value for x in batches])
    attainable = np.floor(level * 128) / 128
    assert abs((p <= level).mean() - attainable) < 3 * np.sqrt(level / runs)
