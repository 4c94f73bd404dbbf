"""Engines with the settings on which durability rests, and the checks that they hold.

An answered record must survive the loss of the process: SQLite runs in WAL
mode with ``synchronous=FULL``; writers begin with BEGIN IMMEDIATE, so that two
of them never read the same state and then collide.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

from sqlalchemy import Engine, create_engine, event, make_url, text
from sqlalchemy.engine import URL

from service.errors import StoreUnavailableError

_PRAGMAS = (
    "PRAGMA journal_mode=WAL",
    "PRAGMA synchronous=FULL",
    "PRAGMA foreign_keys=ON",
    "PRAGMA trusted_schema=OFF",
    "PRAGMA busy_timeout=10000",
)


def writing_engine(url: str, *, create: bool = False) -> Engine:
    """Return the engine for transactions that write.

    Parameters
    ----------
    url : str
        SQLAlchemy address.
    create : bool, optional
        Whether a missing SQLite file is made; otherwise it is an error.

    Raises
    ------
    StoreUnavailableError
        Where the SQLite file is missing and must not be made.
    """
    return _engine(url, begin="BEGIN IMMEDIATE", create=create)


def reading_engine(url: str) -> Engine:
    """Return the engine for transactions that only read; they never wait for a writer.

    Raises
    ------
    StoreUnavailableError
        Where the SQLite file is missing.
    """
    return _engine(url, begin="BEGIN", create=False)


def _engine(url: str, *, begin: str, create: bool) -> Engine:
    address = make_url(url)
    if address.get_backend_name() != "sqlite":
        return create_engine(address, pool_pre_ping=True)
    path = Path(address.database or "")
    if not create and not path.is_file():
        raise StoreUnavailableError(f"There is no store at {path}. Run: acceptance upgrade")
    engine = create_engine(_file_address(path, create=create), pool_size=16, max_overflow=16)

    @event.listens_for(engine, "connect")
    def _settle(connection: Any, _: object) -> None:
        connection.isolation_level = None
        for pragma in _PRAGMAS:
            connection.execute(pragma)

    @event.listens_for(engine, "begin")
    def _begin(connection: Any) -> None:
        connection.exec_driver_sql(begin)

    return engine


def _file_address(path: Path, *, create: bool) -> URL:
    """Return an address that does not make a new, empty store where the path is wrong."""
    mode = "rwc" if create else "rw"
    return URL.create("sqlite", database=f"file:{path}", query={"mode": mode, "uri": "true"})


def check_durability(engine: Engine) -> None:
    """Refuse settings under which an answered record could be lost.

    Raises
    ------
    StoreUnavailableError
        Naming the setting.
    """
    wanted = (
        {"PRAGMA journal_mode": "wal", "PRAGMA synchronous": "2"}
        if engine.dialect.name == "sqlite"
        else {"SHOW synchronous_commit": "on", "SHOW fsync": "on", "SHOW full_page_writes": "on"}
    )
    with engine.connect() as connection:
        for question, answer in wanted.items():
            found = str(connection.execute(text(question)).scalar_one())
            if found != answer:
                name = question.split()[1]
                raise StoreUnavailableError(f"The store's {name} is {found!r}; records are safe only with {answer!r}.")


def sync_folder(url: str) -> None:
    """See the folder of a SQLite file on the disk, with the file of its write-ahead log in it.

    SQLite ignores a failure to do so; here it is an error before serving begins.
    """
    address = make_url(url)
    if address.get_backend_name() == "sqlite":
        folder = os.open(Path(address.database or "").parent, os.O_RDONLY)
        try:
            os.fsync(folder)
        finally:
            os.close(folder)
