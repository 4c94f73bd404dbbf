from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.stats.ellipses import confidence_ellipses
from service.stats.terms import statistic_over
from tests.unit.stats import lots


@pytest.mark.parametrize("dof", [math.inf, 29.0])
def test_axes_agree_with_the_eigenvectors_of_each_pair(dof: float) -> None:
    result = lots.result(5, 4, dof)
    ellipses = confidence_ellipses(result, 0.05)
    for m, pair in enumerate(ellipses.pairs):
        matrix = result.covariance.matrix[np.ix_(pair, pair)] / result.effective_units
        values, vectors = np.linalg.eigh(matrix)
        np.testing.assert_allclose(ellipses.half_lengths[m], np.sqrt(values[::-1] * ellipses.critical_value), rtol=1e-9)
        along = np.array([math.cos(ellipses.angle[m]), math.sin(ellipses.angle[m])])
        assert abs(along @ vectors[:, 1]) == pytest.approx(1.0, abs=1e-12)


@given(seed=st.integers(0, 500), dof=lots.KINDS, turn=st.floats(0, 2 * math.pi))
def test_boundary_is_where_the_pair_alone_is_just_rejected(seed: int, dof: float, turn: float) -> None:
    result = lots.result(3, seed, dof)
    ellipses = confidence_ellipses(result, 0.05)
    m = seed % 3
    a, b, angle = *ellipses.half_lengths[m], ellipses.angle[m]
    rotation = np.array([[math.cos(angle), -math.sin(angle)], [math.sin(angle), math.cos(angle)]])
    boundary = np.zeros(3)
    boundary[ellipses.pairs[m]] = rotation @ [a * math.cos(turn), b * math.sin(turn)]
    there = lots.mean_test(boundary, result.covariance, result.effective_units, 0.05)
    pair = statistic_over(there, ellipses.pairs[m].tolist(), 0.05)
    assert pair.statistic == pytest.approx(ellipses.critical_value, rel=1e-9)
    assert pair.p_value == pytest.approx(0.05, rel=1e-9)


def test_standardised_axes_are_those_of_the_correlation() -> None:
    result = lots.result(4, 9, 29.0)
    ellipses = confidence_ellipses(result, 0.05)
    standard = confidence_ellipses(lots.rescaled(result, 1 / result.covariance.scale), 0.05)
    np.testing.assert_allclose(ellipses.standardised_half_lengths, standard.half_lengths, rtol=1e-12)
    np.testing.assert_allclose(ellipses.standardised_angle, standard.angle, rtol=0, atol=1e-12)


def test_thin_ellipse_keeps_its_minor_axis_across_eighteen_orders_of_magnitude() -> None:
    matrix = np.array([[1e18, 0.5], [0.5, 1e-18]])
    result = lots.mean_test(np.zeros(2), lots.factor_covariance(matrix), 1.0, 0.05)
    ellipses = confidence_ellipses(result, 0.05)
    radius = math.sqrt(ellipses.critical_value)
    np.testing.assert_allclose(ellipses.half_lengths[0], [radius * 1e9, radius * 1e-9 * math.sqrt(0.75)], rtol=1e-12)


def test_rectangle_holds_the_separate_limits() -> None:
    result = lots.result(3, 2, 29.0)
    ellipses = confidence_ellipses(result, 0.05)
    separate = 2.045229642132703 * result.covariance.scale / math.sqrt(20.0)  # Student's 0.975 quantile, 29 d.o.f.
    np.testing.assert_allclose(ellipses.rectangle, separate[ellipses.pairs], rtol=1e-12)
    np.testing.assert_array_equal(ellipses.centre, result.difference[ellipses.pairs])


def test_uncorrelated_pair_has_axes_along_the_characteristics() -> None:
    result = lots.mean_test(np.zeros(2), lots.factor_covariance(np.diag([1.0, 4.0])), 1.0, 0.05)
    ellipses = confidence_ellipses(result, 0.05)
    assert ellipses.angle[0] == pytest.approx(math.pi / 2, abs=1e-15)
    assert ellipses.standardised_angle[0] == 0.0


def test_single_characteristic_has_no_pairs() -> None:
    ellipses = confidence_ellipses(lots.result(1, 0, 1.0), 0.05)
    assert ellipses.pairs.shape == (0, 2)
    assert ellipses.half_lengths.shape == (0, 2)
