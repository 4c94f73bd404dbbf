"""What is posted to be decided, and what comes back."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from marshmallow import INCLUDE, Schema, fields

from schemas.base import Shape
from schemas.batch import BATCH_EXAMPLE, BatchSchema
from schemas.specification import SpecificationReferenceSchema, SpecificationSchema


class NamedOrWhole(fields.Field[dict[str, Any]]):
    """A specification by code, or a whole one."""

    named = SpecificationReferenceSchema()
    whole = SpecificationSchema()
    OF_WHOLE = frozenset(SpecificationSchema().fields) - frozenset(SpecificationReferenceSchema().fields)

    def _deserialize(
        self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any
    ) -> dict[str, Any]:
        # Whole is also what misses a member, or has one misspelt: then its own faults are of use.
        whole = isinstance(value, Mapping) and not self.OF_WHOLE.isdisjoint(value)
        loaded: dict[str, Any] = (self.whole if whole else self.named).load(value)
        return loaded


class DecisionRequestSchema(Shape):
    """A batch, and the specification to judge it by."""

    batch = fields.Nested(BatchSchema, required=True)
    specification = NamedOrWhole(required=True)


class Open(Schema):
    """An answer: the members declared are there; more may come with later versions."""

    class Meta:
        """Options of marshmallow."""

        unknown = INCLUDE


class ReasonSchema(Open):
    """One reason for an outcome."""

    code = fields.String(required=True)
    text = fields.String(required=True)
    evidence = fields.String(required=True, metadata={"description": "JSON Pointer into the same record."})


class JudgedSpecificationSchema(Open):
    """The rule by which a batch was judged."""

    code = fields.String(required=True)
    version = fields.Integer(required=True, allow_none=True)
    digest = fields.String(required=True)


class JudgedBatchSchema(Open):
    """The batch that was judged."""

    batch_id = fields.String(required=True)
    digest = fields.String(required=True)
    n = fields.Integer(required=True)
    p = fields.Integer(required=True)


class EvaluationSchema(Open):
    """An outcome with every number behind it."""

    outcome = fields.String(required=True, metadata={"enum": ["accepted", "rejected", "held"]})
    reasons = fields.List(fields.Nested(ReasonSchema), required=True)
    lot = fields.String(required=True)
    specification = fields.Nested(JudgedSpecificationSchema, required=True)
    batch = fields.Nested(JudgedBatchSchema, required=True)
    test = fields.Dict(required=True, allow_none=True, metadata={"description": "The mean test; null where none was."})
    mean = fields.List(fields.Float(), required=True, allow_none=True)
    follow_up = fields.Dict(required=True, allow_none=True)
    screens = fields.List(fields.Dict(), required=True)
    power = fields.Dict(required=True, allow_none=True)
    assumptions = fields.List(fields.String(), required=True)
    cautions = fields.List(fields.String(), required=True)
    engine = fields.Dict(required=True)


class RecordSchema(EvaluationSchema):
    """A decision record with its envelope."""

    format = fields.String(required=True)
    record_type = fields.String(required=True)
    record_id = fields.String(required=True)
    decided_at = fields.String(required=True)
    issuer = fields.String(required=True)
    origin = fields.String(required=True)
    requested_by = fields.String(required=True)
    attempt = fields.Integer(required=True)
    envelope = fields.String(
        required=True, metadata={"description": "Compact JWS; its payload is exactly this record without this member."}
    )


class DecisionSummarySchema(Open):
    """A decision as a list shows it."""

    record_id = fields.String(required=True)
    decided_at = fields.String(required=True)
    lot = fields.String(required=True)
    attempt = fields.Integer(required=True)
    outcome = fields.String(required=True)
    reasons = fields.List(fields.Nested(ReasonSchema), required=True)
    specification = fields.Nested(JudgedSpecificationSchema, required=True)
    batch = fields.Nested(JudgedBatchSchema, required=True)


class DecisionPageSchema(Open):
    """One page of a list, newest first."""

    items = fields.List(fields.Nested(DecisionSummarySchema), required=True)
    next = fields.String(required=True, allow_none=True, metadata={"description": "Address of the next page."})


class EventSchema(Open):
    """Any other signed record, with its envelope."""

    format = fields.String(required=True)
    record_type = fields.String(required=True)
    record_id = fields.String(required=True)
    at = fields.String(required=True)
    envelope = fields.String(required=True)


class VersionSchema(Open):
    """A version of a specification, its present state and its signed records."""

    code = fields.String(required=True)
    version = fields.Integer(required=True)
    state = fields.String(required=True, metadata={"enum": ["draft", "approved", "superseded", "withdrawn"]})
    digest = fields.String(required=True)
    author = fields.String(required=True)
    effective_at = fields.String(required=True, allow_none=True)
    document = fields.Dict(required=True)
    records = fields.List(fields.Nested(EventSchema), required=True)


class VersionListSchema(Open):
    """Versions, oldest first."""

    items = fields.List(fields.Dict(), required=True)


class BundleSchema(Open):
    """Everything that verifying one decision needs, but the trusted key."""

    format = fields.String(required=True)
    decision = fields.String(required=True)
    batch = fields.Dict(required=True)


DECISION_EXAMPLE = {"batch": BATCH_EXAMPLE, "specification": {"code": "premix-small"}}
