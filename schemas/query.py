"""Query parameters of lists."""

from __future__ import annotations

from marshmallow import fields
from marshmallow.validate import Range

from schemas.base import Shape
from schemas.fields import Choice, Code, Instant, Text


class DecisionQuerySchema(Shape):
    """Which decisions to list, newest first."""

    lot = Text(longest=100)
    specification = Code()
    outcome = Choice("accepted", "rejected", "held")
    reason = Code(metadata={"description": "A reason's code."})
    decided_from = Instant(metadata={"description": "From this time on."})
    decided_to = Instant(metadata={"description": "Before this time."})
    limit = fields.Integer(validate=Range(1, 500), metadata={"description": "Most items on a page; 50 if left out."})
    cursor = fields.Integer(validate=Range(1), metadata={"description": "From the address in next; opaque."})
