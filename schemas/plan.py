"""A question to a specification before any data, and its answer."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from marshmallow import ValidationError, fields
from marshmallow.validate import Range

from schemas.base import Shape
from schemas.decision import NamedOrWhole, Open
from schemas.fields import MAXIMUM_ROWS, Count, Number, as_number
from schemas.specification import SPECIFICATION_EXAMPLE


class Shift(fields.Field[float | dict[str, float]]):
    """A shift of the mean: one number in Mahalanobis units, or differences by characteristic."""

    def _deserialize(
        self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any
    ) -> float | dict[str, float]:
        number = as_number(value)
        if number is not None and number >= 0:
            return number
        if not isinstance(value, dict) or not value:
            raise ValidationError(
                "Give a number of at least 0 (Mahalanobis units), or differences by characteristic, such as "
                '{"iron": 5.0}.'
            )
        differences = {name: as_number(difference) for name, difference in value.items()}
        faults = {name: ["Give a finite number."] for name, number in differences.items() if number is None}
        if faults:
            raise ValidationError(faults)
        return {name: number for name, number in differences.items() if number is not None}


class PlanRequestSchema(Shape):
    """A specification, and what is asked of it."""

    specification = NamedOrWhole(required=True)
    units = Count(
        required=True,
        validate=Range(1, MAXIMUM_ROWS, error="Give a number from {min} to {max}."),
        metadata={"description": "Units in a batch."},
    )
    shift = Shift(required=True)
    power = Number(above=0, below=1, metadata={"description": "Wanted power; 0.9 where left out."})


class PlanSchema(Open):
    """What the specification will and will not detect."""

    question = fields.String(required=True)
    units = fields.Integer(required=True)
    shift = fields.Float(required=True, metadata={"description": "In Mahalanobis units."})
    distribution = fields.Dict(required=True)
    one_at_a_time = fields.Dict(required=True, allow_none=True)
    operating_characteristic = fields.List(fields.Dict(), required=True, allow_none=True)


PLAN_EXAMPLE = {"specification": SPECIFICATION_EXAMPLE, "units": 12, "shift": {"iron": 9.0}, "power": 0.9}
