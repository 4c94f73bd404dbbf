"""A batch on the wire, with all its faults at once."""

from __future__ import annotations

import copy
from typing import Any

import pytest

from schemas.batch import BATCH_EXAMPLE, BatchSchema
from schemas.fields import MAXIMUM_COLUMNS
from tests.unit.schemas.faults import faults_of

WHOLE = BATCH_EXAMPLE | {
    "units": ["s1", "s2", "s3", "s4"],
    "runs": ["am", "am", "pm", "pm"],
    "sequence": ["2026-01-05T08:00:00Z", "2026-01-05T08:05:00Z", "2026-01-05T14:00:00Z", "2026-01-05T14:05:00Z"],
    "resubmission_of": "PX-2601-0",
    "remarks": "Sachets 1 to 4 of the first pallet",
}


def _changed(**members: object) -> dict[str, Any]:
    return copy.deepcopy(WHOLE) | members


def test_a_batch_with_everything_is_taken_as_it_is() -> None:
    assert BatchSchema().load(WHOLE) == WHOLE


@pytest.mark.parametrize("member", ["units", "runs", "sequence", "resubmission_of", "remarks"])
def test_a_member_that_is_not_needed_may_be_left_out(member: str) -> None:
    assert faults_of(BatchSchema(), {name: value for name, value in WHOLE.items() if name != member}) == {}


def test_every_fault_of_a_batch_is_told_at_once() -> None:
    bad = _changed(
        lot=7, units=["s1", " s2", 3, "s4"], rows=[[598.2, "447.9"], [611.0], [None, 1.0], [1.0, True]], runs=[]
    )
    bad["characteristics"][1] = {"nam": "zinc", "measurement_unit": ""}
    assert sorted(faults_of(BatchSchema(), bad)) == [
        "characteristics.1.measurement_unit",
        "characteristics.1.nam",
        "characteristics.1.name",
        "lot",
        "rows.0.1",
        "rows.1",
        "rows.3.1",
        "runs",
        "units.1",
        "units.2",
    ]


@pytest.mark.parametrize(
    ("member", "value", "text"),
    [
        ("characteristics", [], f"Give 1 to {MAXIMUM_COLUMNS} entries."),
        ("characteristics", {}, "Give a list, in brackets."),
        ("characteristics", None, "Give this member a value."),
        ("units", "s1", "Give a list, in brackets."),
        ("units", None, "Leave this member out, or give it a value."),
        ("rows", None, "Give this member a value."),
    ],
)
def test_a_member_of_another_kind_is_refused_with_what_to_do(member: str, value: object, text: str) -> None:
    assert faults_of(BatchSchema(), _changed(**{member: value})) == {member: text}


def test_a_characteristic_that_is_no_object_is_refused_where_it_stands() -> None:
    bad = _changed(characteristics=["iron", WHOLE["characteristics"][1]])  # type: ignore[index]
    assert faults_of(BatchSchema(), bad) == {"characteristics.0._schema": "Give an object, in braces."}


def test_more_characteristics_than_can_be_taken_are_refused() -> None:
    many = [{"name": f"c{j}", "measurement_unit": "mg/kg"} for j in range(MAXIMUM_COLUMNS + 1)]
    assert faults_of(BatchSchema(), _changed(characteristics=many)) == {"characteristics": "Give 1 to 100 entries."}
