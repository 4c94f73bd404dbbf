"""The store: opened with care, written in whole transactions."""

from __future__ import annotations

import gzip
import json
from collections.abc import Iterator
from contextlib import contextmanager

from sqlalchemy import Connection, Engine, insert, text
from sqlalchemy.exc import DataError, DBAPIError, IntegrityError, NotSupportedError, ProgrammingError, TimeoutError

from service.errors import StoreUnavailableError
from service.storage import engine, schema
from service.storage import tables as t
from service.storage.rows import Columns, Filters, Received, RecordRow, TokenRow, VersionRow
from service.storage.view import View

__all__ = ["Columns", "Filters", "Received", "RecordRow", "Store", "TokenRow", "Transaction", "VersionRow", "View"]

# These say that a question was wrong, not that the store is away.
_FAULTS_OF_THIS_PROGRAM = (IntegrityError, ProgrammingError, DataError, NotSupportedError)

# Envelopes and bodies compress well already at the fastest setting.
_COMPRESSION = 1


class Transaction(View):
    """A view that also adds; nothing it adds is there until the transaction has ended well."""

    __slots__ = ()

    def add_record(self, envelope: str, columns: Columns) -> int:
        """Add a signed record, and return its row."""
        values = {
            "record_id": columns.record_id,
            "record_type": columns.record_type,
            "envelope": envelope,
            "recorded_at": columns.recorded_at,
            "actor": columns.actor,
            "lot": columns.lot,
            "specification_code": columns.specification_code,
            "specification_version": columns.specification_version,
            "outcome": columns.outcome,
            "attempt": columns.attempt,
            "batch_id": columns.batch_id,
        }
        result = self._connection.execute(insert(t.record).returning(t.record.c.id), values)
        kept = int(result.scalar_one())
        if columns.reasons:
            rows = [{"record": kept, "code": code} for code in columns.reasons]
            self._connection.execute(insert(t.record_reason), rows)
        return kept

    def add_received(self, record: int, received: Received) -> None:
        """Keep a request body as it came."""
        self._connection.execute(
            insert(t.received),
            {
                "record": record,
                "digest": received.digest,
                "length": len(received.body),
                "media_type": received.media_type,
                "body": gzip.compress(received.body, _COMPRESSION),
            },
        )

    def add_batch(self, record: int, digest: str, body: bytes) -> None:
        """Keep the canonical bytes of a batch."""
        values = {"record": record, "digest": digest, "body": gzip.compress(body, _COMPRESSION)}
        self._connection.execute(insert(t.batch), values)

    def add_idempotency(self, key_digest: str, body_digest: str, record: int) -> None:
        """Keep which record answered a key."""
        values = {"key_digest": key_digest, "body_digest": body_digest, "record": record}
        self._connection.execute(insert(t.idempotency), values)

    def add_specification_version(self, row: VersionRow) -> None:
        """Add a draft."""
        values = {
            "code": row.code,
            "version": row.version,
            "digest": row.digest,
            "author": row.author,
            "record": row.record,
        }
        self._connection.execute(insert(t.specification_version), values)

    def add_specification_event(self, row: VersionRow, actor: str) -> None:
        """Add a step in the life of a version: `row` is the version as it is after the step."""
        values = {
            "code": row.code,
            "version": row.version,
            "state": row.state,
            "actor": actor,
            "effective_at": row.effective_at,
            "record": row.record,
        }
        self._connection.execute(insert(t.specification_event), values)

    def add_token(self, row: TokenRow, record: int) -> None:
        """Add a token."""
        values = {
            "token_id": row.token_id,
            "subject": row.subject,
            "secret_sha256": row.secret_sha256,
            "roles": json.dumps(row.roles),
            "issued_at": row.issued_at,
            "expires_at": row.expires_at,
            "record": record,
        }
        self._connection.execute(insert(t.token), values)

    def revoke_token(self, token_id: str, at: str, record: int) -> None:
        """Revoke a token."""
        self._connection.execute(insert(t.token_revocation), {"token_id": token_id, "revoked_at": at, "record": record})

    def add_null_table(self, key: str, body: bytes) -> None:
        """Keep a table of a null law, unless one is there."""
        if self.null_table(key) is None:
            self._connection.execute(insert(t.null_table), {"key": key, "body": body})


class Store:
    """Where everything is kept.

    Parameters
    ----------
    writer, reader : Engine
        For transactions that write, and for those that only read.
    """

    def __init__(self, writer: Engine, reader: Engine) -> None:
        self._writer = writer
        self._reader = reader

    @classmethod
    def open(cls, url: str) -> Store:
        """Open a store that is there, at this program's schema and as it was made.

        Raises
        ------
        StoreUnavailableError
            Naming what is wrong and what to do.
        """
        with _unavailable("opened"):
            store = cls(engine.writing_engine(url), engine.reading_engine(url))
            try:
                engine.check_durability(store._writer)
                with store._writer.connect() as connection:
                    schema.check(connection)
                engine.sync_folder(url)
            except BaseException:
                store.close()
                raise
        return store

    @staticmethod
    def upgrade(url: str) -> str:
        """Make a store, or bring it to this program's schema; return the revision reached.

        Raises
        ------
        StoreUnavailableError
            Where that cannot be done.
        """
        with _unavailable("upgraded"):
            writer = engine.writing_engine(url, create=True)
            try:
                return schema.upgrade(writer)
            finally:
                writer.dispose()

    @contextmanager
    def transaction(self) -> Iterator[Transaction]:
        """Begin a transaction that writes; it is durable when this ends without an error, and undone with one.

        Raises
        ------
        StoreUnavailableError
            Where the store cannot be reached, is locked or is full.
        """
        with _unavailable("written"), self._writer.begin() as connection:
            _serialise(connection)
            yield Transaction(connection)

    @contextmanager
    def reading(self) -> Iterator[View]:
        """Begin a transaction that reads.

        Raises
        ------
        StoreUnavailableError
            Where the store cannot be reached.
        """
        with _unavailable("read"), self._reader.begin() as connection:
            yield View(connection)

    def ping(self) -> None:
        """Raise `StoreUnavailableError` unless the store answers."""
        with self.reading() as view:
            view.has_records()

    def load_null_table(self, key: str) -> bytes | None:
        """Return a table of a null law."""
        with self.reading() as view:
            return view.null_table(key)

    def save_null_table(self, key: str, body: bytes) -> None:
        """Keep a table of a null law."""
        with self.transaction() as tx:
            tx.add_null_table(key, body)

    def close(self) -> None:
        """Let go of every connection."""
        self._writer.dispose()
        self._reader.dispose()


def _serialise(connection: Connection) -> None:
    """Let one writer at a time read and then write, as BEGIN IMMEDIATE does on SQLite."""
    if connection.dialect.name == "postgresql":
        connection.execute(text("SELECT pg_advisory_xact_lock(7217)"))


@contextmanager
def _unavailable(done: str) -> Iterator[None]:
    try:
        yield
    except _FAULTS_OF_THIS_PROGRAM:
        raise
    except (DBAPIError, TimeoutError, OSError) as error:
        cause = getattr(error, "orig", None) or error
        raise StoreUnavailableError(f"The store cannot be {done} now: {cause}") from error
