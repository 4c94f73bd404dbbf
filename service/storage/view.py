"""Questions to the store, inside one transaction."""

from __future__ import annotations

import gzip
import json
from collections.abc import Sequence
from typing import Any

from sqlalchemy import ColumnElement, Connection, Row, Select, and_, exists, func, select

from service.storage import tables as t
from service.storage.rows import Filters, RecordRow, TokenRow, VersionRow

_RECORD_COLUMNS = (
    t.record.c.id,
    t.record.c.record_id,
    t.record.c.record_type,
    t.record.c.envelope,
    t.record.c.actor,
    t.record.c.specification_code,
    t.record.c.specification_version,
)


class View:
    """A consistent view of the store.

    Parameters
    ----------
    connection : Connection
        In a transaction.
    """

    __slots__ = ("_connection",)

    def __init__(self, connection: Connection) -> None:
        self._connection = connection

    def has_records(self) -> bool:
        """Whether anything was ever recorded."""
        return self._one(select(t.record.c.id).limit(1)) is not None

    def record(self, record_id: str) -> RecordRow | None:
        """Return the record of this identifier."""
        row = self._one(select(*_RECORD_COLUMNS).where(t.record.c.record_id == record_id))
        return None if row is None else _record(row)

    def records(self, filters: Filters) -> list[RecordRow]:
        """Return decisions that the filters let through, newest first, one more than the limit where there are more."""
        c = t.record.c
        equal = {
            c.lot: filters.lot,
            c.specification_code: filters.specification,
            c.outcome: filters.outcome,
            c.actor: filters.actor,
        }
        conditions = [column == value for column, value in equal.items() if value is not None]
        if filters.before is not None:
            conditions.append(c.id < filters.before)
        if filters.decided_from is not None:
            conditions.append(c.recorded_at >= filters.decided_from)
        if filters.decided_to is not None:
            conditions.append(c.recorded_at < filters.decided_to)
        if filters.reason is not None:
            conditions.append(_has_reason(filters.reason))
        query = select(*_RECORD_COLUMNS).where(c.record_type == "decision", *conditions)
        rows = self._connection.execute(query.order_by(c.id.desc()).limit(filters.limit + 1))
        return [_record(row) for row in rows]

    def attempts(self, lot: str, code: str) -> int:
        """Return how many decisions a lot has under a specification."""
        c = t.record.c
        query = select(func.count()).where(c.lot == lot, c.specification_code == code, c.record_type == "decision")
        return int(self._connection.execute(query).scalar_one())

    def batch_body(self, record: int) -> bytes:
        """Return the canonical bytes of the batch that a record decided."""
        return gzip.decompress(self._connection.execute(_of(t.batch, record)).scalar_one())

    def received_body(self, record: int) -> bytes:
        """Return the request body that a record answered, as it came."""
        return gzip.decompress(self._connection.execute(_of(t.received, record)).scalar_one())

    def replay(self, key_digest: str) -> tuple[str, str] | None:
        """Return body digest and envelope kept under an idempotency key."""
        query = (
            select(t.idempotency.c.body_digest, t.record.c.envelope)
            .join(t.record, t.record.c.id == t.idempotency.c.record)
            .where(t.idempotency.c.key_digest == key_digest)
        )
        row = self._one(query)
        return None if row is None else (row.body_digest, row.envelope)

    # --- specifications

    def latest_version(self, code: str) -> int:
        """Return the highest version number of a specification, 0 where there is none."""
        query = select(func.max(t.specification_version.c.version)).where(t.specification_version.c.code == code)
        return int(self._connection.execute(query).scalar() or 0)

    def versions(self, code: str) -> list[VersionRow]:
        """Return every version of a specification with its present state, oldest first."""
        query = _versions().where(t.specification_version.c.code == code)
        rows = self._connection.execute(query.order_by(t.specification_version.c.version))
        return [_version(row) for row in rows]

    def specification_codes(self) -> list[str]:
        """Return the code of every specification, in order."""
        c = t.specification_version.c.code
        return list(self._connection.execute(select(c).distinct().order_by(c)).scalars())

    def governing_version(self, code: str, at: str) -> VersionRow | None:
        """Return the highest version that is approved and effective at a time."""
        query = (
            _versions()
            .where(
                t.specification_version.c.code == code,
                t.specification_event.c.state == "approved",
                t.specification_event.c.effective_at <= at,
            )
            .order_by(t.specification_version.c.version.desc())
        )
        row = self._one(query.limit(1))
        return None if row is None else _version(row)

    def envelope(self, record: int) -> str:
        """Return the envelope of a record by its row."""
        return str(self._connection.execute(select(t.record.c.envelope).where(t.record.c.id == record)).scalar_one())

    def version_history(self, code: str, version: int) -> list[str]:
        """Return the envelopes of a version's records, oldest first: drafted, then every event."""
        c = t.record.c
        query = select(c.envelope).where(
            c.specification_code == code, c.specification_version == version, c.record_type.like("specification-%")
        )
        return list(self._connection.execute(query.order_by(c.id)).scalars())

    # --- tokens and null tables

    def token(self, token_id: str) -> TokenRow | None:
        """Return a token by its identifier."""
        row = self._one(_tokens().where(t.token.c.token_id == token_id))
        return None if row is None else _token(row)

    def tokens(self) -> list[TokenRow]:
        """Return every token, in the order in which they were issued."""
        return [_token(row) for row in self._connection.execute(_tokens().order_by(t.token.c.record))]

    def null_table(self, key: str) -> bytes | None:
        """Return a table of a null law."""
        body: bytes | None = self._connection.execute(
            select(t.null_table.c.body).where(t.null_table.c.key == key)
        ).scalar()
        return body

    def _one(self, query: Select[Any]) -> Row[Any] | None:
        return self._connection.execute(query).first()


def _record(row: Sequence[Any]) -> RecordRow:
    return RecordRow(*row)


def _has_reason(code: str) -> ColumnElement[bool]:
    return exists().where(t.record_reason.c.record == t.record.c.id, t.record_reason.c.code == code)


def _of(table: Any, record: int) -> Select[Any]:
    return select(table.c.body).where(table.c.record == record)


def _versions() -> Select[Any]:
    """Return versions joined with their latest event, if any."""
    v, e = t.specification_version.c, t.specification_event.c
    later = t.specification_event.alias("later")
    newest = ~exists().where(later.c.code == e.code, later.c.version == e.version, later.c.record > e.record)
    joined = t.specification_version.outerjoin(
        t.specification_event, and_(e.code == v.code, e.version == v.version, newest)
    )
    return select(v.code, v.version, v.digest, v.author, v.record, e.state, e.effective_at).select_from(joined)


def _version(row: Sequence[Any]) -> VersionRow:
    code, version, digest, author, record, state, effective_at = row
    return VersionRow(code, version, digest, author, record, state or "draft", effective_at)


def _tokens() -> Select[Any]:
    c = t.token.c
    joined = t.token.outerjoin(t.token_revocation, t.token_revocation.c.token_id == c.token_id)
    return select(
        c.token_id, c.subject, c.secret_sha256, c.roles, c.issued_at, c.expires_at, t.token_revocation.c.revoked_at
    ).select_from(joined)


def _token(row: Sequence[Any]) -> TokenRow:
    token_id, subject, secret, roles, issued_at, expires_at, revoked_at = row
    return TokenRow(token_id, subject, secret, tuple(json.loads(roles)), issued_at, expires_at, revoked_at)
