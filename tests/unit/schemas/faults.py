"""What a schema says of a document, as one fault a line."""

from __future__ import annotations

from collections.abc import Mapping

from marshmallow import Schema, ValidationError


def faults_of(schema: Schema, document: Mapping[str, object]) -> dict[str, str]:
    """Return what is wrong, by dotted path; empty where the document is taken."""
    try:
        schema.load(document)
    except ValidationError as error:
        return dict(_flat(error.messages, ""))
    return {}


def _flat(messages: object, path: str) -> list[tuple[str, str]]:
    if isinstance(messages, Mapping):
        return [found for name, inner in messages.items() for found in _flat(inner, f"{path}.{name}")]
    assert isinstance(messages, list)
    return [(path.removeprefix("."), " ".join(messages))]
