from __future__ import annotations

import math
from typing import Any

import pytest
from scipy import stats

from service.stats import tails
from tests.reference.published import cases

LEVELS = [0.5, 0.1, 0.05, 0.01, 1e-3, 1e-6, 1e-12, 1e-50, 1e-99]
# Near underflow the probability comes from its logarithm, of which one rounding is 1e-13 of the
# probability; the beta function of 50,000 degrees of freedom adds more.
UNDERFLOW, NEAR_UNDERFLOW = 1e-200, 1e-10


def _grid(calculation: str) -> list[Any]:
    [case] = cases(calculation)
    points = zip(
        case["inputs"]["points"], case["recomputed"]["p_value"], case["recomputed"]["log10_p_value"], strict=True
    )
    return [pytest.param(*point, id="-".join(f"{value:g}" for value in point[0])) for point in points]


def _agree(tail: tails.Tail, p_value: float, log10_p_value: float) -> None:
    assert tail.log10_p_value == pytest.approx(log10_p_value, rel=1e-12, abs=0)
    assert tail.p_value == pytest.approx(p_value, rel=1e-12 if p_value > UNDERFLOW else NEAR_UNDERFLOW, abs=1e-305)


@pytest.mark.parametrize(("point", "p_value", "log10_p_value"), _grid("grid_of_chi_square_tails"))
def test_chi_square_tail_agrees_with_50_digits(point: list[float], p_value: float, log10_p_value: float) -> None:
    _agree(tails.chi_square_tail(*point), p_value, log10_p_value)


@pytest.mark.parametrize(("point", "p_value", "log10_p_value"), _grid("grid_of_f_tails"))
def test_f_tail_agrees_with_50_digits(point: list[float], p_value: float, log10_p_value: float) -> None:
    _agree(tails.f_tail(*point), p_value, log10_p_value)


@pytest.mark.parametrize("x", [1e-300, 1e-20, 1e-3, 1.0, 50.0, 919.0, 922.0, 1336.0, 4.6e5])
def test_chi_square_tail_of_two_dof_is_exponential(x: float) -> None:
    assert tails.chi_square_tail(x, 2.0).log10_p_value == pytest.approx(-x / 2 / math.log(10), rel=3e-15)


@pytest.mark.parametrize("dof2", [0.7, 1.0, 3.7, 25.0, 1e3, 1e6, 1e9, 1e12, 1e15])
@pytest.mark.parametrize("x", [1e-12, 0.01, 0.9, 3.0, 40.0, 900.0, 1e4])
def test_f_tail_of_two_numerator_dof_is_a_power_however_large_the_other(x: float, dof2: float) -> None:
    expected = -dof2 / 2 * math.log1p(2 * x / dof2) / math.log(10)
    assert tails.f_tail(x, 2.0, dof2).log10_p_value == pytest.approx(expected, rel=2e-11)


@pytest.mark.parametrize("dof1", [1.0, 2.5, 5.0, 40.0])
@pytest.mark.parametrize("x", [1e-3, 0.5, 2.0, 1e3])
def test_f_tail_of_two_denominator_dof_is_one_less_a_power(x: float, dof1: float) -> None:
    lower = math.exp(-dof1 / 2 * math.log1p(2 / (dof1 * x)))
    assert tails.f_tail(x, dof1, 2.0).p_value == pytest.approx(1 - lower, rel=1e-12)
    assert tails.f_tail(x, dof1, 2.0).log10_p_value == pytest.approx(math.log1p(-lower) / math.log(10), rel=1e-12)


def test_f_tail_keeps_its_digits_where_the_incomplete_beta_function_underflows_inside() -> None:
    # By integration of the density in 50 digits.
    assert tails.f_tail(66.0, 50.0, 1000.0).log10_p_value == pytest.approx(-278.2477933573766, rel=1e-14)


@pytest.mark.parametrize("tail", [tails.chi_square_tail(0.0, 3.0), tails.f_tail(0.0, 3.0, 7.0)])
def test_the_tail_from_zero_is_one(tail: tails.Tail) -> None:
    assert tail == (1.0, 0.0)


@pytest.mark.parametrize("dof", [0.5, 1.0, 2.5, 5.0, 50.0, 1e3, 1e6])
@pytest.mark.parametrize("level", LEVELS)
def test_chi_square_critical_value_is_exceeded_with_its_level(level: float, dof: float) -> None:
    critical = tails.chi_square_critical(level, dof)
    assert tails.chi_square_tail(critical, dof).p_value == pytest.approx(level, rel=2e-12)


@pytest.mark.parametrize("dof1", [1.0, 2.0, 5.0, 20.0, 50.0])
@pytest.mark.parametrize("dof2", [1.0, 3.7, 29.0, 1e3, 1e6, 1e9])
@pytest.mark.parametrize("level", [*LEVELS, 1e-140])
def test_f_critical_value_is_exceeded_with_its_level(level: float, dof1: float, dof2: float) -> None:
    # 1.3e-11: what the tail itself is good for at 1e9 degrees of freedom.
    critical = tails.f_critical(level, dof1, dof2)
    assert tails.f_tail(critical, dof1, dof2).p_value == pytest.approx(level, rel=1.3e-11)


@pytest.mark.parametrize("dof2", [3.7, 10.0, 29.0, 200.0])
def test_f_critical_value_stands_at_levels_where_the_inverse_beta_function_gives_nan(dof2: float) -> None:
    critical = tails.f_critical(1e-290, 5.0, dof2)
    assert tails.f_tail(critical, 5.0, dof2).log10_p_value == pytest.approx(-290.0, rel=1e-12)


def test_f_critical_value_beyond_the_largest_float_is_infinite() -> None:
    assert tails.f_critical(1e-200, 1.0, 1.0) == math.inf


@pytest.mark.parametrize("level", [0.1, 0.05, 0.01, 0.001])
@pytest.mark.parametrize("dof", [1.0, 4.5, 29.0, 400.0])
def test_critical_values_agree_with_scipy(level: float, dof: float) -> None:
    assert tails.chi_square_critical(level, dof) == pytest.approx(stats.chi2.isf(level, dof), rel=1e-12)
    assert tails.f_critical(level, 5.0, dof) == pytest.approx(stats.f.isf(level, 5, dof), rel=1e-11)
    assert tails.t_critical(level, dof) == pytest.approx(stats.t.isf(level / 2, dof), rel=1e-11)


def test_student_critical_value_of_a_known_variance_is_normal() -> None:
    assert tails.t_critical(0.05, math.inf) == pytest.approx(stats.norm.isf(0.025), rel=1e-14)


def test_f_critical_value_tends_to_that_of_chi_square() -> None:
    assert 5 * tails.f_critical(0.01, 5.0, 1e14) == pytest.approx(tails.chi_square_critical(0.01, 5.0), rel=1e-12)
