"""Verify one decision from its bundle alone: no database, no network, no clock.

The steps, in order; each raises its own message:

1. the bundle is of a known format;
2. the decision's envelope is signed by a trusted key, in its one spelling, over canonical bytes;
3. it is a decision record;
4. the specification is the one that the decision names: same code, version and digest, drafted and
   approved in signed records of the same log, approved by another person than its author, effective
   no later than the decision;
5. the batch is the one that the decision names, by its digest;
6. recomputed from batch and specification, every field agrees.

Keys are passed in.  A key that comes with the bundle is never trusted.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

from service.domain.batch import Batch
from service.domain.policy import POLICY_VERSION, evaluate
from service.domain.specification import Specification
from service.errors import Fault, RecomputationMismatchError, UnknownFormatError, VerificationError
from service.signing import canonical
from service.signing.envelope import TrustedKeys, open_envelope
from service.stats.null_laws import NullLaws

BUNDLE_FORMAT = "acceptance-bundle/1"

RELATIVE_TOLERANCE = 1e-9
"""Largest relative difference of two recomputed numbers: rounding of another processor or library."""

NOT_SHOWN = (
    "that no later record disposes of this decision",
    "that the record stands in the log, and that no record was removed from it",
    "that the batch is what the instrument gave",
)
"""What a bundle of one decision cannot show."""


@dataclass(frozen=True, slots=True)
class Verified:
    """What a bundle has been shown to hold.

    Parameters
    ----------
    decision : mapping
        The verified payload.
    shown : tuple of str
        One sentence for each thing that was checked and holds.
    not_shown : tuple of str
        What was not or cannot be checked.
    """

    decision: Mapping[str, Any]
    shown: tuple[str, ...]
    not_shown: tuple[str, ...]


def verify(bundle: object, trusted: TrustedKeys, null_laws: NullLaws) -> Verified:
    """Verify a bundle by the steps of this module.

    Parameters
    ----------
    bundle : object
        A parsed bundle.
    trusted : mapping
        Header segment to public key, from `service.signing.keys.trusted_keys`.
    null_laws : NullLaws
        Provider of exact null laws, for the recomputation.

    Returns
    -------
    Verified
        What holds.

    Raises
    ------
    UnknownFormatError
        Where format, key or decision rule is not known here: neither shown nor refuted.
    VerificationError
        Where something is refuted.
    """
    # Step 1
    if not isinstance(bundle, Mapping) or bundle.get("format") != BUNDLE_FORMAT:
        raise UnknownFormatError(f"The file is not a bundle of format {BUNDLE_FORMAT}.")
    # Steps 2 and 3
    decision = _payload(_text(bundle, "decision"), trusted, "decision")
    shown = [f"record {decision['record_id']} is signed by a trusted key and is in canonical form"]
    # Step 4
    document, sentence = _specification(bundle, decision, trusted)
    shown.append(sentence)
    # Step 5
    if canonical.digest(bundle.get("batch")) != decision["batch"]["digest"]:
        raise VerificationError("The batch in the bundle is not the one that was decided: its digest differs.")
    shown.append(f"the batch is the one decided, SHA-256 {decision['batch']['digest']}")
    # Step 6
    if decision["engine"]["decision_rule"] != POLICY_VERSION:
        other = decision["engine"]["decision_rule"]
        return Verified(decision, tuple(shown), (f"the numbers, made by decision rule {other!r}", *NOT_SHOWN))
    recompute(decision, bundle["batch"], document, null_laws)
    shown.append(f"recomputed, the outcome {decision['outcome']!r} and every number behind it agree")
    return Verified(decision, tuple(shown), NOT_SHOWN)


def recompute(
    decision: Mapping[str, Any], batch: Mapping[str, Any], specification: Mapping[str, Any], null_laws: NullLaws
) -> None:
    """Evaluate again, and compare field by field with what a decision record states.

    Raises
    ------
    RecomputationMismatchError
        With a fault for each field that differs by more than `RELATIVE_TOLERANCE`.
    """
    rule = Specification.from_dict(specification)
    registered = decision["specification"]["version"] is not None
    again = evaluate(Batch.from_dict(batch), rule, null_laws, registered=registered).to_dict()
    faults = [fault for member, value in again.items() for fault in differences(decision.get(member), value, member)]
    if faults:
        raise RecomputationMismatchError(f"Recomputed, {len(faults)} fields of the record differ.", faults)


def differences(recorded: object, recomputed: object, path: str) -> Iterator[Fault]:
    """Yield a fault for each place where two documents differ.

    Numbers agree within `RELATIVE_TOLERANCE` of the larger, or 1e-12 where both are that small.
    """
    if isinstance(recorded, Mapping) and isinstance(recomputed, Mapping):
        for key in sorted({*recorded, *recomputed}):
            yield from differences(recorded.get(key), recomputed.get(key), f"{path}/{key}")
    elif (
        isinstance(recorded, list | tuple) and isinstance(recomputed, list | tuple) and len(recorded) == len(recomputed)
    ):
        for i, (one, other) in enumerate(zip(recorded, recomputed, strict=True)):
            yield from differences(one, other, f"{path}/{i}")
    elif not _agree(recorded, recomputed):
        yield Fault(f"/{path}", f"The record says {recorded!r}; recomputed it is {recomputed!r}.", "differs")


def _agree(recorded: object, recomputed: object) -> bool:
    numbers = (int, float)
    if isinstance(recorded, numbers) and isinstance(recomputed, numbers):
        return math.isclose(recorded, recomputed, rel_tol=RELATIVE_TOLERANCE, abs_tol=1e-12)
    return recorded == recomputed


def _text(bundle: Mapping[str, Any], member: str) -> str:
    envelope = bundle.get(member)
    if not isinstance(envelope, str):
        raise VerificationError(f"The bundle has no {member} record.")
    return envelope


def _payload(envelope: str, trusted: TrustedKeys, record_type: str) -> Mapping[str, Any]:
    payload = open_envelope(envelope, trusted).document
    if payload.get("record_type") != record_type:
        raise VerificationError(f"A {payload.get('record_type')!r} record stands where a {record_type!r} one belongs.")
    return payload


def _specification(
    bundle: Mapping[str, Any], decision: Mapping[str, Any], trusted: TrustedKeys
) -> tuple[Mapping[str, Any], str]:
    """Return the document of the specification that a decision names, and what was shown of it."""
    named = decision["specification"]
    if named["version"] is None:
        document = named["document"]
        if canonical.digest(document) != named["digest"]:
            raise VerificationError("The specification inside the decision does not have the digest stated beside it.")
        return document, "the specification came with the batch; nobody approved it here"
    drafted = _payload(_text(bundle, "specification_drafted"), trusted, "specification-drafted")
    approved = _payload(_text(bundle, "specification_approved"), trusted, "specification-approved")
    _approval(decision, drafted, approved)
    by = f"drafted by {drafted['author']}, approved by {approved['approved_by']}"
    return drafted[
        "document"
    ], f"specification {named['code']} version {named['version']} was {by}, before the decision"


def _approval(decision: Mapping[str, Any], drafted: Mapping[str, Any], approved: Mapping[str, Any]) -> None:
    named = {member: decision["specification"][member] for member in ("code", "version", "digest")}
    for record in (drafted, approved):
        if record["origin"] != decision["origin"]:
            raise VerificationError(f"The {record['record_type']} record belongs to another log.")
        if {member: record["specification"][member] for member in named} != named:
            raise VerificationError(f"The {record['record_type']} record is of another specification or version.")
    if canonical.digest(drafted["document"]) != named["digest"]:
        raise VerificationError("The specification's document does not have the digest that was approved.")
    if approved["approved_by"] == drafted["author"]:
        raise VerificationError(f"{drafted['author']} approved their own specification.")
    if approved["effective_at"] > decision["decided_at"]:
        raise VerificationError("The specification was not yet effective when the decision was made.")
