"""The ledger: one database, its archive and its anchor, written by one process at a time."""

from __future__ import annotations

import contextlib
import hashlib
import sqlite3
import struct
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from sqlalchemy import Connection, Engine, select, text, update
from sqlalchemy.engine import URL

from meterfix.errors import LedgerBusyError, LedgerError
from meterfix.store import opening, query, writing
from meterfix.store.adopt import unknown_entries
from meterfix.store.anchor import Anchor, intent_line
from meterfix.store.archive import Archive, PackEntry
from meterfix.store.chain import Head
from meterfix.store.engine import parsed_url, reader_engine, sqlite_file, writer_engine
from meterfix.store.lock import WriterLock
from meterfix.store.passes import (
    SHARD,
    PassRecord,
    assert_head,
    audit_row,
    read_head,
    record_with_pass,
    rows_beyond,
)
from meterfix.store.query import Between
from meterfix.store.readings import DamagedReadings, RawReadings, joined, no_readings
from meterfix.store.recovery import Recovery, compare
from meterfix.store.tables import table_named
from meterfix.store.values import Row, decode_array, encode_array

__all__ = [
    "Between",
    "DamagedReadings",
    "Head",
    "Ledger",
    "PassRecord",
    "RawReadings",
    "decode_array",
    "encode_array",
]


class Ledger:
    """An open ledger; use `Ledger.open`. Reads see what was committed when they begin."""

    def __init__(self, url: URL, archive_folder: Path, *, read_only: bool) -> None:
        self.url = url
        self.read_only = read_only
        self.engine: Engine = reader_engine(url)
        self.anchor = Anchor(opening.anchor_file(archive_folder))
        self._lock = WriterLock(opening.lock_file(archive_folder))
        self._writing: Connection | None = None
        self._recovery: Recovery | None = None
        self._settled: set[str] = set()
        try:
            self.id = opening.checked_id(self.engine, archive_folder, self.anchor)
        except BaseException:
            self.engine.dispose()
            raise
        self.archive = Archive(archive_folder, self.id)

    @classmethod
    def open(cls, database_url: str, archive_folder: Path, *, read_only: bool = False) -> Ledger:
        """Open a ledger; make or migrate it first unless it is only to be read.

        Raises
        ------
        LedgerError
            If there is none to be read, or database, archive and anchor do not belong together.
        LedgerBusyError
            If it must be made or migrated while another process writes to it.
        """
        url = parsed_url(database_url)
        if not opening.is_ready(url, archive_folder):
            if read_only:
                raise LedgerError(opening.why_not_ready(url, archive_folder))
            opening.prepare(url, archive_folder)
        return cls(url, archive_folder, read_only=read_only)

    def close(self) -> None:
        """Close every connection."""
        self.engine.dispose()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    @property
    def sqlite_version(self) -> str | None:
        """The SQLite library's version; None on another database."""
        return sqlite3.sqlite_version if sqlite_file(self.url) is not None else None

    # --- the writer --------------------------------------------------------------------------

    @contextlib.contextmanager
    def writer(self) -> Iterator[None]:
        """Hold the writer's lock.

        Raises
        ------
        LedgerBusyError
            At once, if it is taken.
        """
        if self.read_only:
            raise LedgerError("this ledger was opened to be read only")
        self._lock.acquire()
        engine: Engine | None = None
        try:
            self.archive.make_folders()
            engine = writer_engine(self.url)
            with engine.connect() as connection:
                self._lock_server(connection)
                self._writing, self._recovery = connection, None
                try:
                    yield
                    self._checkpoint(connection)
                finally:
                    self._writing = self._recovery = None
        finally:
            # closed before the lock is given back: the last connection checkpoints
            if engine is not None:
                engine.dispose()
            self._lock.release()

    @staticmethod
    def _checkpoint(connection: Connection) -> None:
        """Bring SQLite's write-ahead log home, as far as readers allow, while the lock is held."""
        if connection.dialect.name == "sqlite":
            # on the driver's connection: a checkpoint cannot run inside a transaction
            driver: Any = connection.connection.driver_connection
            driver.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchall()

    def _lock_server(self, connection: Connection) -> None:
        """Take PostgreSQL's advisory lock too: two hosts do not share a file lock."""
        if connection.dialect.name != "postgresql":
            return
        key = struct.unpack(">q", hashlib.sha256(self.id.encode()).digest()[:8])[0]
        # the session holds it, so it outlives the transaction and ends with the connection
        taken = connection.execute(text("SELECT pg_try_advisory_lock(:key)"), {"key": key}).scalar()
        connection.commit()
        if not taken:
            raise LedgerBusyError(f"another host writes to ledger {self.id}")

    def _connection(self) -> Connection:
        if self._writing is None:
            raise LedgerError("writing needs the writer's lock; use `with ledger.writer():`")
        return self._writing

    def recover(self) -> list[dict[str, Any]]:
        """Compare the anchor with the database and return facts that the next pass must chain.

        Unfinished files are removed. The anchor is not written here: `commit` writes what settles
        the facts, together with the pass that chains them, so that a process killed at any moment
        leaves them to be found again.

        Returns
        -------
        list of dict
            `{'fact': 'intent resolved', 'sequence', 'hash', 'committed'}` for a pass that was cut
            short: commit a pass of kind 'resolution'. `{'fact': 'older database restored',
            'database_head', 'database_hash', 'anchor_head'}`: commit one of kind 'restore', then
            adopt what `unknown_raw` gives.

        Raises
        ------
        LedgerError
            If the difference has another cause; nothing is written then.
        """
        self._connection()
        self.archive.sweep()
        return [dict(fact) for fact in self._compare().facts]

    def _compare(self) -> Recovery:
        connection = self._connection()
        audit = table_named("audit")

        def committed(intent: Head) -> bool:
            found = connection.execute(
                select(audit.c.row_hash).where(
                    audit.c.shard == SHARD, audit.c.sequence == intent.sequence
                )
            ).scalar()
            return found == intent.row_hash

        with connection.begin():
            head = read_head(connection)
            self._recovery = compare(
                self.anchor.state(),
                head,
                committed,
                lambda: rows_beyond(connection, head.sequence),
            )
        return self._recovery

    def commit(self, record: PassRecord) -> int:
        """Commit a pass: anchor's intent, one transaction, anchor's done.

        Raises
        ------
        HeadMovedError
            If the chain's head is not the expected one; nothing was written.
        LedgerError
            Without the writer's lock, or while facts found by `recover` are not part of the pass.
        ValueError
            Names table, column and value of a row that cannot be stored; nothing was written.

        Returns
        -------
        int
            The sequence number of the pass.
        """
        connection = self._connection()
        recovery = self._recovery
        if recovery is None:
            recovery = self._compare()
            if recovery.facts:
                self._recovery = None
                raise LedgerError(
                    f"a start-up must be recorded first; call recover: {recovery.facts[0]}"
                )
        if record.kind not in recovery.kinds:
            raise LedgerError(
                f"the next pass must be of kind {recovery.kinds[0]!r}, not {record.kind!r}: "
                f"it chains {recovery.facts[0]}"
            )
        with connection.begin():
            head = read_head(connection)
        assert_head(record, head)
        sequence = head.sequence + 1
        rows = writing.prepared_record(record_with_pass(record), sequence)
        settled = [{"pack": pack} for pack in sorted(self._settled)]
        replace = writing.prepared_outside({**record.replace, "settled_pack": settled}, sequence)
        audit = audit_row(record, head, rows, recovery.facts)
        new = Head(sequence, str(audit["row_hash"]))
        self.anchor.append(*recovery.before, intent_line(new))
        self._write(connection, record, sequence, rows, replace, audit, recovery)
        self.anchor.append(*recovery.after, f"done {sequence}")
        self._recovery = Recovery()
        self._settled.clear()
        return sequence

    def _write(
        self,
        connection: Connection,
        record: PassRecord,
        sequence: int,
        rows: Mapping[str, Sequence[Row]],
        replace: Mapping[str, Sequence[Row]],
        audit: Row,
        recovery: Recovery,
    ) -> None:
        committing = False
        try:
            with contextlib.closing(connection.begin()) as transaction:
                assert_head(record, read_head(connection))
                for name, inserted in rows.items():
                    writing.insert_rows(connection, name, inserted)
                writing.insert_rows(connection, "audit", [audit])
                self._change_outside(connection, record.remove, replace)
                ledger = table_named("ledger")
                connection.execute(
                    update(ledger).where(ledger.c.created_us == 0).values(created_us=record.clock)
                )
                committing = True
                transaction.commit()
        except BaseException:
            # after COMMIT was sent nobody knows; the open intent is for the next recover
            self._recovery = None
            if not committing and not recovery.facts:
                self.anchor.append(f"void {sequence}")
            raise

    @staticmethod
    def _change_outside(
        connection: Connection,
        remove: Mapping[str, Sequence[Mapping[str, Any]]],
        replace: Mapping[str, Sequence[Row]],
    ) -> None:
        for name, keys in remove.items():
            writing.remove_rows(connection, name, keys)
        for name, replaced in replace.items():
            writing.replace_rows(connection, name, replaced)

    def write_outside(
        self,
        replace: Mapping[str, Sequence[Mapping[str, Any]]] | None = None,
        remove: Mapping[str, Sequence[Mapping[str, Any]]] | None = None,
    ) -> None:
        """Change tables outside the chain (heartbeat, attempt, waiting) in an own transaction.

        Takes the writer's lock for as long as that lasts, unless it is held already.
        """
        prepared = writing.prepared_outside(replace or {})
        if self._writing is None:
            with self.writer():
                self.write_outside(replace, remove)
            return
        with self._writing.begin():
            self._change_outside(self._writing, remove or {}, prepared)

    def replace_readings(
        self,
        pass_sequence: int,
        signals: Sequence[str],
        columns: Mapping[str, RawReadings] | Sequence[RawReadings],
    ) -> None:
        """Put readings made again from raw bytes in place of a damaged segment's."""
        self._connection()
        file, digest, spans = self.archive.write_readings(signals, columns)
        key = {"pass_sequence": pass_sequence}
        self.write_outside(
            replace={
                "reading_segment": [{**key, "file": file, "digest": digest}],
                "reading_span": [{**key, **span} for span in spans],
            },
            remove={"reading_span": [key]},
        )

    # --- reading -----------------------------------------------------------------------------

    def head(self) -> Head:
        """Return the chain's last row."""
        with self.engine.connect() as connection:
            return read_head(connection)

    def next_sequence(self) -> int:
        """Return the sequence number that the next commit will get."""
        return self.head().sequence + 1

    def find_pass(self, pass_id: str) -> dict[str, Any] | None:
        """Return the pass with the id that its maker gave it, or None: it was not committed."""
        found = self.rows("pass", where={"id": pass_id})
        return found[0] if found else None

    def rows(
        self,
        table: str,
        *,
        where: Mapping[str, Any] | None = None,
        order: Sequence[str] = (),
        columns: Sequence[str] = (),
    ) -> list[dict[str, Any]]:
        """Return rows of a table.

        Parameters
        ----------
        table : str
        where : mapping, optional
            Column to a value (equal), a list, tuple or set (one of them), or a `Between`.
        order : sequence of str
            Columns to sort by, ascending.
        columns : sequence of str
            Columns to return; all where empty.
        """
        with self.engine.connect() as connection:
            return query.select_rows(connection, table, where, order, columns)

    def latest(
        self,
        table: str,
        *,
        group: Sequence[str],
        number: str,
        where: Mapping[str, Any] | None = None,
        order: Sequence[str] = (),
        columns: Sequence[str] = (),
    ) -> list[dict[str, Any]]:
        """Return, of the rows that `where` admits, the one with the highest `number` per group.

        Sorted by `order`, or by the group's columns.
        """
        with self.engine.connect() as connection:
            return query.latest_rows(connection, table, group, number, where, order, columns)

    def load_readings(
        self, signals: Sequence[str], start: int, end: int, *, up_to_pass: int | None = None
    ) -> dict[str, RawReadings]:
        """Return stored readings with start <= instant <= end [UTC us], of all judgements.

        Parameters
        ----------
        signals : sequence of str
        start, end : int
        up_to_pass : int, optional
            Leave out what later passes brought.

        Returns
        -------
        dict
            Signal to readings, in no particular order; every signal asked for is there.

        Raises
        ------
        DamagedReadings
            Names the segment; `replace_readings` repairs it.
        """
        with self.engine.connect() as connection:
            spans = query.select_rows(
                connection,
                "reading_span",
                {
                    "signal": list(signals),
                    "first_us": Between(None, end),
                    "last_us": Between(start, None),
                    "pass_sequence": Between(None, up_to_pass),
                },
                columns=("pass_sequence", "signal"),
            )
            wanted: dict[int, set[str]] = {}
            for span in spans:
                wanted.setdefault(int(span["pass_sequence"]), set()).add(str(span["signal"]))
            segments = query.select_rows(
                connection, "reading_segment", {"pass_sequence": list(wanted)}, ("pass_sequence",)
            )
        parts: dict[str, list[RawReadings]] = {signal: [] for signal in signals}
        for segment in segments:
            of_pass = wanted[int(segment["pass_sequence"])]
            for signal, found in self.archive.read_readings(segment, of_pass, start, end).items():
                parts[signal].append(found)
        return {
            signal: joined(found) if found else no_readings() for signal, found in parts.items()
        }

    def unknown_raw(self, *, at_most: int | None = None) -> list[PackEntry]:
        """Return deliveries that packs of the archive note and the database does not know.

        They are left by a crash between a pack's rename and COMMIT, or by an older database that
        was put back. `Archive.write_pack` returns their present locations and stores nothing
        twice.

        Parameters
        ----------
        at_most : int, optional
            Stop after this many; call again after committing them.

        Returns
        -------
        list of PackEntry
            In the order of arrival, then of the pack; with their bytes.

        Raises
        ------
        DamagedArchiveError
            If a pack cannot be read.
        """
        with self.engine.connect() as connection:
            entries, settled = unknown_entries(connection, self.archive, at_most)
        # written with the next pass, so that a look without anything new changes nothing
        self._settled.update(settled)
        return entries
