"""The store's edge: which values may enter a table, and in which one form.

A number that is not known is NULL with a reason beside it, never NaN; minus zero becomes zero;
NumPy's scalars become Python's. Arrays are stored as little-endian float64 in C order, in which
one quiet NaN stands for "not known".
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
from sqlalchemy import BigInteger, Column, Double, LargeBinary, Table, Text

from meterfix.frames import Floats

Value = int | float | str | bytes | None
Row = dict[str, Value]

_SMALLEST, _LARGEST = -(2**63), 2**63 - 1


def _integer(value: Any) -> int:
    if isinstance(value, (bool, np.bool_, int, np.integer)):
        number = int(value)
        if _SMALLEST <= number <= _LARGEST:
            return number
        raise ValueError(f"{number} does not fit in 64 bits")
    raise TypeError(f"{value!r} is not an integer")


def _real(value: Any) -> float:
    if isinstance(value, (bool, np.bool_)) or not isinstance(
        value, (int, float, np.integer, np.floating)
    ):
        raise TypeError(f"{value!r} is not a number")
    number = float(value)
    if not math.isfinite(number):
        raise ValueError(f"{number} is not finite; a number that is not known is None")
    return number + 0.0  # turns -0.0 into 0.0


def _text(value: Any) -> str:
    if not isinstance(value, str):
        raise TypeError(f"{value!r} is not text")
    text = str.__str__(value)
    if "\0" in text:
        raise ValueError(f"{text!r} holds a NUL character")
    try:
        text.encode("utf-8")
    except UnicodeEncodeError:
        raise ValueError(f"{text!r} cannot be written as UTF-8") from None
    return text


def _blob(value: Any) -> bytes:
    if not isinstance(value, (bytes, bytearray, memoryview)):
        raise TypeError(f"{type(value).__name__} is not bytes")
    return bytes(value)


@dataclass(frozen=True, slots=True)
class _Edge:
    name: str
    convert: Callable[[Any], int | float | str | bytes]
    nullable: bool
    default: Value
    has_default: bool


def _edge(column: Column[Any]) -> _Edge:
    kinds: tuple[tuple[type, Callable[[Any], int | float | str | bytes]], ...] = (
        (BigInteger, _integer),
        (Double, _real),
        (Text, _text),
        (LargeBinary, _blob),
    )
    for kind, convert in kinds:
        if isinstance(column.type, kind):
            default = getattr(column.default, "arg", None)
            return _Edge(
                column.name,
                convert,
                bool(column.nullable),
                default,
                bool(column.nullable) or column.default is not None,
            )
    raise TypeError(f"{column.table.name}.{column.name}: no rule for the type {column.type!r}")


@cache
def _edges(table: Table) -> tuple[_Edge, ...]:
    return tuple(_edge(column) for column in table.columns)


def stored_row(table: Table, row: Mapping[str, Any]) -> Row:
    """Return the row with every column of the table, each value in its stored form.

    Parameters
    ----------
    table : Table
    row : mapping
        Column to value; a column with a default, or one that may be NULL, can be left out.

    Raises
    ------
    ValueError
        Names table, column and value: an unknown or missing column, a value of another type,
        a number that is not finite, an integer of more than 64 bits, text with a NUL or that
        is not UTF-8.
    """
    edges = _edges(table)
    unknown = row.keys() - {edge.name for edge in edges}
    if unknown:
        raise ValueError(f"{table.name} has no column {min(unknown)!r}")
    stored: Row = {}
    for edge in edges:
        if edge.name not in row:
            if not edge.has_default:
                raise ValueError(f"{table.name}.{edge.name} is missing in {_shortened(row)}")
            stored[edge.name] = edge.default
            continue
        value = row[edge.name]
        if value is None:
            if not edge.nullable:
                raise ValueError(f"{table.name}.{edge.name} cannot be None in {_shortened(row)}")
            stored[edge.name] = None
            continue
        try:
            stored[edge.name] = edge.convert(value)
        except (TypeError, ValueError) as error:
            raise ValueError(f"{table.name}.{edge.name}: {error}") from None
    return stored


def _shortened(row: Mapping[str, Any]) -> str:
    text = repr({k: v for k, v in row.items() if not isinstance(v, (bytes, np.ndarray))})
    return text if len(text) <= 300 else text[:300] + "..."


def plain_row(columns: Sequence[str], values: Sequence[Any]) -> dict[str, Any]:
    """Return a row as read from a database, with a driver's buffers made bytes."""
    return {
        name: bytes(value) if isinstance(value, (memoryview, bytearray)) else value
        for name, value in zip(columns, values, strict=True)
    }


def canonical_json(value: Any) -> str:
    """Return JSON with sorted keys, no spaces and no NaN: one text for one value."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), allow_nan=False)


def encode_array(array: object) -> bytes:
    """Return float64 values as little-endian bytes in C order.

    Parameters
    ----------
    array : array of float64, any shape
        NaN stands for "not known" and is written as the one quiet NaN; -0.0 becomes 0.0.

    Raises
    ------
    ValueError
        If a value is infinite.
    """
    values = np.array(array, dtype="<f8", order="C", copy=True)
    if np.isinf(values).any():
        raise ValueError("an infinite value cannot be stored")
    values += 0.0
    values[np.isnan(values)] = np.nan
    return values.tobytes()


def decode_array(blob: bytes, columns: int) -> Floats:
    """Return stored float64 values as a (rows, columns) array of its own.

    Raises
    ------
    ValueError
        If the bytes do not make whole rows.
    """
    if columns < 1 or len(blob) % (8 * columns):
        raise ValueError(f"{len(blob)} bytes are not whole rows of {columns} float64 values")
    return np.frombuffer(blob, dtype="<f8").astype(np.float64).reshape(-1, columns)
