"""Reading tables: rows by equality, membership or range; the latest row of each group."""

from __future__ import annotations

import itertools
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import ColumnElement, Connection, Table, and_, func, select, true

from meterfix.store.tables import table_named
from meterfix.store.values import plain_row

_CHUNK = 500
"""Values in one IN (...): well below the limit of every database."""


@dataclass(frozen=True, slots=True)
class Between:
    """An inclusive range; None leaves that side open."""

    low: Any
    high: Any


def select_rows(
    connection: Connection,
    name: str,
    where: Mapping[str, Any] | None = None,
    order: Sequence[str] = (),
    columns: Sequence[str] = (),
) -> list[dict[str, Any]]:
    """Return rows of a table as dicts."""
    table = table_named(name)
    wanted = tuple(columns) or tuple(column.name for column in table.columns)
    fetched = tuple(dict.fromkeys((*wanted, *order)))
    chunks = list(_conditions(table, where or {}))
    found: list[dict[str, Any]] = []
    for condition in chunks:
        statement = select(*(_column(table, column) for column in fetched)).where(condition)
        statement = statement.order_by(*(_column(table, column) for column in order))
        found += [plain_row(fetched, row) for row in connection.execute(statement)]
    if len(chunks) > 1 and order:
        found.sort(key=lambda row: _sort_key(row, order))
    if fetched != wanted:
        found = [{column: row[column] for column in wanted} for row in found]
    return found


def latest_rows(
    connection: Connection,
    name: str,
    group: Sequence[str],
    number: str,
    where: Mapping[str, Any] | None = None,
    order: Sequence[str] = (),
    columns: Sequence[str] = (),
) -> list[dict[str, Any]]:
    """Return, of the rows that `where` admits, the one with the highest `number` per group."""
    table = table_named(name)
    wanted = tuple(columns) or tuple(column.name for column in table.columns)
    fetched = tuple(dict.fromkeys((*wanted, *group, number, *order)))
    best: dict[tuple[Any, ...], dict[str, Any]] = {}
    for condition in _conditions(table, where or {}):
        ranked = (
            select(
                *(_column(table, column) for column in fetched),
                func.row_number()
                .over(
                    partition_by=[_column(table, column) for column in group],
                    order_by=_column(table, number).desc(),
                )
                .label("rank_in_group"),
            )
            .where(condition)
            .subquery()
        )
        statement = select(*(ranked.c[column] for column in fetched)).where(
            ranked.c.rank_in_group == 1
        )
        for values in connection.execute(statement):
            row = plain_row(fetched, values)
            key = tuple(row[column] for column in group)
            if key not in best or row[number] > best[key][number]:
                best[key] = row
    by = order or group
    found = sorted(best.values(), key=lambda row: _sort_key(row, by))
    return [{column: row[column] for column in wanted} for row in found]


def _sort_key(row: Mapping[str, Any], order: Sequence[str]) -> tuple[Any, ...]:
    return tuple((row[column] is not None, row[column]) for column in order)


def _column(table: Table, name: str) -> ColumnElement[Any]:
    if name not in table.columns:
        raise ValueError(f"{table.name} has no column {name!r}")
    return table.columns[name]


def _conditions(table: Table, where: Mapping[str, Any]) -> Iterator[ColumnElement[bool]]:
    """Yield conditions that together cover `where` without overlap, each of bounded size."""
    fixed: list[ColumnElement[bool]] = [true()]
    alternatives: list[list[ColumnElement[bool]]] = []
    for name, value in where.items():
        column = _column(table, name)
        if isinstance(value, Between):
            if value.low is not None:
                fixed.append(column >= value.low)
            if value.high is not None:
                fixed.append(column <= value.high)
        elif value is None:
            fixed.append(column.is_(None))
        elif isinstance(value, Collection) and not isinstance(value, (str, bytes)):
            distinct = list(dict.fromkeys(value))
            alternatives.append([column.in_(part) for part in _parts(distinct)])
        else:
            fixed.append(column == value)
    for choice in itertools.product(*alternatives):
        yield and_(*fixed, *choice)


def _parts(values: list[Any]) -> Iterator[list[Any]]:
    for at in range(0, len(values), _CHUNK):
        yield values[at : at + _CHUNK]
