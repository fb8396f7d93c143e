from __future__ import annotations

import shutil
import sqlite3
import threading
from pathlib import Path

import pytest

from meterfix.errors import LedgerError
from meterfix.store import proof
from meterfix.store.proof import check_store
from meterfix.store.tables import metadata
from meterfix.store.triggers import sqlite_triggers, unique_keys


@pytest.fixture
def folder(tmp_path, scenario, monkeypatch):
    """Make a ledger of three passes, closed; nobody else commits to it."""
    monkeypatch.setattr(proof, "_SETTLING_WAIT", 0.0)
    with scenario.open_ledger(tmp_path) as ledger:
        for last in (2, 3, 4):
            scenario.run(ledger, scenario.arrivals(*range(1, last + 1)), last * 1000)
        assert check_store(ledger) == []
    return tmp_path


def tamper(folder: Path, *statements: str) -> None:
    """Change the database as somebody would who knows SQLite and takes the triggers away."""
    tables = ("total_revision", "audit", "pass", "delivery")
    triggers = sqlite_triggers({name: unique_keys(metadata.tables[name]) for name in tables})
    with sqlite3.connect(folder / "site.sqlite") as database:
        for name in triggers:
            database.execute(f"DROP TRIGGER {name}")
        for statement in statements:
            assert database.execute(statement).rowcount != 0
        for statement in triggers.values():
            database.execute(statement)
    database.close()


def findings_of(folder: Path, scenario) -> list[proof.Finding]:
    with scenario.open_ledger(folder, read_only=True) as ledger:
        return check_store(ledger)


def flip_byte(path: Path, at: int) -> None:
    content = bytearray(path.read_bytes())
    content[at] ^= 1
    path.write_bytes(content)


@pytest.mark.parametrize("at", [-1, 0, 60])
def test_one_byte_of_a_pack(at, folder, scenario):
    """A changed byte of a pack, in an object, its index or its first line, is found and named."""
    pack = min((folder / "archive" / "packs").glob("*.pack"))
    flip_byte(pack, at)
    findings = findings_of(folder, scenario)
    assert findings
    assert {finding.check for finding in findings} == {"archive"}
    assert any(pack.stem in f"{finding.where} {finding.message}" for finding in findings)


def test_a_missing_pack(folder, scenario):
    """Raw bytes that are gone are missed, object by object."""
    min((folder / "archive" / "packs").glob("*.pack")).unlink()
    first = findings_of(folder, scenario)[0]
    assert first.check == "archive"
    assert "cannot be read" in first.message


def test_one_byte_of_the_readings(folder, scenario):
    """A changed byte of a segment of readings is found."""
    segment = min((folder / "archive" / "readings").glob("*.readings"))
    flip_byte(segment, -1)
    (first,) = findings_of(folder, scenario)
    assert first.check == "readings"
    assert "found" in first.message


def test_last_digit_of_a_total(folder, scenario):
    """A total changed in its last bit is named with its key, pass and both digests."""
    with sqlite3.connect(folder / "site.sqlite") as database:
        (mass,) = database.execute("SELECT mass_kg FROM total_revision ORDER BY 1").fetchone()
    database.close()
    changed = mass + 2.0**-43
    assert changed != mass
    tamper(folder, f"UPDATE total_revision SET mass_kg = {changed!r} WHERE mass_kg = {mass!r}")
    (first,) = findings_of(folder, scenario)
    assert (first.check, first.where) == ("rows", "total_revision of pass 1")
    assert (
        "altered or added: meter=FT-101, kind=gas_day, period_start_us=86400000000 "
        "(1970-01-02T00:00:00Z), basis=measured, revision=1, gas day 2026-03-01"
    ) in first.message
    assert "stored in audit 1" in first.message
    assert "recomputed" in first.message


@pytest.mark.parametrize(
    "change",
    [
        "actor = 'nobody'",
        "clock_us = clock_us + 1",
        "note = '{}'",
        "digests = replace(digests, '\"rows\":1', '\"rows\":2')",
        "previous_hash = substr(previous_hash, 2) || substr(previous_hash, 1, 1)",
        "row_hash = substr(row_hash, 2) || substr(row_hash, 1, 1)",
    ],
)
def test_an_audit_row(change, folder, scenario):
    """Whatever is changed in an audit row, the first difference is in that row."""
    tamper(folder, f"UPDATE audit SET {change} WHERE sequence = 2")
    first = findings_of(folder, scenario)[0]
    assert (first.check, first.where) == ("chain", "audit 2")
    assert "stored" in first.message


def test_last_audit_row_cut(folder, scenario):
    """Cutting exactly the last audit row is seen, and a start-up refuses to build on it."""
    tamper(folder, "DELETE FROM audit WHERE sequence = 3")
    first = findings_of(folder, scenario)[0]
    assert (first.check, first.where) == ("chain", "audit 3")
    assert "is missing" in first.message
    before = (folder / "archive" / "anchor").read_bytes()
    with scenario.open_ledger(folder) as ledger, pytest.raises(LedgerError, match="chain was cut"):
        scenario.run(ledger, scenario.arrivals(5), 9000)
    assert (folder / "archive" / "anchor").read_bytes() == before


def test_total_deleted_with_its_audit_row(folder, scenario):
    """A total deleted together with its audit row leaves a gap that is named."""
    tamper(
        folder,
        "DELETE FROM total_revision WHERE pass_sequence = 2",
        "DELETE FROM audit WHERE sequence = 2",
    )
    first = findings_of(folder, scenario)[0]
    assert (first.check, first.where) == ("chain", "audit 2")
    assert "is missing" in first.message


def test_total_deleted(folder, scenario):
    """A deleted total is missed, although the rest of its pass is whole."""
    tamper(folder, "DELETE FROM total_revision WHERE pass_sequence = 1 AND mass_kg < 1000.2")
    (first,) = findings_of(folder, scenario)
    assert (first.check, first.where) == ("rows", "total_revision of pass 1")
    assert "1 deleted" in first.message


def test_two_totals_swapped(folder, scenario):
    """Two valid totals that have changed places are both named."""
    tamper(
        folder,
        "UPDATE total_revision SET period_start_us = 1 WHERE gas_day = '2026-03-01'",
        "UPDATE total_revision SET period_start_us = 86400000000, period_end_us = 172800000000 "
        "WHERE gas_day = '2026-03-02'",
        "UPDATE total_revision SET period_start_us = 172800000000, period_end_us = 259200000000 "
        "WHERE period_start_us = 1",
    )
    (first,) = findings_of(folder, scenario)
    assert (first.check, first.where) == ("rows", "total_revision of pass 1")
    assert "and 1 more" in first.message


def test_two_totals_swapped_between_passes(folder, scenario):
    """Two valid totals that have exchanged their passes are found in the first of them."""
    tamper(
        folder,
        "UPDATE total_revision SET pass_sequence = 3 WHERE gas_day = '2026-03-01'",
        "UPDATE total_revision SET pass_sequence = 1 WHERE gas_day = '2026-03-04'",
    )
    findings = findings_of(folder, scenario)
    assert [finding.where for finding in findings] == [
        "total_revision of pass 1",
        "total_revision of pass 3",
    ]


def test_two_audit_rows_swapped(folder, scenario):
    """Two valid audit rows that have changed places are found."""
    tamper(
        folder,
        "UPDATE audit SET sequence = 99 WHERE sequence = 2",
        "UPDATE audit SET sequence = 2 WHERE sequence = 3",
        "UPDATE audit SET sequence = 3 WHERE sequence = 99",
    )
    first = findings_of(folder, scenario)[0]
    assert (first.check, first.where) == ("chain", "audit 2")


def test_a_row_without_a_pass(folder, scenario):
    """A total that no pass brought is found."""
    tamper(
        folder,
        "INSERT INTO pass SELECT 4, 'x', kind, now_us, started_us, finished_us, files, readings, "
        "days, note, 4 FROM pass WHERE sequence = 3",
        "UPDATE total_revision SET pass_sequence = 4 WHERE gas_day = '2026-03-01'",
    )
    findings = findings_of(folder, scenario)
    assert findings[0].where == "total_revision of pass 1"
    assert any(f.where == "audit 4" and "is missing" in f.message for f in findings)


def test_a_trigger_is_gone_or_another(folder, scenario):
    """A missing trigger, or one of the same name that does nothing, is found."""
    with sqlite3.connect(folder / "site.sqlite") as database:
        database.execute("DROP TRIGGER audit_refuses_update")
        database.execute("DROP TRIGGER fate_refuses_delete")
        database.execute(
            "CREATE TRIGGER fate_refuses_delete BEFORE DELETE ON fate BEGIN SELECT 1; END"
        )
    database.close()
    assert [finding.where for finding in findings_of(folder, scenario)] == [
        "trigger fate_refuses_delete",
        "trigger audit_refuses_update",
    ]


def test_anchor_altered(folder, scenario):
    """A line that is taken out of the anchor is missed."""
    anchor = folder / "archive" / "anchor"
    lines = anchor.read_text().splitlines()
    anchor.write_text("\n".join(line for line in lines if line != "done 2") + "\n")
    findings = findings_of(folder, scenario)
    assert findings[0].check == "anchor"
    assert "line" in findings[0].message


def test_done_of_the_last_pass_missing(folder, scenario):
    """An anchor without the last `done` fails the proof until a start-up has recorded it."""
    anchor = folder / "archive" / "anchor"
    anchor.write_text(anchor.read_text().removesuffix("done 3\n"))
    (only,) = findings_of(folder, scenario)
    assert (only.check, only.where) == ("anchor", "audit 3")
    with scenario.open_ledger(folder) as ledger:
        facts = scenario.run(ledger, {}, 9000)
        assert [(fact["sequence"], fact["committed"]) for fact in facts] == [(3, True)]
        assert check_store(ledger) == []


def test_anchor_older_than_the_database(folder, scenario):
    """A database that is ahead of its archive's anchor is found and not built upon."""
    anchor = folder / "archive" / "anchor"
    anchor.write_text("".join(anchor.read_text().splitlines(keepends=True)[:5]))
    findings = findings_of(folder, scenario)
    assert (findings[0].check, findings[0].where) == ("anchor", "audit 3")
    with (
        scenario.open_ledger(folder) as ledger,
        pytest.raises(LedgerError, match="never announced"),
    ):
        scenario.run(ledger, scenario.arrivals(5), 9000)


def test_database_of_another_ledger(folder, tmp_path_factory, scenario):
    """Database, archive and anchor of different ledgers are refused, with their ids."""
    other = tmp_path_factory.mktemp("other")
    with scenario.open_ledger(other) as ledger:
        scenario.run(ledger, scenario.arrivals(1), 1000)
        foreign = ledger.id
    shutil.copy(other / "site.sqlite", folder / "site.sqlite")
    with pytest.raises(LedgerError, match=foreign):
        scenario.open_ledger(folder)


def test_empty_database_beside_a_full_archive(folder, scenario):
    """A database that is gone is not silently replaced by an empty one."""
    for path in folder.glob("site.sqlite*"):
        path.unlink()
    with pytest.raises(LedgerError, match="is empty"):
        scenario.open_ledger(folder)


def test_archive_gone(folder, scenario):
    """A database whose archive is gone is refused."""
    shutil.rmtree(folder / "archive")
    with pytest.raises(LedgerError, match="no anchor"):
        scenario.open_ledger(folder)


def test_proof_while_another_process_writes(tmp_path, scenario):
    """A proof beside a working service is of one moment and finds nothing."""
    scenario.open_ledger(tmp_path).close()
    stop = threading.Event()

    def serve() -> None:
        with scenario.open_ledger(tmp_path) as writing:
            for number in range(1, 29):
                if stop.is_set():
                    break
                scenario.run(writing, scenario.arrivals(number), number * 1000)

    thread = threading.Thread(target=serve)
    beside = 0
    with scenario.open_ledger(tmp_path, read_only=True) as ledger:
        thread.start()
        try:
            for _ in range(10):
                beside += thread.is_alive()
                assert check_store(ledger) == []
                if not thread.is_alive():
                    break
        finally:
            stop.set()
            thread.join()
    assert beside > 0
