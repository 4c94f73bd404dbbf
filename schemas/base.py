"""One base for every shape: unknown members are refused, and the nearest known name suggested."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from typing import Any

from marshmallow import RAISE, Schema, ValidationError, fields

_UNKNOWN = "Unknown member."
_NO_OBJECT = "Give an object, in braces."

# A body may hold a million unknown names, or one of a million characters: a suggestion is for slips of the pen.
_FEW = 20
_SHOWN = 60


class Shape(Schema):
    """A JSON object with the members declared, and no other."""

    class Meta:
        """Options of marshmallow."""

        unknown = RAISE
        example: Mapping[str, Any]

    error_messages: dict[str, str] = {"type": _NO_OBJECT, "unknown": _UNKNOWN}  # noqa: RUF012 - marshmallow's own form

    def on_bind_field(self, field_name: str, field_obj: fields.Field[Any]) -> None:
        """Let every field say what to do where it is left out, null, or not of its kind."""
        messages = field_obj.error_messages
        messages |= {"required": "Give this member.", "null": "Leave this member out, or give it a value."}
        if field_obj.required:
            messages["null"] = "Give this member a value."
        if isinstance(field_obj, fields.List):
            messages["invalid"] = "Give a list, in brackets."
        if isinstance(field_obj, fields.Nested):
            messages["type"] = _NO_OBJECT

    def handle_error(self, error: ValidationError, data: Any, **_: Any) -> None:
        """Say which member was probably meant where an unknown one was given."""
        if not isinstance(error.messages, dict):
            return
        unknown = [name for name, messages in error.messages.items() if messages == [_UNKNOWN]]
        for name in unknown:
            error.messages[name] = [self._unknown(str(name), suggest=len(unknown) <= _FEW)]

    def _unknown(self, name: str, *, suggest: bool) -> str:
        near = difflib.get_close_matches(name[:_SHOWN], self.fields, n=1) if suggest else []
        meant = f" Did you mean {near[0]!r}?" if near else f" Known are: {', '.join(sorted(self.fields))}."
        return f"There is no member {name[:_SHOWN]!r} here.{meant}"
