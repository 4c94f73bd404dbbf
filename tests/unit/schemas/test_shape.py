"""Rules that hold for every shape: unknown members, missing ones, nulls, and validators that count."""

from __future__ import annotations

import importlib
import pkgutil
from collections.abc import Iterator

import pytest
from marshmallow import Schema, fields
from marshmallow.validate import Validator

import schemas
from schemas.base import Shape
from schemas.batch import BATCH_EXAMPLE, BatchSchema
from schemas.decision import DECISION_EXAMPLE, DecisionRequestSchema, NamedOrWhole, Open
from schemas.plan import PLAN_EXAMPLE, PlanRequestSchema
from schemas.specification import SPECIFICATION_EXAMPLE, SpecificationSchema
from tests.unit.schemas.faults import faults_of


def _all(kind: type[Schema]) -> list[type[Schema]]:
    for module in pkgutil.iter_modules(schemas.__path__, "schemas."):
        importlib.import_module(module.name)
    found, waiting = [], list(kind.__subclasses__())
    while waiting:
        found.append(waiting.pop())
        waiting += found[-1].__subclasses__()
    return [one for one in found if one.__module__.startswith("schemas.")]


def _fields(schema: Schema) -> Iterator[fields.Field[object]]:
    for field in schema.fields.values():
        yield field
        if isinstance(field, fields.Nested):
            yield from _fields(field.schema)
        if isinstance(field, fields.List):
            yield field.inner
        if isinstance(field, NamedOrWhole):
            yield from (*_fields(field.named), *_fields(field.whole))


@pytest.mark.parametrize("shape", _all(Shape), ids=lambda shape: shape.__name__)
def test_an_unknown_member_is_refused_by_every_request(shape: type[Schema]) -> None:
    assert "There is no member 'qqq' here." in faults_of(shape(), {"qqq": 1})["qqq"]


@pytest.mark.parametrize("shape", _all(Open), ids=lambda shape: shape.__name__)
def test_an_answer_may_grow(shape: type[Schema]) -> None:
    assert "qqq" not in faults_of(shape(), {"qqq": 1})


@pytest.mark.parametrize("shape", _all(Shape), ids=lambda shape: shape.__name__)
def test_every_validator_raises_and_says_what_to_do(shape: type[Schema]) -> None:
    # A validator that answers False is ignored by marshmallow, so only its own kind, which raises, may be used.
    validators = [validator for field in _fields(shape()) for validator in field.validators]
    assert all(isinstance(validator, Validator) for validator in validators)
    assert all(str(getattr(validator, "error", "")).startswith("Give ") for validator in validators)


@pytest.mark.parametrize("shape", _all(Shape), ids=lambda shape: shape.__name__)
def test_every_refusal_of_a_null_or_missing_member_says_what_to_do(shape: type[Schema]) -> None:
    schema = shape()
    required = {name for name, field in schema.fields.items() if field.required}
    assert faults_of(schema, {}) == dict.fromkeys(required, "Give this member.")
    for name, text in faults_of(schema, dict.fromkeys(schema.fields, None)).items():
        assert text.startswith("Give this member a value." if name in required else "Leave this member out"), name


@pytest.mark.parametrize("shape", _all(Shape), ids=lambda shape: shape.__name__)
@pytest.mark.parametrize("value", [{"q": {}}, [[{}]], True, "\x00", 0.5])
def test_no_member_of_any_shape_fails_otherwise_than_by_refusing(shape: type[Schema], value: object) -> None:
    schema = shape()
    for text in faults_of(schema, dict.fromkeys(schema.fields, value)).values():
        assert text.split()[0] in ("Give", "Use", "Leave", "There", "A", "Results"), text


@pytest.mark.parametrize(
    ("schema", "example"),
    [
        (BatchSchema(), BATCH_EXAMPLE),
        (SpecificationSchema(), SPECIFICATION_EXAMPLE),
        (DecisionRequestSchema(), DECISION_EXAMPLE),
        (PlanRequestSchema(), PLAN_EXAMPLE),
    ],
)
def test_an_example_loads_to_itself(schema: Schema, example: dict[str, object]) -> None:
    assert schema.load(example) == example


@pytest.mark.parametrize(
    ("written", "meant"),
    [("batchid", "batch_id"), ("Lot", "lot"), ("row", "rows"), ("characteristic", "characteristics")],
)
def test_a_slip_of_the_pen_is_answered_with_the_name_that_was_meant(written: str, meant: str) -> None:
    text = faults_of(BatchSchema(), BATCH_EXAMPLE | {written: 1})[written]
    assert text == f"There is no member {written!r} here. Did you mean {meant!r}?"


def test_a_name_like_no_other_is_answered_with_those_that_are_known() -> None:
    text = faults_of(SpecificationSchema(), SPECIFICATION_EXAMPLE | {"qqq": 1})["qqq"]
    assert text.endswith("significance_level, title.")


def test_very_many_unknown_members_are_all_named_without_suggestions() -> None:
    unknown = {f"batch_i{i}": 1 for i in range(1000)}
    faults = faults_of(BatchSchema(), BATCH_EXAMPLE | unknown)
    assert set(faults) == set(unknown)
    assert not any("Did you mean" in text for text in faults.values())


def test_a_very_long_name_is_shown_shortened() -> None:
    assert len(faults_of(BatchSchema(), BATCH_EXAMPLE | {"q" * 100_000: 1})["q" * 100_000]) < 300


def test_a_member_named_as_the_library_names_its_own_is_unknown_too() -> None:
    assert "no member '_schema'" in faults_of(BatchSchema(), BATCH_EXAMPLE | {"_schema": 1})["_schema"]
