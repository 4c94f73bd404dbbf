from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats as scipy_stats
from statsmodels.tsa.stattools import acf

from service.stats import ordering
from service.stats.arrays import Matrix
from service.stats.moments import Moments, sample_moments
from service.stats.null_laws import NullLaws
from service.stats.ordering import lag_term, order_dependence

LAWS = NullLaws()


def _moments(x: Matrix) -> Moments:
    return sample_moments(x, np.zeros(x.shape[1]))


def _batch(n: int, p: int, seed: int = 1) -> Matrix:
    return np.random.default_rng([seed, n, p]).standard_normal((n, p))


def _drifting(n: int, p: int, memory: float) -> Matrix:
    x = _batch(n, p)
    for i in range(1, n):
        x[i] += memory * x[i - 1]
    return x


@pytest.mark.parametrize("lag", [1, 2, 5])
def test_a_term_is_hosking_s_in_covariances_with_divisor_n(lag: int) -> None:
    x = _batch(20, 3)
    c = x - x.mean(axis=0)
    n, inverse = len(x), np.linalg.inv(c.T @ c / len(x))
    lagged = c[lag:].T @ c[:-lag] / n
    hosking = n**2 / (n - lag) * np.trace(lagged.T @ inverse @ lagged @ inverse)
    whitened = _moments(x).whitened
    assert whitened is not None
    assert lag_term(whitened, lag) == pytest.approx(hosking, rel=1e-12)


def test_one_characteristic_gives_its_squared_autocorrelation() -> None:
    x, n = _batch(30, 1), 30
    r = acf(x[:, 0], nlags=1, fft=False)[1]
    result = order_dependence(_moments(x), np.arange(30.0), None)
    assert result.statistic == pytest.approx(n * n * r * r / (n - 1), rel=1e-12)
    assert result.p_value == pytest.approx(scipy_stats.chi2.sf(n * n * r * r / (n - 1), 1), rel=1e-11)
    assert result.detail["autocorrelations"] == pytest.approx([r], rel=1e-12)


def test_many_batches_give_what_each_gives_alone() -> None:
    whitened = np.array([_moments(_batch(12, 4, seed)).whitened for seed in range(5)])
    many = ordering.of_many(whitened)["order-dependence"]
    assert many == pytest.approx([lag_term(w) for w in whitened], rel=1e-12)


@given(order=st.permutations(range(16)))
def test_the_order_of_measurement_counts_and_the_order_of_rows_does_not(order: list[int]) -> None:
    x, places = _drifting(16, 2, 0.9), np.arange(16.0) ** 2
    straight = order_dependence(_moments(x), places, LAWS.get(16, 2))
    shuffled = order_dependence(_moments(x[order]), places[order], LAWS.get(16, 2))
    assert shuffled.statistic == pytest.approx(straight.statistic, rel=1e-11)
    assert shuffled.p_value == straight.p_value


def test_without_an_order_of_measurement_the_screen_is_not_applicable() -> None:
    result = order_dependence(_moments(_batch(12, 2)), None, LAWS.get(12, 2))
    assert not result.applicable
    assert "which order" in result.why


def test_units_measured_at_the_same_time_leave_the_order_open() -> None:
    places = np.array([1.0, 2, 3, 4, 5, 6, 6, 7, 8, 9, 10, 11])
    result = order_dependence(_moments(_batch(12, 2)), places[::-1], LAWS.get(12, 2))
    assert not result.applicable
    assert "share a place" in result.why


@pytest.mark.parametrize(("n", "p"), [(4, 3), (2, 1), (3, 5)])
def test_too_few_units_say_nothing_about_order(n: int, p: int) -> None:
    result = order_dependence(_moments(_batch(n, p)), np.arange(float(n)), None)
    assert not result.applicable
    assert f"at least {p + 2}" in result.why


@pytest.mark.parametrize("memory", [0.8, -0.8])
def test_dependence_of_either_sign_is_found(memory: float) -> None:
    result = order_dependence(_moments(_drifting(40, 3, memory)), np.arange(40.0), LAWS.get(40, 3))
    assert result.law == "monte-carlo"
    assert result.p_value <= 0.001


def test_dependence_of_one_characteristic_on_another_before_it_is_found() -> None:
    x = _batch(41, 2)
    x = np.column_stack([x[1:, 0], x[:-1, 0] + 0.3 * x[1:, 1]])
    result = order_dependence(_moments(x), np.arange(40.0), LAWS.get(40, 2))
    assert result.p_value <= 0.001


def test_detail_goes_into_a_record() -> None:
    result = order_dependence(_moments(_batch(12, 2)), np.arange(12.0), LAWS.get(12, 2))
    assert json.loads(json.dumps(dict(result.detail))) == result.detail
