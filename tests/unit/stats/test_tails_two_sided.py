from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest

from service.stats import tails
from tests.unit.stats.by_mpmath import two_sided_t_log10


@pytest.mark.parametrize("dof", [1.0, 5.0, 29.0, 1e4])
@pytest.mark.parametrize("t", [0.5, 2.0, 9.0, 60.0, 1e3])
def test_log_of_student_tail_agrees_with_the_integrated_density(t: float, dof: float) -> None:
    computed = float(tails.t_two_sided_log10(np.array([t]), dof)[0])
    assert computed == pytest.approx(two_sided_t_log10(t, dof), rel=1e-12)


@pytest.mark.parametrize("z", [1e-8, 0.3, 0.999, 1.001, 5.0, 37.0, 38.6, 1e3, 1e8])
def test_log_of_normal_tail_agrees_with_mpmath(z: float) -> None:
    expected = float(mp.log10(mp.erfc(mp.mpf(z) / mp.sqrt(2))))
    assert float(tails.t_two_sided_log10(np.array([z]), math.inf)[0]) == pytest.approx(expected, rel=1e-13)


def test_log_of_student_tail_is_exact_for_two_degrees_of_freedom_however_small_the_ratio() -> None:
    # P(|T| > t) = 1 - t/sqrt(2 + t^2) for two degrees of freedom.
    t = np.array([1e-12, 1e-8, 1e-4, 0.01])
    expected = np.log1p(-t / np.sqrt(2 + t * t)) / math.log(10)
    np.testing.assert_allclose(tails.t_two_sided_log10(t, 2.0), expected, rtol=1e-13)


def test_log_of_student_tail_joins_where_the_probability_underflows() -> None:
    t = np.array([1e20, 1e30, 1e100, 1e140])
    slopes = np.diff(tails.t_two_sided_log10(t, 12.0)) / np.diff(np.log10(t))
    np.testing.assert_allclose(slopes, -12.0, rtol=1e-14)


def test_log_of_tail_is_the_log_of_the_tail() -> None:
    t = np.linspace(-6, 6, 41)
    np.testing.assert_allclose(10 ** tails.t_two_sided_log10(t, 7.0), tails.t_two_sided(t, 7.0), rtol=1e-13)


@pytest.mark.parametrize("dof", [3.0, math.inf])
def test_upper_tails_of_opposite_ratios_sum_to_one(dof: float) -> None:
    t = np.array([0.0, 0.3, 2.0, 5.0])
    np.testing.assert_allclose(tails.t_upper(t, dof) + tails.t_upper(-t, dof), 1.0, rtol=1e-15)
    np.testing.assert_allclose(2 * tails.t_upper(t, dof), tails.t_two_sided(t, dof), rtol=1e-14)
