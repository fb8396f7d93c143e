"""Whatever is changed behind the ledger's back, `verify` finds it and names it first."""

from __future__ import annotations

import math
import re
import shutil
import sqlite3
import struct
from collections.abc import Callable
from contextlib import closing
from pathlib import Path

import pytest
from click.testing import CliRunner

from meterfix.faces.commands import main

DAYS_CLOSED = "2026-10-03T12:00:00Z"
"""The days are closed, the month is open."""


def verified(site: Path) -> tuple[int, str]:
    """Run the command; return its exit code and its first line."""
    result = CliRunner().invoke(main, ["verify", "--site", str(site)])
    assert result.exception is None or isinstance(result.exception, SystemExit), result.output
    return result.exit_code, result.output.splitlines()[0]


@pytest.fixture(scope="module")
def good(hall, flawed_day, tmp_path_factory) -> Path:
    """Make a ledger of three passes, half of the files, the rest, closing, and yesterday's copy.

    Yesterday's database is the one after the first pass.
    """
    folder = tmp_path_factory.mktemp("good") / "site"
    shutil.copytree(flawed_day.parent, folder)
    site = folder / flawed_day.name
    later = sorted((folder / "logs").rglob("*2026-10-02*"))
    assert len(later) > 3
    for path in later:
        path.rename(path.with_name(f"{path.name}.later"))
    hall.run(site, hall.EARLY)
    shutil.copy(folder / "meterfix.sqlite", folder / "yesterday.sqlite")
    for path in later:
        path.with_name(f"{path.name}.later").rename(path)
    hall.run(site, hall.EARLY)
    hall.run(site, DAYS_CLOSED)
    assert len(hall.rows(site, "audit")) == 3
    assert verified(site)[0] == 0
    return site


def tamper(site: Path, change: Callable[[sqlite3.Connection], None]) -> None:
    """Change the database as somebody does who knows it: its guards are off and on again."""
    with closing(sqlite3.connect(site.parent / "meterfix.sqlite")) as database:
        guards = database.execute(
            "SELECT name, sql FROM sqlite_schema WHERE type = 'trigger'"
        ).fetchall()
        for name, _ in guards:
            database.execute(f"DROP TRIGGER {name}")
        change(database)
        for _, statement in guards:
            database.execute(statement)
        database.commit()


def next_bit(table: str, column: str) -> Callable[[sqlite3.Connection], None]:
    """Return a change of the last bit of one figure."""

    def change(database: sqlite3.Connection) -> None:
        at, value = database.execute(
            f"SELECT rowid, {column} FROM {table} WHERE {column} > 0 LIMIT 1"
        ).fetchone()
        database.execute(
            f"UPDATE {table} SET {column} = ? WHERE rowid = ?", (math.nextafter(value, 0.0), at)
        )

    return change


def one_byte(table: str, column: str) -> Callable[[sqlite3.Connection], None]:
    """Return a change of one bit in the middle of an array."""

    def change(database: sqlite3.Connection) -> None:
        at, blob = database.execute(f"SELECT rowid, {column} FROM {table} LIMIT 1").fetchone()
        changed = bytearray(blob)
        changed[8 * 11 * 3 + 1] ^= 1  # of a number that no array of hours leaves 0
        database.execute(f"UPDATE {table} SET {column} = ? WHERE rowid = ?", (bytes(changed), at))

    return change


def next_digit(table: str) -> Callable[[sqlite3.Connection], None]:
    """Return a change of the last digit of the first contribution that a row holds."""

    def change(database: sqlite3.Connection) -> None:
        at, text = database.execute(
            f"SELECT rowid, uncertainty FROM {table} WHERE uncertainty LIKE '%.%' LIMIT 1"
        ).fetchone()
        end = re.search(r"\[-?\d+\.\d+", text).end()
        digit = str((int(text[end - 1]) + 1) % 10)
        database.execute(
            f"UPDATE {table} SET uncertainty = ? WHERE rowid = ?",
            (text[: end - 1] + digit + text[end:], at),
        )

    return change


def audit_letter(database: sqlite3.Connection) -> None:
    database.execute("UPDATE audit SET actor = 'meterfiy' WHERE sequence = 2")


def cut_last_audit_row(database: sqlite3.Connection) -> None:
    database.execute("DELETE FROM audit WHERE sequence = 3")


def cut_last_pass(database: sqlite3.Connection) -> None:
    for (table,) in database.execute(
        "SELECT name FROM sqlite_schema WHERE type = 'table' AND sql LIKE '%pass_sequence%'"
    ).fetchall():
        database.execute(f'DELETE FROM "{table}" WHERE pass_sequence = 3')
    database.execute("DELETE FROM audit WHERE sequence = 3")


def delete_total_and_audit_row(database: sqlite3.Connection) -> None:
    database.execute(
        "DELETE FROM total_revision WHERE rowid = (SELECT max(rowid) FROM total_revision)"
    )
    database.execute("DELETE FROM audit WHERE sequence = 3")


def swap_totals(database: sqlite3.Connection) -> None:
    """Each of two meters gets the other's row."""
    one, other = [
        row[0]
        for row in database.execute(
            "SELECT DISTINCT meter FROM total_revision WHERE revision = 1 ORDER BY meter LIMIT 2"
        )
    ]
    for old, new in ((one, "x"), (other, one), ("x", other)):
        database.execute("UPDATE total_revision SET meter = ? WHERE meter = ?", (new, old))


def swap_audit_rows(database: sqlite3.Connection) -> None:
    for old, new in ((1, 9), (2, 1), (9, 2)):
        database.execute("UPDATE audit SET sequence = ? WHERE sequence = ?", (new, old))


TAMPERED = {
    "last bit of a total": (next_bit("total_revision", "mass_kg"), "rows: total_revision of pass"),
    "a bit of an hourly record": (
        one_byte("hourly_record", "statistics"), "rows: hourly_record of pass"
    ),
    "last bit of an open total": (next_bit("open_total", "base_volume_m3"), "base_volume_m3: "),
    "a letter of an audit row": (audit_letter, "chain: audit 2"),
    "the last audit row cut": (cut_last_audit_row, "chain: audit 3"),
    "the last pass cut, all of it": (cut_last_pass, "audit 3"),
    "a total deleted with its audit row": (delete_total_and_audit_row, "chain: audit 3"),
    "two totals swapped": (swap_totals, "rows: total_revision of pass"),
    "two audit rows swapped": (swap_audit_rows, "chain: audit 1"),
}  # fmt: skip


@pytest.mark.parametrize("what", TAMPERED)
def test_changed_database_is_found(what, hall, copy_of, good):
    """Verify exits 1 and names first what was changed."""
    change, named = TAMPERED[what]
    site = copy_of(good)
    tamper(site, change)
    code, first = verified(site)
    assert code == 1
    assert named in first, first


REPLAYED = {
    "sensitivities": (
        one_byte("hourly_record", "sensitivities"), "hourly_record of pass", ", gas day"
    ),
    "standard_uncertainty": (
        one_byte("hourly_record", "standard_uncertainty"), "hourly_record of pass", ", gas day"
    ),
    "uncertainty": (next_digit("total_revision"), "total_revision of pass", ", gas day"),
    "energy_expanded_uncertainty_J": (
        next_bit("total_revision", "energy_expanded_uncertainty_J"),
        "total_revision of pass", ", gas day",
    ),
    "uncertainty of a month": (next_digit("open_total"), "", ", month"),
    "uncertainty of a balance": (
        next_digit("balance_revision"), "balance_revision of pass", "envelope hall"
    ),
    "expanded_uncertainty": (
        next_bit("balance_revision", "expanded_uncertainty"),
        "balance_revision of pass", "envelope hall",
    ),
    "uncertainty of an open balance": (next_digit("open_balance"), "", "envelope hall"),
}  # fmt: skip


@pytest.mark.parametrize("what", REPLAYED)
def test_changed_uncertainty_is_found_and_replayed(what, hall, copy_of, good):
    """The digests of a closed row find it first; so does the replay, which names the figure."""
    change, digested, where = REPLAYED[what]
    site = copy_of(good)
    tamper(site, change)
    findings = hall.prove(site).findings
    if digested:
        assert (findings[0].check, findings[0].where[: len(digested)]) == ("rows", digested)
    first = next(finding for finding in findings if finding.check == "figures")
    assert first.message.startswith(f"{what.partition(' of ')[0]}: stored ")
    assert where in first.where


UNREADABLE = {
    "hourly_record": ("parameters = '[['", "sensitivities = x'00'",
                      """parameters = '[["bore", "x"]]'"""),
    "total_revision": ("uncertainty = '{'", "uncertainty = '[1]'", "uncertainty = '{}'"),
    "balance_revision": ("uncertainty = '{}'", "uncertainty = '{'", "uncertainty = '[1]'"),
}  # fmt: skip


@pytest.mark.parametrize("number", range(3))
def test_what_cannot_be_read_is_a_finding(number, copy_of, good):
    """Uncertainties that were made unreadable are named; verify does not break off."""
    site = copy_of(good)
    for table, changes in UNREADABLE.items():
        tamper(site, lambda db, t=table, c=changes[number]: db.execute(f"UPDATE {t} SET {c}"))
    code, first = verified(site)
    assert code == 1
    assert first.startswith("rows: ")


# --- a ledger from another machine ---------------------------------------------------------------


@pytest.fixture(scope="module")
def elsewhere(hall, flawed_day, tmp_path_factory) -> Path:
    """Make a ledger of open days that says that another machine computed it."""
    folder = tmp_path_factory.mktemp("elsewhere") / "site"
    shutil.copytree(flawed_day.parent, folder)
    site = folder / flawed_day.name
    hall.run(site, hall.EARLY)
    for table in ("open_total", "open_balance"):
        tamper(site, lambda db, t=table: db.execute(f"UPDATE {t} SET fingerprint = 'another'"))
    return site


def moved(column: str, relative: float) -> Callable[[sqlite3.Connection], None]:
    """Return a relative change of the largest value that the hours hold in a column."""

    def change(database: sqlite3.Connection) -> None:
        at, blob = database.execute(f"SELECT rowid, {column} FROM open_hourly LIMIT 1").fetchone()
        values = list(struct.unpack(f"<{len(blob) // 8}d", blob))
        largest = max(range(len(values)), key=lambda n: abs(values[n]))
        values[largest] *= 1.0 + relative
        changed = struct.pack(f"<{len(values)}d", *values)
        database.execute(f"UPDATE open_hourly SET {column} = ? WHERE rowid = ?", (changed, at))

    return change


def test_ledger_of_another_machine_is_proved_within_a_tolerance(hall, elsewhere):
    """Figures of another fingerprint are replayed, and sums over stored hours to the bit."""
    proof = hall.prove(elsewhere)
    assert not proof.findings
    assert proof.elsewhere == len(hall.METERS)


@pytest.mark.parametrize(
    ("change", "named"),
    [
        (moved("sensitivities", 1e-6), ("sensitivities: ", "random_variance: ")),
        (moved("sensitivities", 1e-13), ("uncertainty: ",)),
        (moved("standard_uncertainty", 1e-13), ("standard_uncertainty: ",)),
        (next_digit("open_total"), ("uncertainty: ",)),
    ],
    ids=["beyond the tolerance", "within it", "of an hour", "of a day"],
)
def test_changed_uncertainty_of_another_machine_is_found(change, named, hall, copy_of, elsewhere):
    """What no longer follows from the stored hours is found, however small."""
    site = copy_of(elsewhere)
    tamper(site, change)
    found = hall.prove(site).findings
    assert any(finding.message.startswith(named) for finding in found), found


# --- the archive ---------------------------------------------------------------------------------


@pytest.mark.parametrize("part", [0.1, 0.5, 0.999])
def test_one_byte_of_the_archive_is_found(part, copy_of, good):
    """One bit of a pack, in its index, its middle or its end: found and named."""
    site = copy_of(good)
    pack = max((site.parent / "archive" / "packs").glob("*.pack"), key=lambda p: p.stat().st_size)
    content = bytearray(pack.read_bytes())
    content[int(part * len(content))] ^= 4
    pack.write_bytes(bytes(content))
    code, first = verified(site)
    assert code == 1
    assert first.startswith("archive: ")
    assert pack.stem in first


def test_guards_that_are_gone_are_found(copy_of, good):
    """A trigger that was taken away is a difference too."""
    site = copy_of(good)
    with closing(sqlite3.connect(site.parent / "meterfix.sqlite")) as database:
        database.execute("DROP TRIGGER total_revision_refuses_update")
        database.commit()
    code, first = verified(site)
    assert code == 1
    assert "total_revision_refuses_update" in first


# --- an older database beside a newer archive ----------------------------------------------------


def put_yesterday_back(site: Path) -> None:
    for path in site.parent.glob("meterfix.sqlite-*"):
        path.unlink()
    (site.parent / "yesterday.sqlite").replace(site.parent / "meterfix.sqlite")


def check_adopted(site: Path, hall, before: dict, counted: dict, now: str) -> None:
    code, first = verified(site)
    assert code == 1
    assert first.startswith("anchor: ")
    assert "older copy" in first
    hall.run(site, now)
    assert verified(site)[0] == 0
    assert hall.differences(before, hall.figures(site)) == []
    assert hall.sums(site) == counted
    shown = CliRunner().invoke(main, ["show", "passes", "--site", str(site), "--format", "csv"])
    assert shown.exit_code == 0
    assert "restore" in shown.output
    # and that is the end of it
    settled = hall.everything(site)
    hall.run(site, now)
    assert hall.differences(settled, hall.everything(site)) == []


def test_yesterdays_database_beside_todays_archive(hall, copy_of, good):
    """It is found; the next pass adopts what the archive holds, and nothing is lost."""
    site = copy_of(good)
    before, counted = hall.figures(site), hall.sums(site)
    put_yesterday_back(site)
    check_adopted(site, hall, before, counted, DAYS_CLOSED)


def test_yesterdays_database_after_the_logs_were_removed(hall, copy_of, good):
    """Adopting needs the archive only: the log folders may be empty by then."""
    site = copy_of(good)
    before, counted = hall.figures(site), hall.sums(site)
    put_yesterday_back(site)
    for path in (site.parent / "logs").rglob("*.csv*"):
        path.unlink()
    check_adopted(site, hall, before, counted, DAYS_CLOSED)


def test_yesterdays_database_and_a_file_that_grew(hall, tmp_path):
    """Tails that the archive holds are adopted; the growing file's newest end follows them."""
    text = hall.hall_text().replace('delivery = "whole"', 'delivery = "appended"')
    site = hall.new_site(tmp_path / "site", text)
    logs = hall.hall_logs(1)
    for number, until in enumerate(("2026-10-01T12:00", "2026-10-01T18:00", "2026-10-01T21:00")):
        for log in logs:
            log.between("", until).put(site, "2026", changed=hall.WRITTEN + number)
        hall.run(site, hall.EARLY)
        if number == 0:
            shutil.copy(site.parent / "meterfix.sqlite", site.parent / "yesterday.sqlite")
    before, counted = hall.figures(site), hall.sums(site)
    assert counted["lines_duplicate"] == 0
    put_yesterday_back(site)
    check_adopted(site, hall, before, counted, hall.EARLY)
    for log in logs:
        log.put(site, "2026", changed=hall.WRITTEN + 9)
    hall.run(site, hall.EARLY)
    assert hall.sums(site)["lines_duplicate"] == 0
    assert sum(len(log.rows) for log in logs) == hall.sums(site)["lines_used"]
    assert not hall.prove(site).findings


# --- derived readings ----------------------------------------------------------------------------


def segments(site: Path) -> dict[str, bytes]:
    folder = site.parent / "archive" / "readings"
    return {path.name: path.read_bytes() for path in folder.glob("*.readings")}


def test_removed_segment_of_readings_is_made_again(hall, copy_of, good):
    """Verify names the missing segment; process makes it again from raw bytes, to the bit."""
    site = copy_of(good)
    before, whole = hall.everything(site), segments(site)
    for name in whole:
        (site.parent / "archive" / "readings" / name).unlink()
    code, first = verified(site)
    assert code == 1
    assert first.startswith("readings: readings of pass 1")
    assert segments(site) == {}
    hall.run(site, DAYS_CLOSED)
    assert segments(site) == whole
    assert hall.differences(before, hall.everything(site)) == []
    assert verified(site)[0] == 0


def test_damaged_segment_of_readings_is_made_again(hall, copy_of, good):
    """Verify names the damaged segment; the next pass that reads it makes it again first."""
    site = copy_of(good)
    whole = segments(site)
    for name, content in whole.items():
        damaged = bytearray(content)
        damaged[-5] ^= 1
        (site.parent / "archive" / "readings" / name).write_bytes(bytes(damaged))
    code, first = verified(site)
    assert code == 1
    assert first.startswith("readings: readings of pass 1")
    # a late file that touches the same day: the day's readings are needed again
    late = site.parent / "logs" / "weather" / "barometer_late_2026-10-03.csv"
    late_rows = "time,barometer\n2026-10-01T20:30:00Z,1001.0\n2026-10-02T02:30:00Z,1001.0\n"
    hall.lay(late, late_rows.encode())
    hall.run(site, DAYS_CLOSED)
    again = segments(site)
    assert {name: again[name] for name in whole} == whole
    assert verified(site)[0] == 0
    assert {row["verdict"] for row in hall.rows(site, "fate")} == {"accepted"}
