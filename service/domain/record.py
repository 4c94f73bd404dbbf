"""What is signed, and nothing else: the documents of every record type."""

from __future__ import annotations

import platform
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from functools import cache
from typing import Any

import numpy as np
import scipy

import service
from service.domain.batch import Batch
from service.domain.policy import POLICY_VERSION, Evaluation
from service.domain.specification import Specification
from service.signing.envelope import FORMAT

STATEMENT = (
    "Decision support: release stays with the laboratory's responsible person, its validated procedures and local "
    "rules. The result relates only to the units tested. It is a test of the lot's mean vector, compared without "
    "rounding, and no guard band for measurement uncertainty is applied."
)


@dataclass(frozen=True, slots=True)
class Heading:
    """The members that every record begins with.

    Parameters
    ----------
    record_id : str
        UUID, version 7.
    at : str
        UTC, RFC 3339 with microseconds.
    issuer, origin : str
        Laboratory, and log that the record belongs to.
    actor : mapping
        Subject, role used, authentication.
    """

    record_id: str
    at: str
    issuer: str
    origin: str
    actor: Mapping[str, str]

    def members(self, record_type: str) -> dict[str, Any]:
        """Return the common members for a record of this type."""
        return {
            "format": FORMAT,
            "record_type": record_type,
            "record_id": self.record_id,
            "issuer": self.issuer,
            "origin": self.origin,
            "actor": dict(self.actor),
            "engine": engine(),
        }


def instant(at: datetime) -> str:
    """Return a UTC time as RFC 3339 text with microseconds and ``Z``."""
    return at.strftime("%Y-%m-%dT%H:%M:%S.%fZ")


@cache
def _engine() -> tuple[tuple[str, str], ...]:
    return (
        ("service", service.__version__),
        ("decision_rule", POLICY_VERSION),
        ("numpy", np.__version__),
        ("scipy", scipy.__version__),
        ("python", platform.python_version()),
    )


def engine() -> dict[str, str]:
    """Return the versions of everything that the numbers depend on."""
    return dict(_engine())


def subject_matter(batch: Batch, specification: Specification, version: int | None) -> dict[str, Any]:
    """Return what was judged and by which rule: the members shared by decisions and evaluations."""
    rule: dict[str, Any] = {"code": specification.code, "version": version, "digest": specification.digest}
    if version is None:
        rule["document"] = specification.document
    n, p = batch.rows.shape
    return {
        "lot": batch.lot,
        "specification": rule,
        "batch": {
            "batch_id": batch.batch_id,
            "digest": batch.digest,
            "n": n,
            "p": p,
            "characteristics": [
                {"name": name, "measurement_unit": unit}
                for name, unit in zip(specification.names, specification.measurement_units, strict=True)
            ],
        },
        "comparison": "absolute",
        "statement": STATEMENT,
    }


def decision(
    heading: Heading, judged: Mapping[str, Any], evaluation: Evaluation, *, attempt: int, received: Mapping[str, Any]
) -> dict[str, Any]:
    """Return the payload of a decision record.

    Parameters
    ----------
    heading : Heading
        Identity, time and actor.
    judged : mapping
        From `subject_matter`.
    evaluation : Evaluation
        Outcome, reasons and every number behind them.
    attempt : int
        How many decisions this lot now has under this specification.
    received : mapping
        Digest, length and media type of the body as it came.
    """
    return {
        **heading.members("decision"),
        "decided_at": heading.at,
        "requested_by": heading.actor["subject"],
        **judged,
        "attempt": attempt,
        "received": dict(received),
        **evaluation.to_dict(),
    }


def event(heading: Heading, record_type: str, **members: object) -> dict[str, Any]:
    """Return the payload of any record that is not a decision."""
    return {**heading.members(record_type), "at": heading.at, **members}


def signature(heading: Heading, meaning: str, components: Sequence[str]) -> dict[str, Any]:
    """Return the block by which a person signs: name, meaning, time, and what proved the person's identity."""
    return {
        "printed_name": heading.actor["subject"],
        "meaning": meaning,
        "executed_at": heading.at,
        "components": list(components),
    }
