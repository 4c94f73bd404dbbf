"""The store takes rows and gives none back, on SQLite and on PostgreSQL."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
import sqlalchemy as sa
from alembic.autogenerate import compare_metadata
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory

from service.errors import StoreUnavailableError
from service.storage import schema, triggers
from service.storage.engine import writing_engine
from service.storage.rows import Columns, Filters, Received, TokenRow, VersionRow
from service.storage.store import Store
from service.storage.tables import metadata
from tests.postgres import binaries, postgresql


@pytest.fixture(scope="session")
def server() -> Iterator[str]:
    if binaries() is None:
        pytest.skip("no PostgreSQL server on this machine")
    with postgresql() as address:
        yield address


@pytest.fixture(params=["sqlite", "postgresql"])
def url(request: pytest.FixtureRequest, tmp_path: Path) -> str:
    if request.param == "sqlite":
        return f"sqlite:///{tmp_path / 'store.sqlite'}"
    address: str = request.getfixturevalue("server")
    engine = sa.create_engine(address)
    with engine.begin() as connection:
        connection.execute(sa.text("DROP SCHEMA public CASCADE"))
        connection.execute(sa.text("CREATE SCHEMA public"))
    engine.dispose()
    return address


@pytest.fixture
def store(url: str) -> Iterator[Store]:
    Store.upgrade(url)
    opened = Store.open(url)
    yield opened
    opened.close()


def columns(record_id: str, **members: object) -> Columns:
    return Columns(record_id, "decision", f"2026-12-01T00:00:00.{record_id:0>6}Z", "pipeline", **members)  # type: ignore[arg-type]


def test_the_schema_is_what_the_tables_say(url: str) -> None:
    assert Store.upgrade(url) == Store.upgrade(url) == "0001"
    engine = writing_engine(url)
    with engine.connect() as connection:
        assert compare_metadata(MigrationContext.configure(connection), metadata) == []
    engine.dispose()


def test_the_head_revision_is_that_of_the_newest_migration() -> None:
    scripts = ScriptDirectory(str(schema.MIGRATIONS))
    assert scripts.get_heads() == [schema.HEAD]


def test_what_is_added_reads_back(store: Store) -> None:
    with store.transaction() as tx:
        kept = tx.add_record("envelope", columns("1", lot="a", outcome="held", reasons=("x", "y")))
        tx.add_received(kept, Received(b"body", "application/json"))
        tx.add_batch(kept, "digest", b"{}")
        tx.add_idempotency("key", "body-digest", kept)
    with store.reading() as view:
        row = view.record("1")
        assert row is not None
        assert (row.envelope, view.envelope(kept)) == ("envelope", "envelope")
        assert (view.received_body(kept), view.batch_body(kept)) == (b"body", b"{}")
        assert view.replay("key") == ("body-digest", "envelope")
        assert view.replay("other") is None
        assert view.record("2") is None


def test_an_error_undoes_the_whole_transaction(store: Store) -> None:
    def fail_halfway() -> None:
        with store.transaction() as tx:
            tx.add_record("envelope", columns("1"))
            raise ZeroDivisionError

    with pytest.raises(ZeroDivisionError):
        fail_halfway()
    with store.reading() as view:
        assert not view.has_records()


@pytest.mark.parametrize("table", triggers.ALL)
@pytest.mark.parametrize(
    "change", ["UPDATE {table} SET {column} = {column}", "DELETE FROM {table}", "TRUNCATE {table} CASCADE"]
)
def test_no_row_is_changed_or_taken_away(store: Store, table: str, change: str) -> None:
    engine = store._writer
    if change.startswith("TRUNCATE") and engine.dialect.name == "sqlite":
        pytest.skip("SQLite has no TRUNCATE")
    _fill(store)
    column = next(iter(metadata.tables[table].columns)).name
    with pytest.raises(sa.exc.DBAPIError, match="append-only"), engine.begin() as connection:
        connection.execute(sa.text(change.format(table=table, column=column)))


def _fill(store: Store) -> None:
    with store.transaction() as tx:
        kept = tx.add_record("e", columns("1", reasons=("x",)))
        tx.add_received(kept, Received(b"", "application/json"))
        tx.add_batch(kept, "d", b"")
        tx.add_idempotency("k", "d", kept)
        version = VersionRow("s", 1, "d", "author", kept, "approved", "2026")
        tx.add_specification_version(version)
        tx.add_specification_event(version, "approver")
        tx.add_token(TokenRow("t", "person", "s", ("auditor",), "2026", None, None), kept)
        tx.revoke_token("t", "2026", kept)
        tx.add_null_table("n", b"")


def test_no_row_is_replaced(store: Store) -> None:
    engine = store._writer
    if engine.dialect.name != "sqlite":
        pytest.skip("PostgreSQL has no INSERT OR REPLACE")
    _fill(store)
    for table in (metadata.tables[name] for name in triggers.ALL):
        names = ", ".join(column.name for column in table.columns)
        statement = f"INSERT OR REPLACE INTO {table.name} ({names}) SELECT {names} FROM {table.name}"  # noqa: S608
        with pytest.raises(sa.exc.IntegrityError, match="append-only"), engine.begin() as connection:
            connection.execute(sa.text(statement))


def test_the_governing_version_is_the_highest_approved_and_effective(store: Store) -> None:
    def add(tx_version: int, state: str | None, effective_at: str | None) -> None:
        with store.transaction() as tx:
            kept = tx.add_record("e", columns(f"{tx_version}0"))
            tx.add_specification_version(VersionRow("s", tx_version, "d", "author", kept, "draft", None))
            if state:
                later = tx.add_record("e", columns(f"{tx_version}1"))
                tx.add_specification_event(VersionRow("s", tx_version, "d", "", later, state, effective_at), "approver")

    add(1, "approved", "2026-01-01")
    add(2, "approved", "2026-06-01")
    add(3, "withdrawn", None)
    add(4, None, None)
    with store.reading() as view:
        found = {at: view.governing_version("s", at) for at in ("2025", "2026-02-01", "2026-07-01")}
        assert [row and row.version for row in found.values()] == [None, 1, 2]
        assert [row.state for row in view.versions("s")] == ["approved", "approved", "withdrawn", "draft"]
        assert (view.latest_version("s"), view.latest_version("t")) == (4, 0)
        assert view.specification_codes() == ["s"]


def test_filters_and_cursor_select_newest_first(store: Store) -> None:
    with store.transaction() as tx:
        for i in range(1, 6):
            tx.add_record("e", columns(str(i), lot="ab"[i % 2], outcome="held", reasons=(f"r{i}",)))
    with store.reading() as view:
        assert [row.record_id for row in view.records(Filters(limit=2))] == ["5", "4", "3"]
        assert [row.record_id for row in view.records(Filters(before=view.records(Filters())[2].id))] == ["2", "1"]
        assert [row.record_id for row in view.records(Filters(lot="b"))] == ["5", "3", "1"]
        assert [row.record_id for row in view.records(Filters(reason="r2"))] == ["2"]
        assert [row.record_id for row in view.records(Filters(outcome="held", actor="nobody"))] == []


def test_many_writers_count_without_a_gap_or_a_double(store: Store) -> None:
    def write(name: int) -> None:
        for i in range(10):
            with store.transaction() as tx:
                attempt = tx.attempts("lot", "s") + 1
                identity = f"{name}{i:02d}"
                tx.add_record("e", columns(identity, lot="lot", specification_code="s", attempt=attempt))

    threads = [threading.Thread(target=write, args=(name,)) for name in range(1, 9)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    with store._reader.connect() as connection:
        found = connection.execute(sa.text("SELECT attempt FROM record ORDER BY attempt")).scalars().all()
    assert found == list(range(1, 81))


def test_a_kept_null_table_can_be_deleted_as_its_message_says(store: Store) -> None:
    store.save_null_table("k", b"damaged")
    with store._writer.begin() as connection:
        connection.execute(sa.text("DELETE FROM null_table"))
    store.save_null_table("k", b"table")
    assert store.load_null_table("k") == b"table"


def test_null_tables_are_kept_once(store: Store) -> None:
    assert store.load_null_table("k") is None
    store.save_null_table("k", b"table")
    store.save_null_table("k", b"another")
    assert store.load_null_table("k") == b"table"


# --- opening


def test_a_missing_store_is_an_error_and_not_a_new_one(tmp_path: Path) -> None:
    path = tmp_path / "missing.sqlite"
    with pytest.raises(StoreUnavailableError, match="acceptance upgrade"):
        Store.open(f"sqlite:///{path}")
    assert not path.exists()


def test_a_store_behind_this_program_is_refused(url: str) -> None:
    engine = writing_engine(url, create=True)
    with engine.begin() as connection:
        connection.execute(sa.text("CREATE TABLE alembic_version (version_num VARCHAR(32) NOT NULL)"))
    engine.dispose()
    with pytest.raises(StoreUnavailableError, match="revision None, this program at 0001"):
        Store.open(url)


def test_a_store_whose_triggers_were_dropped_is_refused(store: Store, url: str) -> None:
    name = "record_no_update" if url.startswith("sqlite") else "record_append_only ON record"
    with store._writer.begin() as connection:
        connection.execute(sa.text(f"DROP TRIGGER {name}"))
    with pytest.raises(StoreUnavailableError, match=name.split()[0]):
        Store.open(url)


def test_a_damaged_store_is_unavailable_and_not_a_crash(store: Store, url: str) -> None:
    if not url.startswith("sqlite"):
        pytest.skip("a file of SQLite is damaged here")
    store.close()
    Path(url.removeprefix("sqlite:///")).write_bytes(b"not a database" * 1000)
    with pytest.raises(StoreUnavailableError, match="cannot be"):
        Store.open(url)


def test_sqlite_writes_through_to_the_disk(tmp_path: Path) -> None:
    url = f"sqlite:///{tmp_path / 'store.sqlite'}"
    Store.upgrade(url)
    store = Store.open(url)
    with store._writer.connect() as connection:
        found = {
            name: connection.execute(sa.text(f"PRAGMA {name}")).scalar_one() for name in ("synchronous", "journal_mode")
        }
    store.close()
    assert found == {"synchronous": 2, "journal_mode": "wal"}
