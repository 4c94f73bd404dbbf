"""Tables of evidence take rows and give none back: the database itself refuses UPDATE, DELETE and replacement.

SQLite's INSERT OR REPLACE deletes without firing delete triggers, so a guard
before each insert refuses a key that is there already.  On PostgreSQL,
TRUNCATE has a trigger of its own.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from sqlalchemy import Table

from service.storage.tables import metadata

CACHES = frozenset({"null_table"})
"""Tables whose rows can be made anew, and so may be deleted."""

ALL = tuple(table.name for table in metadata.sorted_tables if table.name not in CACHES)
"""Every table that holds evidence."""


def statements(dialect: str, names: Sequence[str]) -> list[str]:
    """Return the statements that protect the tables of these names, in order."""
    if dialect == "sqlite":
        return [text for _, text in sqlite_triggers(names)]
    return [_POSTGRESQL_FUNCTION, *(text for _, text in postgresql_triggers(names))]


def sqlite_triggers(names: Sequence[str] = ALL) -> Iterator[tuple[str, str]]:
    """Yield the name and the text of every trigger, as SQLite keeps them."""
    for table in (metadata.tables[name] for name in names):
        for verb in ("UPDATE", "DELETE"):
            name = f"{table.name}_no_{verb.lower()}"
            yield (
                name,
                f"CREATE TRIGGER {name} BEFORE {verb} ON {table.name} "
                f"BEGIN SELECT RAISE(ABORT, '{table.name} is append-only'); END",
            )
        name = f"{table.name}_no_replace"
        yield (
            name,
            f"CREATE TRIGGER {name} BEFORE INSERT ON {table.name} WHEN EXISTS "
            f"(SELECT 1 FROM {table.name} WHERE {_taken(table)}) "
            f"BEGIN SELECT RAISE(ABORT, '{table.name} is append-only: the key is taken'); END",
        )


def _taken(table: Table) -> str:
    """Return the condition under which a new row would replace one that stands there."""
    keys = [[column.name for column in table.primary_key.columns]]
    keys += [[column.name] for column in table.columns if column.unique]
    return " OR ".join("(" + " AND ".join(f"{name} = NEW.{name}" for name in key) + ")" for key in keys)


_POSTGRESQL_FUNCTION = (
    "CREATE OR REPLACE FUNCTION refuse_change() RETURNS trigger LANGUAGE plpgsql AS "
    "$$ BEGIN RAISE EXCEPTION '% is append-only', TG_TABLE_NAME; END $$"
)


def postgresql_triggers(names: Sequence[str] = ALL) -> Iterator[tuple[str, str]]:
    """Yield the name and the text of every trigger for PostgreSQL; one on the statement, so that rows do not matter."""
    for table in (metadata.tables[name] for name in names):
        name = f"{table.name}_append_only"
        yield (
            name,
            f"CREATE TRIGGER {name} BEFORE UPDATE OR DELETE OR TRUNCATE ON {table.name} "
            f"FOR EACH STATEMENT EXECUTE FUNCTION refuse_change()",
        )
