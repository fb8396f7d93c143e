"""Connections to the database, each with its settings read back before it is used.

SQLite: the driver never begins a transaction by itself; a writer begins with BEGIN IMMEDIATE, so
that it holds the write lock before it reads what it will build on. A commit is on the disk when it
returns (`synchronous=FULL`). Readers open the file read-only and never checkpoint.
"""

from __future__ import annotations

import sqlite3
from pathlib import Path
from typing import Any
from urllib.parse import quote

from sqlalchemy import URL, Connection, Engine, create_engine, event, make_url
from sqlalchemy.exc import ArgumentError
from sqlalchemy.pool import QueuePool

from meterfix.errors import LedgerError

_BUSY_TIMEOUT = 10_000
"""ms to wait for a lock of another program on the database file."""

_OLDEST_SQLITE = (3, 37, 0)
"""The first with STRICT tables."""

WRITER_PRAGMAS: dict[str, str | int] = {
    "journal_mode": "wal",
    "synchronous": 2,
    "foreign_keys": 1,
    "recursive_triggers": 1,
    "busy_timeout": _BUSY_TIMEOUT,
}
"""Setting -> value as SQLite reads it back; synchronous 2 is FULL."""

READER_PRAGMAS: dict[str, str | int] = {
    "query_only": 1,
    "foreign_keys": 1,
    "recursive_triggers": 1,
    "busy_timeout": _BUSY_TIMEOUT,
}


def parsed_url(database_url: str) -> URL:
    """Return the database URL; LedgerError if it is none that a ledger can live in."""
    try:
        url = make_url(database_url)
    except ArgumentError as error:
        raise LedgerError(f"{database_url!r} is not a database URL") from error
    backend = url.get_backend_name()
    if backend not in ("sqlite", "postgresql"):
        raise LedgerError(f"a ledger needs sqlite or postgresql, not {backend}")
    if backend == "sqlite" and url.database in (None, "", ":memory:"):
        raise LedgerError("a ledger in memory would be lost; give a file")
    return url


def sqlite_file(url: URL) -> Path | None:
    """Return the database's file, or None where the database is not SQLite."""
    if url.get_backend_name() != "sqlite" or url.database is None:
        return None
    return Path(url.database)


def writer_engine(url: URL) -> Engine:
    """Return an engine for the holder of the writer's lock; makes the file if there is none."""
    path = sqlite_file(url)
    if path is None:
        return create_engine(url, pool_size=1, max_overflow=0)
    return _sqlite_engine(str(path), WRITER_PRAGMAS, "BEGIN IMMEDIATE", uri=False)


def reader_engine(url: URL) -> Engine:
    """Return an engine that can only read."""
    path = sqlite_file(url)
    if path is None:
        engine = create_engine(url, isolation_level="REPEATABLE READ")
        return engine.execution_options(postgresql_readonly=True)
    target = f"file:{quote(str(path.absolute()))}?mode=ro"
    return _sqlite_engine(target, READER_PRAGMAS, "BEGIN", uri=True)


def _sqlite_engine(target: str, pragmas: dict[str, str | int], begin: str, *, uri: bool) -> Engine:
    if sqlite3.sqlite_version_info < _OLDEST_SQLITE:
        raise LedgerError(f"SQLite {sqlite3.sqlite_version} has no STRICT tables; 3.37 has")

    def connect() -> sqlite3.Connection:
        # isolation_level None: the driver adds no BEGIN of its own; `begin` below does it
        return sqlite3.connect(target, uri=uri, isolation_level=None, check_same_thread=False)

    engine = create_engine("sqlite://", creator=connect, poolclass=QueuePool)

    @event.listens_for(engine, "connect")
    def _set_up(connection: Any, _record: object) -> None:
        for name, value in pragmas.items():
            connection.execute(f"PRAGMA {name} = {value}")
        for name, value in pragmas.items():
            found = connection.execute(f"PRAGMA {name}").fetchone()[0]
            if found != value:
                raise LedgerError(f"{target}: PRAGMA {name} is {found!r}; it must be {value!r}")

    @event.listens_for(engine, "begin")
    def _begin(connection: Connection) -> None:
        connection.exec_driver_sql(begin)

    return engine


def read_pragmas(connection: Connection, names: dict[str, str | int]) -> dict[str, str | int]:
    """Return the settings that a SQLite connection has now."""
    return {name: connection.exec_driver_sql(f"PRAGMA {name}").scalar_one() for name in names}
