"""Published distances, critical values, robust estimates, and covariances against a reference."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from scipy import linalg

from service.stats import dispersion, mcd, outliers, robust, robust_laws, spread, tails
from service.stats.deletion import delete_in_turn
from service.stats.moments import sample_moments
from tests.reference.published import at, cases, checks, last_digit, numbers


def _moments(case: dict[str, Any]) -> Any:
    rows = np.array(case["inputs"]["rows"], dtype=float)
    return sample_moments(rows, rows[0])


def _squared(case: dict[str, Any]) -> dict[str, Any]:
    squared = np.array(outliers.within_batch(_moments(case), None, 0.05).detail["squared_distances"])
    return {"d2": squared, "MD": np.sqrt(squared)}


def _wilks(case: dict[str, Any]) -> dict[str, Any]:
    whitened = _moments(case).whitened
    (n, p), squared = whitened.shape, np.square(whitened).sum(axis=1)
    stages = delete_in_turn(whitened, squared)
    w = 1 - n * stages.squared_distances[0] / (n - 1) ** 2
    bound = outliers.maximum_p_value(float(squared.max()), n, p)
    assert stages.p_values[0] == pytest.approx(bound, rel=1e-12)
    return {"w": w, "det_ratio": w, "F": (n - p - 1) / p * (1 / w - 1), "F_p_bonferroni": bound}


def _limits(case: dict[str, Any]) -> dict[str, Any]:
    p = case["inputs"]["p"]
    levels = {"crit": 0.05, "crit_01": 0.01}
    return {key: [outliers.maximum_limit(n, p, a) for n in case["inputs"]["n"]] for key, a in levels.items()}


def _hardin_rocke(case: dict[str, Any]) -> dict[str, Any]:
    n, p = case["inputs"]["n"], case["inputs"]["p"]
    h = mcd.half(n, p)
    asymptotic, predicted = robust_laws.wishart_degrees(n, p)
    consistency = robust_laws.consistency(p, h / n)
    # The cut-off for distances with the covariance of the subset as it is.
    unscaled = robust_laws.hardin_rocke(n, p).quantile(0.05) * consistency * robust_laws.small_sample(n, p)
    return {"h": h, "c": 1 / consistency, "m_asymptotic": asymptotic, "m_predicted": predicted, "cutoff": unscaled}


def _robust(case: dict[str, Any]) -> dict[str, Any]:
    rows = np.array(case["inputs"]["rows"], dtype=float)
    n, p = rows.shape
    found = robust.robust_estimate(rows)
    beyond = found.squared_distances > tails.chi_square_critical(0.025, p)
    subset = np.cov(rows[found.members].T)
    return {
        "center": found.centre,
        "cov": found.covariance.matrix,
        "d2": found.squared_distances,
        "log_determinant": math.log(np.linalg.det(subset)),
        "raw_factors": [robust_laws.consistency(p, mcd.half(n, p) / n), robust_laws.small_sample(n, p)],
        "outliers": np.flatnonzero(beyond) + 1,
    }


def _covariance_ratio(case: dict[str, Any]) -> dict[str, Any]:
    given = case["inputs"]
    values = linalg.eigvalsh(np.array(given["S"]), np.array(given["sigma0"]))
    u = dispersion.corrected_ratio(float(np.log(values).sum()), float(values.sum()), given["n"], 3)
    return {"u_prime": u, "p": tails.chi_square_tail(u, 6.0).p_value}


def _sphericity(case: dict[str, Any]) -> dict[str, Any]:
    rows = np.array(case["inputs"]["rows"])
    contrasts = rows @ linalg.null_space(np.ones((1, 5)))
    u, corrected = spread.proportionality(np.linalg.eigvalsh(np.cov(rows.T)), 10.0)
    u_contrasts, corrected_contrasts = spread.proportionality(np.linalg.eigvalsh(np.cov(contrasts.T)), 10.0)
    return {
        "u": u,
        "u_prime": corrected,
        "crit": tails.chi_square_critical(0.05, 14.0),
        "u_contrasts": u_contrasts,
        "u_prime_contrasts": corrected_contrasts,
    }


CALCULATIONS: dict[str, Callable[[dict[str, Any]], dict[str, Any]]] = {
    "distances": _squared,
    "squared_distances": _squared,
    "wilks_ratio": _wilks,
    "maximum_limit": _limits,
    "hardin_rocke": _hardin_rocke,
    "robust_mcd": _robust,
    "covariance_ratio": _covariance_ratio,
    "sphericity": _sphericity,
}
CASES = cases(*CALCULATIONS)
(DELIVERY,) = cases("robust_mcd_exact")


@pytest.mark.parametrize(("case", "path", "printed"), checks(CASES, "printed"))
def test_units_and_spread_agree_with_the_printed_number(case: dict[str, Any], path: str, printed: str) -> None:
    computed = at(CALCULATIONS[case["calculation"]](case), path)
    assert computed == pytest.approx(float(printed), abs=last_digit(printed), rel=0)


@pytest.mark.parametrize(("case", "path", "expected"), checks(CASES, "recomputed"))
def test_units_and_spread_agree_with_the_recomputed_number(case: dict[str, Any], path: str, expected: float) -> None:
    computed = at(CALCULATIONS[case["calculation"]](case), path)
    assert computed == pytest.approx(expected, rel=1e-11, abs=0)


@pytest.mark.parametrize("case", cases("robust_mcd"), ids=lambda case: case["id"])
def test_no_more_units_are_flagged_than_were_published(case: dict[str, Any]) -> None:
    assert len(_robust(case)["outliers"]) == len(case["recomputed"]["outliers"])


@pytest.mark.slow
def test_best_of_all_subsets_of_the_delivery_times_is_the_published_one(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(mcd, "MOST_SUBSETS", 5_000_000)
    found = _robust(DELIVERY)
    for path, printed in numbers(DELIVERY, "printed"):
        assert at(found, path) == pytest.approx(float(printed), abs=last_digit(printed), rel=0)
    for path, expected in numbers(DELIVERY, "recomputed"):
        assert at(found, path) == pytest.approx(expected, rel=1e-11, abs=0)
