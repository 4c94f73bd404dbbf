from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import linalg

from service.errors import IllConditionedError, NotPositiveDefiniteError
from service.stats import randomisation
from service.stats.covariance import REFUSED_BELOW, WARNED_BELOW, Covariance, factor_covariance
from tests.unit.stats import precise

SCALES = 10.0 ** np.array([-9.0, 9.0, 0.0, 4.0, -6.0, 2.0, -9.0, 9.0])


def _normals(purpose: str, *shape: int) -> np.ndarray:
    [batch] = randomisation.normal_batches(purpose, shape[0], shape[1], 1)
    return batch[0]


def _covariance_with_condition(condition: float, p: int) -> np.ndarray:
    """Return a covariance whose eigenvalues fall evenly, on a log scale, from 1 by this factor."""
    basis, _ = np.linalg.qr(_normals(f"basis {condition:g}", p, p))
    matrix = (basis * np.geomspace(1.0, 1.0 / condition, p)) @ basis.T
    return (matrix + matrix.T) / 2


def _form(covariance: Covariance, difference: np.ndarray) -> float:
    return float(covariance.squared_distances(difference[None])[0])


def _nearly_dependent(gap: float) -> np.ndarray:
    return np.array([[1.0, 1.0 - gap], [1.0 - gap, 1.0]])


@pytest.mark.parametrize(("condition", "tolerance"), [(10.0, 1e-13), (1e4, 1e-9), (1e7, 1e-8), (1e10, 1e-6)])
def test_form_agrees_with_60_digits(condition: float, tolerance: float) -> None:
    matrix, difference = _covariance_with_condition(condition, 6), _normals("difference", 1, 6)[0]
    expected = float(precise.form(difference, matrix))
    assert _form(factor_covariance(matrix), difference) == pytest.approx(expected, rel=tolerance)


@pytest.mark.parametrize("p", range(1, 10))
def test_form_in_a_hilbert_matrix_agrees_with_60_digits_as_far_as_its_condition_lets_it(p: int) -> None:
    covariance = factor_covariance(linalg.hilbert(p))
    expected = float(precise.form(np.ones(p), linalg.hilbert(p)))
    assert _form(covariance, np.ones(p)) == pytest.approx(expected, rel=4e-16 / covariance.reciprocal_condition)


@pytest.mark.parametrize("p", [10, 11, 14, 30])
def test_a_larger_hilbert_matrix_is_refused_for_its_condition(p: int) -> None:
    with pytest.raises(IllConditionedError, match="too close to singular"):
        factor_covariance(linalg.hilbert(p))


@pytest.mark.parametrize("p", range(1, 10))
def test_sum_of_the_inverse_of_a_hilbert_matrix_is_a_square(p: int) -> None:
    # Rounding 1/(i + j - 1) to doubles moves the sum by about as much as the solution does.
    covariance = factor_covariance(linalg.hilbert(p))
    assert _form(covariance, np.ones(p)) == pytest.approx(p * p, rel=4e-16 / covariance.reciprocal_condition)


@pytest.mark.parametrize("p", range(1, 13))
def test_form_of_ones_in_a_pascal_matrix_is_one(p: int) -> None:
    form = _form(factor_covariance(linalg.pascal(p).astype(np.float64)), np.ones(p))
    assert form == pytest.approx(1.0, rel=1e-15 * 4.0**p)


@pytest.mark.parametrize("rho", [-0.05, 0.0, 0.5, 0.999])
def test_form_of_ones_in_an_equicorrelated_matrix_has_its_closed_form(rho: float) -> None:
    matrix = (1 - rho) * np.eye(20) + rho
    assert _form(factor_covariance(matrix), np.ones(20)) == pytest.approx(20 / (1 + 19 * rho), rel=1e-12)


@pytest.mark.parametrize("condition", [10.0, 1e6])
def test_solution_agrees_with_60_digits(condition: float) -> None:
    matrix, difference = _covariance_with_condition(condition, 6), _normals("difference", 1, 6)[0]
    covariance = factor_covariance(matrix)
    expected = precise.direction(precise.matrix(difference), precise.matrix(matrix))
    solved = covariance.solve(difference) / math.sqrt(_form(covariance, difference))
    np.testing.assert_allclose(solved, expected, rtol=0, atol=1e-15 * condition * abs(expected).max())


def test_whitened_rows_have_the_squared_distances_of_the_form() -> None:
    rows, covariance = _normals("rows", 9, 4), factor_covariance(_covariance_with_condition(50.0, 4))
    np.testing.assert_allclose(np.square(covariance.whiten(rows)).sum(axis=1), covariance.squared_distances(rows))
    expected = [float(precise.form(row, covariance.matrix)) for row in rows]
    np.testing.assert_allclose(covariance.squared_distances(rows), expected, rtol=1e-13)


def test_covariance_gives_back_its_matrix_and_its_correlations() -> None:
    matrix = _covariance_with_condition(100.0, 5) * np.outer(SCALES[:5], SCALES[:5])
    covariance = factor_covariance(matrix, 12.0)
    np.testing.assert_allclose(covariance.matrix, matrix, rtol=1e-13)
    np.testing.assert_allclose(np.diagonal(covariance.correlation), 1.0, rtol=1e-15)
    assert (covariance.dimension, covariance.degrees_of_freedom) == (5, 12.0)


def test_covariance_without_degrees_of_freedom_is_known() -> None:
    assert factor_covariance(np.eye(2)).degrees_of_freedom == math.inf


@pytest.mark.parametrize("power", [-9, -3, 3, 9])
def test_form_does_not_depend_on_the_units_of_a_characteristic(power: int) -> None:
    matrix, difference = _covariance_with_condition(1e3, 6), _normals("difference", 1, 6)[0]
    units = np.array([10.0**power, 1.0, 1.0, 1.0, 10.0**-power, 1.0])
    expected = _form(factor_covariance(matrix), difference)
    assert _form(factor_covariance(matrix * np.outer(units, units)), difference * units) == pytest.approx(
        expected, rel=1e-12
    )


@pytest.mark.parametrize("p", [2, 5, 8])
def test_condition_does_not_depend_on_units(p: int) -> None:
    matrix, units = linalg.hilbert(p), SCALES[:p]
    expected = factor_covariance(matrix).reciprocal_condition
    scaled = factor_covariance(matrix * np.outer(units, units)).reciprocal_condition
    assert scaled == pytest.approx(expected, rel=1e-15 / expected)


@pytest.mark.parametrize("p", [10, 12])
def test_refusal_does_not_depend_on_units(p: int) -> None:
    units = np.resize(SCALES, p)
    with pytest.raises(IllConditionedError, match="too close to singular"):
        factor_covariance(linalg.hilbert(p) * np.outer(units, units))


@pytest.mark.parametrize("p", [1, 4, 7])
def test_reciprocal_condition_is_that_of_the_correlation_in_the_1_norm(p: int) -> None:
    matrix = linalg.hilbert(p)
    correlation = matrix / np.sqrt(np.outer(np.diagonal(matrix), np.diagonal(matrix)))
    expected = 1 / np.linalg.cond(correlation, 1)
    assert factor_covariance(matrix).reciprocal_condition == pytest.approx(expected, rel=1e-6)


@pytest.mark.parametrize(("gap", "warned"), [(3e-8, False), (1e-8, True), (1e-11, True), (3e-12, True)])
def test_a_nearly_singular_covariance_is_taken_with_a_condition_to_warn_of(gap: float, warned: bool) -> None:
    # With two characteristics the reciprocal condition number is gap/(2 - gap).
    covariance = factor_covariance(_nearly_dependent(gap))
    assert covariance.reciprocal_condition == pytest.approx(gap / (2 - gap), rel=1e-4)
    assert (covariance.reciprocal_condition < WARNED_BELOW) == warned


@pytest.mark.parametrize("gap", [1.9e-12, 1e-14, 1e-16])
def test_a_covariance_closer_to_singular_is_refused_though_it_may_have_a_factor(gap: float) -> None:
    assert gap / 2 < REFUSED_BELOW
    with pytest.raises(IllConditionedError, match=r"below 1e-12\. Leave out"):
        factor_covariance(_nearly_dependent(gap))


@pytest.mark.parametrize("power", [-9, 0, 9])
def test_an_exactly_singular_covariance_is_refused_for_its_condition_in_any_units(power: int) -> None:
    loadings = np.array([[1.0, 0.0], [0.5, 0.5], [0.25, 0.75], [0.1, 0.9]]) * 10.0**power
    with pytest.raises(IllConditionedError, match="too close to singular"):
        factor_covariance(loadings @ loadings.T)


@pytest.mark.parametrize("scale", [1e-9, 1.0, 1e9])
def test_impossible_correlations_are_refused_with_their_smallest_eigenvalue(scale: float) -> None:
    matrix = np.array([[1.0, 0.9, 0.9], [0.9, 1.0, -0.9], [0.9, -0.9, 1.0]])
    units = np.array([1.0, scale, 1.0])
    with pytest.raises(NotPositiveDefiniteError, match=r"smallest eigenvalue of its correlation form is -0\.8"):
        factor_covariance(matrix * np.outer(units, units))


@pytest.mark.parametrize("variance", [0.0, -1.0, math.nan])
def test_a_variance_that_is_not_positive_is_refused_by_its_number(variance: float) -> None:
    with pytest.raises(NotPositiveDefiniteError, match="Variance 2 of"):
        factor_covariance(np.diag([1.0, variance, 2.0]))
