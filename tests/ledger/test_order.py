"""The same deliveries give the same bits, in whatever order, slices and passes they come."""

from __future__ import annotations

import re
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

BEFORE = "2026-10-05T12:00:00Z"
"""After all rows; no day's deadline has passed, as these sites close late."""
AFTER = "2026-12-15T12:00:00Z"
"""After every deadline: what is there by then closes at once and is revised later."""
END = "2026-10-09"

CUTS = {
    # inside an hour; at a midnight between daily files; between a pressure and its dp
    "dp": ("", "2026-10-01T13:37:00Z", "2026-10-03T00:00:00Z", END),
    "other": ("", "2026-10-01T13:37:00Z", "2026-10-02T11:20:00Z", END),
}


def late_closing(text: str) -> str:
    """Return the site file with deadlines after `BEFORE`, so that tests choose when days close."""
    assert text.count('provisional_after = "12 h"') == 1
    return text.replace('provisional_after = "12 h"', 'provisional_after = "20 d"')


@pytest.fixture(scope="module")
def logs(hall):
    return hall.split_logs(3)


@pytest.fixture(scope="module")
def slices(logs):
    """Cut the recorders' rows in three: inside an hour, at midnight, between pressure and dp."""
    return [
        [
            log.between(*list(pairwise(CUTS["dp" if log.source.endswith("dp") else "other"]))[n])
            for log in logs
        ]
        for n in range(3)
    ]


@pytest.fixture(scope="module")
def at_once(hall, logs, tmp_path_factory):
    """Return what the ledger says if each recorder's rows are one file and all come at once."""
    site = hall.new_site(tmp_path_factory.mktemp("once") / "site", late_closing(hall.split_text()))
    hall.put_all(site, logs)
    hall.run(site, AFTER)
    found = hall.figures(site)
    days = [name for name in found if name.startswith("hours")]
    assert len(days) == 3 * len(hall.METERS)
    assert all(found[name]["statistics"] for name in days)
    totals = [row for name, row in found.items() if name.startswith("total")]
    assert len(totals) == 4 * len(hall.METERS)
    assert sum(row["mass_kg"] > 0 for row in totals) > 3 * len(hall.METERS)
    assert hall.doubted(found) > 4 * len(hall.METERS)
    return found


@pytest.fixture
def site(hall, tmp_path) -> Path:
    return hall.new_site(tmp_path / "site", late_closing(hall.split_text()))


ORDERS = {"in order": (0, 1, 2), "in reverse": (2, 1, 0), "middle last": (2, 0, 1)}


@pytest.mark.parametrize("now", [BEFORE, AFTER], ids=["open between", "closed between"])
@pytest.mark.parametrize("order", ORDERS)
def test_three_slices(order, now, hall, site, slices, at_once):
    """Slices with passes in between, days closed early and revised or not: identical bits."""
    for number in ORDERS[order]:
        for log in slices[number]:
            log.put(site, f"slice{number}")
        hall.run(site, now)
    revised = [row["revision"] for row in hall.rows(site, "total_revision")]
    if now == BEFORE:
        assert revised == []
        hall.run(site, AFTER)
    else:
        assert max(revised) > 1
    assert hall.differences(at_once, hall.figures(site)) == []
    assert not hall.prove(site).findings


def test_meter_days_computed_one_by_one(hall, site, logs, at_once, monkeypatch):
    """A meter-day computed alone has the bits of one among many, sensitivities included."""
    from meterfix.calc.gas.properties import GasLibrary
    from meterfix.run import compute

    done, many = [], compute.hours_of

    def one_by_one(index, days, _gases):
        records = [record for day in days for record in many(index, [day], GasLibrary())]
        done.extend(records)
        return records

    monkeypatch.setattr(compute, "hours_of", one_by_one)
    hall.put_all(site, logs)
    hall.run(site, AFTER)
    assert len(done) == 3 * len(hall.METERS)
    assert hall.differences(at_once, hall.figures(site)) == []


@pytest.mark.parametrize("now", [BEFORE, AFTER], ids=["open between", "closed between"])
def test_files_that_meet_at_the_edge_of_the_gas_day(now, hall, tmp_path, logs):
    """The next day's first reading ends the last interval of the day before, whenever it comes.

    The edge is at 06:00 UTC here, where blocks in which readings are looked at meet too.
    """
    text = late_closing(hall.split_text()).replace(
        'gas_day_start = "06:00"', 'gas_day_start = "08:00"'
    )
    edge = "2026-10-02T06:00:00Z"
    found = []
    for name, cuts in (("once", [("", END)]), ("cut", [("", edge), (edge, END)])):
        site = hall.new_site(tmp_path / name, text)
        for number, cut in enumerate(cuts):
            for log in logs:
                log.between(*cut).put(site, f"part{number}")
            hall.run(site, now)
        found.append(hall.figures(site))
    day = next(r for n, r in found[0].items() if n.startswith("total") and r["meter"] == "FT-202"
               and r["kind"] == "gas_day" and r["gas_day"] == "2026-10-01")  # fmt: skip
    assert day["measured_time_s"] == 86400.0
    assert hall.differences(*found) == []


def test_a_pass_for_each_of_many_small_files(hall, site, logs, at_once):
    """Files of six hours, shuffled, some passes with the clock before and some after deadlines."""
    edges = [f"2026-10-{day:02d}T{hour:02d}" for day in range(1, 5) for hour in (0, 6, 12, 18)]
    files = [
        (log.between(start, end), number)
        for number, (start, end) in enumerate(pairwise(["", *edges, END]))
        for log in logs
    ]
    files = [files[n] for n in np.random.default_rng(11).permutation(len(files))]
    for batch in range(5):
        for log, number in files[batch::5]:
            log.put(site, f"part{number:02d}")
        hall.run(site, BEFORE if batch < 2 else AFTER)
    assert hall.differences(at_once, hall.figures(site), inputs=False) == []
    assert not hall.prove(site).findings


def test_files_that_grow(hall, tmp_path, logs, at_once):
    """Files that grow, looked at inside a line, inside an hour and at midnight: identical bits."""
    text = late_closing(hall.split_text()).replace('delivery = "whole"', 'delivery = "appended"')
    site = hall.new_site(tmp_path / "site", text)
    for number, share in enumerate((0.1, 0.34, 0.35, 0.8, 1.0)):
        for place, log in enumerate(logs):
            content = log.content
            # the recorders are not in step: pressures lag behind dp, and cuts split lines
            grown = content[: int(len(content) * min(1.0, share * (1.0 - 0.02 * place)))]
            path = log.put(site, "2026")
            hall.lay(path, content if share == 1.0 else grown, changed=hall.WRITTEN + number)
        hall.run(site, AFTER if number > 1 else BEFORE)
    kinds = [row["kind"] for row in hall.rows(site, "delivery")]
    assert kinds.count("whole") == len(logs)
    assert kinds.count("tail") == 4 * len(logs)
    assert hall.sums(site)["lines_duplicate"] == 0
    assert hall.sums(site)["lines_set_aside"] == 0
    found = hall.figures(site)
    # this site file is another one by its delivery mode; nothing else may differ
    for name, row in found.items():
        if isinstance(row, dict) and "site_digest" in row:
            row["site_digest"] = at_once[name]["site_digest"]
    assert hall.differences(at_once, found, inputs=False) == []
    assert not hall.prove(site).findings


def test_processing_twice_changes_nothing_but_the_heartbeat(hall, undisturbed, copy_of):
    """The second `process`: every table, pack, segment and anchor line stays; the heart beats."""
    site = copy_of(undisturbed)
    before, beat = hall.everything(site), hall.rows(site, "heartbeat")
    assert len(before) > 25
    done = hall.run(site, "2026-11-04T12:00:00Z")
    assert (done.passes, done.files, done.readings, done.days) == (0, 0, 0, 0)
    assert hall.differences(before, hall.everything(site)) == []
    assert hall.rows(site, "heartbeat") != beat


# --- values that disagree ------------------------------------------------------------------------


def with_other_pressures(log, bar: str):
    """Return the recorder's rows with another static pressure in each."""
    rows = tuple(re.sub(r"^([^,]+),[^,]+", rf"\1,{bar}", row) for row in log.rows)
    return type(log)(log.source, log.meter, log.header, rows)


@pytest.fixture
def disputed_rows(logs):
    """Other pressures of one meter for ten instants inside an hour."""
    log = next(x for x in logs if x.source == "works_pt" and x.meter == "FT-301")
    assert log.header == "time,p,t"
    part = log.between("2026-10-02T10:32", "2026-10-02T10:52")
    assert len(part.rows) == 10
    return with_other_pressures(part, "123.4")


@pytest.fixture(scope="module")
def undisputed_totals(hall, at_once):
    return {name: row for name, row in at_once.items() if name.startswith("total")}


def test_overlapping_files_that_disagree(hall, tmp_path, logs, disputed_rows, undisputed_totals):
    """The hour is disputed, conflicts and an alert are there, whichever file came first."""
    found = []
    for first in ("all", "other"):
        site = hall.new_site(tmp_path / first, late_closing(hall.split_text()))
        for step in ("all", "other") if first == "all" else ("other", "all"):
            if step == "all":
                hall.put_all(site, logs)
            else:
                disputed_rows.put(site, "other")
            hall.run(site, AFTER)
        conflicts = hall.rows(site, "conflict", signal="PT-301")
        assert len({row["instant_us"] for row in conflicts}) == 10
        assert {row["chosen"] for row in conflicts} == {123_400.0}
        assert all("disputed" in row["rule"] for row in conflicts)
        ((state, evidence),) = hall.events(site, "disputed hour")
        assert state == "opened"
        told = evidence.pop("first_conflicts")
        assert evidence == {
            "hours": ["2026-10-02T10:00:00Z"], "readings": 10, "conflicts": 10,
        }  # fmt: skip
        assert [one["signal"] for one in told] == ["PT-301"] * 5
        assert told[0]["instant"].startswith("2026-10-02T10:3")
        assert told[0]["instant"].endswith("Z")
        for one in told:
            low, high = one["values"]
            assert low == {"value_SI": 123_400.0, "files": ["works_pt: FT-301_other.csv"]}
            assert high["value_SI"] > 123_400.0
            assert high["files"] == ["works_pt: FT-301_all.csv"]
        assert not hall.prove(site).findings
        found.append(hall.figures(site))
    assert hall.differences(*found) == []
    row = next(r for n, r in found[0].items() if n.startswith("total") and r["meter"] == "FT-301"
               and r["kind"] == "gas_day" and r["gas_day"] == "2026-10-02")  # fmt: skip
    assert '"disputed_readings":10' in row["flags"]
    changed = {n for n in undisputed_totals if found[0][n] != undisputed_totals[n]}
    assert {(found[0][n]["meter"], found[0][n]["gas_day"]) for n in changed} == {
        ("FT-301", "2026-10-02"), ("FT-301", "2026-10-01"),  # the day, and its month
    }  # fmt: skip


def test_disagreement_that_a_resend_settles(hall, site, logs, disputed_rows, at_once):
    """Once the other file is sent again with the right values, nothing is disputed any more."""
    hall.put_all(site, logs)
    disputed_rows.put(site, "other")
    hall.run(site, AFTER)
    log = next(x for x in logs if x.source == "works_pt" and x.meter == "FT-301")
    right = log.between("2026-10-02T10:32", "2026-10-02T10:52")
    right.put(site, "other", changed=hall.WRITTEN + 60)
    hall.run(site, AFTER)
    assert hall.differences(at_once, hall.figures(site)) == []
    assert [state for state, _ in hall.events(site, "disputed hour")] == ["opened", "closed"]
    assert not hall.prove(site).findings


def test_the_other_file_sent_as_a_copy_settles_too(hall, site, logs, disputed_rows, at_once):
    """Known bytes count under a name that last held other ones: A and B both say what A said."""
    right = next(x for x in logs if x.source == "works_pt" and x.meter == "FT-301")
    hall.put_all(site, logs)
    path = disputed_rows.put(site, "other")
    hall.run(site, AFTER)
    hall.lay(path, right.content, changed=hall.WRITTEN + 60)
    hall.run(site, AFTER)
    assert hall.differences(at_once, hall.figures(site)) == []
    assert [state for state, _ in hall.events(site, "disputed hour")] == ["opened", "closed"]
    assert not hall.prove(site).findings
    # and sent a third time with the wrong bytes, the wrong ones count again
    hall.lay(path, disputed_rows.content, changed=hall.WRITTEN + 120)
    hall.run(site, AFTER)
    assert [row["version"] for row in hall.rows(site, "delivery", name=path.name)] == [1, 2, 3]
    assert [state for state, _ in hall.events(site, "disputed hour")] == [
        "opened", "closed", "updated",
    ]  # fmt: skip
    assert not hall.prove(site).findings


def test_same_name_with_other_bytes(hall, site, logs, at_once):
    """A new version: the later wins without dispute; rows absent from it are kept and reported."""
    hall.put_all(site, logs)
    hall.run(site, AFTER)
    log = next(x for x in logs if x.source == "works_pt" and x.meter == "FT-301")
    resent = with_other_pressures(log.between("2026-10-02T10:32", "2026-10-02T10:52"), "123.4")
    path = resent.put(site, "all", changed=hall.WRITTEN + 60)
    hall.run(site, AFTER)
    versions = hall.rows(site, "delivery", name=path.name, source="works_pt")
    assert [row["version"] for row in versions] == [1, 2]
    assert versions[1]["replaces"] == versions[0]["sequence"]
    fate = hall.rows(site, "fate", delivery_sequence=versions[1]["sequence"])[0]
    absent = 2 * (len(log.rows) - len(resent.rows))
    assert f"{absent} readings" in fate["warning"]
    assert "absent" in fate["warning"]
    conflicts = hall.rows(site, "conflict", signal="PT-301")
    assert len(conflicts) == 10
    assert {row["chosen"] for row in conflicts} == {123_400.0}
    assert not any("disputed" in row["rule"] for row in conflicts)
    assert hall.rows(site, "alert") == []
    found = hall.figures(site)
    # every reading still counts: the later file's where it has one, the earlier one's elsewhere
    assert found["PT-301 instants"] == at_once["PT-301 instants"]
    assert found["PDT-301 values"] == at_once["PDT-301 values"]
    assert found["TT-301 values"] == at_once["TT-301 values"]
    assert len(hall.differences(at_once, found)) > 3
    assert not hall.prove(site).findings


@pytest.mark.parametrize("first", ["preferred", "other"])
def test_precedence_between_sources(first, hall, tmp_path, logs, at_once):
    """Where two sources give one instant, the lower number wins, whichever came first."""
    text = late_closing(hall.split_text())
    blocks = re.split(r"(?m)^(?=\[)", text)
    second = "".join(
        block.replace("works_pt", "backup")
        for block in blocks
        if block.startswith("[source.works_pt")
    ).replace('delivery = "whole"', 'delivery = "whole"\nprecedence = 2', 1)
    text = text.replace(
        '[signal.PT-301]\nfrom = [{ source = "works_pt", binding = "FT-301", column = "p" }]',
        '[signal.PT-301]\nfrom = [{ source = "works_pt", binding = "FT-301", column = "p" },\n'
        '  { source = "backup", binding = "FT-301", column = "p" }]',
    )
    assert "backup" in text
    at = text.index("[signal.PDT-202]")
    site = hall.new_site(tmp_path / "site", text[:at] + second + text[at:])
    log = next(x for x in logs if x.source == "works_pt" and x.meter == "FT-301")
    worse = with_other_pressures(log.between("2026-10-02T10:32", "2026-10-02T10:52"), "123.4")
    worse = type(log)("backup", worse.meter, worse.header, worse.rows)
    steps = [lambda: hall.put_all(site, logs), lambda: worse.put(site, "all")]
    for step in steps if first == "preferred" else reversed(steps):
        step()
        hall.run(site, AFTER)
    found = hall.figures(site)
    for name, row in found.items():
        if isinstance(row, dict) and "site_digest" in row:
            row["site_digest"] = at_once[name]["site_digest"]
    assert hall.differences(at_once, found) == []
    assert {row["rule"] for row in hall.rows(site, "conflict")} == {
        "the source of lower precedence number wins"
    }
    assert not hall.prove(site).findings


def test_two_meters_files_with_the_same_bytes_both_count(hall, site, logs):
    """Two meters shut in write the same bytes; each of them has its readings."""
    pair = [x for x in logs if x.meter in {"FT-301", "FT-303"} and x.source != "kiln_control"]
    shut = {"works_dp": "0.000", "works_pt": "101.3,18.0"}
    for log in pair:
        rows = tuple(f"{row.split(',')[0]},{shut[log.source]}" for row in log.rows)
        type(log)(log.source, log.meter, log.header, rows).put(site, "all")
    for log in logs:
        if log not in pair:
            log.put(site, "all")
    hall.run(site, AFTER)
    assert len(hall.rows(site, "delivery")) == len(logs)
    assert len(hall.rows(site, "raw_object")) == len(logs) - 2
    found = hall.figures(site)
    assert found["PT-301 values"] == found["PT-303 values"]
    assert len(found["PT-301 values"]) > 8 * 2000
    measured = {
        row["meter"]: row["measured_fraction"]
        for row in found.values()
        if isinstance(row, dict) and row.get("kind") == "gas_day" and "meter" in row
    }
    assert measured["FT-301"] == measured["FT-303"] > 0.99
    assert not hall.prove(site).findings


def test_same_bytes_under_another_name(hall, undisturbed, copy_of, monkeypatch):
    """Nothing changes, and the file is not read again at each pass."""
    from meterfix.run import gather

    site = copy_of(undisturbed)
    counted, before = hall.sums(site), hall.figures(site)
    known = min((site.parent / "logs" / "weather").iterdir())
    hall.lay(known.with_name("barometer_again.csv"), known.read_bytes())
    hall.run(site)
    assert hall.sums(site) == counted
    assert hall.differences(before, hall.figures(site)) == []
    read = []
    real = gather.read_stable
    monkeypatch.setattr(gather, "read_stable", lambda found: (read.append(found), real(found))[1])
    hall.run(site)
    assert read == []
