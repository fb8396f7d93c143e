"""What `show` prints: the promised columns, every digit, and never more than 100 columns wide."""

from __future__ import annotations

import csv
import io
import json
import re
import shutil
import sqlite3
from datetime import datetime, timedelta

import pytest

from meterfix.faces.columns import ALL

TOTALS = [
    "meter",
    "period_start",
    "period_end",
    "gas_day",
    "base_pressure_kPa",
    "base_temperature_degC",
    "line_volume_m3",
    "base_volume_m3",
    "mass_kg",
    "energy_MJ",
    "calorific_value_kind",
    "flow_time_s",
    "base_volume_expanded_uncertainty_m3",
    "mass_expanded_uncertainty_kg",
    "energy_expanded_uncertainty_MJ",
    "expanded_uncertainty_percent",
    "measured_fraction",
    "basis",
    "flags",
    "reason",
    "status",
    "revision",
    "combustion_reference_temperature_degC",
    "month",
]
BALANCES = [
    "envelope",
    "period_start",
    "period_end",
    "gas_day",
    "quantity",
    "in",
    "out",
    "vented",
    "storage_change",
    "imbalance",
    "expanded_uncertainty",
    "tolerance",
    "unit",
    "significant",
    "beyond_tolerance",
    "measured_fraction",
    "reason",
    "status",
    "revision",
    "base_pressure_kPa",
    "base_temperature_degC",
    "calorific_value_kind",
    "combustion_reference_temperature_degC",
    "month",
]
ALERTS = [
    "kind",
    "subject",
    "since",
    "until",
    "severity",
    "message",
    "evidence",
    "effect_base_volume_m3_per_day",
    "effect_energy_MJ_per_day",
    "effect_money_per_day",
    "currency",
]
VIEWS = (
    ("totals", "hour"),
    ("totals", "gas-day"),
    ("totals", "month"),
    ("balances", "hour"),
    ("balances", "gas-day"),
    ("balances", "month"),
    ("budget", "gas-day"),
    ("budget", "month"),
    ("alerts", None),
    ("files", None),
    ("passes", None),
)
UNCERTAINTY = {
    "base_volume_m3": "base_volume_expanded_uncertainty_m3",
    "mass_kg": "mass_expanded_uncertainty_kg",
    "energy_MJ": "energy_expanded_uncertainty_MJ",
}
PERIODS = [view for view in VIEWS if view[1] is not None]
WHEN = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d{1,6})?Z")


def options(by):
    return () if by is None else ("--by", by)


def as_csv(folder, invoke, what, by, *more):
    text = invoke(
        "show", what, "--site", folder.site, *options(by), *more, "--format", "csv"
    ).stdout
    return list(csv.DictReader(io.StringIO(text)))


@pytest.mark.parametrize(
    ("what", "columns"), [("totals", TOTALS), ("balances", BALANCES), ("alerts", ALERTS)]
)
def test_the_promised_columns_in_their_order(works, invoke, what, columns):
    """CSV has exactly the columns of the outer contract, and so has JSON."""
    text = invoke("show", what, "--site", works.site, "--format", "csv").stdout
    assert next(csv.reader(io.StringIO(text))) == columns
    assert all(list(row) == columns for row in works.json(what))


@pytest.mark.parametrize(("what", "by"), VIEWS)
def test_csv_and_json_say_the_same(works, invoke, what, by):
    """Both hold the same rows and values; an unknown number is an empty cell and a null."""
    rows = works.json(what, *options(by))
    table = as_csv(works, invoke, what, by)
    assert len(rows) == len(table)
    for row, cells in zip(rows, table, strict=True):
        for name, value in row.items():
            if value is None:
                assert cells[name] == "", name
            elif isinstance(value, (float, int)):
                assert float(cells[name]) == value, name
            elif isinstance(value, str):
                assert cells[name] == value, name
            else:
                assert json.loads(cells[name]) == value, name


@pytest.mark.parametrize(("what", "by"), VIEWS)
def test_no_number_is_nan_infinite_or_negative_zero(works, invoke, what, by):
    """No cell holds NaN, an infinity or -0.0; the JSON is strict JSON."""
    for row in as_csv(works, invoke, what, by):
        assert not {"nan", "inf", "-inf", "-0.0", "-0"} & {cell.lower() for cell in row.values()}

    def refuse(constant):
        pytest.fail(f"{constant} is not JSON")

    text = invoke("show", what, "--site", works.site, *options(by), "--format", "json").stdout
    json.loads(text, parse_constant=refuse)
    assert not re.search(r"-0\.0\b(?!\d)", text)


@pytest.mark.parametrize(("what", "by"), VIEWS)
def test_times_are_iso_8601_in_utc(works, what, by):
    """Every time is written like 2026-10-01T04:00:00Z."""
    names = {"period_start", "period_end", "since", "until", "arrived", "started", "finished"}
    for row in works.json(what, *options(by)):
        for name in names & set(row):
            assert row[name] is None or WHEN.fullmatch(row[name]), (name, row[name])


@pytest.mark.parametrize(("what", "by"), VIEWS)
def test_tables_fit_100_columns(works, what, by):
    """No line of a table is longer than 100 characters where there is no terminal."""
    lines = works.text(what, *options(by)).splitlines()
    assert len(lines) >= 2
    assert max(len(line.rstrip()) for line in lines) <= 100


@pytest.mark.parametrize(("what", "by"), PERIODS)
def test_a_table_shows_no_traces_of_other_periods(works, what, by):
    """A table of hours shows instants, of gas days dates, of months months: one of them."""
    lines = works.text(what, *options(by)).splitlines()
    heading = next(line for line in lines if re.match("(meter|envelope) ", line))
    shown = set(re.findall(r"from \(UTC\)|gas day|month", heading))
    assert shown == {{"hour": "from (UTC)", "gas-day": "gas day", "month": "month"}[by]}


def test_totals_are_the_stored_floats(works):
    """JSON carries every digit: mass, volumes and flow time are the stored floats to the bit."""
    with sqlite3.connect(f"file:{works.path / 'meterfix.sqlite'}?mode=ro", uri=True) as database:
        stored = {}
        for table in ("open_total", "total_revision"):
            for row in database.execute(
                "SELECT meter, gas_day, line_volume_m3, base_volume_m3, mass_kg, flow_time_s, "
                f"energy_J FROM {table} WHERE kind = 'gas_day'"
            ):
                stored[row[:2]] = row[2:]
    rows = works.json("totals")
    assert len(rows) == len(stored) >= 33
    for row in rows:
        line, base, mass, flow_time, energy = stored[row["meter"], row["gas_day"]]
        assert (row["line_volume_m3"], row["base_volume_m3"]) == (line, base)
        assert (row["mass_kg"], row["flow_time_s"]) == (mass, flow_time)
        assert row["energy_MJ"] == (None if energy is None else energy / 1e6)


def test_hours_add_up_to_the_day_they_are_shown_with(works):
    """24 hours a gas day, end to end; their masses sum to the gas day's."""
    for day in works.json("totals"):
        hours = works.json(
            "totals", "--by", "hour", "--meter", day["meter"],
            "--from", day["period_start"], "--to", day["period_end"],
        )  # fmt: skip
        assert len(hours) == 24
        assert hours[0]["period_start"] == day["period_start"]
        assert hours[-1]["period_end"] == day["period_end"]
        assert [h["period_end"] for h in hours[:-1]] == [h["period_start"] for h in hours[1:]]
        masses = [hour["mass_kg"] or 0.0 for hour in hours]
        assert sum(masses) == pytest.approx(day["mass_kg"], rel=1e-12)


def test_a_number_that_is_not_known_has_a_reason(works):
    """Where energy is empty, or time was not measured, the reason says why."""
    rows = works.json("totals")
    without = [row for row in rows if row["energy_MJ"] is None]
    assert {row["meter"] for row in without} == {"FA-401", "FA-411", "FA-412"}
    assert all("no calorific value" in row["reason"] for row in without)
    partly = [row for row in works.json("totals", "--by", "hour") if row["measured_fraction"] < 1]
    assert all(re.search(r"\d s", row["reason"]) for row in partly)
    for row in rows:
        for figure, name in UNCERTAINTY.items():
            assert (row[figure] is None) == (row[name] is None), name
        percent = row["expanded_uncertainty_percent"]
        assert (percent is None) == ("no uncertainty in percent of nothing" in row["reason"])
    assert {
        row["base_volume_m3"] for row in rows if row["expanded_uncertainty_percent"] is None
    } == {0.0}


def test_a_balance_says_what_it_cannot_judge(works):
    """Both verdicts are a word; an hour has none, for gas may stay in the pipes."""
    for by in ("hour", "gas-day", "month"):
        for row in works.json("balances", "--by", by):
            for name in ("significant", "beyond_tolerance"):
                if by == "hour":
                    assert row[name] == "cannot be judged: storage is not configured"
                elif row["imbalance"] is not None:
                    limit = row["expanded_uncertainty" if name == "significant" else "tolerance"]
                    assert row[name] == ("yes" if abs(row["imbalance"]) > limit else "no")
            assert re.fullmatch("yes|no|cannot be judged: .+", row["beyond_tolerance"])
            assert (row["imbalance"] is None) <= row["beyond_tolerance"].startswith("cannot")
            assert (row["unit"], row["quantity"]) in {
                ("kg", "mass"),
                ("m3", "base_volume"),
                ("MJ", "energy"),
            }


def test_an_imbalance_is_what_its_row_says(works):
    """The difference in - out - vented is the imbalance of every row that has one."""
    rows = [row for row in works.json("balances") if row["imbalance"] is not None]
    assert rows
    for row in rows:
        expected = row["in"] - row["out"] - row["vented"]
        assert row["imbalance"] == pytest.approx(expected, abs=1e-9 * row["in"])


def test_status_and_revision(works):
    """A closed day is provisional with its revision; an open one has none."""
    rows = works.json("totals")
    assert {row["status"] for row in rows} >= {"provisional"}
    for row in rows:
        assert (row["revision"] is None) == (row["status"] == "open")


@pytest.mark.parametrize(("what", "by"), [view for view in PERIODS if view[1] != "month"])
def test_from_and_to_choose_periods(works, what, by):
    """Periods that share time with [from, to) are shown, all of them and no others."""
    everything = works.json(what, "--by", by)
    start, end = "2026-10-02T08:30:00+02:00", "2026-10-02T10:30:00+02:00"
    since, until = datetime.fromisoformat(start), datetime.fromisoformat(end)
    wanted = [
        row
        for row in everything
        if datetime.fromisoformat(row["period_end"]) > since
        and datetime.fromisoformat(row["period_start"]) < until
    ]
    assert 0 < len(wanted) < len(everything)
    assert works.json(what, "--by", by, "--from", start, "--to", end) == wanted


def test_a_date_means_the_gas_day(works):
    """--from 2026-10-02 --to 2026-10-03 is exactly that gas day."""
    rows = works.json("totals", "--from", "2026-10-02", "--to", "2026-10-03")
    assert {row["gas_day"] for row in rows} == {"2026-10-02"}
    assert len(rows) == 11


def test_meter_chooses(works):
    """--meter keeps one meter's totals, its envelopes' balances and the files that feed it."""
    assert {row["meter"] for row in works.json("totals", "--meter", "FT-101")} == {"FT-101"}
    assert {row["envelope"] for row in works.json("balances", "--meter", "FT-101")} == {"works"}
    sources = {row["source"] for row in works.json("files", "--meter", "FT-101")}
    assert "supply" in sources
    assert "compressed_air" not in sources
    names = {row["name"] for row in works.json("files", "--meter", "FT-101")}
    assert not [name for name in names if name.startswith("FT-102")]


def test_from_and_to_choose_files_and_passes(works):
    """Of files and passes the time is the arrival and the pass's now: an end before it is none."""
    for what in ("files", "passes"):
        rows = works.json(what)
        assert works.json(what, "--from", "2026-10-04T09:00:00+02:00") == rows
        assert works.json(what, "--to", "2026-10-04T09:00:00+02:00") == []


def test_show_never_computes(own_works, invoke):
    """With the logs gone and the database read-only, every view is what it was; no file changes."""
    before = {view: own_works.json(view[0], *options(view[1])) for view in VIEWS}
    shutil.rmtree(own_works.path / "logs")
    kept = {
        path: path.read_bytes()
        for path in own_works.path.rglob("*")
        if path.is_file() and not path.name.endswith("-shm")
    }
    for view in VIEWS:
        assert own_works.json(view[0], *options(view[1])) == before[view]
        own_works.text(view[0], *options(view[1]))
    assert kept == {
        path: path.read_bytes()
        for path in own_works.path.rglob("*")
        if path.is_file() and not path.name.endswith("-shm")
    }


def test_a_formula_is_never_exported(one_meter, invoke, hour_log):
    """A name that a spreadsheet would take for a formula is exported as text."""
    site = one_meter.site.read_text(encoding="utf-8")
    one_meter.site.write_text(
        site.replace('files = "{binding}_*.csv*"', 'files = "*{binding}_*.csv*"'),
        encoding="utf-8",
    )
    one_meter.log("=FT-1_00.csv", hour_log(7))
    one_meter.process(exit_code=None)
    text = invoke("show", "files", "--site", one_meter.site, "--format", "csv").stdout
    assert all(
        not cell.startswith(("=", "+", "@"))
        for row in csv.reader(io.StringIO(text))
        for cell in row
    )


def test_every_pass_carries_its_audit_hash(works):
    """An auditor can write down the head of the chain from `show passes`."""
    done = [row for row in works.json("passes") if row["kind"] != "heartbeat"]
    assert done
    assert all(re.fullmatch("[0-9a-f]{64}", row["row_hash"]) for row in done)


def test_lines_add_up_per_file_and_per_source(works):
    """Lines read = used + set aside + duplicate + skipped, for each file and for each source."""
    rows = works.json("files")
    assert len(rows) >= 30
    sums = {}
    for row in rows:
        counts = [row[f"lines_{name}"] for name in ("used", "set_aside", "duplicate", "skipped")]
        assert row["lines_read"] == sum(counts), row["name"]
        assert row["cells_read"] == (
            row["cells_used"] + row["cells_set_aside"] + row["cells_duplicate"]
        )
        total = sums.setdefault(row["source"], [0] * 5)
        for n, count in enumerate([row["lines_read"], *counts]):
            total[n] += count
    for read, *parts in sums.values():
        assert read == sum(parts)
    summary = works.text("files").partition("By source")[2].partition("Rejected")[0]
    shown = {
        line.split()[0]: [int(n) for n in line.split()[2:]]
        for line in summary.splitlines()
        if line.split() and line.split()[0] in sums
    }
    assert shown == sums


def test_what_was_set_aside_is_in_json(works):
    """Each set-aside line or cell stands in its file's row with line, column, text, reason."""
    rows = works.json("files")
    problems = [problem for row in rows for problem in row["set_aside"]]
    assert problems
    assert all(p["line"] >= 1 and p["reason"] for p in problems)
    whole_lines = sum(row["lines_set_aside"] for row in rows)
    assert len({(row["name"], p["line"]) for row in rows for p in row["set_aside"]}) >= whole_lines


def test_every_view_has_its_columns():
    """No two columns of a view share a name."""
    for columns in ALL.values():
        assert len(set(columns)) == len(columns)


def test_hours_have_their_length(works):
    """An hour is an hour."""
    for row in works.json("totals", "--by", "hour", "--meter", "FT-101"):
        start, end = (datetime.fromisoformat(row[n]) for n in ("period_start", "period_end"))
        assert end - start == timedelta(hours=1)
