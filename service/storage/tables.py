"""Tables.  Envelopes are the evidence; every other column only selects rows."""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    Column,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    PrimaryKeyConstraint,
    String,
    Table,
    Text,
)

metadata = MetaData()

_Id = BigInteger().with_variant(Integer, "sqlite")


def _of_record(**options: bool) -> Column[int]:
    return Column("record", _Id, ForeignKey("record.id"), nullable=False, **options)  # type: ignore[arg-type]


record = Table(
    "record",
    metadata,
    Column("id", _Id, primary_key=True, autoincrement=True),
    Column("record_id", String(36), nullable=False, unique=True),
    Column("record_type", String(64), nullable=False),
    Column("envelope", Text, nullable=False),
    Column("recorded_at", String(27), nullable=False),
    Column("actor", Text, nullable=False),
    Column("lot", Text),
    Column("specification_code", String(64)),
    Column("specification_version", Integer),
    Column("outcome", String(16)),
    Column("attempt", Integer),
    Column("batch_id", Text),
    Index("record_by_type", "record_type", "id"),
    Index("record_by_lot", "lot", "specification_code", "id"),
    Index("record_by_specification", "specification_code", "specification_version", "id"),
    Index("record_by_outcome", "outcome", "id"),
    Index("record_by_actor", "actor", "id"),
    Index("record_by_time", "recorded_at"),
    sqlite_autoincrement=True,
)

record_reason = Table(
    "record_reason",
    metadata,
    _of_record(),
    Column("code", String(64), nullable=False),
    PrimaryKeyConstraint("code", "record"),
)

received = Table(
    "received",
    metadata,
    _of_record(primary_key=True),
    Column("digest", String(64), nullable=False),
    Column("length", Integer, nullable=False),
    Column("media_type", Text, nullable=False),
    Column("body", LargeBinary, nullable=False),
)

batch = Table(
    "batch",
    metadata,
    _of_record(primary_key=True),
    Column("digest", String(64), nullable=False),
    Column("body", LargeBinary, nullable=False),
)

specification_version = Table(
    "specification_version",
    metadata,
    Column("code", String(64), nullable=False),
    Column("version", Integer, nullable=False),
    Column("digest", String(64), nullable=False),
    Column("author", Text, nullable=False),
    _of_record(),
    PrimaryKeyConstraint("code", "version"),
)

specification_event = Table(
    "specification_event",
    metadata,
    Column("code", String(64), nullable=False),
    Column("version", Integer, nullable=False),
    Column("state", String(16), nullable=False),
    Column("actor", Text, nullable=False),
    Column("effective_at", String(27)),
    _of_record(primary_key=True),
    Index("specification_event_by_version", "code", "version", "record"),
)

idempotency = Table(
    "idempotency",
    metadata,
    Column("key_digest", String(64), primary_key=True),
    Column("body_digest", String(64), nullable=False),
    _of_record(),
)

token = Table(
    "token",
    metadata,
    Column("token_id", String(32), primary_key=True),
    Column("subject", Text, nullable=False),
    Column("secret_sha256", String(64), nullable=False),
    Column("roles", Text, nullable=False),
    Column("issued_at", String(27), nullable=False),
    Column("expires_at", String(27)),
    _of_record(),
)

token_revocation = Table(
    "token_revocation",
    metadata,
    Column("token_id", String(32), ForeignKey("token.token_id"), primary_key=True),
    Column("revoked_at", String(27), nullable=False),
    _of_record(),
)

null_table = Table(
    "null_table",
    metadata,
    Column("key", String(128), primary_key=True),
    Column("body", LargeBinary, nullable=False),
)
