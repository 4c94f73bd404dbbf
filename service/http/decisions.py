"""Decide, evaluate, read back."""

from __future__ import annotations

from typing import Any
from urllib.parse import urlencode

from flask import Response, request

from schemas.decision import (
    DECISION_EXAMPLE,
    BundleSchema,
    DecisionPageSchema,
    DecisionRequestSchema,
    EvaluationSchema,
    RecordSchema,
)
from schemas.query import DecisionQuerySchema
from service.domain.actor import Actor
from service.errors import MalformedRequestError
from service.http import answers
from service.http.guards import JSON, negotiate
from service.http.routing import Routes
from service.procedures import decide, read
from service.procedures.evaluate import evaluate_batch
from service.procedures.site import Site
from service.signing.envelope import open_envelope
from service.storage.store import Filters, Received

routes = Routes("Decisions")

_READERS = ("submitter", "auditor", "reviewer", "author", "approver")


@routes.route(
    "/v1/decisions",
    "POST",
    roles=("submitter",),
    body=DecisionRequestSchema(),
    example=DECISION_EXAMPLE,
    answers={201: RecordSchema()},
    problems=(400, 401, 403, 404, 409, 413, 415, 422, 503),
    headers={"Idempotency-Key": "Up to 255 visible characters; the same key and body give the same record again."},
)
def decide_batch(site: Site, actor: Actor, body: dict[str, Any], received: Received) -> Response:
    """Decide a batch and keep the signed record.

    The answer is the record, durable before it is sent. Keep its envelope: it is your receipt.
    """
    key = _idempotency_key()
    answer = decide.decide_batch(site, actor, body, received, idempotency_key=key)
    payload = open_envelope(answer.envelope, site.trusted)
    made = answers.record(payload, 201)
    made.headers["Location"] = f"/v1/decisions/{payload.document['record_id']}"
    if answer.replayed:
        made.headers["Idempotent-Replayed"] = "true"
    return made


@routes.route(
    "/v1/evaluations",
    "POST",
    roles=("submitter", "author"),
    body=DecisionRequestSchema(),
    example=DECISION_EXAMPLE,
    answers={200: EvaluationSchema()},
    problems=(400, 401, 403, 404, 409, 413, 415, 422, 503),
)
def evaluate_only(site: Site, actor: Actor, body: dict[str, Any], received: Received) -> Response:
    """Compute what a decision would say, and keep nothing."""
    return answers.plain(evaluate_batch(site, actor, body))


@routes.route(
    "/v1/decisions",
    roles=_READERS,
    query=DecisionQuerySchema(),
    answers={200: DecisionPageSchema()},
    problems=(400, 401, 403, 503),
)
def list_decisions(site: Site, actor: Actor, query: dict[str, Any]) -> Response:
    """List decisions, newest first.

    A submitter sees its own; the other roles see all. Follow `next` for the page after.
    """
    chosen = {name: value for name, value in query.items() if name != "cursor"}
    items, cursor = read.decisions(site, actor, Filters(**chosen, before=query.get("cursor")))
    following = None
    if cursor is not None:
        following = f"{request.path}?{urlencode({**request.args.to_dict(), 'cursor': cursor})}"
    answer = answers.plain({"items": items, "next": following})
    if following:
        answer.headers["Link"] = f'<{following}>; rel="next"'
    return answer


@routes.route(
    "/v1/decisions/<record_id>",
    roles=_READERS,
    answers={200: RecordSchema()},
    other_types=(answers.JOSE,),
    problems=(400, 401, 403, 404, 406, 503),
)
def read_decision(site: Site, actor: Actor, record_id: str) -> Response:
    """Read a decision record.

    As application/json: the record with its envelope. As application/jose: the envelope alone.
    """
    media_type = negotiate(JSON, answers.JOSE)
    return answers.record(read.decision(site, actor, record_id), media_type=media_type)


@routes.route(
    "/v1/decisions/<record_id>/bundle",
    roles=_READERS,
    answers={200: BundleSchema()},
    problems=(400, 401, 403, 404, 503),
)
def read_bundle(site: Site, actor: Actor, record_id: str) -> Response:
    """Take everything that `acceptance verify` needs, but the trusted key."""
    answer = answers.plain(read.bundle(site, actor, record_id))
    answer.headers["Content-Disposition"] = f'attachment; filename="{record_id}.bundle"'
    return answer


def _idempotency_key() -> str | None:
    key = request.headers.get("Idempotency-Key")
    if key is not None and not (0 < len(key) <= 255 and key.isascii() and key.isprintable()):
        raise MalformedRequestError("An Idempotency-Key has 1 to 255 visible ASCII characters.")
    return key
