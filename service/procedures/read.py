"""Read records, batches, specifications and bundles; every answer is made from verified bytes."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from typing import Any

from service.domain.actor import Actor
from service.errors import NotFoundError, NotPermittedError
from service.procedures.site import Site
from service.signing.envelope import Payload, open_envelope
from service.storage.store import Filters, RecordRow, VersionRow, View
from service.verification import BUNDLE_FORMAT

READERS = ("auditor", "reviewer", "author", "approver")
"""Roles that may read every decision; a submitter reads its own."""


def decision(site: Site, actor: Actor, record_id: str) -> Payload:
    """Return a decision record, verified.

    Raises
    ------
    NotFoundError
        Where there is none, or it is not for this actor to see.
    """
    with site.store.reading() as view:
        row = _visible(view, actor, record_id)
    return open_envelope(row.envelope, site.trusted)


def bundle(site: Site, actor: Actor, record_id: str) -> dict[str, Any]:
    """Return everything that verifying one decision needs, but the trusted key.

    Raises
    ------
    NotFoundError
        As `decision`.
    """
    with site.store.reading() as view:
        row = _visible(view, actor, record_id)
        documents: dict[str, Any] = {
            "format": BUNDLE_FORMAT,
            "decision": row.envelope,
            "batch": json.loads(view.batch_body(row.id)),
        }
        if row.specification_version is not None:
            code, version = str(row.specification_code), row.specification_version
            drafted, approved, *_ = view.version_history(code, version)
            documents |= {"specification_drafted": drafted, "specification_approved": approved}
    return documents


def decisions(site: Site, actor: Actor, filters: Filters) -> tuple[list[Mapping[str, Any]], int | None]:
    """Return one page of decisions, newest first, and the cursor of the next page.

    Parameters
    ----------
    site : Site
        The service.
    actor : Actor
        A reader, who sees all; or a submitter, who sees its own.
    filters : Filters
        What to look for, and how many to return.
    """
    with site.store.reading() as view:
        rows = view.records(filters.of_actor(None if _sees_all(actor) else actor.subject))
    more = len(rows) > filters.limit
    rows = rows[: filters.limit]
    items = [_summary(open_envelope(row.envelope, site.trusted).document) for row in rows]
    return items, rows[-1].id if more else None


def versions(site: Site, code: str) -> list[VersionRow]:
    """Return every version of a specification, oldest first.

    Raises
    ------
    NotFoundError
        Where there is none.
    """
    with site.store.reading() as view:
        rows = view.versions(code)
    if not rows:
        raise NotFoundError(f"There is no specification {code!r}.")
    return rows


def specification(site: Site, code: str, version: int) -> tuple[VersionRow, list[Payload]]:
    """Return one version and its signed records, oldest first.

    Raises
    ------
    NotFoundError
        Where there is none.
    """
    for row in versions(site, code):
        if row.version == version:
            with site.store.reading() as view:
                envelopes = view.version_history(code, version)
            return row, [open_envelope(envelope, site.trusted) for envelope in envelopes]
    raise NotFoundError(f"There is no version {version} of a specification {code!r}.")


def _visible(view: View, actor: Actor, record_id: str) -> RecordRow:
    row = view.record(record_id)
    own = row is not None and row.actor == actor.subject
    if row is None or row.record_type != "decision" or not (own or _sees_all(actor)):
        raise NotFoundError(f"There is no decision {record_id!r} that {actor.subject} may read.")
    return row


def _sees_all(actor: Actor) -> bool:
    if not actor.roles & {*READERS, "submitter"}:
        raise NotPermittedError(f"Reading decisions needs one of the roles submitter, {', '.join(READERS)}.")
    return bool(actor.roles & set(READERS))


def _summary(document: Mapping[str, Any]) -> Mapping[str, Any]:
    """Return the members of a decision by which a list tells it from others."""
    members = ("record_id", "decided_at", "lot", "attempt", "outcome", "reasons", "specification", "batch")
    return {member: document[member] for member in members}


def present_state(row: VersionRow, rows: Sequence[VersionRow], at: str) -> str:
    """Return the state of a version at a time: approved ones give way to a later one once that is effective."""
    later = any(
        other.version > row.version and other.state == "approved" and (other.effective_at or at) <= at for other in rows
    )
    return "superseded" if row.state == "approved" and later else row.state
