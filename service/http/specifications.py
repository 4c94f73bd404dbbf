"""Draft, approve, withdraw and read specifications."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from flask import Response, request

from schemas.decision import EventSchema, VersionListSchema, VersionSchema
from schemas.specification import SPECIFICATION_EXAMPLE, ApprovalSchema, SpecificationSchema, WithdrawalSchema
from service.domain.actor import Actor
from service.domain.record import instant
from service.http import answers
from service.http.routing import Routes
from service.procedures import read, specifications
from service.procedures.site import Site
from service.procedures.specifications import Step
from service.signing.envelope import Payload, open_envelope
from service.storage.store import Received, VersionRow

routes = Routes("Specifications")

_READERS = ("submitter", "author", "approver", "reviewer", "auditor")
_VERSION = "/v1/specifications/<code>/versions/<int:version>"
_IF_MATCH = {"If-Match": "ETag of the version as you saw it; the step is refused where it changed."}


@routes.route(
    "/v1/specifications",
    "POST",
    roles=("author",),
    body=SpecificationSchema(),
    example=SPECIFICATION_EXAMPLE,
    answers={201: EventSchema()},
    problems=(400, 401, 403, 413, 415, 422, 503),
)
def draft_specification(site: Site, actor: Actor, body: dict[str, Any], received: Received) -> Response:
    """Draft a new version of a specification.

    Versions are numbered from 1 under their code. A draft decides nothing until another person approves it.
    """
    return _step_answer(site, specifications.draft(site, actor, body), 201)


@routes.route(
    _VERSION + "/approval",
    "POST",
    roles=("approver",),
    body=ApprovalSchema(),
    example={"reason": "Reference data reviewed"},
    answers={201: EventSchema()},
    problems=(400, 401, 403, 404, 409, 412, 413, 415, 422, 503),
    headers=_IF_MATCH,
)
def approve_specification(
    site: Site, actor: Actor, code: str, version: int, *, body: dict[str, Any], received: Received
) -> Response:
    """Approve a draft, so that it governs from its effective time.

    The author of a version cannot approve it, whatever token is used.
    """
    step = Step(code, version, _if_match(), body["reason"], body.get("effective_at"))
    return _step_answer(site, specifications.approve(site, actor, step), 201)


@routes.route(
    _VERSION + "/withdrawal",
    "POST",
    roles=("approver", "author"),
    body=WithdrawalSchema(),
    example={"reason": "Method changed"},
    answers={201: EventSchema()},
    problems=(400, 401, 403, 404, 409, 412, 413, 415, 422, 503),
    headers=_IF_MATCH,
)
def withdraw_specification(
    site: Site, actor: Actor, code: str, version: int, *, body: dict[str, Any], received: Received
) -> Response:
    """Withdraw a version, so that it decides nothing any more.

    An approver withdraws any version; an author their own draft.
    """
    step = Step(code, version, _if_match(), body["reason"])
    return _step_answer(site, specifications.withdraw(site, actor, step), 201)


@routes.route("/v1/specifications", roles=_READERS, answers={200: VersionListSchema()}, problems=(400, 401, 403, 503))
def list_specifications(site: Site, actor: Actor) -> Response:
    """List the codes of all specifications."""
    with site.store.reading() as view:
        return answers.plain({"items": [{"code": code} for code in view.specification_codes()]})


@routes.route(
    "/v1/specifications/<code>", roles=_READERS, answers={200: VersionListSchema()}, problems=(400, 401, 403, 404, 503)
)
def list_versions(site: Site, actor: Actor, code: str) -> Response:
    """List the versions of a specification, oldest first, with their states."""
    rows = read.versions(site, code)
    return answers.plain({"items": [_described(site, row, rows) for row in rows]})


@routes.route(_VERSION, roles=_READERS, answers={200: VersionSchema()}, problems=(400, 401, 403, 404, 503))
def read_version(site: Site, actor: Actor, code: str, version: int) -> Response:
    """Read a version: its document, its present state, and every signed record of its life."""
    row, payloads = read.specification(site, code, version)
    records = [payload.document | {"envelope": payload.envelope} for payload in payloads]
    described = _described(site, row, read.versions(site, code))
    answer = answers.plain({**described, "document": payloads[0].document["document"], "records": records})
    answer.set_etag(row.digest)
    return answer


def _described(site: Site, row: VersionRow, rows: Sequence[VersionRow]) -> dict[str, Any]:
    state = read.present_state(row, rows, instant(site.clock()))
    members = {"code": row.code, "version": row.version, "state": state, "digest": row.digest, "author": row.author}
    return {**members, "effective_at": row.effective_at}


def _step_answer(site: Site, envelope: str, status: int) -> Response:
    payload: Payload = open_envelope(envelope, site.trusted)
    answer = answers.record(payload, status)
    named = payload.document["specification"]
    answer.headers["Location"] = f"/v1/specifications/{named['code']}/versions/{named['version']}"
    # The tag of the version itself, for the next step's If-Match.
    answer.set_etag(named["digest"])
    return answer


def _if_match() -> str | None:
    """Return the one tag of If-Match; none where it is absent or matches anything."""
    tags = request.if_match
    if not tags or tags.star_tag:
        return None
    return next(iter(tags.as_set()), "")
