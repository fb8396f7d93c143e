"""The uncertainty beside every figure: what is stored, added up again by hand."""

from __future__ import annotations

import csv
import io
import json
import sqlite3
import struct
from collections import defaultdict
from math import fsum, sqrt

import pytest

from meterfix.run.opening import open_site

QUANTITIES = ("mass", "base_volume", "energy")
FIGURES = ("mass_kg", "base_volume_m3", "energy_MJ")
SHOWN = (
    "mass_expanded_uncertainty_kg",
    "base_volume_expanded_uncertainty_m3",
    "energy_expanded_uncertainty_MJ",
)
HOUR = 3_600_000_000
BY = {"gas-day": "gas_day", "month": "month"}


def stored(folder, *tables):
    """Return rows of the ledger."""
    with sqlite3.connect(f"file:{folder.path / 'meterfix.sqlite'}?mode=ro", uri=True) as database:
        database.row_factory = sqlite3.Row
        found = [dict(r) for name in tables for r in database.execute(f"SELECT * FROM {name}")]
    database.close()
    return found


def expanded(doubt, at):
    """Return 2 * sqrt(sum of squares over sources + random variance) from the stored JSON."""
    squares = [amounts[at] ** 2 for amounts in doubt["contributions"].values()]
    return 2.0 * sqrt(fsum(squares) + doubt["random_variance"][at])


def added(doubts):
    """Return stored JSON added up source by source; (sign, doubt) pairs."""
    total = defaultdict(lambda: [[], [], []])
    variance = [[], [], []]
    for sign, doubt in doubts:
        for at in range(3):
            for name, amounts in doubt["contributions"].items():
                total[name][at].append(sign * amounts[at])
            variance[at].append(doubt["random_variance"][at])
    return {
        "contributions": {n: [fsum(some) for some in parts] for n, parts in total.items()},
        "random_variance": [fsum(some) for some in variance],
    }


def period_key(shown_row, by):
    return (
        shown_row["meter"],
        f"{shown_row['month']}-01" if by == "month" else shown_row["gas_day"],
    )


@pytest.mark.parametrize("by", ["gas-day", "month"])
def test_totals_carry_what_their_sources_give(works, invoke, by):
    """Expanded uncertainties in JSON and CSV are twice what the stored contributions give."""
    doubts = {
        (row["meter"], row["gas_day"]): json.loads(row["uncertainty"])
        for row in stored(works, "open_total", "total_revision")
        if row["kind"] == BY[by]
    }
    rows = works.json("totals", "--by", by)
    text = invoke("show", "totals", "--by", by, "--site", works.site, "--format", "csv").stdout
    cells = list(csv.DictReader(io.StringIO(text)))
    assert len(rows) == len(doubts) == len(cells)
    known = 0
    for row, cell in zip(rows, cells, strict=True):
        doubt = doubts[period_key(row, by)]
        for at, (figure, name) in enumerate(zip(FIGURES, SHOWN, strict=True)):
            if row[figure] is None:
                assert (row[name], cell[name]) == (None, "")
                continue
            scale = 1e6 if at == 2 else 1.0
            assert row[name] == pytest.approx(expanded(doubt, at) / scale, rel=1e-12)
            assert float(cell[name]) == row[name]
            known += row[name] > 0
        if row["base_volume_m3"]:
            percent = 100.0 * row[SHOWN[1]] / row["base_volume_m3"]
            assert row["expanded_uncertainty_percent"] == pytest.approx(percent, rel=1e-12)
    assert known > 2 * len(rows)


def test_a_month_is_its_days_added_up_source_by_source(works):
    """Every source's contribution to the month is the sum over the days, with sign, to the bit."""
    rows = stored(works, "open_total", "total_revision")
    months = [row for row in rows if row["kind"] == "month"]
    assert len(months) == 11
    for month in months:
        days = [
            (1.0, json.loads(row["uncertainty"]))
            for row in rows
            if row["kind"] == "gas_day" and row["meter"] == month["meter"]
        ]
        assert len(days) == 3
        assert json.loads(month["uncertainty"]) == added(days)
        # what every day shares does not average out
        summed = added(days)["contributions"]
        name = next(n for n in summed if n.startswith(f"{month['meter']} ") and "bore" in n)
        parts = [day["contributions"].get(name, [0.0])[0] for _, day in days]
        assert summed[name][0] == fsum(parts)
        assert sum(abs(part) for part in parts) == pytest.approx(abs(sum(parts)), rel=1e-12)


def hours_by_hand(opened, meters, gas_day):
    """Return the variance of each hour of a signed sum of meters from stored sensitivities.

    `meters` are (sign, meter). The size of every part is worked out here: start, end, drift.
    """
    contributions = defaultdict(lambda: [[0.0] * 3 for _ in range(24)])
    variance = [[0.0] * 3 for _ in range(24)]
    for sign, meter in meters:
        where = {"meter": meter, "gas_day": gas_day}
        (row,) = [
            *opened.ledger.rows("open_hourly", where=where),
            *opened.ledger.rows("hourly_record", where=where),
        ]
        parameters = [tuple(p) for p in json.loads(row["parameters"])]
        numbers = struct.unpack(f"<{len(row['sensitivities']) // 8}d", row["sensitivities"])
        width = 3 * (len(parameters) + 1)
        for hour in range(24):
            block = numbers[hour * width : (hour + 1) * width]
            middle = row["period_start_us"] + (hour + 0.5) * HOUR
            for source in opened.site.uncertainty:
                for part in source.parts:
                    key = (part.parameter, part.subject)
                    inside = (part.start or 0) <= middle < (part.end or 2**62)
                    if key not in parameters or not inside:
                        continue
                    size = part.size
                    if part.since is not None:
                        size += part.growth * max(middle - part.since, 0.0) / 1e6
                    n = parameters.index(key)
                    for at in range(3):
                        contributions[source.name][hour][at] += sign * block[3 * n + at] * size
            for at in range(3):
                variance[hour][at] += block[width - 3 + at]
    return [
        [
            fsum(some[hour][at] ** 2 for some in contributions.values()) + variance[hour][at]
            for at in range(3)
        ]
        for hour in range(24)
    ]


@pytest.mark.parametrize("meter", ["FT-101", "FT-201", "FT-301", "FA-412"])
def test_hours_carry_what_their_sensitivities_give(works, meter):
    """Each hour's uncertainty follows from stored sensitivities and the site's sources by hand."""
    with open_site(works.site, read_only=True) as opened:
        by_hand = hours_by_hand(opened, [(1.0, meter)], "2026-10-01")
    rows = works.json("totals", "--by", "hour", "--meter", meter)[:24]
    for row, variances in zip(rows, by_hand, strict=True):
        for at, (figure, name) in enumerate(zip(FIGURES, SHOWN, strict=True)):
            if row[figure] is None:
                assert row[name] is None
                continue
            expected = 2.0 * sqrt(variances[at]) / (1e6 if at == 2 else 1.0)
            assert row[name] == pytest.approx(expected, rel=1e-9)
    # an hour is less certain than its day: what does not repeat has less time to even out
    (day, *_) = works.json("totals", "--meter", meter)
    percent = [row["expanded_uncertainty_percent"] for row in rows if row["base_volume_m3"]]
    assert len(percent) > 12
    assert fsum(percent) / len(percent) > day["expanded_uncertainty_percent"]


def signed_meters(site, name):
    envelope = next(e for e in site.envelopes if e.name == name)
    return [
        *((1.0, meter) for meter in envelope.inflow),
        *((-1.0, meter) for meter in (*envelope.outflow, *envelope.vented)),
    ]


@pytest.mark.parametrize("name", ["hall", "works", "air"])
def test_envelopes_carry_signed_sums(works, name):
    """What the meters of an envelope share is added with sign before anything is squared."""
    rows = stored(works, "open_total", "total_revision")
    days = {
        (row["meter"], row["gas_day"]): json.loads(row["uncertainty"])
        for row in rows
        if row["kind"] == "gas_day"
    }
    with open_site(works.site, read_only=True) as opened:
        signed = signed_meters(opened.site, name)
        hours = hours_by_hand(opened, signed, "2026-10-01")
    by_day = {}
    for row in works.json("balances"):
        if row["envelope"] != name:
            continue
        at = QUANTITIES.index(row["quantity"])
        doubt = added([(sign, days[meter, row["gas_day"]]) for sign, meter in signed])
        by_day[row["gas_day"]] = doubt
        (kept,) = [
            json.loads(b["uncertainty"])
            for b in stored(works, "open_balance", "balance_revision")
            if (b["envelope"], b["quantity"], b["gas_day"], b["kind"])
            == (name, row["quantity"], row["gas_day"], "gas_day")
        ]
        assert kept == doubt
        scale = 1e6 if at == 2 else 1.0
        assert row["expanded_uncertainty"] == pytest.approx(expanded(doubt, at) / scale, rel=1e-12)
        verdict = "yes" if abs(row["imbalance"]) > row["expanded_uncertainty"] else "no"
        assert row["significant"] == verdict
    assert len(by_day) == 3
    month = added([(1.0, by_day[day]) for day in sorted(by_day)])
    for row in works.json("balances", "--by", "month"):
        if row["envelope"] == name:
            at = QUANTITIES.index(row["quantity"])
            scale = 1e6 if at == 2 else 1.0
            assert row["expanded_uncertainty"] == pytest.approx(
                expanded(month, at) / scale, rel=1e-12
            )
            assert "significant: on 3 of 31 gas days" in row["reason"]
    shown = [row for row in works.json("balances", "--by", "hour") if row["envelope"] == name]
    for row in shown:
        if row["gas_day"] != "2026-10-01" or row["imbalance"] is None:
            continue
        at = QUANTITIES.index(row["quantity"])
        hour = (int(row["period_start"][11:13]) - 4) % 24
        expected = 2.0 * sqrt(hours[hour][at]) / (1e6 if at == 2 else 1.0)
        assert row["expanded_uncertainty"] == pytest.approx(expected, rel=1e-9)


def test_what_an_envelope_shares_cancels(works):
    """A composition moves what goes in and out alike: nearly nothing of it is left in between."""
    rows = stored(works, "open_balance", "balance_revision")
    balance = next(
        json.loads(row["uncertainty"])
        for row in rows
        if (row["envelope"], row["quantity"], row["kind"]) == ("hall", "mass", "gas_day")
    )
    total = next(
        json.loads(row["uncertainty"])
        for row in stored(works, "open_total", "total_revision")
        if (row["meter"], row["kind"], row["gas_day"]) == ("FT-202", "gas_day", "2026-10-01")
    )
    name = "natural_gas composition: carbon_dioxide"
    assert abs(balance["contributions"][name][0]) < 0.05 * abs(total["contributions"][name][0])


# --- the budget --------------------------------------------------------------------------------

BUDGET = [
    "meter",
    "period_start",
    "period_end",
    "gas_day",
    "source_of_uncertainty",
    "mass_contribution_kg",
    "base_volume_contribution_m3",
    "energy_contribution_MJ",
    "base_volume_contribution_percent",
    "variance_fraction",
    "reason",
    "status",
    "revision",
    "base_pressure_kPa",
    "base_temperature_degC",
    "calorific_value_kind",
    "combustion_reference_temperature_degC",
    "month",
]


@pytest.mark.parametrize("by", ["gas-day", "month"])
def test_a_budget_is_the_stored_contributions(works, by):
    """Every source once, as stored, with its sign; the largest of base volume first."""
    doubts = {
        (row["meter"], row["gas_day"]): (json.loads(row["uncertainty"]), row)
        for row in stored(works, "open_total", "total_revision")
        if row["kind"] == BY[by]
    }
    lines = defaultdict(list)
    for row in works.json("budget", "--by", by):
        assert list(row) == BUDGET
        lines[period_key(row, by)].append(row)
    assert lines.keys() == doubts.keys()
    for key, some in lines.items():
        doubt, total = doubts[key]
        assert len({line["source_of_uncertainty"] for line in some}) == len(some)
        found = {line["source_of_uncertainty"]: line for line in some}
        random = found.pop("scatter of readings, and what happens between them")
        assert random["mass_contribution_kg"] == sqrt(doubt["random_variance"][0])
        assert found.keys() == doubt["contributions"].keys()
        for name, (mass, volume, energy) in doubt["contributions"].items():
            line = found[name]
            assert line["mass_contribution_kg"] == mass
            assert line["base_volume_contribution_m3"] == volume
            if total["energy_J"] is None:
                assert line["energy_contribution_MJ"] is None
                assert "no energy" in line["reason"]
            else:
                assert line["energy_contribution_MJ"] == energy / 1e6
        sizes = [abs(line["base_volume_contribution_m3"]) for line in some]
        assert sizes == sorted(sizes, reverse=True)
        if total["base_volume_m3"] == 0:
            assert all("no percentage of nothing" in line["reason"] for line in some)
            assert all(line["variance_fraction"] is None for line in some)
            continue
        assert fsum(line["variance_fraction"] for line in some) == pytest.approx(1.0, abs=1e-12)
        for line in some:
            assert line["base_volume_contribution_percent"] == pytest.approx(
                100.0 * line["base_volume_contribution_m3"] / total["base_volume_m3"], rel=1e-12
            )
            assert line["base_pressure_kPa"] == 101.325


def test_signs_in_a_budget(works):
    """More dp, pressure or bore is more gas; a hotter gas, or a denser one at base, is less."""
    day = {
        row["source_of_uncertainty"]: row
        for row in works.json("budget", "--meter", "FT-101", "--to", "2026-10-02")
    }
    for name, sign in {
        "PDT-101 span": 1,
        "PT-101 span": 1,
        "FT-101 bore": 1,
        "FT-101 discharge coefficient, ISO 5167-2": 1,
        "TT-101 zero": -1,
        "natural_gas base density, AGA8 DETAIL": -1,
    }.items():
        assert sign * day[name]["base_volume_contribution_m3"] > 0, name
    # the base density turns a mass into a volume: it does not touch the mass
    assert day["natural_gas base density, AGA8 DETAIL"]["mass_contribution_kg"] == 0.0
    # half a percent of C at k = 2 (ISO 5167-2:2003, 5.3.3.1, beta 0.2 to 0.6) is 0.25 %
    percent = day["FT-101 discharge coefficient, ISO 5167-2"]["base_volume_contribution_percent"]
    assert percent == pytest.approx(0.25, rel=2e-3)


# --- nothing stated, nothing flowing -----------------------------------------------------------

ENVELOPES = """
[envelope.unsound]
in = ["FT-1"]
out = ["FT-2"]
vented = []
quantities = ["mass", "base_volume"]
tolerance = "1 %"

[envelope.sound]
in = ["FT-1"]
out = ["FT-3"]
vented = []
quantities = ["mass", "base_volume"]
tolerance = "1 %"
"""
REASON = (
    "no uncertainty is stated for FT-2 discharge coefficient, ISO 5167-2 "
    "(outside the limits of use or the stated range)"
)


@pytest.fixture(scope="module")
def outside(new_one_meter):
    """Three meters on the same signals, FT-2 of beta 0.8; 12 hours of flow, then none for 36."""
    folder = new_one_meter()
    text = folder.site.read_text(encoding="utf-8")
    meter = text[text.index("[meter.FT-1]") :]
    wide = meter.replace("FT-1", "FT-2").replace('bore = "50 mm"', 'bore = "80 mm"')
    assert wide.count("80 mm") == 1
    third = meter.replace("FT-1", "FT-3")
    folder.site.write_text(f"{text}\n{wide}\n{third}\n{ENVELOPES}", encoding="utf-8")
    lines = ["time,dp,p,t"]
    for n in range(481):
        day, minute = 1 + (360 + 6 * n) // 1440, (360 + 6 * n) % 1440
        dp = 100 + n % 7 if n < 120 else 0
        lines.append(f"2026-10-{day:02d}T{minute // 60:02d}:{minute % 60:02d}:00Z,{dp},5.0,20.5")
    folder.log("FT-1_00.csv", "\n".join(lines) + "\n")
    folder.process("2026-10-05T09:00:00+00:00")
    return folder


def test_outside_the_limits_of_use_no_uncertainty_is_claimed(outside):
    """The meter has its figures, no uncertainty, and a reason that names what is not stated."""
    for by in ("gas-day", "month"):
        (row, *_) = outside.json("totals", "--by", by, "--meter", "FT-2")
        assert row["mass_kg"] > 0
        assert {row[name] for name in SHOWN} == {None}
        assert row["expanded_uncertainty_percent"] is None
        assert REASON in row["reason"]
        (row, *_) = outside.json("totals", "--by", by, "--meter", "FT-3")
        assert 0.3 < row["expanded_uncertainty_percent"] < 3
    hours = outside.json("totals", "--by", "hour", "--meter", "FT-2")
    flowing = [row for row in hours if row["mass_kg"] > 0]
    assert len(hours) == 48
    assert len(flowing) == 12
    for row in flowing:
        assert {row[name] for name in SHOWN} == {None}
        assert REASON in row["reason"]
    for row in hours[12:]:
        assert row[SHOWN[0]] == 0.0
        assert "no uncertainty is stated" not in row["reason"]


def test_an_envelope_with_such_a_meter_is_not_judged_for_that_reason(outside):
    """Significance cannot be judged, and why is said; the tolerance, and others, are judged."""
    for by, first in (("gas-day", "2026-10-01"), ("month", "2026-10-01")):
        rows = [
            row
            for row in outside.json("balances", "--by", by)
            if (row["gas_day"] or f"{row['month']}-01") == first
        ]
        assert len(rows) == 4
        for row in rows:
            assert row["beyond_tolerance"] in {"yes", "no"}
            if row["envelope"] == "sound":
                assert row["significant"] == "no"
                assert row["expanded_uncertainty"] > 0
            else:
                assert row["significant"] == f"cannot be judged: {REASON}"
                assert row["expanded_uncertainty"] is None
                assert REASON in row["reason"]
    for row in outside.json("balances", "--by", "hour"):
        flowing = row["in"] > 0
        lacks = flowing and row["envelope"] == "unsound"
        assert (row["expanded_uncertainty"] is None) == lacks
        assert (REASON in row["reason"]) == lacks


def test_a_day_of_no_flow_is_zero_without_doubt(outside):
    """Measured flow of zero: the totals are 0, and so is what the sources make of them."""
    for meter in ("FT-1", "FT-2", "FT-3"):
        (_, row) = outside.json("totals", "--meter", meter)
        assert (row["mass_kg"], row["base_volume_m3"]) == (0.0, 0.0)
        assert (row[SHOWN[0]], row[SHOWN[1]]) == (0.0, 0.0)
        assert row["expanded_uncertainty_percent"] is None
        assert "no uncertainty in percent of nothing" in row["reason"]
    for row in outside.json("balances"):
        if row["gas_day"] == "2026-10-02":
            assert (row["imbalance"], row["expanded_uncertainty"]) == (0.0, 0.0)
            assert row["significant"] == "no"


@pytest.mark.parametrize(
    ("what", "by"),
    [(w, b) for w in ("totals", "balances", "budget") for b in ("hour", "gas-day", "month")
     if (w, b) != ("budget", "hour")],
)  # fmt: skip
def test_what_is_not_known_is_never_nan(outside, invoke, what, by):
    """Every view of such a site prints: strict JSON, CSV without NaN, tables of 100 columns."""

    def refuse(constant):
        pytest.fail(f"{constant} is not JSON")

    arguments = ("show", what, "--by", by, "--site", outside.site)
    json.loads(invoke(*arguments, "--format", "json").stdout, parse_constant=refuse)
    text = invoke(*arguments, "--format", "csv").stdout
    for row in csv.DictReader(io.StringIO(text)):
        assert not {"nan", "inf", "-inf", "-0.0"} & {cell.lower() for cell in row.values()}
    assert max(len(line.rstrip()) for line in invoke(*arguments).stdout.splitlines()) <= 100


def test_tables_say_once_why_there_is_no_uncertainty(outside):
    """Under totals and balances stands each meter or envelope without one, with the reason."""
    for what, subject in (("totals", "FT-2"), ("balances", "unsound")):
        for by in ("hour", "gas-day", "month"):
            text = " ".join(
                outside.text(what, "--by", by).partition("Without uncertainty")[2].split()
            )
            assert text == f"{subject}: {REASON}"
    assert "not stated" in outside.text("budget", "--meter", "FT-2")


def test_a_budget_names_first_what_is_not_stated(outside):
    """Sources for which nothing is stated stand first, empty, with the reason; no shares then."""
    rows = outside.json("budget", "--meter", "FT-2", "--to", "2026-10-02")
    first, *others = rows
    assert first["source_of_uncertainty"] == "FT-2 discharge coefficient, ISO 5167-2"
    assert first["base_volume_contribution_m3"] is None
    assert first["reason"] == "no uncertainty is stated for it"
    assert len(others) >= 4
    for row in others:
        assert row["base_volume_contribution_m3"] is not None
        assert row["variance_fraction"] is None
        assert "the base volume's uncertainty is not known" in row["reason"]


def test_what_is_not_stated_is_replayed(outside, invoke):
    """A ledger of figures without uncertainty is proved like any other."""
    assert invoke("verify", "--site", outside.site).stdout.startswith("proved: ")
