"""Writing rows: statements compiled once by SQLAlchemy, run by the driver's executemany."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from sqlalchemy import Connection, Table, and_, delete, insert
from sqlalchemy.dialects import postgresql, sqlite
from sqlalchemy.sql.base import Executable
from sqlalchemy.sql.elements import CompilerElement

from meterfix.store.tables import OUTSIDE_TABLES, RECORD_TABLES, table_named
from meterfix.store.values import Row, stored_row

Rows = Mapping[str, Sequence[Mapping[str, Any]]]


def prepared_record(rows: Rows, sequence: int) -> dict[str, list[Row]]:
    """Return rows for tables of record in stored form, stamped with the pass's sequence.

    Tables come in an order in which references are met.

    Raises
    ------
    ValueError
        For a table that is not one of record, a row stamped with another pass, or a value that
        cannot be stored.
    """
    for name in rows:
        if name not in RECORD_TABLES:
            raise ValueError(f"{name} is not a table of record")
    prepared: dict[str, list[Row]] = {}
    for name in RECORD_TABLES:
        if rows.get(name):
            table = table_named(name)
            prepared[name] = [
                stored_row(table, _stamped(name, row, sequence)) for row in rows[name]
            ]
    return prepared


def _stamped(table: str, row: Mapping[str, Any], sequence: int) -> dict[str, Any]:
    stamped = dict(row)
    for column in ("pass_sequence", "sequence") if table == "pass" else ("pass_sequence",):
        if stamped.setdefault(column, sequence) != sequence:
            raise ValueError(f"{table}.{column} is {stamped[column]}; the next pass has {sequence}")
    return stamped


def prepared_outside(rows: Rows, sequence: int | None = None) -> dict[str, list[Row]]:
    """Return rows for tables outside the chain in stored form."""
    prepared: dict[str, list[Row]] = {}
    for name in rows:
        _assert_outside(name)
    for name in OUTSIDE_TABLES:
        table = table_named(name)
        stamp = sequence is not None and "pass_sequence" in table.columns
        for row in rows.get(name, ()):
            filled = {"pass_sequence": sequence, **row} if stamp else row
            prepared.setdefault(name, []).append(stored_row(table, filled))
    return prepared


def _assert_outside(name: str) -> None:
    if name not in OUTSIDE_TABLES:
        raise ValueError(f"{name} is not a table outside the chain; its rows are never changed")


def insert_rows(connection: Connection, name: str, rows: Sequence[Row]) -> None:
    """Insert rows in stored form."""
    _execute_many(connection, insert(table_named(name)), rows)


def replace_rows(connection: Connection, name: str, rows: Sequence[Row]) -> None:
    """Insert rows in stored form, each in place of the row with the same primary key."""
    _assert_outside(name)
    table = table_named(name)
    dialect = sqlite if connection.dialect.name == "sqlite" else postgresql
    statement = dialect.insert(table)
    key = [column.name for column in table.primary_key.columns]
    others = {c.name: statement.excluded[c.name] for c in table.columns if c.name not in key}
    _execute_many(
        connection,
        statement.on_conflict_do_update(index_elements=key, set_=others)
        if others
        else statement.on_conflict_do_nothing(index_elements=key),
        rows,
    )


def remove_rows(connection: Connection, name: str, keys: Iterable[Mapping[str, Any]]) -> None:
    """Delete the rows whose columns equal those given, for each of the mappings."""
    _assert_outside(name)
    table = table_named(name)
    for key in keys:
        if not key:
            raise ValueError(f"{name}: rows to be removed need at least one column")
        connection.execute(delete(table).where(and_(*_equalities(table, key))))


def _equalities(table: Table, key: Mapping[str, Any]) -> list[Any]:
    for column in key:
        if column not in table.columns:
            raise ValueError(f"{table.name} has no column {column!r}")
    return [table.columns[column] == value for column, value in key.items()]


def _execute_many(connection: Connection, statement: Executable, rows: Sequence[Row]) -> None:
    if not rows:
        return
    assert isinstance(statement, CompilerElement)
    compiled = statement.compile(dialect=connection.dialect, column_keys=list(rows[0]))
    names = getattr(compiled, "positiontup", None)
    parameters: list[Any] = (
        [tuple(row[name] for name in names) for row in rows] if names else list(rows)
    )
    connection.exec_driver_sql(str(compiled), parameters)
