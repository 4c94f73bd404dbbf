"""What goes into the store and what comes out of it: plain values."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, replace


@dataclass(frozen=True, slots=True)
class Columns:
    """What a record is found by.  Copied out of its payload, never an answer themselves."""

    record_id: str
    record_type: str
    recorded_at: str
    actor: str
    lot: str | None = None
    specification_code: str | None = None
    specification_version: int | None = None
    outcome: str | None = None
    attempt: int | None = None
    batch_id: str | None = None
    reasons: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class Received:
    """A request body as it came."""

    body: bytes
    media_type: str

    @property
    def digest(self) -> str:
        """SHA-256 of the bytes, in hexadecimal."""
        return hashlib.sha256(self.body).hexdigest()


@dataclass(frozen=True, slots=True)
class RecordRow:
    """A record's envelope, with the columns that its readers need before they open it."""

    id: int
    record_id: str
    record_type: str
    envelope: str
    actor: str
    specification_code: str | None
    specification_version: int | None


@dataclass(frozen=True, slots=True)
class VersionRow:
    """One version of a specification and its present state: ``draft``, ``approved`` or ``withdrawn``."""

    code: str
    version: int
    digest: str
    author: str
    record: int
    state: str
    effective_at: str | None


@dataclass(frozen=True, slots=True)
class TokenRow:
    """A token: who it speaks for and what it may do; never its secret."""

    token_id: str
    subject: str
    secret_sha256: str
    roles: tuple[str, ...]
    issued_at: str
    expires_at: str | None
    revoked_at: str | None


@dataclass(frozen=True, slots=True)
class Filters:
    """Which decisions to list, newest first.

    Parameters
    ----------
    limit : int
        Rows on a page.
    before : int or None
        Cursor: only records older than the one with this row id.
    """

    limit: int = 50
    before: int | None = None
    lot: str | None = None
    specification: str | None = None
    outcome: str | None = None
    reason: str | None = None
    decided_from: str | None = None
    decided_to: str | None = None
    actor: str | None = None

    def of_actor(self, actor: str | None) -> Filters:
        """Return the same filters for the records of one actor only, or of all."""
        return replace(self, actor=actor)
