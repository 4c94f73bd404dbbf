from __future__ import annotations

import numpy as np
import pytest

from service.errors import IllConditionedError, NotPositiveDefiniteError, TooFewUnitsError
from service.stats import randomisation
from service.stats.location import hotelling_test
from service.stats.moments import sample_moments
from tests.unit.stats import precise


def _batch(purpose: str, n: int, p: int) -> np.ndarray:
    [batch] = randomisation.normal_batches(purpose, n, p, 1)
    return batch[0]


def _correlated(n: int, p: int) -> np.ndarray:
    return _batch("correlated", n, p) @ (np.eye(p) + 0.5 * np.tri(p)) + np.arange(1.0, p + 1)


@pytest.mark.parametrize(("n", "p"), [(2, 1), (6, 5), (30, 5), (12, 8)])
def test_moments_agree_with_60_digits(n: int, p: int) -> None:
    x, target = _correlated(n, p), np.arange(1.0, p + 1)
    moments = sample_moments(x, target)
    d, scatter = precise.scatter(x, target)
    np.testing.assert_allclose(moments.difference, [float(value) for value in d], rtol=0, atol=1e-15)
    expected = np.array(scatter.tolist(), dtype=np.float64)
    np.testing.assert_allclose(moments.scatter, expected, rtol=0, atol=1e-15 * abs(expected).max())


@pytest.mark.parametrize("centre", [1e6, 1e7, 1e9])
def test_moments_of_data_far_from_zero_are_those_of_the_doubles(centre: float) -> None:
    # The difference from the target is exact here; the difference of means is wrong in the fifth digit at 1e9.
    x = np.array([[centre + 0.2]] + [[centre + 0.1], [centre + 0.3]] * 50)
    target = np.array([centre])
    moments = sample_moments(x, target)
    d, scatter = precise.scatter(x, target)
    assert moments.difference[0] == pytest.approx(float(d[0]), rel=1e-14)
    assert moments.scatter[0, 0] == pytest.approx(float(scatter[0]), rel=1e-13)


def test_an_offset_of_a_million_standard_deviations_changes_nothing_where_the_data_carry_it() -> None:
    # Multiples of 2**-20 below 2**10, so that adding 2**20 is exact.
    x, target = np.round(_batch("offset", 30, 5) * 2**20) / 2**20, np.array([0.5, -0.25, 0.0, 1.0, 2.0])
    near, far = sample_moments(x, target), sample_moments(x + 2.0**20, target + 2.0**20)
    np.testing.assert_array_equal(near.deviations, far.deviations)
    np.testing.assert_array_equal(near.scatter, far.scatter)
    np.testing.assert_array_equal(near.difference, far.difference)


def test_a_target_far_from_the_data_costs_no_digit_of_the_covariance() -> None:
    x = np.round(_batch("offset", 30, 5) * 2**20) / 2**20
    near, far = sample_moments(x, np.zeros(5)), sample_moments(x, np.full(5, -(2.0**20)))
    np.testing.assert_allclose(far.scatter, near.scatter, rtol=0, atol=1e-15 * abs(near.scatter).max())
    np.testing.assert_allclose(far.difference, near.difference + 2.0**20, rtol=1e-16)


@pytest.mark.parametrize(("n", "p"), [(6, 5), (30, 5), (5000, 50), (60, 50)])
def test_whitened_rows_have_unit_covariance_and_no_mean(n: int, p: int) -> None:
    whitened = sample_moments(_correlated(n, p), np.zeros(p)).whitened
    assert whitened is not None
    np.testing.assert_allclose(whitened.T @ whitened / (n - 1), np.eye(p), rtol=0, atol=1e-11)
    np.testing.assert_allclose(whitened.mean(axis=0), 0.0, atol=1e-12)


def test_moments_of_many_units_agree_with_numpy() -> None:
    x = _correlated(5000, 50)
    moments = sample_moments(x, np.zeros(50))
    np.testing.assert_allclose(moments.difference, x.mean(axis=0), rtol=1e-13)
    np.testing.assert_allclose(
        moments.scatter, np.cov(x, rowvar=False), rtol=0, atol=1e-13 * abs(moments.scatter).max()
    )
    assert (moments.units, moments.dimension) == (5000, 50)


def test_centred_rows_sum_to_zero_and_are_the_deviations_less_the_difference() -> None:
    moments = sample_moments(_correlated(12, 4), np.arange(1.0, 5.0))
    np.testing.assert_allclose(moments.centred.sum(axis=0), 0.0, atol=1e-14)
    np.testing.assert_allclose(moments.centred, moments.deviations - moments.difference, atol=1e-15)


def test_moments_of_integers_are_not_integers() -> None:
    moments = sample_moments(np.array([[1, 2], [2, 5], [4, 4]]), np.array([1, 1]))
    np.testing.assert_allclose(moments.difference, [4 / 3, 8 / 3], rtol=1e-15)
    np.testing.assert_allclose(moments.scatter, [[7 / 3, 7 / 6], [7 / 6, 7 / 3]], rtol=1e-14)


def test_one_unit_has_a_difference_and_no_covariance() -> None:
    moments = sample_moments(np.array([[3.0, 5.0]]), np.array([1.0, 1.0]))
    np.testing.assert_array_equal(moments.difference, [2.0, 4.0])
    assert moments.covariance is None
    assert np.isnan(moments.scatter).all()
    with pytest.raises(TooFewUnitsError, match="One unit has no sample covariance"):
        moments.required_covariance()


@pytest.mark.parametrize("n", [2, 4, 5])
def test_no_more_units_than_characteristics_have_a_scatter_but_no_factor(n: int) -> None:
    x = _batch("few", n, 5)
    moments = sample_moments(x, np.zeros(5))
    np.testing.assert_allclose(moments.scatter, np.cov(x, rowvar=False), rtol=1e-13)
    assert moments.whitened is None
    with pytest.raises(TooFewUnitsError, match=f"needs at least 6 units; the batch has {n}"):
        moments.required_covariance()


def test_one_unit_more_than_characteristics_is_enough() -> None:
    x = _batch("just enough", 6, 5)
    moments = sample_moments(x, np.zeros(5))
    assert moments.required_covariance().degrees_of_freedom == 5.0
    d, scatter = precise.scatter(x, np.zeros(5))
    assert hotelling_test(moments, 0.05).statistic == pytest.approx(6 * float(precise.form(d, scatter)), rel=1e-12)


@pytest.mark.parametrize("value", [0.0, 0.1, 12.3, 10_000_000.1])
@pytest.mark.parametrize("n", [7, 30])
def test_a_constant_characteristic_is_an_obstacle_named_by_its_number(value: float, n: int) -> None:
    x = _batch("constant", n, 3)
    x[:, 1] = value
    moments = sample_moments(x, np.array([0.0, 0.3, 0.0]))
    with pytest.raises(NotPositiveDefiniteError, match="Characteristic 2 is constant in this batch"):
        moments.required_covariance()


def test_a_characteristic_constant_but_for_rounding_is_constant() -> None:
    # Means of three replicates that agree to the last decimal and not to the last bit.
    x = _batch("constant", 12, 3)
    x[:, 1] = np.resize([(12.1 + 12.3 + 12.5) / 3, (12.5 + 12.1 + 12.3) / 3, 12.3], 12)
    assert len(set(x[:, 1])) > 1
    with pytest.raises(NotPositiveDefiniteError, match="Characteristic 2 is constant in this batch"):
        sample_moments(x, np.zeros(3)).required_covariance()


def test_a_spread_of_a_billionth_of_the_value_is_a_spread() -> None:
    x = _batch("constant", 12, 3)
    x[:, 1] = 12.3 + 1e-8 * x[:, 1]
    assert sample_moments(x, np.zeros(3)).required_covariance().dimension == 3


def test_characteristics_that_sum_to_a_constant_are_an_obstacle() -> None:
    x = _batch("closed", 20, 4)
    x[:, 3] = 100.0 - x[:, :3].sum(axis=1)
    with pytest.raises(IllConditionedError, match="sample covariance cannot be used"):
        sample_moments(x, np.zeros(4)).required_covariance()


def test_a_characteristic_given_twice_is_an_obstacle() -> None:
    x = _batch("twice", 20, 3)
    x[:, 2] = 1e9 * x[:, 0]
    with pytest.raises(IllConditionedError, match="sample covariance cannot be used"):
        sample_moments(x, np.zeros(3)).required_covariance()


def test_units_that_repeat_too_few_different_ones_are_an_obstacle() -> None:
    x = np.repeat(_batch("repeated", 3, 3), 4, axis=0)
    with pytest.raises(IllConditionedError, match="sample covariance cannot be used"):
        sample_moments(x, np.zeros(3)).required_covariance()


def test_duplicate_units_count_as_units() -> None:
    x = np.repeat(_batch("repeated", 8, 3), 2, axis=0)
    moments = sample_moments(x, np.zeros(3))
    d, scatter = precise.scatter(x, np.zeros(3))
    assert hotelling_test(moments, 0.05).statistic == pytest.approx(16 * float(precise.form(d, scatter)), rel=1e-12)
    assert moments.required_covariance().degrees_of_freedom == 15.0


def test_moments_leave_the_data_as_they_are() -> None:
    x = _batch("untouched", 6, 3)
    before = x.copy()
    x.setflags(write=False)
    sample_moments(x, np.zeros(3))
    np.testing.assert_array_equal(x, before)
