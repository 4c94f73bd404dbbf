"""Bring a store to this program's schema, and refuse one that is not as it was made."""

from __future__ import annotations

from pathlib import Path

from sqlalchemy import Connection, Engine, inspect, text

from service.errors import StoreUnavailableError
from service.storage.triggers import postgresql_triggers, sqlite_triggers

MIGRATIONS = Path(__file__).parent / "migrations"

HEAD = "0001"
"""Revision that this program works with: that of its newest migration."""


def upgrade(engine: Engine) -> str:
    """Run every migration that is missing, and return the revision reached."""
    # Loaded here: a service at its head revision needs none of it.
    from alembic import command
    from alembic.config import Config

    config = Config()
    config.set_main_option("script_location", str(MIGRATIONS))
    with engine.begin() as connection:
        config.attributes["connection"] = connection
        command.upgrade(config, HEAD)
    return HEAD


def check(connection: Connection) -> None:
    """Refuse a store that is behind this program, or whose triggers are not as they were made.

    Raises
    ------
    StoreUnavailableError
        Naming what is wrong.
    """
    found = _revision(connection)
    if found != HEAD:
        raise StoreUnavailableError(
            f"The store is at revision {found}, this program at {HEAD}. Run: acceptance upgrade"
        )
    changed = _changed_sqlite(connection) if connection.dialect.name == "sqlite" else _missing_postgresql(connection)
    if changed:
        raise StoreUnavailableError(
            f"Triggers that protect the store are missing or changed: {', '.join(changed)}. Find out who changed the "
            "store before it is used again."
        )


def _changed_sqlite(connection: Connection) -> list[str]:
    rows = connection.execute(text("SELECT name, sql FROM sqlite_master WHERE type = 'trigger'"))
    found = {row.name: row.sql for row in rows}
    return [name for name, wanted in sqlite_triggers() if found.get(name) != wanted]


def _missing_postgresql(connection: Connection) -> list[str]:
    rows = connection.execute(text("SELECT tgname FROM pg_trigger WHERE tgenabled IN ('O', 'A') AND NOT tgisinternal"))
    found = set(rows.scalars())
    return [name for name, _ in postgresql_triggers() if name not in found]


def _revision(connection: Connection) -> str | None:
    if not inspect(connection).has_table("alembic_version"):
        return None
    found: str | None = connection.execute(text("SELECT version_num FROM alembic_version")).scalar()
    return found
