"""One base for every shape: unknown members are refused, and the nearest known name suggested."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from typing import Any

from marshmallow import RAISE, Schema, ValidationError


class Shape(Schema):
    """A JSON object with the members declared, and no other."""

    class Meta:
        """Options of marshmallow."""

        unknown = RAISE
        example: Mapping[str, Any]

    def handle_error(self, error: ValidationError, data: Any, **_: Any) -> None:
        """Say which member was probably meant where an unknown one was given."""
        if isinstance(error.messages, dict):
            for name in set(error.messages) - set(self.fields):
                if isinstance(name, str) and name != "_schema":
                    error.messages[name] = [self._unknown(name)]

    def _unknown(self, name: str) -> str:
        near = difflib.get_close_matches(name, self.fields, n=1)
        meant = f" Did you mean {near[0]!r}?" if near else f" Known are: {', '.join(sorted(self.fields))}."
        return f"There is no member {name!r} here.{meant}"
