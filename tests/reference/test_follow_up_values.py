"""Published intervals, terms, noncentral probabilities, equivalence limits and deep tails."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from service.stats import noncentral, tails
from service.stats.covariance import factor_covariance
from service.stats.equivalence import equivalence_limits
from service.stats.follow_up import follow_up
from service.stats.laws import QuadraticLaw
from service.stats.location import hotelling_test, mean_test
from service.stats.moments import sample_moments
from service.stats.power import power
from service.stats.terms import combination_intervals, given, statistic_over
from tests.reference.published import at, cases, checks, last_digit


def _intervals(case: dict[str, Any]) -> dict[str, Any]:
    given_, mean = case["inputs"], np.array(case["inputs"]["mean"])
    covariance = factor_covariance(np.array(given_["S"]), given_["n"] - 1.0)
    result = mean_test(mean, covariance, float(given_["n"]), given_["alpha"])
    followed = follow_up(result, given_["alpha"])
    centre, half = combination_intervals(
        result, np.array(given_.get("contrasts", np.zeros((0, mean.size)))), given_["alpha"]
    )
    return {
        "critical_value": result.critical_value,
        "T2_lo": mean - followed.t_squared_half_width,
        "T2_hi": mean + followed.t_squared_half_width,
        "bonf_lo": mean - followed.bonferroni_half_width,
        "bonf_hi": mean + followed.bonferroni_half_width,
        "contrast_centre": centre,
        "contrast_half": half,
    }


def _contrasts(case: dict[str, Any]) -> dict[str, Any]:
    x = np.array(case["inputs"]["data"]) @ np.array(case["inputs"]["contrasts"]).T
    result = hotelling_test(sample_moments(x, np.zeros(x.shape[1])), case["inputs"]["alpha"])
    return {"half_width": follow_up(result, case["inputs"]["alpha"]).t_squared_half_width}


def _reference_result(case: dict[str, Any], alpha: float) -> Any:
    i = case["inputs"]
    covariance = factor_covariance(np.array(i["sigma0"]), float(i["degrees_of_freedom"]))
    return mean_test(np.array(i["difference"]), covariance, float(i["effective_units"]), alpha)


def _reference(case: dict[str, Any]) -> dict[str, Any]:
    result = _reference_result(case, case["inputs"]["alpha"])
    return {
        "T2": result.statistic,
        "F": result.scaled_statistic,
        "p_value": result.p_value,
        "critical_value": result.critical_value,
        "discriminant": result.direction * result.mahalanobis_distance,
    }


def _terms(case: dict[str, Any]) -> dict[str, Any]:
    result = _reference_result(case, 0.05)
    followed, p = follow_up(result, 0.05), result.law.dimension
    return {
        "T2_12": statistic_over(result, [0, 1], 0.05).statistic,
        "T2_34_given_12": given(result, [0, 1], 0.05).statistic,
        "partial_F": [given(result, [i for i in range(p) if i != j], 0.05).scaled_statistic for j in range(p)],
        "term_alone": followed.term_alone,
        "term_given_others": followed.term_given_others,
    }


def _patnaik(case: dict[str, Any]) -> dict[str, Any]:
    return {
        "lower": [noncentral.chi_square_lower(q["x"], q["dof"], q["noncentrality"]) for q in case["inputs"]["points"]]
    }


def _pwr(case: dict[str, Any]) -> dict[str, Any]:
    # T-squared over u characteristics on nu = u + v - 1 degrees of freedom is F(u, v).
    return {
        "power": [
            power(QuadraticLaw(q["u"], q["u"] + q["v"] - 1.0), q["alpha"], q["f2"] * (q["u"] + q["v"] + 1))
            for q in case["inputs"]["points"]
        ]
    }


def _deep(case: dict[str, Any]) -> dict[str, Any]:
    functions = {
        ("ncx2", "lower"): noncentral.chi_square_lower,
        ("ncx2", "upper"): noncentral.chi_square_upper,
        ("ncf", "lower"): noncentral.f_lower,
        ("ncf", "upper"): noncentral.f_upper,
    }
    return {"value": [functions[q["law"], q["side"]](*q["parameters"]) for q in case["inputs"]["points"]]}


def _equivalence(case: dict[str, Any]) -> dict[str, Any]:
    limits, scaled = [], []
    for q in case["inputs"]["points"]:
        law = QuadraticLaw(q["p"], q["n"] - 1.0)
        limits.append(equivalence_limits(law, q["alpha"], q["n"] * q["delta_squared"])[0])
        scaled.append(limits[-1] * law.factor)
    return {"T2": limits, "F": scaled}


def _chi_square_tails(case: dict[str, Any]) -> dict[str, Any]:
    log10s = [tails.chi_square_tail(x, dof).log10_p_value for x, dof in case["inputs"]["x_dof"]]
    return {"log_p": np.array(log10s) * math.log(10)}


def _two_sided_tails(case: dict[str, Any]) -> dict[str, Any]:
    t = [float(tails.t_two_sided_log10(np.array([t]), dof)[0]) for t, dof in case["inputs"]["t_dof"]]
    z = tails.t_two_sided_log10(np.array(case["inputs"]["z"]), math.inf)
    return {"t_log_p": np.array(t) * math.log(10), "z_log_p": z * math.log(10)}


CALCULATIONS: dict[str, Callable[[dict[str, Any]], dict[str, Any]]] = {
    "simultaneous_intervals": _intervals,
    "contrast_intervals": _contrasts,
    "T2_reference_covariance": _reference,
    "T2_decomposition": _terms,
    "noncentral_chi_square": _patnaik,
    "noncentral_f_power": _pwr,
    "noncentral_deep": _deep,
    "equivalence": _equivalence,
    "deep_tail_chi_square": _chi_square_tails,
    "deep_tail_two_sided": _two_sided_tails,
}
CASES = cases(*CALCULATIONS)


@pytest.mark.parametrize(("case", "path", "printed"), checks(CASES, "printed"))
def test_follow_up_agrees_with_the_printed_number(case: dict[str, Any], path: str, printed: str) -> None:
    computed = at(CALCULATIONS[case["calculation"]](case), path)
    assert computed == pytest.approx(float(printed), abs=last_digit(printed), rel=0)


@pytest.mark.parametrize(("case", "path", "expected"), checks(CASES, "recomputed"))
def test_follow_up_agrees_with_the_recomputed_number(case: dict[str, Any], path: str, expected: float) -> None:
    computed = at(CALCULATIONS[case["calculation"]](case), path)
    assert computed == pytest.approx(expected, rel=1e-11, abs=0)
