"""Draft, approve and withdraw a specification; each step is a signed record."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from service.domain import record
from service.domain.actor import Actor
from service.domain.record import Heading
from service.domain.specification import Specification
from service.errors import (
    NotFoundError,
    NotPermittedError,
    PreconditionError,
    SelfApprovalError,
    SpecificationStateError,
)
from service.procedures.site import Site
from service.signing.envelope import sign
from service.storage.store import Columns, Transaction, VersionRow, View


@dataclass(frozen=True, slots=True)
class Step:
    """A step asked for in the life of one version.

    Parameters
    ----------
    code : str
        Specification.
    version : int
        Its version.
    expected_digest : str or None
        Digest that the caller last saw (``If-Match``).
    reason : str
        Why, in the caller's words.
    effective_at : str or None
        Approval: from when the version governs; None for at once.
    """

    code: str
    version: int
    expected_digest: str | None
    reason: str
    effective_at: str | None = None


def draft(site: Site, actor: Actor, document: Mapping[str, Any]) -> str:
    """Keep a new version of a specification as a draft.

    Parameters
    ----------
    site : Site
        The service.
    actor : Actor
        An author.
    document : mapping
        A specification of the right shape.

    Returns
    -------
    str
        The signed ``specification-drafted`` record.

    Raises
    ------
    InvalidContentError
        Where the specification has no sound meaning.
    """
    heading = site.heading(actor, "author")
    specification = Specification.from_dict(document)
    with site.store.transaction() as tx:
        version = tx.latest_version(specification.code) + 1
        payload = record.event(
            heading,
            "specification-drafted",
            specification=_named(specification.code, version, specification.digest),
            author=actor.subject,
            document=document,
        )
        envelope = sign(payload, site.signer)
        kept = tx.add_record(envelope, _columns(heading, "specification-drafted", specification.code, version))
        row = VersionRow(specification.code, version, specification.digest, actor.subject, kept, "draft", None)
        tx.add_specification_version(row)
        return envelope


def approve(site: Site, actor: Actor, step: Step) -> str:
    """Approve a draft, so that it governs from its effective time.

    Returns
    -------
    str
        The signed ``specification-approved`` record.

    Raises
    ------
    SelfApprovalError
        Where the approver is the author.
    SpecificationStateError
        Where the version is not a draft, or the effective time has passed.
    NotFoundError, PreconditionError
        Where there is no such version, or it is not the one that the caller saw.
    """
    heading = site.heading(actor, "approver")
    effective_at = step.effective_at or heading.at
    if effective_at < heading.at:
        text = f"The effective time {effective_at} has passed. Leave it out to approve from now on."
        raise SpecificationStateError(text).at("/effective_at")
    with site.store.transaction() as tx:
        row = _version(tx, step)
        if actor.subject == row.author:
            raise SelfApprovalError(
                f"{actor.subject} wrote version {row.version} of {row.code!r}; another must approve."
            )
        _require_state(row, "draft")
        payload = record.event(
            heading,
            "specification-approved",
            specification=_named(row.code, row.version, row.digest),
            approved_by=actor.subject,
            effective_at=effective_at,
            why=step.reason,
            signature=record.signature(heading, "approval", ["token"]),
        )
        return _event(site, tx, heading, row, payload)


def withdraw(site: Site, actor: Actor, step: Step) -> str:
    """Withdraw an approved version, or one's own draft.

    Returns
    -------
    str
        The signed ``specification-withdrawn`` record.

    Raises
    ------
    NotPermittedError
        Where the actor is neither an approver nor the author of the draft.
    SpecificationStateError
        Where the version is withdrawn already.
    NotFoundError, PreconditionError
        As `approve`.
    """
    with site.store.transaction() as tx:
        row = _version(tx, step)
        _require_state(row, "draft", "approved")
        own_draft = row.state == "draft" and row.author == actor.subject and "author" in actor.roles
        if row.state == "draft" and not own_draft and "approver" not in actor.roles:
            raise NotPermittedError("A draft is withdrawn by its author or by an approver.")
        heading = site.heading(actor, "author" if own_draft else "approver")
        payload = record.event(
            heading,
            "specification-withdrawn",
            specification=_named(row.code, row.version, row.digest),
            withdrawn_by=actor.subject,
            why=step.reason,
            signature=record.signature(heading, "responsibility", ["token"]),
        )
        return _event(site, tx, heading, row, payload)


def _event(site: Site, tx: Transaction, heading: Heading, row: VersionRow, payload: Mapping[str, Any]) -> str:
    record_type = str(payload["record_type"])
    envelope = sign(payload, site.signer)
    kept = tx.add_record(envelope, _columns(heading, record_type, row.code, row.version))
    state = record_type.removeprefix("specification-")
    after = replace(row, record=kept, state=state, effective_at=payload.get("effective_at"))
    tx.add_specification_event(after, heading.actor["subject"])
    return envelope


def _version(view: View, step: Step) -> VersionRow:
    for row in view.versions(step.code):
        if row.version == step.version:
            if step.expected_digest not in (None, row.digest):
                raise PreconditionError("The version is not the one that you saw: its digest differs from If-Match.")
            return row
    raise NotFoundError(f"There is no version {step.version} of a specification {step.code!r}.")


def _require_state(row: VersionRow, *states: str) -> None:
    if row.state not in states:
        text = (
            f"Version {row.version} of {row.code!r} is {row.state}; this step takes one that is {' or '.join(states)}."
        )
        raise SpecificationStateError(text)


def _named(code: str, version: int, digest: str) -> dict[str, Any]:
    return {"code": code, "version": version, "digest": digest}


def _columns(heading: Heading, record_type: str, code: str, version: int) -> Columns:
    return Columns(
        record_id=heading.record_id,
        record_type=record_type,
        recorded_at=heading.at,
        actor=heading.actor["subject"],
        specification_code=code,
        specification_version=version,
    )
