"""When a period closes, what a later change does to it, and what another site file does."""

from __future__ import annotations

import os
import re
import shutil
from pathlib import Path

import pytest

OPEN = "2026-10-02T06:00:00Z"
"""The first gas day is over; its deadline is at 16:00 UTC, twelve hours after its end."""
DEADLINE = "2026-10-02T16:00:00Z"
MONTH_DEADLINE = "2026-11-01T17:00:00Z"
"""The month ends at 06:00 local winter time."""


@pytest.fixture(scope="module")
def logs(hall):
    return hall.hall_logs(1)


@pytest.fixture
def site(hall, tmp_path) -> Path:
    return hall.new_site(tmp_path / "site", hall.hall_text())


def stages(hall, site: Path) -> dict[tuple[str, str], int]:
    """Return how many revisions stand by meter and kind; 0 while open."""
    found = {(row["meter"], row["kind"]): 0 for row in hall.rows(site, "open_total")}
    for row in hall.rows(site, "total_revision"):
        key = (row["meter"], row["kind"])
        found[key] = max(found.get(key, 0), row["revision"])
    return found


def all_at(hall, day: int, month: int) -> dict[tuple[str, str], int]:
    return {
        (meter, kind): number
        for meter in hall.METERS
        for kind, number in (("gas_day", day), ("month", month))
    }


def test_day_and_month_close_at_their_deadlines(hall, site, logs):
    """Open until the deadline, provisional from that very instant on; the month likewise."""
    hall.put_all(site, logs)
    hall.run(site, OPEN)
    assert stages(hall, site) == all_at(hall, 0, 0)
    opened = hall.figures(site)
    untouched = hall.everything(site)
    hall.run(site, "2026-10-02T15:59:59.999999Z")
    assert hall.differences(untouched, hall.everything(site)) == []
    hall.run(site, DEADLINE)
    assert stages(hall, site) == all_at(hall, 1, 0)
    assert hall.rows(site, "open_hourly") == []
    hall.run(site, MONTH_DEADLINE)
    assert stages(hall, site) == all_at(hall, 1, 1)
    assert hall.rows(site, "open_total") == []
    assert hall.rows(site, "open_balance") == []
    events = hall.rows(site, "period_event")
    assert {row["stage"] for row in events} == {"provisional"}
    assert len(events) == 2 * len(hall.METERS)
    assert {row["reason"] for row in hall.rows(site, "total_revision")} == {
        "the deadline has passed"
    }
    # closing changes no figure
    assert hall.differences(opened, hall.figures(site)) == []
    assert not hall.prove(site).findings


def test_late_file_makes_a_revision_of_day_and_month(hall, site, logs, tmp_path):
    """A file that comes after the close revises what it touches, with the reason; nothing else."""
    late = next(log for log in logs if log.meter == "FT-301")
    first, rest = late.between("", "2026-10-01T15:00"), late.between("2026-10-01T15:00", "2027")
    for log in logs:
        (first if log is late else log).put(site, "a")
    hall.run(site, MONTH_DEADLINE)
    assert stages(hall, site) == all_at(hall, 1, 1)
    rest.put(site, "b")
    hall.run(site, "2026-11-02T00:00:00Z")
    expected = all_at(hall, 1, 1) | {("FT-301", "gas_day"): 2, ("FT-301", "month"): 2}
    assert stages(hall, site) == expected
    revised = [row for row in hall.rows(site, "total_revision") if row["revision"] == 2]
    assert {row["reason"] for row in revised} == {"later readings"}
    masses = {row["revision"]: row["mass_kg"] for row in
              hall.rows(site, "total_revision", meter="FT-301", kind="gas_day")}  # fmt: skip
    assert masses[2] > 1.5 * masses[1] > 0.0
    balances = [row for row in hall.rows(site, "balance_revision") if row["kind"] == "gas_day"]
    assert {row["revision"] for row in balances} == {1, 2}
    assert {row["revision_reason"] for row in balances if row["revision"] == 2} == {
        "later readings"
    }
    assert len(hall.rows(site, "period_event", subject="meter FT-301")) == 2
    assert not hall.prove(site).findings
    # the bits are those of a site that got all in time
    other = hall.new_site(tmp_path / "other", hall.hall_text())
    hall.put_all(other, logs)
    hall.run(other, MONTH_DEADLINE)
    assert hall.differences(hall.figures(other), hall.figures(site)) == []


def test_nothing_closes_while_the_clock_is_behind(hall, site, logs):
    """A clock behind the last pass closes nothing and says so; once it caught up, days close."""
    for log in logs:
        log.between("", "2026-10-01T20:00").put(site, "a")
    hall.run(site, "2026-10-02T15:00:00Z")
    for log in logs:
        log.between("2026-10-01T20:00", "2027").put(site, "b")
    # the deadline is long past by another clock's word; this one has jumped back from there
    hall.run(site, "2026-10-20T00:00:00Z")
    assert stages(hall, site) == all_at(hall, 1, 0)
    days = hall.hall_logs(2)
    for log in days:
        log.between("2026-10-02T04:02", "2026-10-03T04:00").put(site, "c")
    hall.run(site, "2026-10-19T00:00:00Z")
    closed = [row["gas_day"] for row in hall.rows(site, "total_revision", kind="gas_day")]
    assert set(closed) == {"2026-10-01"}
    still_open = {row["gas_day"] for row in hall.rows(site, "open_total", kind="gas_day")}
    assert still_open == {"2026-10-02"}
    assert [state for state, _ in hall.events(site, "clock behind")] == ["opened"]
    hall.run(site, "2026-10-19T12:00:00Z")
    assert [state for state, _ in hall.events(site, "clock behind")] == ["opened"]
    hall.run(site, "2026-10-20T00:00:01Z")
    assert [state for state, _ in hall.events(site, "clock behind")] == ["opened", "closed"]
    assert hall.rows(site, "open_total", kind="gas_day") == []
    assert not hall.prove(site).findings


def test_nothing_closes_while_a_readable_file_waits_for_its_turn(hall, site, logs, monkeypatch):
    """A backlog that needs many passes closes in the last of them, with all its readings."""
    from meterfix.run import gather

    for log in logs:
        for hour in range(4, 29, 6):
            start, end = (f"2026-10-{1 + h // 24:02d}T{h % 24:02d}" for h in (hour, hour + 6))
            log.between(start, end).put(site, f"{hour:02d}")
    monkeypatch.setattr(gather, "SLICE_FILES", 4)
    done = hall.run(site, DEADLINE)
    assert done.passes >= 6
    assert stages(hall, site) == all_at(hall, 1, 0)
    last = max(row["sequence"] for row in hall.rows(site, "pass"))
    assert {row["pass_sequence"] for row in hall.rows(site, "total_revision")} == {last}
    assert not hall.prove(site).findings


def test_file_that_is_still_written_holds_no_close_and_is_named(hall, site, logs):
    """A growing file delays nothing beyond the deadline; the close says that it was waiting."""
    hall.put_all(site, logs)
    growing = site.parent / "logs" / "works" / "FT-301_2026-10-02.csv"
    hall.lay(growing, b"time,dp,p,t\n2026-10-02T0")
    growing.touch()
    soon = growing.stat().st_mtime + 60.0
    os.utime(growing, (soon, soon))
    done = hall.run(site, DEADLINE)
    assert any("FT-301_2026-10-02.csv" in text for text in done.waiting)
    assert stages(hall, site) == all_at(hall, 1, 0)
    reasons = {row["reason"] for row in hall.rows(site, "total_revision")}
    assert reasons == {"the deadline has passed; without works: FT-301_2026-10-02.csv"}
    assert not hall.prove(site).findings


# --- another site file ---------------------------------------------------------------------------


@pytest.fixture(scope="module")
def closed_days(hall, tmp_path_factory) -> Path:
    """Three closed days and their closed month: to be copied."""
    site = hall.new_site(tmp_path_factory.mktemp("closed") / "site", hall.hall_text())
    hall.put_all(site, hall.hall_logs(3))
    hall.run(site, MONTH_DEADLINE)
    return site


@pytest.fixture
def closed(closed_days, tmp_path) -> Path:
    shutil.copytree(closed_days.parent, tmp_path / "site")
    return tmp_path / "site" / closed_days.name


BORE = """
[[meter.FT-301.change]]
since = "2026-10-03T12:00:00+02:00"
nozzle = { bore = "42.50 mm" }

"""


def with_change(text: str, change: str) -> str:
    at = text.index("[meter.FT-302]")
    return text[:at] + change + text[at:]


def test_bore_from_an_instant_on_revises_only_the_days_it_touches(hall, closed):
    """A new nozzle on the third day: a revision of that day, its month and its balance alone."""
    text, before = closed.read_text(), hall.figures(closed)
    closed.write_text(with_change(text, BORE))
    hall.run(closed, "2026-11-02T00:00:00Z")
    revised = [row for row in hall.rows(closed, "total_revision") if row["revision"] > 1]
    assert {(row["meter"], row["kind"], row["gas_day"], row["reason"]) for row in revised} == {
        ("FT-301", "gas_day", "2026-10-03", "the site file changed"),
        ("FT-301", "month", "2026-10-01", "the site file changed"),
    }
    balances = [row for row in hall.rows(closed, "balance_revision") if row["revision"] > 1]
    assert {row["gas_day"] for row in balances if row["kind"] == "gas_day"} == {"2026-10-03"}
    assert {row["judgement"] for row in hall.rows(closed, "fate")} == {1}
    assert len(hall.rows(closed, "site_version")) == 2
    assert not hall.prove(closed).findings
    # hours before the exchange keep every bit
    hours = {row["revision"]: row["statistics"] for row in
             hall.rows(closed, "hourly_record", meter="FT-301", gas_day="2026-10-03")}  # fmt: skip
    width = len(hours[1]) // 24
    assert hours[1][: 6 * width] == hours[2][: 6 * width]
    assert hours[1][6 * width : 7 * width] != hours[2][6 * width : 7 * width]
    # and back: a third revision with the first one's figures, and no third version of the file
    settled = hall.everything(closed)
    hall.run(closed, "2026-11-02T00:00:00Z")
    assert hall.differences(settled, hall.everything(closed)) == []
    closed.write_text(text)
    hall.run(closed, "2026-11-02T01:00:00Z")
    assert stages(hall, closed)["FT-301", "gas_day"] == 3
    assert len(hall.rows(closed, "site_version")) == 2
    assert hall.differences(before, hall.figures(closed)) == []
    assert not hall.prove(closed).findings


def same_but(one: bytes | str | None, other: bytes | str | None, name: str, *changes: str) -> None:
    """Check that a column of two revisions is the same, or another one where it is to change."""
    assert (one != other) == (name in changes), name


@pytest.mark.parametrize(
    ("stated", "meters"),
    [
        (r'\[signal\.PDT-301\].*?"zero", size = "([\d.]+) %', {"FT-301"}),
        # FT-303 is a classical Venturi tube, whose C does not ask the Reynolds number
        (
            r'\[gas\.natural_gas\].*?viscosity_uncertainty = \{ size = "([\d.]+) %',
            {"FT-202", "FT-301", "FT-302"},
        ),
    ],
    ids=["of one transmitter", "of a gas"],
)
def test_another_stated_uncertainty_revises_what_it_touches(stated, meters, hall, closed):
    """Specified worse: new revisions of the meters that it touches; no figure moves a bit."""
    text, before = closed.read_text(), hall.figures(closed)
    found = re.search(stated, text, re.DOTALL)
    worse = str(2.0 * float(found[1]))
    closed.write_text(text[: found.start(1)] + worse + text[found.end(1) :])
    hall.run(closed, "2026-11-02T00:00:00Z")
    expected = {
        (meter, kind): 2 if meter in meters else 1
        for meter in hall.METERS
        for kind in ("gas_day", "month")
    }
    assert stages(hall, closed) == expected
    revised = [row for row in hall.rows(closed, "total_revision") if row["revision"] == 2]
    assert {row["reason"] for row in revised} == {"the site file changed"}
    assert {row["judgement"] for row in hall.rows(closed, "fate")} == {1}
    first = {
        (row["meter"], row["kind"], row["gas_day"]): row
        for row in hall.rows(closed, "total_revision")
        if row["revision"] == 1
    }
    # a day without flow has nothing to doubt
    doubtful = {key for key, row in first.items() if key[0] in meters and row["mass_kg"] > 0}
    assert {(row["meter"], row["kind"], row["gas_day"]) for row in revised} == doubtful
    assert len(revised) == len(doubtful) > 3 * len(meters)
    for row in revised:
        old = first[row["meter"], row["kind"], row["gas_day"]]
        for name in ("mass_kg", "line_volume_m3", "base_volume_m3", "energy_J", "flags", "missing",
                     "measured_time_s", "uncertainty"):  # fmt: skip
            same_but(old[name], row[name], name, "uncertainty")
        assert row["mass_expanded_uncertainty_kg"] > old["mass_expanded_uncertainty_kg"]
    for meter in meters:
        one, two = hall.rows(closed, "hourly_record", meter=meter, gas_day="2026-10-02")
        for name in ("statistics", "sensitivities", "parameters", "standard_uncertainty"):
            same_but(one[name], two[name], name, "standard_uncertainty")
    # the balance stands at the same imbalance, and knows less of it
    latest = {
        (row["kind"], row["quantity"], row["gas_day"], row["revision"]): row
        for row in hall.rows(closed, "balance_revision")
    }
    assert {key[3] for key in latest} == {1, 2}
    for (kind, quantity, day, revision), row in latest.items():
        if revision == 2:
            old = latest[kind, quantity, day, 1]
            assert row["revision_reason"] == "the site file changed"
            assert row["imbalance"] == old["imbalance"]
            assert row["uncertainty"] != old["uncertainty"]
    assert not hall.prove(closed).findings
    # and back: what was stated first gives the first figures
    closed.write_text(text)
    hall.run(closed, "2026-11-02T01:00:00Z")
    assert hall.differences(before, hall.figures(closed)) == []
    assert not hall.prove(closed).findings


def test_comment_in_the_site_file_revises_nothing(hall, closed):
    """A version that changes no term is stored once, and moves no figure."""
    before = hall.rows(closed, "total_revision")
    closed.write_text(closed.read_text() + "\n# reviewed\n")
    for _ in range(2):
        hall.run(closed, "2026-11-02T00:00:00Z")
    assert hall.rows(closed, "total_revision") == before
    assert len(hall.rows(closed, "site_version")) == 2
    assert len(hall.rows(closed, "pass")) == 2
    assert not hall.prove(closed).findings


def test_another_unit_judges_the_sources_files_again(hall, closed):
    """A unit that was wrong: the source's stored files are judged anew, figures revised."""
    text, before = closed.read_text(), hall.figures(closed)
    wrong = '[source.works.column.p]\nquantity = "static_pressure"\nunit = "kPa"'
    assert wrong in text
    for path in (closed.parent / "logs").rglob("*.csv"):
        path.unlink()  # the archive is enough
    closed.write_text(text.replace(wrong, wrong.replace("kPa", "psi")))
    hall.run(closed, "2026-11-02T00:00:00Z")
    sources = {row["sequence"]: row["source"] for row in hall.rows(closed, "delivery")}
    again = [row for row in hall.rows(closed, "fate") if row["judgement"] == 2]
    assert {sources[row["delivery_sequence"]] for row in again} == {"works"}
    assert len(again) == list(sources.values()).count("works")
    found = hall.figures(closed)
    changed = [n for n in before if n.startswith("total") and before[n] != found[n]]
    assert {before[n]["meter"] for n in changed} == {"FT-202", "FT-301", "FT-303"}
    assert len(changed) == 3 * 4
    assert before["PT-302 values"] == found["PT-302 values"]
    assert before["PT-301 values"] != found["PT-301 values"]
    assert not hall.prove(closed).findings
    closed.write_text(text)
    hall.run(closed, "2026-11-02T01:00:00Z")
    assert max(row["judgement"] for row in hall.rows(closed, "fate")) == 3
    assert hall.differences(before, hall.figures(closed)) == []
    assert not hall.prove(closed).findings
    settled = hall.everything(closed)
    hall.run(closed, "2026-11-02T01:00:00Z")
    assert hall.differences(settled, hall.everything(closed)) == []
