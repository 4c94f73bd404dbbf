"""The document of a small interface: valid, the same every time, and in agreement with what is taken."""

from __future__ import annotations

import copy
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st
from marshmallow import Schema, ValidationError
from openapi_schema_validator import OAS31Validator
from openapi_spec_validator import validate

from service.http.app import OPERATIONS
from service.http.openapi import document, in_lines, in_words, to_yaml
from service.http.routing import Operation
from tests.unit.http.small import small_app

ROOT = Path(__file__).parents[3]
WHOLE = document(OPERATIONS)
WITH_BODY = [operation for operation in OPERATIONS if operation.body is not None]


def _small() -> dict[str, Any]:
    return document(small_app().extensions["operations"])


def _validator(described: dict[str, Any], name: str) -> OAS31Validator:
    schema = {"$ref": f"#/components/schemas/{name}", "components": described["components"]}
    return OAS31Validator(schema)


def test_the_document_of_a_small_interface_is_valid() -> None:
    validate(_small())


def test_every_rule_and_method_stands_in_the_document() -> None:
    paths = _small()["paths"]
    rules = [rule for rule in small_app().url_map.iter_rules() if rule.endpoint != "static"]
    assert {rule.rule.replace("<", "{").replace(">", "}") for rule in rules} == set(paths)
    for rule in rules:
        path = rule.rule.replace("<", "{").replace(">", "}")
        assert (rule.methods or set()) - {"HEAD", "OPTIONS"} == {method.upper() for method in paths[path]}


def test_bounds_are_open_or_closed_as_they_are_kept() -> None:
    properties = WHOLE["components"]["schemas"]["Specification"]["properties"]
    assert properties["significance_level"] == {"type": "number", "minimum": 1e-12, "maximum": 0.5}
    assert _small()["components"]["schemas"]["Group"]["properties"]["share"] == {
        "type": "number",
        "exclusiveMinimum": 0,
        "exclusiveMaximum": 1,
    }


def test_a_path_parameter_is_described() -> None:
    [parameter] = _small()["paths"]["/either/{name}"]["get"]["parameters"]
    assert parameter == {"in": "path", "name": "name", "required": True, "schema": {"type": "string"}}


def test_an_answer_in_several_types_names_them_all() -> None:
    content = _small()["paths"]["/either/{name}"]["get"]["responses"]["200"]["content"]
    assert list(content) == ["text/plain", "text/csv"]


def test_what_needs_no_token_says_so_and_all_else_needs_one() -> None:
    for operation in OPERATIONS:
        path = operation.rule.replace("<int:", "<").replace("<", "{").replace(">", "}")
        described = WHOLE["paths"][path][operation.method.lower()]
        assert described["security"] == ([] if operation.public else [{"token": []}])
    assert WHOLE["components"]["securitySchemes"] == {"token": {"type": "http", "scheme": "bearer"}}


def test_requests_take_no_unknown_member_and_answers_may_grow() -> None:
    schemas = WHOLE["components"]["schemas"]
    closed = {name for name, schema in schemas.items() if schema.get("additionalProperties") is False}
    assert {"DecisionRequest", "Batch", "Specification", "Covariance", "Screens", "Approval"} <= closed
    assert closed.isdisjoint({"Record", "Evaluation", "Problem", "Fault", "Version", "DecisionPage"})


def test_the_text_of_the_document_has_no_anchors_and_reads_back() -> None:
    text = to_yaml(WHOLE)
    assert yaml.safe_load(text) == WHOLE
    assert not [token for token in yaml.scan(text) if isinstance(token, yaml.AnchorToken | yaml.AliasToken)]


@pytest.mark.parametrize("seed", ["1", "2"])
def test_the_text_is_the_same_in_every_process(seed: str) -> None:
    environment = {**os.environ, "PYTHONHASHSEED": seed}
    command = [sys.executable, "-m", "service.http.openapi"]
    written = subprocess.run(command, cwd=ROOT, env=environment, capture_output=True, check=True).stdout
    assert written.decode("utf-8") == to_yaml(WHOLE)


# --- the document and the shapes agree

_WORDS = st.sampled_from(["", " ", "a", "known", "batch", "hold", "note", "equivalence", "2026-12-01T07:30:00Z"])
_SCALARS = st.none() | st.booleans() | st.integers(-2, 600) | st.floats(-2, 2) | _WORDS
_NAMES = st.sampled_from(["code", "name", "version", "iron", "dispersion", "q"])
_VALUES = st.recursive(
    _SCALARS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(_NAMES, inner, max_size=2),
    max_leaves=4,
)


def _places(value: Any, place: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    inner = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    return [place, *(found for name, one in inner for found in _places(one, (*place, name)))]


def _put(document: Any, place: tuple[Any, ...], value: Any) -> Any:
    if not place:
        return value
    changed = copy.deepcopy(document)
    at = changed
    for step in place[:-1]:
        at = at[step]
    at[place[-1]] = value
    return changed


def _at(document: Any, place: tuple[Any, ...]) -> Any:
    for step in place:
        document = document[step]
    return document


def _like(value: Any) -> st.SearchStrategy[Any]:
    """Return values of the same kind, many of which are taken."""
    if isinstance(value, dict):
        return st.sampled_from(sorted(value)).map(lambda name: {n: v for n, v in value.items() if n != name})
    if isinstance(value, list):
        return st.integers(1, 3).map(lambda times: value * times)
    if isinstance(value, str):
        return st.text(st.characters(codec="utf-8"), max_size=12) | _WORDS
    return st.integers(0, 20_000) | st.floats(0, 1) | st.floats()


def _takes(schema: Schema, body: Any) -> bool:
    try:
        schema.load(body)
    except ValidationError:
        return False
    return True


@pytest.mark.parametrize("operation", WITH_BODY, ids=lambda operation: operation.name)
@given(data=st.data())
def test_whatever_a_shape_takes_is_valid_by_the_document(operation: Operation, data: st.DataObject) -> None:
    assert operation.body is not None
    place = data.draw(st.sampled_from(_places(operation.example)))
    body = _put(operation.example, place, data.draw(_like(_at(operation.example, place)) | _VALUES))
    name = type(operation.body).__name__.removesuffix("Schema")
    if _takes(operation.body, body):
        _validator(WHOLE, name).validate(body)


@pytest.mark.parametrize("operation", WITH_BODY, ids=lambda operation: operation.name)
def test_an_example_is_valid_by_the_document(operation: Operation) -> None:
    _validator(WHOLE, type(operation.body).__name__.removesuffix("Schema")).validate(operation.example)


# --- words for the page


@pytest.mark.parametrize(
    ("shape", "words"),
    [
        ({"$ref": "#/components/schemas/Batch"}, "Batch"),
        (
            {"type": "array", "items": {"type": "array", "items": {"type": ["number", "null"]}}},
            "list of list of number or null",
        ),
        ({"oneOf": [{"$ref": "#/x/A"}, {"type": "number"}]}, "A or number"),
        ({"anyOf": [{"type": "object"}, {"type": "null"}]}, "object or null"),
        ({"type": "string", "enum": ["hold", "note"]}, "one of: hold, note"),
        ({}, "any"),
    ],
)
def test_a_shape_is_said_in_words(shape: dict[str, Any], words: str) -> None:
    assert in_words(shape) == words


def test_an_example_is_set_with_plain_lists_on_one_line() -> None:
    assert in_lines({"rows": [[1, 2], [3.5, None]]}) == '{\n  "rows": [\n    [1, 2],\n    [3.5, null]\n  ]\n}'
