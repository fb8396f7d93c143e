"""Canonical digests of rows, and the hash that ties one audit row to the one before it.

A digest covers names, types and values, never a database's own bytes. A NULL is left out of its
row, so that a column that a later version adds does not change the digest of an older row.
"""

from __future__ import annotations

import hashlib
import struct
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from meterfix.store.tables import table_named
from meterfix.store.values import Value, canonical_json

_MARK = 8
"""Hexadecimal digits of a row's digest that are kept in the audit row, to name a changed row."""


@dataclass(frozen=True, slots=True)
class Head:
    """The last row of the chain; sequence 0 and hash '' while there is none."""

    sequence: int
    row_hash: str


EMPTY = Head(0, "")


@dataclass(frozen=True, slots=True)
class TableDigest:
    """The digest of all rows that one pass inserted into one table."""

    rows: int
    digest: str
    marks: str
    """The first digits of each row's own digest, in the order of the primary key."""


def _encoded(value: Value) -> bytes:
    if isinstance(value, int):
        return b"i" + struct.pack(">q", value)
    if isinstance(value, float):
        return b"f" + struct.pack(">d", value)
    if isinstance(value, str):
        text = value.encode("utf-8")
        return b"t" + struct.pack(">q", len(text)) + text
    if isinstance(value, bytes):
        return b"b" + struct.pack(">q", len(value)) + value
    raise TypeError(f"{type(value).__name__} has no canonical form")


def row_digest(row: Mapping[str, Value]) -> bytes:
    """Return the SHA-256 over (name, type, value) of each column that is not NULL, by name."""
    parts = [b"meterfix row 1"]
    for name in sorted(row):
        value = row[name]
        if value is not None:
            parts += (_encoded(name), _encoded(value))
    return hashlib.sha256(b"".join(parts)).digest()


def key_of(table: str, row: Mapping[str, Value]) -> tuple[Any, ...]:
    """Return the row's primary key; text sorts by code point, which is bytewise in UTF-8."""
    return tuple(row[column.name] for column in table_named(table).primary_key.columns)


def table_digest(table: str, rows: Iterable[Mapping[str, Value]]) -> TableDigest:
    """Return the digest of rows of a table, whatever their order."""
    ordered = sorted(rows, key=lambda row: key_of(table, row))
    digests = [row_digest(row) for row in ordered]
    whole = hashlib.sha256(b"meterfix table 1" + _encoded(table) + _encoded(len(digests)))
    for digest in digests:
        whole.update(digest)
    return TableDigest(
        len(digests), whole.hexdigest(), "".join(digest.hex()[:_MARK] for digest in digests)
    )


def row_mark(row: Mapping[str, Value]) -> str:
    """Return the digits of a row's digest that its audit row keeps."""
    return row_digest(row).hex()[:_MARK]


def split_marks(marks: str) -> list[str]:
    """Return the marks of an audit row one by one."""
    return [marks[at : at + _MARK] for at in range(0, len(marks), _MARK)]


def digests_text(digests: Mapping[str, TableDigest]) -> str:
    """Return the audit row's `digests`: JSON of table -> rows, digest, marks."""
    return canonical_json(
        {
            table: {"rows": found.rows, "digest": found.digest, "marks": found.marks}
            for table, found in digests.items()
        }
    )


def audit_hash(
    shard: int,
    sequence: int,
    previous_hash: str,
    digests: str,
    actor: str,
    clock_us: int,
    note: str,
) -> str:
    """Return the hash of an audit row: over all of it, the hash of the row before included."""
    values: Sequence[Value] = (shard, sequence, previous_hash, digests, actor, clock_us, note)
    return hashlib.sha256(
        b"meterfix audit 1" + b"".join(_encoded(value) for value in values)
    ).hexdigest()
