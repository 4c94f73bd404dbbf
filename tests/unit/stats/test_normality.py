from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats as scipy_stats

from service.stats import normality
from service.stats.arrays import Matrix
from service.stats.moments import Moments, sample_moments
from service.stats.null_laws import NullLaws

SIZES = [(3, 1), (8, 3), (12, 5), (40, 5), (40, 6), (60, 10), (150, 2)]
LAWS = NullLaws()


def _batch(n: int, p: int, seed: int = 1) -> Matrix:
    return np.random.default_rng([seed, n, p]).standard_normal((n, p))


def _moments(x: Matrix) -> Moments:
    return sample_moments(x, np.zeros(x.shape[1]))


def _whitened(x: Matrix) -> Matrix:
    whitened = _moments(x).whitened
    assert whitened is not None
    return whitened


def _inner_products(x: Matrix) -> Matrix:
    """Return g by an explicit inverse of S_n."""
    centred = x - x.mean(axis=0)
    return np.asarray(centred @ np.linalg.inv(centred.T @ centred / len(x)) @ centred.T)


@pytest.mark.parametrize(("n", "p"), SIZES)
def test_skewness_is_the_mean_cube_of_the_inner_products(n: int, p: int) -> None:
    g = _inner_products(_batch(n, p))
    naive = math.fsum(v**3 for v in g.ravel().tolist()) / n**2
    assert normality.skewness_of(_whitened(_batch(n, p))) == pytest.approx(naive, rel=1e-11, abs=1e-13)


@pytest.mark.parametrize(("n", "p"), SIZES)
def test_kurtosis_is_the_mean_square_of_the_squared_lengths(n: int, p: int) -> None:
    g = np.diagonal(_inner_products(_batch(n, p)))
    naive = math.fsum(v**2 for v in g.tolist()) / n
    assert normality.kurtosis_of(_whitened(_batch(n, p))) == pytest.approx(naive, rel=1e-11)


def test_mardia_of_whole_numbers_agrees_with_exact_fractions() -> None:
    x = [[1, 2], [4, 1], [3, 7], [8, 5], [2, 2], [6, 9]]
    n = len(x)
    a, b = (sum(Fraction(row[j]) for row in x) / n for j in (0, 1))
    d = [(row[0] - a, row[1] - b) for row in x]
    s, t, u = (sum(v[j] * v[k] for v in d) / n for j, k in ((0, 0), (0, 1), (1, 1)))
    det = s * u - t * t
    g = [[(u * v[0] * w[0] - t * (v[0] * w[1] + v[1] * w[0]) + s * v[1] * w[1]) / det for w in d] for v in d]
    whitened = _whitened(np.array(x, dtype=float))
    assert normality.skewness_of(whitened) == pytest.approx(float(sum(v**3 for r in g for v in r) / n**2), rel=1e-13)
    assert normality.kurtosis_of(whitened) == pytest.approx(float(sum(g[i][i] ** 2 for i in range(n)) / n), rel=1e-13)


def test_one_characteristic_gives_the_squared_skewness_and_the_kurtosis() -> None:
    x = np.exp(_batch(25, 1))
    whitened = _whitened(x)
    assert normality.skewness_of(whitened) == pytest.approx(scipy_stats.skew(x[:, 0]) ** 2, rel=1e-12)
    assert normality.kurtosis_of(whitened) == pytest.approx(scipy_stats.kurtosis(x[:, 0], fisher=False), rel=1e-12)


@pytest.mark.parametrize(("n", "p"), [(8, 3), (12, 5), (40, 5), (60, 10)])
def test_henze_zirkler_agrees_with_its_definition_unit_by_unit(n: int, p: int) -> None:
    rows = _batch(n, p)
    inverse = np.linalg.inv(np.cov(rows.T, bias=True))
    b2 = ((n * (2 * p + 1) / 4) ** (1 / (p + 4)) / math.sqrt(2)) ** 2

    def distance(difference: Matrix) -> float:
        return float(difference @ inverse @ difference)

    pairs = sum(math.exp(-b2 / 2 * distance(x - y)) for x in rows for y in rows) / n
    centre = sum(math.exp(-b2 / (2 + 2 * b2) * distance(x - rows.mean(axis=0))) for x in rows)
    expected = pairs - 2 * (1 + b2) ** (-p / 2) * centre + n * (1 + 2 * b2) ** (-p / 2)
    result = normality.henze_zirkler(_moments(rows), None)
    assert result.statistic == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(("n", "p"), SIZES)
def test_many_batches_give_what_each_gives_alone(n: int, p: int) -> None:
    whitened = np.array([_whitened(_batch(n, p, seed)) for seed in range(4)])
    many = normality.mardia_of_many(whitened) | normality.henze_zirkler_of_many(whitened)
    alone = {
        normality.SKEWNESS: normality.skewness_of,
        normality.KURTOSIS: normality.kurtosis_of,
        normality.HENZE_ZIRKLER: normality.henze_zirkler_of,
    }
    for name, function in alone.items():
        assert many[name] == pytest.approx([function(w) for w in whitened], rel=1e-11, abs=1e-13)


def test_large_batches_taken_in_stripes_give_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    whitened = _whitened(_batch(61, 8))
    whole = normality.skewness_of(whitened), normality.henze_zirkler_of(whitened)
    monkeypatch.setattr(normality, "_STRIPE", 61 * 7)
    striped = normality.skewness_of(whitened), normality.henze_zirkler_of(whitened)
    assert striped == pytest.approx(whole, rel=1e-12)


STATISTICS = (normality.skewness_of, normality.kurtosis_of, normality.henze_zirkler_of)


@given(scale=st.lists(st.floats(-9, 9), min_size=4, max_size=4))
def test_statistics_do_not_change_with_units_of_measurement(scale: list[float]) -> None:
    x = _batch(20, 4)
    plain, scaled = _whitened(x), _whitened(x * 10.0 ** np.array(scale))
    for function in STATISTICS:
        assert function(scaled) == pytest.approx(function(plain), rel=1e-11)


@given(offset=st.integers(-(10**6), 10**6))
def test_statistics_do_not_change_with_an_offset_of_data_and_target_alike(offset: int) -> None:
    # Multiples of 2^-20, so that the offset itself costs no digit.
    x = np.round(_batch(20, 4) * 2.0**20) / 2.0**20
    moved = sample_moments(x + offset, np.full(4, float(offset))).whitened
    assert moved is not None
    for function in STATISTICS:
        assert function(moved) == pytest.approx(function(_whitened(x)), rel=1e-11)


@given(order=st.permutations(range(15)))
def test_statistics_do_not_change_with_the_order_of_units(order: list[int]) -> None:
    x = np.exp(_batch(15, 3))
    for function in STATISTICS:
        assert function(_whitened(x[order])) == pytest.approx(function(_whitened(x)), rel=1e-11)


def test_kurtosis_law_has_the_mean_and_variance_that_simulation_finds() -> None:
    n, p = 12, 3
    table = LAWS.get(n, p)
    assert table is not None
    values = table.values[normality.KURTOSIS]
    mean = p * (p + 2) * (n - 1) / (n + 1)
    deviation = values.std()
    assert abs(values.mean() - mean) < 4 * deviation / math.sqrt(values.size)
    one_off = normality.kurtosis_law(mean + deviation, n, p)
    assert one_off == pytest.approx(2 * scipy_stats.norm.sf(1), rel=0.05)


def test_skewness_correction_makes_the_mean_that_simulation_finds() -> None:
    n, p = 12, 3
    table = LAWS.get(n, p)
    assert table is not None
    values = table.values[normality.SKEWNESS]
    mean = p * (p + 2) * ((n + 1) * (p + 1) - 6) / ((n + 1) * (n + 3))
    assert abs(values.mean() - mean) < 4 * values.std() / math.sqrt(values.size)
    k = (p + 1) * (n + 1) * (n + 3) / (n * ((n + 1) * (p + 1) - 6))
    at_mean = scipy_stats.chi2.sf(n * k * mean / 6, p * (p + 1) * (p + 2) / 6)
    assert normality.skewness_law(mean, n, p) == pytest.approx(at_mean, rel=1e-12)


@pytest.mark.parametrize("screen", [normality.skewness, normality.kurtosis, normality.henze_zirkler])
def test_a_table_gives_the_p_value_and_the_large_sample_one_stands_beside_it(screen: object) -> None:
    assert callable(screen)
    moments = _moments(_batch(12, 5))
    with_table, without = screen(moments, LAWS.get(12, 5)), screen(moments, None)
    assert (with_table.law, without.law) == ("monte-carlo", "asymptotic")
    assert with_table.asymptotic_p_value == without.p_value
    assert with_table.p_value != without.p_value


@pytest.mark.parametrize("screen", [normality.skewness, normality.kurtosis, normality.henze_zirkler])
@pytest.mark.parametrize("n", [1, 4, 6])
def test_too_few_units_say_nothing_about_normality(screen: object, n: int) -> None:
    assert callable(screen)
    result = screen(_moments(_batch(n, 5)), None)
    assert (result.applicable, result.statistic, result.p_value) == (False, None, None)
    assert "at least 7" in result.why


def test_at_one_unit_more_than_characteristics_plus_one_the_statistics_are_constants() -> None:
    p = 4
    for seed in range(3):
        whitened = _whitened(np.exp(_batch(p + 1, p, seed)))
        assert normality.skewness_of(whitened) == pytest.approx(p * (p - 1), rel=1e-10)
        assert normality.kurtosis_of(whitened) == pytest.approx(p * p, rel=1e-10)


def test_three_units_of_one_characteristic_have_no_kurtosis_screen() -> None:
    result = normality.kurtosis(_moments(_batch(3, 1)), LAWS.get(3, 1))
    assert not result.applicable
    assert "3 units" in result.why


def test_collinear_characteristics_are_named_as_the_obstacle() -> None:
    x = _batch(20, 3)
    x[:, 2] = x[:, 0] + x[:, 1]
    result = normality.skewness(_moments(x), None)
    assert not result.applicable
    assert "too close to singular" in result.why


@pytest.mark.parametrize("screen", [normality.skewness, normality.henze_zirkler])
def test_a_log_normal_batch_is_found(screen: object) -> None:
    assert callable(screen)
    x = np.exp(_batch(30, 5))
    assert screen(_moments(x), LAWS.get(30, 5)).p_value <= 0.001


def test_heavy_tails_are_found_by_kurtosis() -> None:
    x = _batch(30, 5) / np.sqrt(np.random.default_rng(2).chisquare(2, 30))[:, None]
    assert normality.kurtosis(_moments(x), LAWS.get(30, 5)).p_value <= 0.001


def test_tails_too_light_are_found_by_kurtosis() -> None:
    x = _batch(60, 5)
    x /= np.linalg.norm(x, axis=1)[:, None]
    assert normality.kurtosis(_moments(x), LAWS.get(60, 5)).p_value <= 0.001
