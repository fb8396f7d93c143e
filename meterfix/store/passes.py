"""A pass as it is committed: its record, and the audit row that ties it to the chain."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from sqlalchemy import Connection, func, select

from meterfix.errors import HeadMovedError
from meterfix.store.chain import EMPTY, Head, TableDigest, audit_hash, digests_text, table_digest
from meterfix.store.tables import RECORD_TABLES, table_named
from meterfix.store.values import Row, canonical_json, stored_row

SHARD = 0
"""The only shard so far."""


@dataclass
class PassRecord:
    """Everything that one pass commits, in one transaction."""

    pass_id: str
    """Made by the caller, so that a commit whose reply was lost can be looked up."""
    kind: str
    """'pass', 'restore' or 'resolution'."""
    expected_head: Head
    actor: str
    clock: int
    """UTC us."""
    note: dict[str, Any]
    rows: dict[str, list[dict[str, Any]]]
    """Table of record -> rows to insert; one `pass` row among them. `pass_sequence` is filled."""
    replace: dict[str, list[dict[str, Any]]] = field(default_factory=dict)
    """Table outside the chain -> rows to put in place of those with the same key."""
    remove: dict[str, list[dict[str, Any]]] = field(default_factory=dict)
    """Table outside the chain -> column values of rows to delete; done before `replace`."""


def assert_head(record: PassRecord, head: Head) -> None:
    """Raise HeadMovedError unless the chain's head is the one that the pass was computed on."""
    if head != record.expected_head:
        raise HeadMovedError(
            f"the ledger's head is pass {head.sequence} ({head.row_hash}); the pass was "
            f"computed on {record.expected_head.sequence} ({record.expected_head.row_hash})"
        )


def read_head(connection: Connection) -> Head:
    """Return the last row of the chain in the database."""
    audit = table_named("audit")
    found = connection.execute(
        select(audit.c.sequence, audit.c.row_hash)
        .where(audit.c.shard == SHARD)
        .order_by(audit.c.sequence.desc())
        .limit(1)
    ).first()
    return EMPTY if found is None else Head(int(found[0]), str(found[1]))


def rows_beyond(connection: Connection, sequence: int) -> str:
    """Return '' or which table holds rows of a pass after the chain's head."""
    for name in RECORD_TABLES:
        table = table_named(name)
        highest = connection.execute(select(func.max(table.c.pass_sequence))).scalar()
        if highest is not None and highest > sequence:
            return f"table {name} still holds rows of pass {highest}"
    return ""


def record_with_pass(record: PassRecord) -> dict[str, list[dict[str, Any]]]:
    """Return the rows with the pass's own row completed from the record."""
    passes = record.rows.get("pass", [])
    if len(passes) != 1:
        raise ValueError(f"a pass commits one row of table pass, not {len(passes)}")
    own = {"id": record.pass_id, "kind": record.kind, **passes[0]}
    if own["id"] != record.pass_id or own["kind"] != record.kind:
        raise ValueError(f"the pass row says {own['id']}, {own['kind']}, its record otherwise")
    return {**record.rows, "pass": [own]}


def audit_row(
    record: PassRecord,
    head: Head,
    rows: Mapping[str, Sequence[Row]],
    facts: Sequence[Mapping[str, Any]],
) -> Row:
    """Return the audit row that ties a pass's rows to the chain."""
    digests: dict[str, TableDigest] = {name: table_digest(name, r) for name, r in rows.items()}
    note = {**record.note, "recovered": list(facts)} if facts else record.note
    row: Row = {
        "shard": SHARD,
        "sequence": head.sequence + 1,
        "previous_hash": head.row_hash,
        "digests": digests_text(digests),
        "actor": record.actor,
        "clock_us": record.clock,
        "note": canonical_json(note),
    }
    row["row_hash"] = ""
    row = stored_row(table_named("audit"), row)
    row["row_hash"] = hash_of(row)
    return row


def hash_of(row: Mapping[str, Any]) -> str:
    """Return the hash that an audit row should carry."""
    return audit_hash(
        row["shard"],
        row["sequence"],
        row["previous_hash"],
        row["digests"],
        row["actor"],
        row["clock_us"],
        row["note"],
    )
