"""A specification on the wire: what each kind and form needs, takes and refuses."""

from __future__ import annotations

import copy
from typing import Any

import pytest

from schemas.decision import DecisionRequestSchema
from schemas.plan import PlanRequestSchema
from schemas.query import DecisionQuerySchema
from schemas.specification import (
    SCREENS,
    SPECIFICATION_EXAMPLE,
    ApprovalSchema,
    CovarianceSchema,
    QuestionSchema,
    SpecificationSchema,
    WithdrawalSchema,
)
from service.domain.specification import SCREEN_NAMES
from tests.unit.schemas.faults import faults_of

MEMBERS = {"matrix": [[4.0]], "degrees_of_freedom": 30, "target_units": 12}
TAKES = {
    "known": ({"matrix"}, set()),
    "reference": ({"matrix", "degrees_of_freedom"}, {"target_units"}),
    "batch": (set(), set()),
    "pooled": ({"matrix", "degrees_of_freedom"}, {"target_units"}),
}


def _changed(**members: object) -> dict[str, Any]:
    return copy.deepcopy(SPECIFICATION_EXAMPLE) | members


@pytest.mark.parametrize("kind", TAKES)
def test_a_covariance_takes_what_its_kind_needs_and_no_more(kind: str) -> None:
    needed, optional = TAKES[kind]
    taken = {name: value for name, value in MEMBERS.items() if name in needed | optional}
    assert faults_of(CovarianceSchema(), {"kind": kind, **taken}) == {}
    assert set(faults_of(CovarianceSchema(), {"kind": kind})) == needed
    assert set(faults_of(CovarianceSchema(), {"kind": kind, **MEMBERS})) == set(MEMBERS) - needed - optional


def test_a_bad_cell_does_not_hide_that_degrees_of_freedom_are_missing() -> None:
    assert faults_of(CovarianceSchema(), {"kind": "reference", "matrix": [["4"]]}) == {
        "matrix.0.0": "Give a finite number of at most 1e100 in size, without quotes.",
        "degrees_of_freedom": "A covariance of kind 'reference' needs this.",
    }


def test_a_null_member_is_told_once() -> None:
    assert faults_of(CovarianceSchema(), {"kind": "known", "matrix": None}) == {
        "matrix": "Leave this member out, or give it a value."
    }


@pytest.mark.parametrize("kind", ["components", "Known", "", None, 1, ["known"]])
def test_a_covariance_of_no_known_kind_is_refused_for_that_alone(kind: object) -> None:
    assert set(faults_of(CovarianceSchema(), {"kind": kind, **MEMBERS})) == {"kind"}


@pytest.mark.parametrize(
    ("question", "faults"),
    [
        ({"form": "difference"}, set()),
        ({"form": "difference", "required_power": {"shift": 1.5, "power": 0.9}}, set()),
        ({"form": "equivalence", "delta": 1.5}, set()),
        ({"form": "equivalence"}, set()),
        ({"form": "difference", "delta": 1.5}, {"delta"}),
        ({"form": "equivalence", "required_power": {"shift": 1.5, "power": 0.9}}, {"required_power"}),
        (
            {"form": "difference", "delta": "1.5", "required_power": {"shift": 0, "power": 1}},
            {"delta", "required_power.shift", "required_power.power"},
        ),
        ({"form": "equivalent"}, {"form"}),
        ({}, {"form"}),
    ],
)
def test_a_question_takes_the_members_of_its_form(question: dict[str, object], faults: set[str]) -> None:
    assert set(faults_of(QuestionSchema(), question)) == faults


@pytest.mark.parametrize(
    ("level", "taken"), [(0.5, True), (1e-12, True), (9e-13, False), (0, False), (0.51, False), ("0.01", False)]
)
def test_a_significance_level_is_one_that_can_be_told_from_never_and_at_most_a_half(level: object, taken: bool) -> None:
    assert (faults_of(SpecificationSchema(), _changed(significance_level=level)) == {}) is taken


def test_the_screens_on_the_wire_are_those_of_the_domain() -> None:
    assert SCREENS == SCREEN_NAMES


def test_every_screen_takes_its_settings() -> None:
    settings = {"level": 0.05, "on_failure": "note", "required": True}
    assert faults_of(SpecificationSchema(), _changed(screens=dict.fromkeys(SCREENS, settings))) == {}


@pytest.mark.parametrize(
    ("screens", "path"),
    [
        ({"mardia-skewnes": {}}, "mardia-skewnes"),
        ({"dispersion": {"level": 0.6}}, "dispersion.level"),
        ({"dispersion": {"on_failure": "reject"}}, "dispersion.on_failure"),
        ({"dispersion": {"required": "yes"}}, "dispersion.required"),
        ({"dispersion": True}, "dispersion._schema"),
    ],
)
def test_a_wrong_setting_of_a_screen_is_named(screens: dict[str, object], path: str) -> None:
    assert list(faults_of(SpecificationSchema(), _changed(screens=screens))) == [f"screens.{path}"]


@pytest.mark.parametrize(
    ("member", "value"), [("scale", "log"), ("tolerance", 0), ("lower_bound", None), ("target", "600"), ("unit", "mg")]
)
def test_a_wrong_member_of_a_characteristic_is_named(member: str, value: object) -> None:
    document = _changed()
    document["characteristics"][1][member] = value
    assert list(faults_of(SpecificationSchema(), document)) == [f"characteristics.1.{member}"]


def test_every_fault_of_a_specification_is_told_at_once() -> None:
    bad = _changed(code="Premix", significance_level=1, missing="drop", title="a\nb")
    bad["covariance"] = {"kind": "known", "matrix": [[1, 0], [0, None]], "degrees_of_freedom": "9"}
    bad["question"] = {"form": "difference", "delta": 1}
    assert sorted(faults_of(SpecificationSchema(), bad)) == [
        "code",
        "covariance.degrees_of_freedom",
        "covariance.matrix.1.1",
        "missing",
        "question.delta",
        "significance_level",
        "title",
    ]


def test_a_member_that_is_wrong_and_not_taken_is_told_both() -> None:
    faults = faults_of(CovarianceSchema(), {"kind": "batch", "matrix": [["4"]]})
    assert set(faults) == {"matrix.0.0", "matrix._schema"}


def test_a_step_needs_its_reason() -> None:
    assert faults_of(ApprovalSchema(), {"reason": "reviewed", "effective_at": "2027-01-01T00:00:00Z"}) == {}
    assert set(faults_of(ApprovalSchema(), {"effective_at": "tomorrow"})) == {"reason", "effective_at"}
    assert set(faults_of(WithdrawalSchema(), {"reason": " "})) == {"reason"}


# --- a specification named or whole


def _specification_faults(specification: object) -> dict[str, str]:
    return faults_of(DecisionRequestSchema(only=("specification",)), {"specification": specification})


@pytest.mark.parametrize("named", [{"code": "premix-a"}, {"code": "premix-a", "version": 3}, SPECIFICATION_EXAMPLE])
def test_a_specification_is_named_or_whole(named: object) -> None:
    assert _specification_faults(named) == {}


def test_a_misspelt_specification_is_judged_as_a_whole_one() -> None:
    document = _changed()
    document["characteristic"] = document.pop("characteristics")
    assert _specification_faults(document) == {
        "specification.characteristic": "There is no member 'characteristic' here. Did you mean 'characteristics'?",
        "specification.characteristics": "Give this member.",
    }


@pytest.mark.parametrize("named", ["premix-a", ["premix-a"], 1, True])
def test_a_specification_that_is_no_object_is_refused(named: object) -> None:
    assert _specification_faults(named) == {"specification._schema": "Give an object, in braces."}


@pytest.mark.parametrize("named", [{}, {"version": 1}, {"code": "premix-a", "version": "1"}, {"code": 1}])
def test_a_reference_that_names_nothing_is_refused(named: object) -> None:
    assert len(_specification_faults(named)) == 1


# --- plans and queries

_PLAN = {"specification": {"code": "premix-a"}, "units": 12, "shift": 1.0}


@pytest.mark.parametrize("shift", [0, 1.5, {"iron": -9.0}, {"iron": 0, "zinc": 1}])
def test_a_shift_is_a_distance_or_differences(shift: object) -> None:
    assert faults_of(PlanRequestSchema(), _PLAN | {"shift": shift}) == {}


@pytest.mark.parametrize("shift", [-1, "1", True, {}, [], [1.0]])
def test_what_is_no_shift_is_refused(shift: object) -> None:
    assert list(faults_of(PlanRequestSchema(), _PLAN | {"shift": shift})) == ["shift"]


def test_every_bad_difference_of_a_shift_is_named() -> None:
    faults = faults_of(PlanRequestSchema(), _PLAN | {"shift": {"iron": "9", "zinc": 1, "calcium": None}})
    assert list(faults) == ["shift.iron", "shift.calcium"]


@pytest.mark.parametrize("change", [{"units": 0}, {"units": 10_001}, {"units": 12.0}, {"power": 1}, {"power": 0}])
def test_a_plan_is_asked_within_bounds(change: dict[str, object]) -> None:
    assert list(faults_of(PlanRequestSchema(), _PLAN | change)) == list(change)


@pytest.mark.parametrize(("limit", "taken"), [("1", True), ("500", True), ("0", False), ("501", False)])
def test_a_page_has_1_to_500_items(limit: str, taken: bool) -> None:
    assert (faults_of(DecisionQuerySchema(), {"limit": limit}) == {}) is taken
