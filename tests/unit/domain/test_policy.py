"""The decision rule: which outcome follows from which findings."""

from __future__ import annotations

import copy
from collections.abc import Mapping
from typing import Any

import numpy as np
import pytest

from service.demo import generate, load
from service.domain.batch import Batch
from service.domain.policy import Evaluation, evaluate
from service.domain.reasons import CATALOGUE
from service.domain.specification import SCREEN_NAMES, Specification
from service.errors import InvalidContentError, NotPositiveDefiniteError, TooFewUnitsError
from service.stats.arrays import Matrix
from service.stats.null_laws import NullLaws
from service.stats.randomisation import normal_batches

LAWS = NullLaws()
ROOT_CORRELATION = np.linalg.cholesky(generate.CORRELATION)


def sample(purpose: str, n: int, *, width: float = 1.0) -> Matrix:
    """Return n sachets on target, in units of measurement."""
    noise = next(normal_batches(purpose, n, 5, 1))[0] @ ROOT_CORRELATION.T
    return np.asarray(generate.TARGET + width * noise * generate.DEVIATIONS)


def judged(rows: Matrix, *, batch: Mapping[str, Any] | None = None, **members: object) -> Evaluation:
    """Judge rows by the demonstration's specification with some members changed."""
    posted = {
        "batch_id": "b",
        "lot": "l",
        "characteristics": [
            {"name": name, "measurement_unit": unit} for name, unit in zip(generate.NAMES, generate.UNITS, strict=True)
        ],
        "rows": rows.tolist(),
        **(batch or {}),
    }
    specification = copy.deepcopy(load.specification()) | members
    return evaluate(Batch.from_dict(posted), Specification.from_dict(specification), LAWS)


def codes(evaluation: Evaluation) -> list[str]:
    return [reason.code for reason in evaluation.reasons]


def screen(evaluation: Evaluation, name: str) -> dict[str, Any]:
    return next(item for item in evaluation.to_dict()["screens"] if item["name"] == name)


def lot(shows: str) -> Matrix:
    return generate.lots()[shows][1]


def test_every_screen_stands_in_every_record_in_one_order() -> None:
    names = [item["name"] for item in judged(lot("clean")).to_dict()["screens"]]
    assert names == list(SCREEN_NAMES)


def test_a_screen_that_is_only_noted_does_not_hold() -> None:
    screens = {name: {"on_failure": "note"} for name in ("mardia-skewness", "mardia-kurtosis", "henze-zirkler")}
    evaluation = judged(lot("skewed"), screens=screens)
    assert evaluation.outcome == "accepted"
    assert screen(evaluation, "mardia-skewness")["state"] == "not-met"


def test_units_outlying_against_the_specification_do_not_soften_a_rejection() -> None:
    rows = lot("one-shift") - np.array([0, 0, 9.0, 0, 0])
    evaluation = judged(rows)
    assert screen(evaluation, "outlying-against-specification")["state"] == "not-met"
    assert evaluation.outcome == "rejected"
    assert codes(evaluation) == ["mean-differs", "outlying-units"]


def test_doubt_about_the_data_holds_a_lot_whatever_the_test_says() -> None:
    rows = lot("one-shift")
    rows[3] = rows[2]
    evaluation = judged(rows)
    assert evaluation.outcome == "held"
    assert codes(evaluation) == ["suspected-data", "mean-differs"]
    assert screen(evaluation, "completeness")["units"] == [2, 3]


@pytest.mark.parametrize(("width", "direction"), [(2.0, "wider"), (0.3, "narrower")])
def test_another_spread_than_the_references_is_named(width: float, direction: str) -> None:
    evaluation = judged(sample("spread", 20, width=width))
    assert evaluation.outcome == "held"
    assert screen(evaluation, "dispersion")["detail"]["direction"] == direction
    assert any(direction in reason.text for reason in evaluation.reasons)


def test_units_that_drift_in_order_of_measurement_hold_the_lot() -> None:
    trend = np.linspace(-1.5, 1.5, 30)[:, None] * generate.DEVIATIONS
    rows = sample("drift", 30, width=0.6) + trend
    in_order = {"sequence": list(map(float, range(30)))}
    assert "order-dependent" in codes(judged(rows, batch=in_order))
    assert "order-dependent" not in codes(judged(rows))
    # The same units measured in an order that has nothing to do with the trend.
    mixed = {"sequence": [float(7 * i % 30) for i in range(30)]}
    assert screen(judged(rows, batch=mixed), "order-dependence")["state"] == "met"


def test_times_of_measurement_give_the_order_too() -> None:
    times = [f"2026-12-01T07:{minute:02d}:00+01:00" for minute in range(12)]
    by_time = screen(judged(lot("clean"), batch={"sequence": times}), "order-dependence")
    by_number = screen(judged(lot("clean"), batch={"sequence": list(map(float, range(12)))}), "order-dependence")
    assert by_time == by_number


def test_a_required_screen_that_cannot_be_computed_holds_the_lot() -> None:
    rows = lot("clean")
    assert judged(rows).outcome == "accepted"
    evaluation = judged(rows, screens={"order-dependence": {"required": True}})
    assert (evaluation.outcome, codes(evaluation)[0]) == ("held", "screen-not-computable")


def test_robust_distances_are_made_where_they_are_asked_for() -> None:
    rows = sample("robust", 30)
    # In correlated directions against each other, so that no single value stands out.
    rows[:4] += np.array([6.0, -6.0, 0, 0, 0]) * generate.DEVIATIONS
    assert screen(judged(rows), "outlying-robust")["state"] == "not-applicable"
    asked = screen(judged(rows, screens={"outlying-robust": {"on_failure": "note"}}), "outlying-robust")
    assert asked["state"] == "not-met"
    assert asked["units"] == [0, 1, 2, 3]


def test_coarse_reporting_is_noted_and_holds_only_where_told_to() -> None:
    rows = sample("coarse", 12)
    rows[:, 0] = np.round(rows[:, 0] / 20) * 20
    noted = judged(rows)
    assert screen(noted, "resolution")["detail"]["coarse_steps"][0]["characteristic"] == "iron"
    assert "suspected-data" not in codes(noted)
    assert "suspected-data" in codes(judged(rows, screens={"resolution": {"on_failure": "hold"}}))


# --- sign flips

BY_SIGNS = {name: {"on_failure": "sign-flip"} for name in ("mardia-skewness", "mardia-kurtosis", "henze-zirkler")}


def test_sign_flips_stand_beside_the_test_where_normality_is_in_doubt() -> None:
    assert "sign_flip" not in judged(lot("clean")).numbers["test"]
    beside = judged(lot("skewed")).numbers["test"]["sign_flip"]
    assert (beside["law"], beside["decides"], beside["patterns"]) == ("exact", False, 2**11)


def test_sign_flips_decide_where_the_specification_says_so() -> None:
    accepted = judged(lot("skewed"), screens=BY_SIGNS)
    assert (accepted.outcome, codes(accepted)) == ("accepted", ["mean-agrees-by-signs"])
    moved = judged(lot("skewed") + 2 * generate.DEVIATIONS, screens=BY_SIGNS)
    assert (moved.outcome, codes(moved)[0]) == ("rejected", "mean-differs-by-signs")
    assert moved.numbers["test"]["sign_flip"]["decides"] is True


def test_sign_flips_that_could_never_reject_decide_nothing() -> None:
    evaluation = judged(lot("skewed"), screens=BY_SIGNS, significance_level=1e-4)
    assert evaluation.outcome == "held"
    assert evaluation.numbers["test"]["sign_flip"]["decides"] is False


def test_sign_flips_do_not_decide_about_an_estimated_target() -> None:
    covariance = load.specification()["covariance"] | {"target_units": 119.0}
    evaluation = judged(lot("skewed"), screens=BY_SIGNS, covariance=covariance)
    assert evaluation.outcome == "held"
    assert "symmetry" in evaluation.numbers["test"]["sign_flip"]["why"]


# --- the question


def test_an_acceptance_without_the_required_power_is_held() -> None:
    wanted = {"form": "difference", "required_power": {"shift": 0.5, "power": 0.9}}
    evaluation = judged(lot("clean"), question=wanted)
    assert (evaluation.outcome, codes(evaluation)[0]) == ("held", "too-few-units-for-power")
    assert evaluation.numbers["power"]["required"]["reached"] < 0.9
    enough = {"form": "difference", "required_power": {"shift": 1.5, "power": 0.9}}
    assert judged(lot("clean"), question=enough).outcome == "accepted"


@pytest.mark.parametrize(
    ("delta", "outcome", "code"),
    [(3.0, "accepted", "closeness-shown"), (1.0, "held", "inconclusive-for-now")],
)
def test_equivalence_is_shown_or_left_open(delta: float, outcome: str, code: str) -> None:
    evaluation = judged(lot("clean"), question={"form": "equivalence", "delta": delta}, significance_level=0.05)
    assert (evaluation.outcome, codes(evaluation)[0]) == (outcome, code)


def test_a_departure_beyond_what_does_not_matter_is_rejected() -> None:
    rows = lot("clean") + np.array([0, 0, 12.0, 0, 0])
    evaluation = judged(rows, question={"form": "equivalence", "delta": 1.0}, significance_level=0.05)
    assert (evaluation.outcome, codes(evaluation)[0]) == ("rejected", "departure-shown")


def test_equivalence_by_tolerances_needs_no_delta() -> None:
    characteristics = load.specification()["characteristics"]
    for item, deviation in zip(characteristics, generate.DEVIATIONS, strict=True):
        item["tolerance"] = 2.0 * float(deviation)
    evaluation = judged(lot("clean"), characteristics=characteristics, question={"form": "equivalence"})
    assert (evaluation.outcome, codes(evaluation)[0]) == ("accepted", "closeness-shown")


# --- edges: a right answer or a refusal by name, and never a number that is none


def _all_finite(document: object) -> bool:
    if isinstance(document, float):
        return bool(np.isfinite(document))
    if isinstance(document, dict):
        return all(map(_all_finite, document.values()))
    if isinstance(document, list | tuple):
        return all(map(_all_finite, document))
    return True


@pytest.mark.parametrize("kind", ["known", "reference", "pooled", "batch"])
@pytest.mark.parametrize("n", [1, 2, 4, 5, 6, 7, 12, 201])
def test_any_number_of_units_gives_an_answer_or_a_refusal_by_name(kind: str, n: int) -> None:
    covariance = {"kind": kind}
    if kind != "batch":
        covariance["matrix"] = load.specification()["covariance"]["matrix"]
    if kind in ("reference", "pooled"):
        covariance["degrees_of_freedom"] = 20
    if kind == "batch" and n <= 5:
        with pytest.raises(TooFewUnitsError, match=r"at least 6 units|One unit"):
            judged(sample("edges", n), covariance=covariance)
        return
    assert _all_finite(judged(sample("edges", n), covariance=covariance).to_dict())


def test_a_constant_characteristic_is_refused_by_name_with_the_batchs_own_covariance() -> None:
    rows = sample("constant", 12)
    rows[:, 2] = 120.0
    with pytest.raises(NotPositiveDefiniteError, match="Characteristic 3 is constant"):
        judged(rows, covariance={"kind": "batch"})
    held = judged(rows)
    assert held.outcome == "held"
    assert screen(held, "completeness")["detail"]["constant"] == ["calcium"]
    assert _all_finite(held.to_dict())


def test_one_characteristic_is_judged_like_many() -> None:
    rows = sample("one", 12)[:, :1]
    characteristics = load.specification()["characteristics"][:1]
    named = [{"name": "iron", "measurement_unit": "mg/kg"}]
    evaluation = judged(
        rows,
        batch={"characteristics": named},
        characteristics=characteristics,
        covariance={"kind": "known", "matrix": [[144.0]]},
    )
    assert evaluation.outcome == "accepted"
    assert _all_finite(evaluation.to_dict())


@pytest.mark.parametrize("p", [13, 50])
def test_many_characteristics_are_followed_up_by_holm_alone(p: int) -> None:
    rows = next(normal_batches("wide", 60, p, 1))[0]
    names = [{"name": f"c{j}", "measurement_unit": "mg/kg"} for j in range(p)]
    evaluation = judged(
        rows,
        batch={"characteristics": names},
        characteristics=[item | {"target": 0.0} for item in names],
        covariance={"kind": "known", "matrix": np.eye(p).tolist()},
    )
    assert evaluation.numbers["follow_up"]["multiplicity"].startswith("Holm only")
    assert _all_finite(evaluation.to_dict())


def test_every_reason_has_a_code_of_the_catalogue() -> None:
    found = {reason.code for shows in generate.FILES if shows != "wrong-unit" for reason in judged(lot(shows)).reasons}
    assert found <= set(CATALOGUE)


@pytest.mark.parametrize("seed", range(3))
def test_an_answer_does_not_depend_on_units_of_measurement(seed: int) -> None:
    rows, scale = sample(f"scale {seed}", 12), np.array([1e-9, 1e9, 1e3, 1.0, 1e-3])
    matrix = np.array(load.specification()["covariance"]["matrix"]) * np.outer(scale, scale)
    characteristics = load.specification()["characteristics"]
    for item, factor in zip(characteristics, scale, strict=True):
        item["target"] *= float(factor)
    covariance = load.specification()["covariance"] | {"matrix": matrix.tolist()}
    one = judged(rows).to_dict()
    other = judged(rows * scale, characteristics=characteristics, covariance=covariance).to_dict()
    assert other["outcome"] == one["outcome"]
    assert other["test"]["statistic"] == pytest.approx(one["test"]["statistic"], rel=1e-9)
    for a, b in zip(one["screens"], other["screens"], strict=True):
        assert b["state"] == a["state"]
        assert (b["p_value"] or 0.0) == pytest.approx(a["p_value"] or 0.0, rel=1e-9, abs=1e-12)


def test_values_beyond_any_statistic_are_refused_where_they_stand() -> None:
    rows = sample("far", 12)
    rows[0, 0], rows[5, 3] = 1e100, -1e100
    characteristics = [item | {"lower_bound": -1e100} for item in load.specification()["characteristics"]]
    with pytest.raises(InvalidContentError) as caught:
        judged(rows, characteristics=characteristics)
    assert [fault.pointer for fault in caught.value.faults] == ["/rows/0/0", "/rows/5/3"]


@pytest.mark.parametrize("dof", [None, 20])
def test_values_as_far_off_as_is_let_through_still_give_numbers(dof: float | None) -> None:
    matrix = load.specification()["covariance"]["matrix"]
    covariance = {"kind": "known", "matrix": matrix}
    if dof:
        covariance |= {"kind": "reference", "degrees_of_freedom": dof}
    rows = sample("far", 12)
    rows[0] += 9e49 * generate.DEVIATIONS
    characteristics = [item | {"lower_bound": -1e100} for item in load.specification()["characteristics"]]
    evaluation = judged(rows, characteristics=characteristics, covariance=covariance)
    assert evaluation.outcome == "held"
    assert _all_finite(evaluation.to_dict())
