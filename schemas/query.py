"""Query parameters of lists."""

from __future__ import annotations

from marshmallow.validate import Range

from schemas.base import Shape
from schemas.fields import Choice, Code, Instant, Name, Written


class DecisionQuerySchema(Shape):
    """Which decisions to list, newest first."""

    lot = Name(longest=100)
    specification = Code()
    outcome = Choice("accepted", "rejected", "held")
    reason = Code(metadata={"description": "A reason's code."})
    decided_from = Instant(metadata={"description": "From this time on."})
    decided_to = Instant(metadata={"description": "Before this time."})
    limit = Written(
        validate=Range(1, 500, error="Give a number from {min} to {max}."),
        metadata={"description": "Most items on a page; 50 if left out."},
    )
    cursor = Written(
        validate=Range(1, error="Give a number of at least {min}."),
        metadata={"description": "From the address in next; opaque."},
    )
