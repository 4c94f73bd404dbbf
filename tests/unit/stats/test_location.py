from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.multivariate import test_mvmean as statsmodels_mvmean
from statsmodels.stats.multivariate import test_mvmean_2indep as statsmodels_mvmean_2indep

from service.errors import IllConditionedError, NotPositiveDefiniteError, TooFewUnitsError
from service.stats import randomisation
from service.stats.covariance import Covariance, factor_covariance
from service.stats.location import (
    LocationResult,
    chi_square_test,
    effective_units,
    hotelling_test,
    mean_test,
    pooled_covariance,
    pooled_test,
    reference_test,
)
from service.stats.moments import Moments, sample_moments
from tests.unit.stats import precise

TARGET = np.array([120.0, 60.0, 4.5, 900.0, 0.031])
SPREAD = np.array([8.0, 5.0, 0.2, 45.0, 0.002])
MIXING = np.eye(5) + 0.6 * np.tri(5, k=-1)
SIGMA0 = (MIXING @ MIXING.T) * np.outer(SPREAD, SPREAD)


def _batch(n: int, shift: float = 0.3, p: int = 5) -> np.ndarray:
    [batch] = randomisation.normal_batches(f"location {n}", n, 5, 1)
    return (TARGET + ((batch[0] + shift) @ MIXING.T) * SPREAD)[:, :p]


def _moments(n: int, p: int = 5) -> Moments:
    return sample_moments(_batch(n, p=p), TARGET[:p])


def _reference(degrees_of_freedom: float = 29.0, p: int = 5) -> Covariance:
    return factor_covariance(SIGMA0[:p, :p], degrees_of_freedom)


def _agrees(result: LocationResult, statistic: object, *, rel: float = 1e-12) -> None:
    """Compare a result with its statistic in 60 digits and all that follows from it."""
    nu, p = result.law.degrees_of_freedom, result.law.dimension
    known = math.isinf(nu)
    p_value = precise.chi_square_p_value(statistic, p) if known else precise.t_squared_p_value(statistic, p, nu)
    assert result.statistic == pytest.approx(float(statistic), rel=rel)  # type: ignore[arg-type]
    assert result.p_value == pytest.approx(p_value, rel=1e3 * rel)
    assert result.log10_p_value == pytest.approx(math.log10(p_value), rel=1e3 * rel)
    assert result.scaled_statistic == pytest.approx(
        result.statistic * (1 if known else (nu - p + 1) / (nu * p)), rel=1e-14
    )


@pytest.mark.parametrize("n", [1, 2, 5, 12, 60])
def test_chi_square_test_agrees_with_its_formula_in_60_digits(n: int) -> None:
    d, _ = precise.scatter(_batch(n), TARGET)
    result = chi_square_test(_moments(n), _reference(math.inf), 0.05)
    _agrees(result, n * precise.form(d, SIGMA0))


@pytest.mark.parametrize(("n", "p"), [(2, 1), (6, 5), (7, 5), (30, 5), (200, 3)])
def test_hotelling_test_agrees_with_its_formula_in_60_digits(n: int, p: int) -> None:
    d, scatter = precise.scatter(_batch(n, p=p), TARGET[:p])
    _agrees(hotelling_test(_moments(n, p), 0.05), n * precise.form(d, scatter), rel=1e-11)


@pytest.mark.parametrize("n", [1, 3, 12])
@pytest.mark.parametrize("m", [math.inf, 25.0])
@pytest.mark.parametrize("nu", [5.0, 17.5, 118.0])
def test_reference_test_agrees_with_its_formula_in_60_digits(n: int, m: float, nu: float) -> None:
    d, _ = precise.scatter(_batch(n), TARGET)
    k = n if math.isinf(m) else n * m / (n + m)
    _agrees(reference_test(_moments(n), _reference(nu), 0.05, target_units=m), k * precise.form(d, SIGMA0))


@pytest.mark.parametrize(("n", "nu"), [(4, 2.0), (12, 29.0), (30, 5.0)])
def test_pooled_test_agrees_with_its_formula_in_60_digits(n: int, nu: float) -> None:
    d, scatter = precise.scatter(_batch(n), TARGET)
    pooled = ((n - 1) * scatter + nu * precise.matrix(SIGMA0)) / (n - 1 + nu)
    result = pooled_test(_moments(n), _reference(nu), 0.05, target_units=40.0)
    _agrees(result, n * 40 * precise.form(d, pooled) / (n + 40))
    assert result.law.degrees_of_freedom == nu + n - 1


@pytest.mark.parametrize(("n", "p"), [(4, 3), (12, 5), (60, 2)])
def test_hotelling_test_agrees_with_statsmodels(n: int, p: int) -> None:
    result, other = hotelling_test(_moments(n, p), 0.05), statsmodels_mvmean(_batch(n, p=p), TARGET[:p])
    assert result.statistic == pytest.approx(other.t2, rel=1e-10)
    assert result.scaled_statistic == pytest.approx(other.statistic, rel=1e-10)
    assert result.p_value == pytest.approx(other.pvalue, rel=1e-9)
    assert result.law.parameters == other.df


@pytest.mark.parametrize(("n", "m"), [(4, 20), (12, 9), (1, 30)])
def test_reference_test_with_an_estimated_target_is_the_two_sample_test(n: int, m: int) -> None:
    x, y = _batch(n), _batch(m, 0.0)
    sums = sum((z - z.mean(axis=0)).T @ (z - z.mean(axis=0)) for z in (x, y))
    sigma0 = factor_covariance(sums / (n + m - 2), float(n + m - 2))
    result = reference_test(sample_moments(x, y.mean(axis=0)), sigma0, 0.05, target_units=float(m))
    d, k = x.mean(axis=0) - y.mean(axis=0), n * m / (n + m)
    assert result.statistic == pytest.approx(k * float(precise.form(d, sums / (n + m - 2))), rel=1e-10)


@pytest.mark.parametrize(("n", "m"), [(4, 20), (12, 9), (30, 30)])
def test_pooled_test_with_an_estimated_target_agrees_with_statsmodels(n: int, m: int) -> None:
    x, y = _batch(n), _batch(m, 0.0)
    reference = factor_covariance(np.cov(y, rowvar=False), m - 1.0)
    result = pooled_test(sample_moments(x, y.mean(axis=0)), reference, 0.05, target_units=float(m))
    other = statsmodels_mvmean_2indep(x, y)
    assert result.statistic == pytest.approx(other.t2, rel=1e-10)
    assert result.scaled_statistic == pytest.approx(other.statistic, rel=1e-10)
    assert result.p_value == pytest.approx(other.pvalue, rel=1e-9)
    assert result.law.parameters == other.df


def test_hotelling_test_of_one_characteristic_is_student_s_test() -> None:
    result, other = hotelling_test(_moments(9, 1), 0.05), stats.ttest_1samp(_batch(9, p=1)[:, 0], TARGET[0])
    assert result.statistic == pytest.approx(other.statistic**2, rel=1e-12)
    assert result.p_value == pytest.approx(other.pvalue, rel=1e-12)
    assert result.critical_value == pytest.approx(stats.t.isf(0.025, 8) ** 2, rel=1e-12)


def test_chi_square_test_of_one_characteristic_is_the_z_test() -> None:
    result = chi_square_test(_moments(9, 1), _reference(math.inf, 1), 0.05)
    z = (_batch(9, p=1).mean() - TARGET[0]) / math.sqrt(SIGMA0[0, 0] / 9)
    assert result.statistic == pytest.approx(z * z, rel=1e-11)
    assert result.p_value == pytest.approx(2 * stats.norm.sf(abs(z)), rel=1e-11)
    assert result.critical_value == pytest.approx(stats.norm.isf(0.025) ** 2, rel=1e-12)


def test_pooled_test_of_two_groups_of_one_characteristic_is_student_s_two_sample_test() -> None:
    x, y = _batch(9, p=1), _batch(14, 0.0, p=1)
    reference = factor_covariance(np.array([[y.var(ddof=1)]]), 13.0)
    result = pooled_test(sample_moments(x, y.mean(axis=0)), reference, 0.05, target_units=14.0)
    assert result.p_value == pytest.approx(float(stats.ttest_ind(x, y).pvalue[0]), rel=1e-11)


def test_effective_units_are_the_units_for_a_fixed_target_and_fewer_for_an_estimated_one() -> None:
    assert effective_units(12) == 12.0
    assert effective_units(12, 24.0) == 8.0
    assert effective_units(1, 1.0) == 0.5


def test_a_single_unit_is_tested_with_the_reference_covariance_alone() -> None:
    moments, reference = _moments(1), _reference()
    assert pooled_covariance(moments, reference) is reference
    pooled, alone = pooled_test(moments, reference, 0.05), reference_test(moments, reference, 0.05)
    assert (pooled.statistic, pooled.p_value) == (alone.statistic, alone.p_value)


@pytest.mark.parametrize("n", [2, 12, 60])
def test_distance_and_direction_of_the_mean_agree_with_60_digits(n: int) -> None:
    d, _ = precise.scatter(_batch(n), TARGET)
    result = chi_square_test(_moments(n), _reference(math.inf), 0.05)
    assert result.mahalanobis_distance == pytest.approx(math.sqrt(float(precise.form(d, SIGMA0))), rel=1e-13)
    expected = precise.direction(d, precise.matrix(SIGMA0)) * SPREAD
    np.testing.assert_allclose(result.direction * SPREAD, expected, rtol=0, atol=1e-12)


def test_direction_has_unit_standard_deviation_and_gives_the_distance() -> None:
    result = reference_test(_moments(12), _reference(), 0.05)
    assert result.direction @ SIGMA0 @ result.direction == pytest.approx(1.0, rel=1e-12)
    assert result.direction @ result.difference == pytest.approx(result.mahalanobis_distance, rel=1e-12)


def test_a_mean_on_its_target_has_no_direction_and_a_p_value_of_one() -> None:
    result = mean_test(np.zeros(5), _reference(), 12.0, 0.05)
    assert (result.statistic, result.p_value, result.log10_p_value) == (0.0, 1.0, 0.0)
    np.testing.assert_array_equal(result.direction, np.zeros(5))


def test_a_mean_very_far_off_keeps_the_logarithm_of_its_p_value() -> None:
    result = chi_square_test(
        sample_moments(TARGET + 200 * SPREAD * np.ones((30, 5)), TARGET), _reference(math.inf), 0.05
    )
    assert result.p_value == 0.0
    # ln Q(5/2, x/2) = -x/2 + (3/2) ln(x/2) - ln Gamma(5/2) + ln(1 + 3/x - 3/x^2 ...) for a large x.
    half = result.statistic / 2
    series = math.log1p(1.5 / half + 0.75 / half**2)
    expected = (-half + 1.5 * math.log(half) - math.lgamma(2.5) + series) / math.log(10)
    assert result.log10_p_value == pytest.approx(expected, rel=1e-13)


@pytest.mark.parametrize("n", [2, 5])
def test_hotelling_refuses_as_many_units_as_characteristics(n: int) -> None:
    with pytest.raises(TooFewUnitsError, match="needs at least 6 units"):
        hotelling_test(_moments(n), 0.05)


def test_hotelling_refuses_one_unit() -> None:
    with pytest.raises(TooFewUnitsError, match="One unit has no sample covariance"):
        hotelling_test(_moments(1, 1), 0.05)


def test_hotelling_refuses_a_constant_characteristic() -> None:
    x = _batch(12)
    x[:, 3] = 900.0
    with pytest.raises(NotPositiveDefiniteError, match="Characteristic 4 is constant"):
        hotelling_test(sample_moments(x, TARGET), 0.05)


def test_hotelling_refuses_a_characteristic_that_the_others_determine() -> None:
    x = _batch(12)
    x[:, 3] = 3.0 * x[:, 0] - x[:, 1]
    with pytest.raises(IllConditionedError, match="Leave out a characteristic"):
        hotelling_test(sample_moments(x, TARGET), 0.05)


def test_reference_test_refuses_fewer_degrees_of_freedom_than_characteristics() -> None:
    with pytest.raises(TooFewUnitsError, match="at least 5 degrees of freedom; this one has 4"):
        reference_test(_moments(12), _reference(4.0), 0.05)


def test_pooled_test_refuses_too_few_degrees_of_freedom_in_all() -> None:
    with pytest.raises(TooFewUnitsError, match="at least 5 degrees of freedom; this one has 4"):
        pooled_test(_moments(3), _reference(2.0), 0.05)


def test_pooled_test_stands_where_neither_covariance_would_alone() -> None:
    assert pooled_test(_moments(4), _reference(2.0), 0.05).law.parameters == (5.0, 1.0)
