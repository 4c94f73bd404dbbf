"""The first schema: records and what selects them, specifications, tokens, null tables; all append-only."""

import sqlalchemy as sa
from alembic import op

from service.storage.triggers import statements

revision = "0001"
down_revision = None

TABLES = (
    "record",
    "record_reason",
    "received",
    "batch",
    "specification_version",
    "specification_event",
    "idempotency",
    "token",
    "token_revocation",
)
"""Tables of evidence, in an order in which each refers to earlier ones only."""


def row_id() -> sa.types.TypeEngine[int]:
    """Return the type of row numbers; SQLite numbers rows by themselves only in an INTEGER column."""
    return sa.BigInteger().with_variant(sa.Integer(), "sqlite")


def upgrade() -> None:
    """Make every table and its triggers."""
    op.create_table(
        "null_table",
        sa.Column("key", sa.String(length=128), nullable=False),
        sa.Column("body", sa.LargeBinary(), nullable=False),
        sa.PrimaryKeyConstraint("key"),
    )
    op.create_table(
        "record",
        sa.Column("id", row_id(), autoincrement=True, nullable=False),
        sa.Column("record_id", sa.String(length=36), nullable=False),
        sa.Column("record_type", sa.String(length=64), nullable=False),
        sa.Column("envelope", sa.Text(), nullable=False),
        sa.Column("recorded_at", sa.String(length=27), nullable=False),
        sa.Column("actor", sa.Text(), nullable=False),
        sa.Column("lot", sa.Text(), nullable=True),
        sa.Column("specification_code", sa.String(length=64), nullable=True),
        sa.Column("specification_version", sa.Integer(), nullable=True),
        sa.Column("outcome", sa.String(length=16), nullable=True),
        sa.Column("attempt", sa.Integer(), nullable=True),
        sa.Column("batch_id", sa.Text(), nullable=True),
        sa.PrimaryKeyConstraint("id"),
        sa.UniqueConstraint("record_id"),
        sqlite_autoincrement=True,
    )
    op.create_index("record_by_actor", "record", ["actor", "id"], unique=False)
    op.create_index("record_by_lot", "record", ["lot", "specification_code", "id"], unique=False)
    op.create_index("record_by_outcome", "record", ["outcome", "id"], unique=False)
    op.create_index(
        "record_by_specification", "record", ["specification_code", "specification_version", "id"], unique=False
    )
    op.create_index("record_by_time", "record", ["recorded_at"], unique=False)
    op.create_index("record_by_type", "record", ["record_type", "id"], unique=False)
    op.create_table(
        "batch",
        sa.Column("record", row_id(), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("body", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["record"],
            ["record.id"],
        ),
        sa.PrimaryKeyConstraint("record"),
    )
    op.create_table(
        "idempotency",
        sa.Column("key_digest", sa.String(length=64), nullable=False),
        sa.Column("body_digest", sa.String(length=64), nullable=False),
        sa.Column("record", row_id(), nullable=False),
        sa.ForeignKeyConstraint(
            ["record"],
            ["record.id"],
        ),
        sa.PrimaryKeyConstraint("key_digest"),
    )
    op.create_table(
        "received",
        sa.Column("record", row_id(), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("length", sa.Integer(), nullable=False),
        sa.Column("media_type", sa.Text(), nullable=False),
        sa.Column("body", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["record"],
            ["record.id"],
        ),
        sa.PrimaryKeyConstraint("record"),
    )
    op.create_table(
        "record_reason",
        sa.Column("record", row_id(), nullable=False),
        sa.Column("code", sa.String(length=64), nullable=False),
        sa.ForeignKeyConstraint(
            ["record"],
            ["record.id"],
        ),
        sa.PrimaryKeyConstraint("code", "record"),
    )
    op.create_table(
        "specification_event",
        sa.Column("code", sa.String(length=64), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("state", sa.String(length=16), nullable=False),
        sa.Column("actor", sa.Text(), nullable=False),
        sa.Column("effective_at", sa.String(length=27), nullable=True),
        sa.Column("record", row_id(), nullable=False),
        sa.ForeignKeyConstraint(
            ["record"],
            ["record.id"],
        ),
        sa.PrimaryKeyConstraint("record"),
    )
    op.create_index(
        "specification_event_by_version", "specification_event", ["code", "version", "record"], unique=False
    )
    op.create_table(
        "specification_version",
        sa.Column("code", sa.String(length=64), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("author", sa.Text(), nullable=False),
        sa.Column("record", row_id(), nullable=False),
        sa.ForeignKeyConstraint(
            ["record"],
            ["record.id"],
        ),
        sa.PrimaryKeyConstraint("code", "version"),
    )
    op.create_table(
        "token",
        sa.Column("token_id", sa.String(length=32), nullable=False),
        sa.Column("subject", sa.Text(), nullable=False),
        sa.Column("secret_sha256", sa.String(length=64), nullable=False),
        sa.Column("roles", sa.Text(), nullable=False),
        sa.Column("issued_at", sa.String(length=27), nullable=False),
        sa.Column("expires_at", sa.String(length=27), nullable=True),
        sa.Column("record", row_id(), nullable=False),
        sa.ForeignKeyConstraint(
            ["record"],
            ["record.id"],
        ),
        sa.PrimaryKeyConstraint("token_id"),
    )
    op.create_table(
        "token_revocation",
        sa.Column("token_id", sa.String(length=32), nullable=False),
        sa.Column("revoked_at", sa.String(length=27), nullable=False),
        sa.Column("record", row_id(), nullable=False),
        sa.ForeignKeyConstraint(
            ["record"],
            ["record.id"],
        ),
        sa.ForeignKeyConstraint(
            ["token_id"],
            ["token.token_id"],
        ),
        sa.PrimaryKeyConstraint("token_id"),
    )
    for statement in statements(op.get_bind().dialect.name, TABLES):
        op.execute(statement)


def downgrade() -> None:
    """Take everything away."""
    for table in ("null_table", *reversed(TABLES)):
        op.drop_table(table)
    if op.get_bind().dialect.name == "postgresql":
        op.execute("DROP FUNCTION refuse_change()")
