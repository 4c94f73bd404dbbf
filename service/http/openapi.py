"""The interface's document, made of the operations themselves (OpenAPI 3.1).

``python -m service.http.openapi > openapi.yaml`` writes it anew.
"""

from __future__ import annotations

import json
import re
import sys
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import yaml
from apispec import APISpec
from apispec.ext.marshmallow import MarshmallowPlugin
from marshmallow import Schema, fields

from schemas import fields as own
from schemas.decision import NamedOrWhole
from schemas.plan import Shift
from schemas.problem import ProblemSchema
from schemas.specification import SpecificationReferenceSchema, SpecificationSchema
from service import __version__
from service.http.problems import phrase
from service.http.routing import Operation

_DESCRIPTION = (
    "Decides whether the mean vector of a laboratory lot agrees with its approved specification, says why, and keeps a "
    "signed record. Decision support: release stays with the laboratory's responsible person, its validated "
    "procedures and local rules."
)
_PATH_TYPES = {"int": {"type": "integer", "minimum": 1}, None: {"type": "string"}}


def document(operations: Sequence[Operation]) -> dict[str, Any]:
    """Return the document of these operations, as plain data in a fixed order."""
    plugin = MarshmallowPlugin(schema_name_resolver=_schema_name)
    spec = APISpec(
        "Acceptance decisions for laboratory batches",
        __version__,
        "3.1.0",
        plugins=[plugin],
        info={
            "summary": "Batches in, signed decisions out",
            "description": _DESCRIPTION,
            "license": {"name": "Apache-2.0", "identifier": "Apache-2.0"},
        },
        servers=[{"url": "/", "description": "This service"}],
    )
    assert plugin.converter is not None
    plugin.converter.add_attribute_function(_own_field)  # type: ignore[no-untyped-call]
    spec.components.security_scheme("token", {"type": "http", "scheme": "bearer"})
    for status in sorted({status for operation in operations for status in operation.problems}):
        spec.components.response(f"Problem{status}", _problem_response(status))
    for operation in operations:
        path = re.sub(r"<(?:int:)?(\w+)>", r"{\1}", operation.rule)
        spec.path(path, operations={operation.method.lower(): _described(operation)})
    return dict(spec.to_dict())


def to_yaml(described: dict[str, Any]) -> str:
    """Return the document as YAML, the same bytes every time and without anchors."""

    class Plain(yaml.SafeDumper):
        def ignore_aliases(self, data: Any) -> bool:
            return True

    return yaml.dump(described, Dumper=Plain, sort_keys=False, allow_unicode=True, width=110)


def _schema_name(schema: type[Schema]) -> str:
    # apispec hands over instances too.
    return str(getattr(schema, "__name__", type(schema).__name__)).removesuffix("Schema")


def _described(operation: Operation) -> dict[str, Any]:
    described: dict[str, Any] = {
        "operationId": operation.name,
        "summary": operation.summary,
        "description": operation.description + _roles(operation),
        "tags": [operation.tag],
        "security": [] if operation.public else [{"token": []}],
        "parameters": _parameters(operation),
    }
    if operation.body is not None:
        content: dict[str, Any] = {"schema": operation.body, "example": operation.example}
        described["requestBody"] = {"required": True, "content": {"application/json": content}}
    responses: dict[str, Any] = {str(status): _response(status, shape) for status, shape in operation.answers.items()}
    for response in responses.values():
        response["content"] |= {other: {"schema": {"type": "string"}} for other in operation.other_types}
    responses |= {str(status): f"Problem{status}" for status in operation.problems}
    described["responses"] = responses
    return described


def _roles(operation: Operation) -> str:
    return "" if operation.public else f" Roles: {', '.join(operation.roles)}."


def _parameters(operation: Operation) -> list[dict[str, Any]]:
    found: list[dict[str, Any]] = []
    for kind, name in re.findall(r"<(?:(int):)?(\w+)>", operation.rule):
        found.append({"in": "path", "name": name, "required": True, "schema": _PATH_TYPES[kind or None]})
    for name, meaning in operation.headers.items():
        found.append({"in": "header", "name": name, "description": meaning, "schema": {"type": "string"}})
    if operation.query is not None:
        found.append({"in": "query", "schema": operation.query})
    return found


def _response(status: int, shape: Schema | str) -> dict[str, Any]:
    if isinstance(shape, str):
        return {"description": phrase(status), "content": {shape: {"schema": {"type": "string"}}}}
    return {"description": phrase(status), "content": {"application/json": {"schema": shape}}}


def _problem_response(status: int) -> dict[str, Any]:
    return {
        "description": phrase(status),
        "content": {"application/problem+json": {"schema": ProblemSchema}},
    }


def _own_field(self: Any, field: fields.Field[Any], **_: Any) -> dict[str, Any]:
    """Describe the fields that are our own."""
    if isinstance(field, NamedOrWhole):
        shapes = (SpecificationReferenceSchema, SpecificationSchema)
        return {"oneOf": [self.resolve_nested_schema(shape) for shape in shapes]}
    for kind, describe in _OWN.items():
        if isinstance(field, kind):
            described: dict[str, Any] = describe(field)
            return described
    return {}


def _number(field: own.Number) -> dict[str, Any]:
    bounds = {
        "exclusiveMinimum": field.above,
        "exclusiveMaximum": field.below,
        "minimum": field.least,
        "maximum": field.most,
    }
    return {"type": "number"} | {name: bound for name, bound in bounds.items() if bound is not None}


def _matrix(field: own.Matrix) -> dict[str, Any]:
    cell: dict[str, Any] = {"type": ["number", "null"] if field.missing_allowed else "number"}
    row = {"type": "array", "minItems": 1, "maxItems": own.MAXIMUM_COLUMNS, "items": cell}
    return {"type": "array", "minItems": 1, "maxItems": own.MAXIMUM_ROWS, "items": row}


_OWN: dict[type[fields.Field[Any]], Callable[[Any], dict[str, Any]]] = {
    own.Number: _number,
    own.Matrix: _matrix,
    own.Sequence: lambda _: {"type": "array", "minItems": 1, "items": {"type": ["number", "string"]}},
    own.Code: lambda field: {"type": "string", "pattern": f"^{field.PATTERN.pattern}$"},
    own.Text: lambda field: {"type": "string", "minLength": 1, "maxLength": field.longest},
    own.Choice: lambda field: {"type": "string", "enum": list(field.words)},
    Shift: lambda _: {
        "oneOf": [{"type": "number", "minimum": 0}, {"type": "object", "additionalProperties": {"type": "number"}}]
    },
    own.Instant: lambda _: {"type": "string", "format": "date-time"},
}
"""From a field to its JSON Schema; the more special kinds first."""


def in_words(shape: Mapping[str, Any]) -> str:
    """Return a JSON Schema in a few words, for a page."""
    if "$ref" in shape:
        return str(shape["$ref"]).rsplit("/", 1)[-1]
    if "oneOf" in shape:
        return " or ".join(in_words(one) for one in shape["oneOf"])
    if "anyOf" in shape:
        return " or ".join(in_words(one) for one in shape["anyOf"])
    if "enum" in shape:
        return "one of: " + ", ".join(map(str, shape["enum"]))
    kind = shape.get("type", "any")
    if kind == "array":
        return f"list of {in_words(shape.get('items', {}))}"
    return " or ".join(kind) if isinstance(kind, list) else str(kind)


_LIST_OF_SCALARS = re.compile(r"\[\s+([^\[\]{}]*?)\s+\]")


def in_lines(example: object) -> str:
    """Return an example as JSON for a page: members as written, each list of plain values on one line."""
    text = json.dumps(example, indent=2, ensure_ascii=False)
    return _LIST_OF_SCALARS.sub(lambda found: "[" + " ".join(found[1].split()) + "]", text)


if __name__ == "__main__":
    from service.http.app import OPERATIONS

    sys.stdout.write(to_yaml(document(OPERATIONS)))
