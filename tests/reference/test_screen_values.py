"""Published and independently computed values of the screens of normality and order."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from service.stats import normality
from service.stats.moments import Moments, sample_moments
from service.stats.ordering import lag_term
from service.stats.shapiro_wilk import shapiro_wilk
from tests.reference.published import at, cases, checks, last_digit


def _moments(case: dict[str, Any]) -> Moments:
    x = np.array(case["inputs"]["data"])
    return sample_moments(x, x[0])


def _mardia(case: dict[str, Any]) -> dict[str, Any]:
    moments = _moments(case)
    skewness, kurtosis = normality.skewness(moments, None), normality.kurtosis(moments, None)
    return {
        "b1": skewness.statistic,
        "skew_small_p": skewness.p_value,
        "b2": kurtosis.statistic,
    }


def _henze_zirkler(case: dict[str, Any]) -> dict[str, Any]:
    result = normality.henze_zirkler(_moments(case), None)
    return {"HZ": result.statistic, "p": result.p_value}


def _lags(case: dict[str, Any]) -> list[float]:
    whitened = _moments(case).whitened
    assert whitened is not None
    return [sum(lag_term(whitened, lag + 1) for lag in range(lags)) for lags in case["inputs"]["lags"]]


def _portmanteau(case: dict[str, Any]) -> dict[str, Any]:
    return {"Q": _lags(case)}


def _ljung_box(case: dict[str, Any]) -> dict[str, Any]:
    n = len(case["inputs"]["data"])
    return {"Q": [q * (n + 2) / n for q in _lags(case)]}


def _shapiro_wilk(case: dict[str, Any]) -> dict[str, Any]:
    inputs = case["inputs"]
    if "data" in inputs:
        x = np.array(inputs["data"], dtype=float)
    else:
        x = (np.arange(1, inputs["count"] + 1) * 7919 % 104729 / 104729) ** inputs["power"]
    w, p = shapiro_wilk(np.sort(x - x.mean())[:, None])
    return {"W": w[0], "p": p[0]}


_CALCULATIONS: dict[str, Callable[[dict[str, Any]], dict[str, Any]]] = {
    "mardia": _mardia,
    "henze_zirkler": _henze_zirkler,
    "portmanteau": _portmanteau,
    "ljung_box": _ljung_box,
    "shapiro_wilk": _shapiro_wilk,
}
CASES = cases(*_CALCULATIONS)


@pytest.mark.parametrize(("case", "path", "printed"), checks(CASES, "printed"))
def test_computed_value_agrees_with_the_printed_digits(case: dict[str, Any], path: str, printed: str) -> None:
    computed = at(_CALCULATIONS[case["calculation"]](case), path)
    assert abs(computed - float(printed)) <= last_digit(printed)


@pytest.mark.parametrize(("case", "path", "recomputed"), checks(CASES, "recomputed"))
def test_computed_value_agrees_with_another_program(case: dict[str, Any], path: str, recomputed: float) -> None:
    computed = at(_CALCULATIONS[case["calculation"]](case), path)
    assert computed == pytest.approx(recomputed, rel=1e-11)
