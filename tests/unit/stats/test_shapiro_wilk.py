from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats as scipy_stats

from service.stats.arrays import Matrix
from service.stats.moments import Moments, sample_moments
from service.stats.multiplicity import holm
from service.stats.shapiro_wilk import margins, shapiro_wilk, weights


def _moments(x: Matrix) -> Moments:
    return sample_moments(x, np.zeros(x.shape[1]))


def _batch(n: int, p: int, seed: int = 1) -> Matrix:
    return np.random.default_rng([seed, n, p]).standard_normal((n, p))


@pytest.mark.parametrize("n", [*range(3, 31), 50, 200, 2000, 5000])
@pytest.mark.parametrize("transform", [np.asarray, np.exp, np.tanh])
def test_w_and_p_agree_with_scipy(n: int, transform: np.ufunc) -> None:
    x = transform(_batch(n, 1))
    result = margins(_moments(x))
    theirs = scipy_stats.shapiro(x[:, 0])
    # scipy's normal quantiles have nine digits; the values of R in tests/reference agree to 1e-11.
    assert result.statistic == pytest.approx(theirs.statistic, rel=5e-9)
    assert result.p_value == pytest.approx(theirs.pvalue, rel=2e-6)


@pytest.mark.parametrize("n", [3, 4, 5, 6, 7, 12, 50, 5000])
def test_weights_are_antisymmetric_and_of_length_one(n: int) -> None:
    a = weights(n)
    assert (a == -a[::-1]).all()
    assert a @ a == pytest.approx(1.0, rel=1e-14)


def test_each_characteristic_has_its_own_w_and_holm_joins_them() -> None:
    x = np.column_stack([_batch(25, 2), np.exp(_batch(25, 1))])
    result = margins(_moments(x))
    alone = [margins(_moments(x[:, [j]])) for j in range(3)]
    assert result.detail["w"] == pytest.approx([one.statistic for one in alone], rel=1e-14)
    assert result.detail["holm_p_values"] == pytest.approx(holm(np.array([one.p_value for one in alone])), rel=1e-12)
    assert (result.statistic, result.p_value) == (min(result.detail["w"]), min(result.detail["holm_p_values"]))


def test_a_constant_characteristic_is_named_and_the_others_are_judged() -> None:
    x = _batch(10, 3)
    x[:, 1] = 0.1
    result = margins(_moments(x))
    assert result.detail["constant_characteristics"] == [1]
    assert result.detail["w"][1] is None
    others = margins(_moments(x[:, [0, 2]]))
    assert [result.detail["w"][j] for j in (0, 2)] == others.detail["w"]


def test_a_batch_of_constants_has_no_w() -> None:
    result = margins(_moments(np.full((6, 2), 0.1)))
    assert (result.applicable, result.p_value) == (False, None)
    assert result.why == "Every characteristic is constant."


@pytest.mark.parametrize("n", [1, 2, 5001])
def test_w_is_for_three_to_five_thousand_units(n: int) -> None:
    result = margins(_moments(_batch(n, 2)))
    assert not result.applicable
    assert f"has {n}" in result.why


def test_more_characteristics_than_units_are_no_obstacle() -> None:
    assert margins(_moments(_batch(4, 9))).applicable


@given(scale=st.floats(-150, 150))
def test_w_does_not_change_with_units_of_measurement(scale: float) -> None:
    x = np.sort(_batch(12, 2), axis=0)
    x -= x.mean(axis=0)
    w, p = shapiro_wilk(x * 10.0**scale)
    assert w == pytest.approx(shapiro_wilk(x)[0], rel=1e-13)
    assert p == pytest.approx(shapiro_wilk(x)[1], rel=1e-11)


def test_three_units_at_equal_steps_are_as_normal_as_can_be() -> None:
    w, p = shapiro_wilk(np.array([[-1.0], [0.0], [1.0]]))
    assert w[0] == 1.0
    assert p[0] == pytest.approx(1.0, abs=1e-7)


@pytest.mark.parametrize("n", range(4, 12))
def test_the_least_normal_few_units_have_a_p_value(n: int) -> None:
    x = np.zeros((n, 1))
    x[-1] = 1.0
    w, p = shapiro_wilk(x - x.mean())
    assert w[0] == pytest.approx(n * weights(n)[-1] ** 2 / (n - 1), rel=1e-12)
    assert 0 < p[0] < 0.05


def test_its_size_is_near_the_level() -> None:
    x = np.random.default_rng(5).standard_normal((15, 20_000))
    w, p = shapiro_wilk(np.sort(x - x.mean(axis=0), axis=0))
    assert w.shape == p.shape == (20_000,)
    for level in (0.01, 0.05):
        # Royston's law is fitted, not exact: allow it 5 per cent of the level beyond chance.
        assert abs((p <= level).mean() - level) < 0.05 * level + 3 * np.sqrt(level / 20_000)
