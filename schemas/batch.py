"""A batch on the wire."""

from __future__ import annotations

from marshmallow import fields

from schemas.base import Shape
from schemas.fields import MAXIMUM_COLUMNS, MAXIMUM_ROWS, Matrix, Name, Sequence, Text, entries


class MeasuredCharacteristicSchema(Shape):
    """A column: what was measured, and in which unit of measurement."""

    name = Name(required=True, longest=100)
    measurement_unit = Name(required=True, longest=50)


class BatchSchema(Shape):
    """Measured values of the units of one lot, one row for each unit."""

    batch_id = Name(required=True, longest=100, metadata={"description": "The laboratory's name for this set of data."})
    lot = Name(required=True, longest=100, metadata={"description": "The lot that the units were taken from."})
    characteristics = fields.List(
        fields.Nested(MeasuredCharacteristicSchema), required=True, validate=entries(MAXIMUM_COLUMNS)
    )
    rows = Matrix(
        required=True,
        missing_allowed=True,
        metadata={"description": "n rows of p numbers, in the order of characteristics; null where missing."},
    )
    units = fields.List(Name(longest=100), validate=entries(MAXIMUM_ROWS), metadata={"description": "A label a row."})
    runs = fields.List(Name(longest=100), validate=entries(MAXIMUM_ROWS), metadata={"description": "A run a row."})
    sequence = Sequence(metadata={"description": "Order of measurement: a number or a time (RFC 3339) a row."})
    resubmission_of = Name(longest=100, metadata={"description": "Earlier batch_id of the same lot."})
    remarks = Text(longest=2000)


BATCH_EXAMPLE = {
    "batch_id": "PX-2601-1",
    "lot": "PX-2601",
    "characteristics": [
        {"name": "iron", "measurement_unit": "mg/kg"},
        {"name": "zinc", "measurement_unit": "mg/kg"},
    ],
    "rows": [[598.2, 447.9], [611.0, 455.3], [603.4, 452.8], [590.7, 444.1]],
}
