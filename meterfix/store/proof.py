"""Proof of what is stored: chain, rows, anchor, archive and settings, checked against each other.

Nothing is changed and nothing computed here that a calculation would have to repeat; whether the
stored figures follow from the raw bytes is another proof.
"""

from __future__ import annotations

import json
import threading
from collections import Counter
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from itertools import groupby
from typing import Any

from sqlalchemy import Connection, select
from sqlalchemy.exc import SQLAlchemyError

from meterfix.errors import LedgerError
from meterfix.model.wording import utc_text
from meterfix.store import query
from meterfix.store.anchor import Anchor, AnchorState
from meterfix.store.archive import Archive
from meterfix.store.chain import EMPTY, Head, key_of, row_mark, split_marks, table_digest
from meterfix.store.ledger import Ledger
from meterfix.store.passes import SHARD, hash_of, read_head
from meterfix.store.proof_archive import archive_findings, unknown_findings
from meterfix.store.proof_database import database_findings
from meterfix.store.proof_finding import Finding
from meterfix.store.tables import RECORD_TABLES, table_named
from meterfix.store.values import Row, plain_row

__all__ = ["Finding", "check_store"]

Progress = Callable[[str, int, int], None]
"""Called with what is being checked, how much is done, and of how much."""

_SETTLING_WAIT = 0.1
"""s between two looks at a ledger to which a pass is just being committed."""
_SETTLING_LOOKS = 20


@dataclass
class _Stored:
    """What the tables of record hold for one pass."""

    digests: dict[str, tuple[int, str]] = field(default_factory=dict)
    """Table -> number of rows, digest."""


def check_store(ledger: Ledger, progress: Progress | None = None) -> list[Finding]:
    """Return every difference between what is stored and what proves it; none if all is well.

    Parameters
    ----------
    ledger : Ledger
        A pass may be committed meanwhile; the proof is of one moment.
    progress : callable, optional

    Returns
    -------
    list of Finding
        Settings first, then the chain and its rows in the order of passes, then the archive:
        the first finding names the first difference.
    """
    report = progress or (lambda _what, _done, _of: None)
    findings: list[Finding] = []
    try:
        with ledger.engine.connect() as connection:
            state = _begin_at_rest(ledger, connection)
            findings += database_findings(connection)
            findings += _chain_findings(connection, state, ledger.id, report)
            # an archive object of its own: what it has checked before does not count here
            archive = Archive(ledger.archive.folder, ledger.id)
            findings += archive_findings(connection, archive, report)
        findings += _unknown_at_rest(ledger, archive)
    except (SQLAlchemyError, LedgerError) as error:
        findings.append(Finding("database", str(ledger.url), f"cannot be read on: {error}"))
    return findings


def _begin_at_rest(ledger: Ledger, connection: Connection) -> AnchorState:
    """Begin the connection's snapshot at a moment at which no pass is being committed."""
    path = ledger.anchor.path
    for look in range(_SETTLING_LOOKS):
        size = path.stat().st_size
        read_head(connection)
        state = Anchor(path).state()
        if path.stat().st_size == size and not state.open:
            break
        if look < _SETTLING_LOOKS - 1:
            connection.rollback()
            threading.Event().wait(_SETTLING_WAIT)
    return state


def _unknown_at_rest(ledger: Ledger, archive: Archive) -> list[Finding]:
    """Return packs that the database does not know and that no pass is just about to commit."""
    for look in range(_SETTLING_LOOKS):
        if look:
            threading.Event().wait(_SETTLING_WAIT)
        with ledger.engine.connect() as connection:
            found = list(unknown_findings(connection, archive))
        if not found:
            break
    return found


# --- the chain -------------------------------------------------------------------------------


def _chain_findings(
    connection: Connection, state: AnchorState, ledger_id: str, report: Progress
) -> Iterator[Finding]:
    if state.ledger_id != ledger_id:
        yield Finding("anchor", "line 1", f"is of ledger {state.ledger_id}, not of {ledger_id}")
    for mistake in state.mistakes:
        yield Finding("anchor", "anchor", mistake)
    audit = {
        int(row["sequence"]): row
        for row in query.select_rows(connection, "audit", {"shard": SHARD}, ("sequence",))
    }
    for other in query.select_rows(connection, "audit", {"shard": query.Between(SHARD + 1, None)}):
        yield Finding("chain", f"audit shard {other['shard']}", "no such shard is in use")
    stored = _stored_digests(connection, report)
    path = state.path()
    announced = {intent.sequence: intent.row_hash for intent in state.open}
    head = EMPTY
    last = max((*audit, 0))
    behind = sorted(sequence for sequence in path if sequence > last)
    for sequence in sorted({*audit, *stored, *(s for s in path if s <= last)}):
        row = audit.get(sequence)
        if row is None:
            yield from _without_audit(connection, sequence, stored.get(sequence), path)
            continue
        yield from _link_findings(sequence, row, head)
        yield from _anchor_findings(sequence, row, path, announced)
        yield from _row_findings(connection, sequence, row, stored.get(sequence, _Stored()))
        head = Head(sequence, str(row["row_hash"]))
    if behind:
        yield Finding(
            "anchor",
            f"audit {behind[0]}",
            f"the anchor has pass {behind[0]} with hash {path[behind[0]]} as done, up to pass "
            f"{behind[-1]}; the database ends with pass {last}: the database is behind the archive "
            "(an older copy, or its end was cut)",
        )
    yield from _unsettled_findings(state, audit)


def _link_findings(sequence: int, row: Mapping[str, Any], head: Head) -> Iterator[Finding]:
    where = f"audit {sequence}"
    if sequence != head.sequence + 1:
        yield Finding(
            "chain", f"audit {head.sequence + 1}", f"is missing: {where} follows {head.sequence}"
        )
    recomputed = hash_of(row)
    if recomputed != row["row_hash"]:
        yield Finding("chain", where, f"row_hash stored {row['row_hash']}, recomputed {recomputed}")
    if row["previous_hash"] != head.row_hash:
        yield Finding(
            "chain",
            where,
            f"previous_hash stored {row['previous_hash']!r}, audit {head.sequence} has "
            f"{head.row_hash!r}",
        )


def _anchor_findings(
    sequence: int, row: Mapping[str, Any], path: Mapping[int, str], announced: Mapping[int, str]
) -> Iterator[Finding]:
    where = f"audit {sequence}"
    if sequence in path:
        if path[sequence] != row["row_hash"]:
            yield Finding(
                "anchor", where, f"row_hash stored {row['row_hash']}, anchor has {path[sequence]}"
            )
    elif announced.get(sequence) != row["row_hash"]:
        yield Finding("anchor", where, f"the anchor never announced hash {row['row_hash']}")


def _unsettled_findings(
    state: AnchorState, audit: Mapping[int, Mapping[str, Any]]
) -> Iterator[Finding]:
    for intent in state.open:
        row = audit.get(intent.sequence)
        committed = row is not None and row["row_hash"] == intent.row_hash
        yield Finding(
            "anchor",
            f"audit {intent.sequence}",
            f"has an intent without 'done' ({'it was' if committed else 'it was not'} committed): "
            "a pass was cut short and no later pass has recorded that",
        )
    for restored in state.restores:
        yield Finding(
            "anchor",
            f"audit {restored.database.sequence}",
            f"an older database was put back in place of pass {restored.anchor_sequence}, and no "
            "later pass has recorded that",
        )


# --- rows against their digests --------------------------------------------------------------


def _stored_digests(connection: Connection, report: Progress) -> dict[int, _Stored]:
    """Return pass -> digests of the rows that each table holds of it."""
    found: dict[int, _Stored] = {}
    for done, name in enumerate(RECORD_TABLES):
        report("rows", done, len(RECORD_TABLES))
        table = table_named(name)
        columns = [column.name for column in table.columns]
        result = connection.execute(
            select(table).order_by(table.c.pass_sequence).execution_options(yield_per=1000)
        )
        rows = (plain_row(columns, values) for values in result)
        for sequence, of_pass in groupby(rows, key=lambda row: int(row["pass_sequence"])):
            digest = table_digest(name, of_pass)
            found.setdefault(sequence, _Stored()).digests[name] = (digest.rows, digest.digest)
    report("rows", len(RECORD_TABLES), len(RECORD_TABLES))
    return found


def _row_findings(
    connection: Connection, sequence: int, row: Mapping[str, Any], stored: _Stored
) -> Iterator[Finding]:
    try:
        claimed: dict[str, dict[str, Any]] = json.loads(row["digests"])
        for name, digest in claimed.items():
            if {*digest} != {"rows", "digest", "marks"} or name not in RECORD_TABLES:
                yield Finding("chain", f"audit {sequence}", f"its digest of {name} is not one")
                return
    except (ValueError, TypeError, AttributeError):
        yield Finding("chain", f"audit {sequence}", "its digests cannot be read")
        return
    nothing = {"rows": 0, "digest": "(no rows)", "marks": ""}
    for name in RECORD_TABLES:
        digest = claimed.get(name, nothing)
        number, recomputed = stored.digests.get(name, (0, "(no rows)"))
        if digest["digest"] != recomputed:
            yield Finding(
                "rows",
                f"{name} of pass {sequence}",
                f"{_difference(connection, name, sequence, digest['marks'])}; {digest['rows']} "
                f"rows with digest {digest['digest']} stored in audit {sequence}, {number} rows "
                f"with digest {recomputed} recomputed",
            )


def _difference(connection: Connection, name: str, sequence: int, marks: str) -> str:
    """Return which rows of a pass are not as they were."""
    rows = _rows_of(connection, name, sequence)
    lacking = Counter(split_marks(marks))
    foreign: list[Row] = []
    for row in rows:
        mark = row_mark(row)
        if lacking[mark] > 0:
            lacking[mark] -= 1
        else:
            foreign.append(row)
    parts: list[str] = []
    if foreign:
        parts.append(f"altered or added: {_named(name, foreign[0])}")
        if len(foreign) > 1:
            parts[-1] += f" and {len(foreign) - 1} more"
    gone = sum(lacking.values()) - len(foreign)
    if gone > 0:
        parts.append(f"{gone} deleted, next to {_named(name, rows[0]) if rows else 'no other'}")
    return ", ".join(parts) or "rows differ"


def _named(name: str, row: Row) -> str:
    """Return a row's key, its instants in ISO 8601 too, and its gas day where it has one."""
    names = [column.name for column in table_named(name).primary_key.columns]
    parts = []
    for column, value in zip(names, key_of(name, row), strict=True):
        iso = f" ({_instant(value)})" if column.endswith("_us") else ""
        parts.append(f"{column}={value}{iso}")
    if "gas_day" in row and "gas_day" not in names:
        parts.append(f"gas day {row['gas_day']!s}")
    return ", ".join(parts)


def _instant(value: Any) -> str:
    try:
        return utc_text(value)
    except (OverflowError, TypeError):
        return "no instant at all"  # somebody put it there; the number stands beside it


def _rows_of(connection: Connection, name: str, sequence: int) -> list[Row]:
    rows = query.select_rows(connection, name, {"pass_sequence": sequence})
    return sorted(rows, key=lambda row: key_of(name, row))


def _without_audit(
    connection: Connection, sequence: int, stored: _Stored | None, path: Mapping[int, str]
) -> Iterator[Finding]:
    """Name a pass that the anchor or a table of record has and the chain has not."""
    for name, (number, _) in (stored or _Stored()).digests.items():
        first = _rows_of(connection, name, sequence)[0]
        yield Finding(
            "chain",
            f"audit {sequence}",
            f"is missing, but {name} holds {number} rows of pass {sequence}, the first "
            f"{_named(name, first)}",
        )
    if sequence in path:
        yield Finding(
            "anchor",
            f"audit {sequence}",
            f"is missing; the anchor has it as done with hash {path[sequence]}",
        )
