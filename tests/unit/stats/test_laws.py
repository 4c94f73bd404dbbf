from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from service.errors import TooFewUnitsError
from service.stats import tails
from service.stats.laws import QuadraticLaw
from tests.unit.stats import precise


@pytest.mark.parametrize(("p", "nu"), [(1, 1.0), (2, 5.5), (5, 29.0), (5, 5.0), (12, 400.0)])
@pytest.mark.parametrize("statistic", [0.3, 4.0, 30.0, 2e3])
def test_tail_of_an_estimated_covariance_agrees_with_60_digits(statistic: float, p: int, nu: float) -> None:
    expected = precise.t_squared_p_value(statistic, p, nu)
    assert QuadraticLaw(p, nu).tail(statistic).p_value == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("p", [1, 5, 30])
@pytest.mark.parametrize("statistic", [0.3, 4.0, 30.0, 600.0])
def test_tail_of_a_known_covariance_agrees_with_60_digits(statistic: float, p: int) -> None:
    expected = precise.chi_square_p_value(statistic, p)
    assert QuadraticLaw(p, math.inf).tail(statistic).p_value == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(("p", "nu"), [(1, 1.0), (3, 17.0), (5, 29.0), (4, 4.5), (3, math.inf)])
def test_critical_value_is_exceeded_with_its_level(p: int, nu: float) -> None:
    law = QuadraticLaw(p, nu)
    assert law.tail(law.critical_value(0.01)).p_value == pytest.approx(0.01, rel=1e-12)


def test_law_of_an_estimated_covariance_is_scaled_f() -> None:
    law = QuadraticLaw(5, 29.0)
    assert law.parameters == (5.0, 25.0)
    assert law.factor == pytest.approx(25 / 145, rel=1e-15)
    assert law.tail(20.0).p_value == pytest.approx(stats.f.sf(20.0 * 25 / 145, 5, 25), rel=1e-12)


def test_law_of_a_known_covariance_is_chi_square() -> None:
    law = QuadraticLaw(5, math.inf)
    assert law.is_chi_square
    assert law.parameters == (5.0,)
    assert law.factor == 1.0


def test_law_over_some_characteristics_keeps_the_degrees_of_freedom() -> None:
    assert QuadraticLaw(5, 29.0).over(2) == QuadraticLaw(2, 29.0)


@pytest.mark.parametrize(("p", "nu"), [(5, 4.0), (5, 4.999), (1, 0.0)])
def test_law_refuses_fewer_degrees_of_freedom_than_characteristics(p: int, nu: float) -> None:
    with pytest.raises(TooFewUnitsError, match=f"at least {p} degrees of freedom"):
        QuadraticLaw(p, nu)


@pytest.mark.parametrize(("alpha", "real"), [(0.05, 0.129), (0.01, 0.050)])
def test_an_estimated_covariance_treated_as_known_rejects_far_too_often(alpha: float, real: float) -> None:
    as_if_known = QuadraticLaw(5, math.inf).critical_value(alpha)
    p_value = QuadraticLaw(5, 29.0).tail(as_if_known).p_value
    assert round(p_value, 3) == real
    assert p_value == pytest.approx(precise.t_squared_p_value(as_if_known, 5, 29.0), rel=1e-12)


def test_statistic_of_one_characteristic_is_the_square_of_student_t() -> None:
    t = np.array([0.1, 1.0, 3.0, 9.0])
    p_values = [QuadraticLaw(1, 11.0).tail(value * value).p_value for value in t]
    np.testing.assert_allclose(p_values, 2 * stats.t.sf(t, 11), rtol=1e-12)
    np.testing.assert_allclose(p_values, tails.t_two_sided(t, 11.0), rtol=1e-12)
