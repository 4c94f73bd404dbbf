"""Judge a batch: read it, find its specification, compute.  Leaves no record."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

from service.domain import record
from service.domain.actor import Actor
from service.domain.batch import Batch
from service.domain.faults import refuse_any
from service.domain.policy import Evaluation, evaluate
from service.domain.record import instant
from service.domain.specification import Specification
from service.errors import Fault, InvalidContentError, NotFoundError, SpecificationStateError, VerificationError
from service.procedures.site import Site, require, under
from service.signing.envelope import open_envelope
from service.storage.store import VersionRow, View


@dataclass(frozen=True, slots=True)
class Judgement:
    """A batch judged by one version of a specification.

    Parameters
    ----------
    batch : Batch
        What was measured.
    specification : Specification
        The rule.
    version : int or None
        Version of the rule; None where it came with the batch.
    evaluation : Evaluation
        Outcome and numbers.
    """

    batch: Batch
    specification: Specification
    version: int | None
    evaluation: Evaluation

    def subject_matter(self) -> dict[str, Any]:
        """Return the members of a record that say what was judged."""
        return record.subject_matter(self.batch, self.specification, self.version)


def evaluate_batch(site: Site, actor: Actor, body: Mapping[str, Any]) -> dict[str, Any]:
    """Return what a decision would say, without making one.

    Parameters
    ----------
    site : Site
        The service.
    actor : Actor
        A submitter or author.
    body : mapping
        ``batch`` and ``specification``, of the right shape.

    Raises
    ------
    ServiceError
        As `judge`.
    """
    require(actor, "submitter", "author")
    judged = judge(site, body)
    return {**judged.subject_matter(), **judged.evaluation.to_dict(), "engine": record.engine()}


def judge(site: Site, body: Mapping[str, Any]) -> Judgement:
    """Judge the batch in `body` by the specification in it.

    Raises
    ------
    NotFoundError
        Where no such specification, or no approved version, exists.
    SpecificationStateError
        Where the version asked for does not govern.
    InvalidContentError
        Where batch or specification has no sound meaning, with every fault of both.
    TooFewUnitsError, NotPositiveDefiniteError, IllConditionedError
        Where the test cannot be made of this batch.
    """
    faults: list[Fault] = []
    found = _gathered(faults, "/specification", lambda: find_specification(site, body["specification"]))
    batch = _gathered(faults, "/batch", lambda: Batch.from_dict(body["batch"]))
    if found is None or batch is None:
        refuse_any(faults, "request")
        raise AssertionError("a document without faults was made")
    specification, version = found
    with under("/batch"):
        evaluation = evaluate(batch, specification, site.null_laws, registered=version is not None)
    return Judgement(batch, specification, version, evaluation)


def find_specification(site: Site, wanted: Mapping[str, Any]) -> tuple[Specification, int | None]:
    """Return the specification that a body names or brings, and its version.

    Parameters
    ----------
    site : Site
        The service.
    wanted : mapping
        ``code`` and perhaps ``version``, or a whole specification.

    Returns
    -------
    specification : Specification
        Factored; kept for the next batch.
    version : int or None
        None where the specification came whole.
    """
    if "characteristics" in wanted:
        if not site.inline_specifications:
            text = "This site does not judge by a specification that comes with the batch; name a registered one."
            raise InvalidContentError(text, [Fault("", text, "inline-specification-refused")])
        return Specification.from_dict(wanted), None
    with site.store.reading() as view:
        row = governing_version(view, wanted["code"], wanted.get("version"), instant(site.clock()))
        return registered_specification(site, view, row), row.version


def any_specification(site: Site, wanted: Mapping[str, Any]) -> tuple[Specification, int | None]:
    """Return a specification that is to be studied, not decided by: whole, or any version, drafts too.

    Raises
    ------
    NotFoundError
        Where there is no such version.
    """
    if "characteristics" in wanted:
        return Specification.from_dict(wanted), None
    with site.store.reading() as view:
        rows = [row for row in view.versions(wanted["code"]) if wanted.get("version") in (None, row.version)]
        if not rows:
            raise NotFoundError(f"There is no such version of a specification {wanted['code']!r}.").at("/code")
        return registered_specification(site, view, rows[-1]), rows[-1].version


def governing_version(view: View, code: str, version: int | None, at: str) -> VersionRow:
    """Return the approved version of a specification that governs at a time.

    Raises
    ------
    NotFoundError
        Where there is no specification `code`, or no such version.
    SpecificationStateError
        Where none is approved and effective, or another version governs than the one asked for.
    """
    if not view.versions(code):
        raise NotFoundError(f"There is no specification {code!r}.").at("/code")
    row = view.governing_version(code, at)
    if row is None:
        text = f"No version of {code!r} is approved and effective. An approver can approve its draft."
        raise SpecificationStateError(text).at("/code")
    if version not in (None, row.version):
        text = f"Version {version} of {code!r} does not govern; version {row.version} does. Leave the version out."
        raise SpecificationStateError(text).at("/version")
    return row


def registered_specification(site: Site, view: View, row: VersionRow) -> Specification:
    """Return a registered version, factored, from its signed record.

    Raises
    ------
    VerificationError
        Where the record is not what the row says.
    """
    known = site.factored.get(row.digest)
    if known is None:
        envelope = view.envelope(row.record)
        known = Specification.from_dict(open_envelope(envelope, site.trusted).document["document"])
        if known.digest != row.digest:
            raise VerificationError(f"The record of {row.code} version {row.version} is not the one registered.")
        site.factored[row.digest] = known
    return known


T = TypeVar("T")


def _gathered(faults: list[Fault], prefix: str, make: Callable[[], T]) -> T | None:
    """Return what `make` makes, or add its faults to those found already."""
    try:
        with under(prefix):
            return make()
    except InvalidContentError as error:
        faults += error.faults
        return None
