"""The database's own guards: triggers, strict tables, references, settings, sound pages."""

from __future__ import annotations

import re
from collections.abc import Iterator

from sqlalchemy import Connection, text

from meterfix.store.engine import READER_PRAGMAS, read_pragmas
from meterfix.store.migrate import LATEST_REVISION, database_revision
from meterfix.store.proof_finding import Finding
from meterfix.store.tables import INSERT_ONLY_TABLES, metadata
from meterfix.store.triggers import postgresql_triggers, sqlite_triggers, unique_keys


def database_findings(connection: Connection) -> Iterator[Finding]:
    """Yield what is not in place."""
    revision = database_revision(connection)
    if revision != LATEST_REVISION:
        yield Finding("database", "alembic_version", f"is {revision}, not {LATEST_REVISION}")
    if connection.dialect.name == "sqlite":
        yield from _sqlite_findings(connection)
    else:
        yield from _postgresql_findings(connection)


def _sqlite_findings(connection: Connection) -> Iterator[Finding]:
    for line in connection.exec_driver_sql("PRAGMA integrity_check(1)").scalars():
        if line != "ok":
            yield Finding("database", "integrity_check", str(line))
    for table, row, parent, _ in connection.exec_driver_sql("PRAGMA foreign_key_check"):
        yield Finding("database", f"{table} row {row}", f"refers to a row that {parent} lacks")
    expected_settings = {**READER_PRAGMAS, "journal_mode": "wal"}
    for name, found in read_pragmas(connection, expected_settings).items():
        if found != expected_settings[name]:
            yield Finding(
                "database", f"PRAGMA {name}", f"is {found!r}, must be {expected_settings[name]!r}"
            )
    strict = {
        str(row.name): bool(row.strict) for row in connection.exec_driver_sql("PRAGMA table_list")
    }
    for table in metadata.tables:
        if not strict.get(table, False):
            yield Finding("database", table, "is missing or not a STRICT table")
    yield from _trigger_findings(connection)


def _trigger_findings(connection: Connection) -> Iterator[Finding]:
    expected = sqlite_triggers(
        {name: unique_keys(metadata.tables[name]) for name in INSERT_ONLY_TABLES}
    )
    found = {
        str(name): str(statement)
        for name, statement in connection.exec_driver_sql(
            "SELECT name, sql FROM sqlite_schema WHERE type = 'trigger' ORDER BY name"
        )
    }
    for name, statement in expected.items():
        if name not in found:
            yield Finding("database", f"trigger {name}", "is missing")
        elif _spaces(found[name]) != _spaces(statement):
            yield Finding(
                "database", f"trigger {name}", f"is {found[name]!r}, must be {statement!r}"
            )
    for name in found.keys() - expected.keys():
        yield Finding("database", f"trigger {name}", f"does not belong here: {found[name]!r}")


def _postgresql_findings(connection: Connection) -> Iterator[Finding]:
    enabled = {
        str(name): str(state)
        for name, state in connection.execute(
            text("SELECT tgname, tgenabled FROM pg_trigger WHERE NOT tgisinternal")
        )
    }
    for name in postgresql_triggers(INSERT_ONLY_TABLES):
        if enabled.get(name) not in ("O", "A"):
            yield Finding("database", f"trigger {name}", "is missing or disabled")


def _spaces(statement: str) -> str:
    return re.sub(r"\s+", " ", statement).strip()
