from __future__ import annotations

import os
import sqlite3
import subprocess
import sys
import uuid
from contextlib import closing
from pathlib import Path

import pytest
from sqlalchemy import Integer, exc

from meterfix.errors import HeadMovedError, LedgerBusyError, LedgerError
from meterfix.store import ledger as ledger_module
from meterfix.store.chain import Head
from meterfix.store.engine import (
    READER_PRAGMAS,
    WRITER_PRAGMAS,
    parsed_url,
    read_pragmas,
    writer_engine,
)
from meterfix.store.ledger import PassRecord
from meterfix.store.proof import check_store
from meterfix.store.tables import INSERT_ONLY_TABLES, RECORD_TABLES, metadata
from meterfix.store.triggers import unique_keys

ROOT = Path(__file__).parents[2]


def test_one_writer_at_a_time(ledger, tmp_path, scenario):
    """A second writer is turned away at once, in this process and in another."""
    program = (
        "import sys; sys.path.insert(0, sys.argv[1]); import scenario; from pathlib import Path\n"
        "from meterfix.errors import LedgerBusyError\n"
        "with scenario.open_ledger(Path(sys.argv[2])) as ledger:\n"
        "    try:\n"
        "        with ledger.writer(): print('wrote')\n"
        "    except LedgerBusyError: print('busy')\n"
    )

    def other() -> str:
        return subprocess.run(
            [sys.executable, "-c", program, str(Path(__file__).parent), str(tmp_path)],
            env={**os.environ, "PYTHONPATH": str(ROOT)},
            capture_output=True,
            text=True,
            check=True,
        ).stdout.strip()

    with ledger.writer():
        assert other() == "busy"
        with scenario.open_ledger(tmp_path) as second:
            with pytest.raises(LedgerBusyError), second.writer():
                pass
            with pytest.raises(LedgerBusyError):
                second.write_outside(replace={"heartbeat": [{"id": 1, "last_us": 1}]})
        with pytest.raises(LedgerBusyError), ledger.writer():
            pass
    assert other() == "wrote"


def test_a_pass_on_an_old_head_changes_nothing(ledger, scenario):
    """A pass that was computed on another head is refused, and leaves no trace."""
    scenario.run(ledger, scenario.arrivals(1), 1000)
    anchor = ledger.anchor.path.read_bytes()
    with ledger.writer():
        ledger.recover()
        record = scenario.build_pass(ledger, [scenario.entry_of("day_02.csv", b"x\ny\n", 2)], 2)
        record.expected_head = Head(0, "")
        with pytest.raises(HeadMovedError, match="head is pass 1"):
            ledger.commit(record)
    assert ledger.anchor.path.read_bytes() == anchor
    assert ledger.head().sequence == 1


def test_a_head_that_moves_between_intent_and_transaction(ledger, scenario, monkeypatch):
    """The head is asserted again inside the transaction; the anchor then says void."""
    heads = [Head(0, ""), Head(9, "elsewhere")]
    with ledger.writer():
        ledger.recover()
        record = scenario.build_pass(ledger, [scenario.entry_of("day_02.csv", b"x\ny\n", 2)], 2)
        monkeypatch.setattr(ledger_module, "read_head", lambda _connection: heads.pop(0))
        with pytest.raises(HeadMovedError):
            ledger.commit(record)
        monkeypatch.undo()
        assert ledger.anchor.path.read_text().endswith("void 1\n")
        assert ledger.head().sequence == 0
        assert ledger.rows("delivery") == []
        assert ledger.commit(record) == 1
    assert check_store(ledger) == []


def test_a_pass_that_the_database_refuses_is_void(ledger, scenario):
    """A row that breaks a rule of the database undoes the whole pass."""
    with ledger.writer():
        ledger.recover()
        record = scenario.build_pass(ledger, [scenario.entry_of("day_02.csv", b"x\ny\n", 2)], 2)
        record.rows["fate"][0]["lines_used"] += 1
        with pytest.raises(exc.IntegrityError, match="lines_add_up"):
            ledger.commit(record)
        assert ledger.rows("raw_object") == []
        record.rows["fate"][0]["lines_used"] -= 1
        assert ledger.commit(record) == 1
    assert check_store(ledger) == []


def test_a_pass_is_found_by_its_id(ledger, scenario):
    """A pass whose commit's reply was lost can be looked up by the id that its maker gave."""
    with ledger.writer():
        ledger.recover()
        record = scenario.build_pass(ledger, [scenario.entry_of("day_02.csv", b"x\ny\n", 2)], 2)
        assert ledger.find_pass(record.pass_id) is None
        sequence = ledger.commit(record)
    found = ledger.find_pass(record.pass_id)
    assert found is not None
    assert found["sequence"] == sequence
    assert found["kind"] == "pass"


def test_every_stored_row_refuses_change(ledger, tmp_path, scenario):
    """UPDATE, DELETE and INSERT OR REPLACE are refused in tables of record and audit."""
    scenario.run(ledger, scenario.arrivals(1), 1000)
    engine = writer_engine(parsed_url(f"sqlite:///{tmp_path / 'site.sqlite'}"))
    tried = set()
    for table in INSERT_ONLY_TABLES:
        if not ledger.rows(table):
            continue
        tried.add(table)
        for statement in (
            f'UPDATE "{table}" SET rowid = rowid',
            f'DELETE FROM "{table}"',
            f'INSERT OR REPLACE INTO "{table}" SELECT * FROM "{table}"',
        ):
            with (
                engine.connect() as connection,
                pytest.raises(exc.IntegrityError, match="never changed"),
            ):
                connection.exec_driver_sql(statement)
    engine.dispose()
    assert tried >= {"pass", "delivery", "fate", "set_aside", "total_revision", "audit"}
    assert check_store(ledger) == []


def test_a_plain_connection_cannot_replace_rows(ledger, tmp_path, scenario):
    """INSERT OR REPLACE under any unique key is refused without recursive_triggers too."""
    scenario.run(ledger, scenario.arrivals(1), 1000)
    tried = 0
    with closing(sqlite3.connect(tmp_path / "site.sqlite")) as plain:
        assert plain.execute("PRAGMA recursive_triggers").fetchone() == (0,)
        for name in INSERT_ONLY_TABLES:
            table = metadata.tables[name]
            columns = [column.name for column in table.columns]
            keys = unique_keys(table)
            number = {
                column.name
                for key in keys
                for column in map(table.columns.__getitem__, key)
                if isinstance(column.type, Integer)
            }
            for key in keys if ledger.rows(name) else ():
                # the same key, and another value in every other key
                free = {c for other in keys if other != key for c in other} - {*key}
                values = [
                    c if c not in free else f'"{c}" + 1000' if c in number else f"\"{c}\" || 'x'"
                    for c in columns
                ]
                listed = ", ".join(columns)
                with pytest.raises(sqlite3.IntegrityError, match="never changed"):
                    plain.execute(
                        f'INSERT OR REPLACE INTO "{name}" ({listed}) '
                        f'SELECT {", ".join(values)} FROM "{name}" LIMIT 1'
                    )
                tried += 1
        with pytest.raises(sqlite3.IntegrityError, match="never changed"):
            plain.execute(
                "INSERT OR REPLACE INTO total_revision (rowid, meter, kind, period_start_us, "
                "basis, revision, pass_sequence) SELECT rowid, meter, kind, period_start_us, "
                "basis, revision + 1, pass_sequence FROM total_revision LIMIT 1"
            )
        plain.rollback()
    assert tried >= 8
    assert check_store(ledger) == []


def test_settings_are_what_they_must_be(ledger, tmp_path):
    """Writer and reader have their settings; the reader cannot write."""
    engine = writer_engine(parsed_url(f"sqlite:///{tmp_path / 'site.sqlite'}"))
    with engine.connect() as connection:
        assert read_pragmas(connection, WRITER_PRAGMAS) == WRITER_PRAGMAS
        assert WRITER_PRAGMAS["synchronous"] == 2
    engine.dispose()
    with ledger.engine.connect() as connection:
        assert read_pragmas(connection, READER_PRAGMAS) == READER_PRAGMAS
        with pytest.raises(exc.OperationalError, match="readonly"):
            connection.exec_driver_sql("DELETE FROM heartbeat")


def test_a_setting_that_does_not_hold_is_refused(tmp_path, monkeypatch):
    """A setting that SQLite reads back otherwise stops the ledger."""
    monkeypatch.setitem(WRITER_PRAGMAS, "page_size", 1234)
    engine = writer_engine(parsed_url(f"sqlite:///{tmp_path / 'site.sqlite'}"))
    with pytest.raises(LedgerError, match="PRAGMA page_size is"):
        engine.connect()
    engine.dispose()


def test_a_writer_locks_before_it_reads(ledger, tmp_path):
    """A transaction begins with the write lock, not with a read."""
    engine = writer_engine(parsed_url(f"sqlite:///{tmp_path / 'site.sqlite'}"))
    with engine.connect() as connection, connection.begin():
        other = sqlite3.connect(tmp_path / "site.sqlite", timeout=0)
        with pytest.raises(sqlite3.OperationalError, match="locked"):
            other.execute("BEGIN IMMEDIATE")
        other.close()
    engine.dispose()


def test_writing_needs_the_lock(ledger, tmp_path, scenario):
    """No commit without the writer's lock, and none through a ledger opened to be read."""
    record = PassRecord(uuid.uuid4().hex, "pass", Head(0, ""), "t", 1, {}, {"pass": [{}]})
    with pytest.raises(LedgerError, match="writer's lock"):
        ledger.commit(record)
    with (
        scenario.open_ledger(tmp_path, read_only=True) as reader,
        pytest.raises(LedgerError, match="read only"),
        reader.writer(),
    ):
        pass


def test_outside_and_record_are_kept_apart(ledger, scenario):
    """Rows of record cannot be replaced or removed, rows outside the chain not be inserted."""
    with ledger.writer():
        ledger.recover()
        for table in (*RECORD_TABLES, "audit"):
            with pytest.raises(ValueError, match=table):
                ledger.write_outside(replace={table: [{}]})
            with pytest.raises(ValueError, match=table):
                ledger.write_outside(remove={table: [{"pass_sequence": 1}]})
        record = PassRecord(
            "id",
            "pass",
            ledger.head(),
            "t",
            1,
            {},
            {"pass": [scenario.pass_row(1, 0)], "heartbeat": [{"id": 1, "last_us": 1}]},
        )
        with pytest.raises(ValueError, match="heartbeat is not a table of record"):
            ledger.commit(record)


def test_outside_tables_are_replaced_and_removed(ledger):
    """A heartbeat is one row; waiting files come and go; the chain does not move."""
    for last in (1, 2):
        ledger.write_outside(replace={"heartbeat": [{"id": 1, "last_us": last}]})
    assert ledger.rows("heartbeat", columns=["last_us"]) == [{"last_us": 2}]
    key = {"source": "s", "binding": "", "name": "a.csv"}
    waiting = [{**key, "name": name, "reason": "grows", "seen_us": 1} for name in ("a", "b")]
    ledger.write_outside(replace={"waiting": waiting})
    ledger.write_outside(remove={"waiting": [{"source": "s", "name": "a"}]})
    assert [row["name"] for row in ledger.rows("waiting")] == ["b"]
    with pytest.raises(ValueError, match="at least one column"):
        ledger.write_outside(remove={"waiting": [{}]})
    assert ledger.head().sequence == 0
    assert check_store(ledger) == []


def test_a_ledger_to_be_read_must_exist(tmp_path, scenario):
    """Opening to read makes nothing."""
    with pytest.raises(LedgerError, match="no ledger"):
        scenario.open_ledger(tmp_path, read_only=True)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("url", ["sqlite://", "sqlite:///:memory:", "mysql://x/y", "nonsense"])
def test_an_unusable_database_url(url, tmp_path):
    """A database that cannot hold a ledger is refused by name."""
    with pytest.raises(LedgerError):
        ledger_module.Ledger.open(url, tmp_path)


def test_a_file_that_is_no_database(tmp_path, scenario):
    """Something else under the database's name is refused, and left as it is."""
    path = tmp_path / "site.sqlite"
    path.write_bytes(b"not a database at all" * 100)
    with pytest.raises(LedgerError, match="cannot be opened"):
        scenario.open_ledger(tmp_path)
    assert path.read_bytes() == b"not a database at all" * 100


def test_created_is_the_first_commit(ledger, scenario):
    """The ledger's creation time is the clock of its first commit; its id is in three places."""
    scenario.run(ledger, scenario.arrivals(1), 1234)
    scenario.run(ledger, scenario.arrivals(2), 5678)
    assert ledger.rows("ledger") == [{"id": ledger.id, "created_us": 1234}]
    folder = ledger.archive.folder
    for name in ("anchor", "ledger"):
        assert (folder / name).read_text().splitlines()[0] == f"ledger {ledger.id}"
    assert ledger.sqlite_version == sqlite3.sqlite_version


def test_the_database_file_is_complete_at_rest(ledger, tmp_path, scenario):
    """After a pass the database file alone, without its write-ahead log, holds everything."""
    scenario.run(ledger, scenario.arrivals(1), 1000)
    copy = tmp_path / "copy.sqlite"
    copy.write_bytes((tmp_path / "site.sqlite").read_bytes())
    with sqlite3.connect(copy) as database:
        assert database.execute("SELECT count(*) FROM audit").fetchone() == (1,)
    database.close()
