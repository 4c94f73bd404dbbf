"""Decide a batch: judge it, count the attempt, sign, keep, answer.  One transaction, one record."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from service.domain import record
from service.domain.actor import Actor
from service.errors import Fault, IdempotencyConflictError, SpecificationStateError
from service.procedures.evaluate import Judgement, judge
from service.procedures.site import Site, require
from service.signing import canonical
from service.signing.envelope import sign
from service.storage.store import Columns, Received, Transaction


@dataclass(frozen=True, slots=True)
class Answer:
    """What a submitter gets back.

    Parameters
    ----------
    envelope : str
        The signed record, as stored.
    replayed : bool
        Whether it was made by an earlier request with the same Idempotency-Key.
    """

    envelope: str
    replayed: bool


def decide_batch(
    site: Site, actor: Actor, body: Mapping[str, Any], received: Received, *, idempotency_key: str | None = None
) -> Answer:
    """Decide the batch in `body` and keep the signed record.

    Parameters
    ----------
    site : Site
        The service.
    actor : Actor
        A submitter.
    body : mapping
        ``batch`` and ``specification``, of the right shape.
    received : Received
        The body as it came: bytes, digest, media type.
    idempotency_key : str, optional
        The same key and body give the same record again.

    Returns
    -------
    Answer
        The signed record, durable.

    Raises
    ------
    ServiceError
        As `judge`; nothing is stored then.
    IdempotencyConflictError
        Where the key was used with another body.
    """
    require(actor, "submitter")
    key = None if idempotency_key is None else _key_digest(actor, idempotency_key)
    if key is not None:
        with site.store.reading() as view:
            earlier = _replay(view.replay(key), received)
        if earlier is not None:
            return Answer(earlier, replayed=True)
    judgement = judge(site, body)
    with site.store.transaction() as tx:
        # Two requests with one key may both come this far; the second finds the first's record here.
        earlier = None if key is None else _replay(tx.replay(key), received)
        if earlier is not None:
            return Answer(earlier, replayed=True)
        return Answer(_record(site, tx, actor, judgement, received=received, key=key), replayed=False)


def _record(
    site: Site, tx: Transaction, actor: Actor, judgement: Judgement, *, received: Received, key: str | None
) -> str:
    """Compose, sign and add the record, with its number of attempts counted under the same lock."""
    heading = site.heading(actor, "submitter")
    _still_governs(tx, judgement, heading.at)
    batch, rule, evaluation = judgement.batch, judgement.specification, judgement.evaluation
    attempt = tx.attempts(batch.lot, rule.code) + 1
    what = {"digest": received.digest, "length": len(received.body), "media_type": received.media_type}
    payload = record.decision(heading, judgement.subject_matter(), evaluation, attempt=attempt, received=what)
    envelope = sign(payload, site.signer)
    columns = Columns(
        record_id=heading.record_id,
        record_type="decision",
        recorded_at=heading.at,
        actor=actor.subject,
        lot=batch.lot,
        specification_code=rule.code,
        specification_version=judgement.version,
        outcome=evaluation.outcome,
        attempt=attempt,
        batch_id=batch.batch_id,
        reasons=tuple(dict.fromkeys(reason.code for reason in evaluation.reasons)),
    )
    kept = tx.add_record(envelope, columns)
    tx.add_received(kept, received)
    tx.add_batch(kept, batch.digest, canonical.encode(batch.document))
    if key is not None:
        tx.add_idempotency(key, received.digest, kept)
    return envelope


def _still_governs(tx: Transaction, judgement: Judgement, at: str) -> None:
    """Refuse where the version judged by was withdrawn or superseded while the batch was being judged."""
    if judgement.version is None:
        return
    code = judgement.specification.code
    row = tx.governing_version(code, at)
    if row is None or row.version != judgement.version:
        text = f"Version {judgement.version} of {code!r} stopped governing while the batch was judged. Post it again."
        raise SpecificationStateError(text, [Fault("/specification/code", text, SpecificationStateError.code)])


def _key_digest(actor: Actor, idempotency_key: str) -> str:
    return hashlib.sha256(f"{actor.subject}\n{idempotency_key}".encode()).hexdigest()


def _replay(found: tuple[str, str] | None, received: Received) -> str | None:
    """Return the envelope kept under a key, or None; refuse the key with another body."""
    if found is None:
        return None
    body_digest, envelope = found
    if body_digest != received.digest:
        text = "This Idempotency-Key was used with another body. Use a new key for a new request."
        raise IdempotencyConflictError(text)
    return envelope
