"""Published mean tests, moments, critical values and tails, number by number."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy import linalg

from service.stats import tails
from service.stats.covariance import factor_covariance
from service.stats.laws import QuadraticLaw
from service.stats.location import LocationResult, chi_square_test, hotelling_test, reference_test
from service.stats.moments import sample_moments
from tests.reference.published import at, cases, checks, last_digit, numbers

# A source that prints every digit of a double prints its own rounding too, times the condition of its covariance.
ROUNDING = 1e-13


def _reported(result: LocationResult, mean: np.ndarray) -> dict[str, Any]:
    parameters = result.law.parameters
    return {
        "statistic": result.statistic,
        "scaled_statistic": result.scaled_statistic,
        "critical_value": result.critical_value,
        "p_value": result.p_value,
        "log_p": result.log10_p_value * math.log(10),
        "dof1": parameters[0],
        "dof2": parameters[-1],
        "mean": mean,
        "discriminant": result.direction * result.mahalanobis_distance,
        "variances": np.square(result.covariance.scale),
    }


def _hotelling(given: dict[str, Any]) -> dict[str, Any]:
    target = np.array(given["target"])
    moments = sample_moments(np.array(given["data"]), target)
    return _reported(hotelling_test(moments, given["alpha"]), target + moments.difference)


def _chi_square(given: dict[str, Any]) -> dict[str, Any]:
    target = np.array(given["target"])
    moments = sample_moments(np.array(given["data"]), target)
    result = chi_square_test(moments, factor_covariance(np.array(given["sigma0"])), given["alpha"])
    return _reported(result, target + moments.difference)


def _reference(given: dict[str, Any]) -> dict[str, Any]:
    # Any rows with this mean difference will do: the covariance is not theirs.
    difference = np.array(given["difference"])
    moments = sample_moments(np.tile(difference, (given["units"], 1)), np.zeros_like(difference))
    sigma0 = factor_covariance(np.array(given["sigma0"]), given["degrees_of_freedom"])
    return _reported(reference_test(moments, sigma0, given["alpha"], target_units=given["target_units"]), difference)


def _structured(given: dict[str, Any]) -> dict[str, Any]:
    p, n = given["p"], given["n"]
    families = {
        "hilbert": linalg.hilbert,
        "pascal": linalg.pascal,
        "equicorrelated": lambda size: (np.eye(size) + np.ones((size, size))) / 2,
    }
    moments = sample_moments(np.full((n, p), given["shift"]), np.zeros(p))
    sigma0 = factor_covariance(np.asarray(families[given["family"]](p), dtype=np.float64))
    statistic = chi_square_test(moments, sigma0, 0.05).statistic
    return {"ideal": statistic, "statistic": statistic}


def _mean_and_covariance(given: dict[str, Any]) -> dict[str, Any]:
    data = np.array(given["data"])
    moments = sample_moments(data, np.zeros(data.shape[1]))
    return {"mean": moments.difference, "S": moments.scatter}


def _univariate(given: dict[str, Any]) -> dict[str, Any]:
    column = np.array(given["first"] + given["pair"] * given["pairs"])[:, None]
    moments = sample_moments(column, np.zeros(1))
    centred = moments.centred[:, 0]
    return {
        "mean": moments.difference[0],
        "sd": math.sqrt(moments.scatter[0, 0]),
        "r1": centred[:-1] @ centred[1:] / (centred @ centred),
    }


def _chi_square_critical(given: dict[str, Any]) -> dict[str, Any]:
    rows = [[tails.chi_square_critical(level, dof) for level in given["alpha"]] for dof in given["df"]]
    return {"critical_value": rows}


def _f_critical(given: dict[str, Any]) -> dict[str, Any]:
    return {"critical_value": [tails.f_critical(*point) for point in given["alpha_df1_df2"]]}


def _t_squared_critical(given: dict[str, Any]) -> dict[str, Any]:
    laws = [QuadraticLaw(p, float(nu)) for p, nu in given["p_nu"]]
    return {"critical_value": [law.critical_value(given["alpha"]) for law in laws]}


def _natural_logs(given: dict[str, Any]) -> dict[str, Any]:
    return {"log_p": [tails.chi_square_tail(*point).log10_p_value * math.log(10) for point in given["x_dof"]]}


CALCULATIONS: dict[str, Callable[[dict[str, Any]], dict[str, Any]]] = {
    "hotelling_test": _hotelling,
    "chi_square_test": _chi_square,
    "reference_test": _reference,
    "structured_covariance": _structured,
    "mean_and_covariance": _mean_and_covariance,
    "univariate_summary": _univariate,
    "critical_values_chi_square": _chi_square_critical,
    "critical_values_f": _f_critical,
    "critical_values_t_squared": _t_squared_critical,
    "natural_log_chi_square": _natural_logs,
}
CASES = cases(*CALCULATIONS)


@pytest.mark.parametrize(("case", "path", "printed"), checks(CASES, "printed"))
def test_location_agrees_with_the_printed_number(case: dict[str, Any], path: str, printed: str) -> None:
    computed = at(CALCULATIONS[case["calculation"]](case["inputs"]), path)
    tolerance = max(last_digit(printed), ROUNDING * abs(float(printed)))
    assert computed == pytest.approx(float(printed), abs=tolerance, rel=0)


@pytest.mark.parametrize(("case", "path", "expected"), checks(CASES, "recomputed"))
def test_location_agrees_with_the_recomputed_number(case: dict[str, Any], path: str, expected: float) -> None:
    computed = at(CALCULATIONS[case["calculation"]](case["inputs"]), path)
    assert computed == pytest.approx(expected, rel=1e-10, abs=0)


@pytest.mark.parametrize("case", [case for case in CASES if "misprinted" in case], ids=lambda case: case["id"])
def test_a_source_with_a_misprint_has_one_number_that_does_not_follow(case: dict[str, Any]) -> None:
    assert any(
        abs(float(printed) - at(case["recomputed"], path)) > last_digit(printed) / 2
        for path, printed in numbers(case, "misprinted")
        if path != "note"
    )


@pytest.mark.parametrize(
    "case", [case for case in cases("hotelling_test") if "p_value" in case["recomputed"]], ids=lambda case: case["id"]
)
def test_a_source_of_t_squared_agrees_with_its_own_f(case: dict[str, Any]) -> None:
    recomputed, (n, p) = case["recomputed"], np.shape(case["inputs"]["data"])
    f = recomputed["statistic"] * (n - p) / (p * (n - 1))
    assert tails.f_tail(f, p, n - p).p_value == pytest.approx(recomputed["p_value"], rel=1e-10)
