"""What must not matter: units of measurement, a common offset, the order of units and of characteristics."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.stats import randomisation
from service.stats.covariance import factor_covariance
from service.stats.location import LocationResult, chi_square_test, hotelling_test, pooled_test, reference_test
from service.stats.moments import sample_moments

P = 4
TARGET = np.array([3.0, 10.0, -2.0, 7.0])
MIXING = np.eye(P) + 0.7 * np.tri(P, k=-1)
EXACT_STEP = 2.0**-20
"""Data on this grid stay exact when 2**20 standard deviations are added: 41 bits in all."""


@dataclass(frozen=True)
class Case:
    x: np.ndarray
    target: np.ndarray
    sigma0: np.ndarray

    def mapped(self, a: np.ndarray, b: np.ndarray | float = 0.0) -> Case:
        """Return the same lot in other coordinates, every unit y going to ``A y + b``."""
        return Case(self.x @ a.T + b, a @ self.target + b, a @ self.sigma0 @ a.T)


def _case(seed: int, n: int) -> Case:
    [batch] = randomisation.normal_batches(f"invariance {seed}", n, P, 1)
    x = TARGET + 0.3 + batch[0] @ MIXING.T
    return Case(np.round(x / EXACT_STEP) * EXACT_STEP, TARGET, MIXING @ MIXING.T)


def _results(case: Case) -> list[LocationResult]:
    moments = sample_moments(case.x, case.target)
    known, estimated = factor_covariance(case.sigma0), factor_covariance(case.sigma0, 17.0)
    return [
        chi_square_test(moments, known, 0.05),
        hotelling_test(moments, 0.05),
        reference_test(moments, estimated, 0.05, target_units=9.0),
        pooled_test(moments, estimated, 0.05),
    ]


def _numbers(case: Case) -> np.ndarray:
    """Return statistics, p-values, their logarithms and distances of the means, then those of the units."""
    moments = sample_moments(case.x, case.target)
    of_means = [
        (result.statistic, result.p_value, result.log10_p_value, result.mahalanobis_distance)
        for result in _results(case)
    ]
    within = moments.required_covariance().squared_distances(moments.centred)
    against = factor_covariance(case.sigma0).squared_distances(moments.deviations)
    return np.concatenate([np.ravel(of_means), within, against])


def _distances(case: Case) -> tuple[np.ndarray, float]:
    """Return the distances of the units and of their mean from the target, in the reference covariance."""
    moments, known = sample_moments(case.x, case.target), factor_covariance(case.sigma0)
    units = np.sqrt(known.squared_distances(moments.deviations))
    return units, chi_square_test(moments, known, 0.05).mahalanobis_distance


cases = st.builds(_case, st.integers(0, 10**6), st.integers(P + 2, 40))
exponents = st.lists(st.floats(-9, 9), min_size=P, max_size=P)
whole_exponents = st.lists(st.integers(-30, 30), min_size=P, max_size=P)
entries = st.lists(st.floats(-1, 1), min_size=P * P, max_size=P * P)


@given(case=cases, powers=exponents)
def test_results_do_not_depend_on_units_of_measurement(case: Case, powers: list[float]) -> None:
    scaled = case.mapped(np.diag(10.0 ** np.array(powers)))
    np.testing.assert_allclose(_numbers(scaled), _numbers(case), rtol=1e-9)


@given(case=cases, powers=whole_exponents)
def test_units_of_measurement_by_powers_of_two_change_no_bit(case: Case, powers: list[int]) -> None:
    scaled = case.mapped(np.diag(2.0 ** np.array(powers, dtype=np.float64)))
    np.testing.assert_array_equal(_numbers(scaled), _numbers(case))


@given(case=cases, powers=exponents)
def test_direction_changes_with_units_of_measurement_inversely(case: Case, powers: list[float]) -> None:
    units = 10.0 ** np.array(powers)
    for scaled, result in zip(_results(case.mapped(np.diag(units))), _results(case), strict=True):
        largest = abs(result.direction).max()
        np.testing.assert_allclose(scaled.direction * units, result.direction, rtol=0, atol=1e-9 * largest)


@given(case=cases, sign=st.sampled_from([-1.0, 1.0]))
def test_a_common_offset_of_a_million_standard_deviations_changes_no_bit(case: Case, sign: float) -> None:
    offset = case.mapped(np.eye(P), sign * 2.0**20)
    np.testing.assert_array_equal(_numbers(offset), _numbers(case))


@given(case=cases, offset=st.floats(1e5, 1e6))
def test_a_common_offset_moves_distances_by_no_more_than_the_rounding_of_the_data(case: Case, offset: float) -> None:
    # Adding it rounds data and target by up to half a unit in the last place each; by the triangle
    # inequality no distance moves by more than the length of what was rounded away.
    bound = math.ulp(1e6) * math.sqrt(P) * np.linalg.norm(np.linalg.inv(MIXING), 2)
    for near, far in zip(_distances(case), _distances(case.mapped(np.eye(P), offset)), strict=True):
        np.testing.assert_allclose(far, near, rtol=1e-13, atol=bound)


@given(case=cases, data=st.data())
def test_order_of_units_does_not_matter(case: Case, data: st.DataObject) -> None:
    order = data.draw(st.permutations(range(case.x.shape[0])))
    shuffled = Case(case.x[order], case.target, case.sigma0)
    expected, n = _numbers(case), case.x.shape[0]
    units = np.array(order)
    index = np.concatenate([np.arange(16), 16 + units, 16 + n + units])
    np.testing.assert_allclose(_numbers(shuffled), expected[index], rtol=1e-11)


@given(case=cases, order=st.permutations(range(P)))
def test_order_of_characteristics_does_not_matter(case: Case, order: list[int]) -> None:
    np.testing.assert_allclose(_numbers(case.mapped(np.eye(P)[order])), _numbers(case), rtol=1e-11)


@given(case=cases, values=entries, shift=st.floats(-10, 10))
def test_results_do_not_change_under_a_linear_map(case: Case, values: list[float], shift: float) -> None:
    # The diagonal outweighs the rest, so the map loses at most two digits.
    mapped = case.mapped(np.reshape(values, (P, P)) + 5 * np.eye(P), shift)
    np.testing.assert_allclose(_numbers(mapped), _numbers(case), rtol=1e-10)


@given(case=cases)
def test_reflecting_the_lot_about_its_target_changes_no_bit(case: Case) -> None:
    reflected = Case(2 * case.target - case.x, case.target, case.sigma0)
    np.testing.assert_array_equal(_numbers(reflected), _numbers(case))


@given(case=cases, factor=st.floats(1.0, 30.0))
def test_a_wider_known_covariance_lowers_the_statistic_in_proportion(case: Case, factor: float) -> None:
    wide = Case(case.x, case.target, case.sigma0 * factor)
    assert _results(wide)[0].statistic * factor == pytest.approx(_results(case)[0].statistic, rel=1e-12)
