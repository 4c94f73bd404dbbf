"""What an error looks like (RFC 9457)."""

from __future__ import annotations

from marshmallow import fields

from schemas.decision import Open


class FaultSchema(Open):
    """One thing that is wrong."""

    pointer = fields.String(required=True, metadata={"description": "JSON Pointer into the body that was sent."})
    detail = fields.String(required=True)
    code = fields.String(required=True)


class ProblemSchema(Open):
    """A problem: what is wrong, where, and what to do."""

    type = fields.String(required=True)
    title = fields.String(required=True)
    status = fields.Integer(required=True)
    detail = fields.String(required=True)
    code = fields.String(required=True)
    errors = fields.List(fields.Nested(FaultSchema), required=True)
