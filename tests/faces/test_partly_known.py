"""Figures of which only a part is known: no number, the seconds, and what a verdict rests on."""

from __future__ import annotations

import json
import math
import re
import sqlite3

import pytest

from meterfix import units

ENERGY = """
[contract.energy]
way = "volume"
kind = "gross"
combustion_reference_temperature = "15 degC"
"""
SINCE_NINE = """
[[gas.air.calorific_value]]
since = "2026-10-02T09:00:00+00:00"
value = "38.9 MJ/m3"
kind = "gross"
combustion_reference_temperature = "15 degC"
volume_base = { pressure = "101.325 kPa", temperature = "15 degC" }
"""
ENVELOPE = """
[envelope.line]
in = ["FT-1"]
out = ["FT-2"]
vented = []
quantities = ["mass", "base_volume", "energy"]
tolerance = "1 %"
"""
AFTER = "2026-10-04T09:00:00+00:00"
BASE = """[site.base_conditions]
pressure = "101.325 kPa"
temperature = "15 degC"
"""
CHANGED_BASE = """[[site.base_conditions]]
pressure = "101.325 kPa"
temperature = "60 degF"

[[site.base_conditions]]
since = "2026-10-02T06:00:00+00:00"
pressure = "101.325 kPa"
temperature = "15 degC"
"""


def stored(folder, table, **where):
    with sqlite3.connect(f"file:{folder.path / 'meterfix.sqlite'}?mode=ro", uri=True) as database:
        database.row_factory = sqlite3.Row
        rows = [dict(row) for row in database.execute(f"SELECT * FROM {table}")]
    return [row for row in rows if all(row[k] == v for k, v in where.items())]


def two_meters(folder, *tables):
    """Give a one-meter site a second meter on the same signals, and more tables."""
    text = folder.site.read_text(encoding="utf-8")
    meter = text[text.index("[meter.FT-1]") :]
    added = (meter.replace("meter.FT-1", "meter.FT-2"), *tables)
    folder.site.write_text("\n".join((text, *added)), encoding="utf-8")


@pytest.fixture(scope="module")
def part_energy(new_one_meter, hour_log):
    """Three hours of 2026-10-02, a calorific value from the third on, and an envelope."""
    folder = new_one_meter()
    two_meters(folder, ENERGY, SINCE_NINE, ENVELOPE)
    for number in (7, 8, 9):
        folder.log(f"FT-1_{number:02d}.csv", hour_log(number))
    folder.process(AFTER)
    return folder


@pytest.fixture(scope="module")
def two_bases(new_one_meter, hour_log):
    """Gas day 2026-10-01 at 60 degF, 2026-10-02 at 15 degC, each bridged throughout."""
    folder = new_one_meter()
    text = folder.site.read_text(encoding="utf-8")
    assert BASE in text
    text = text.replace(BASE, CHANGED_BASE).replace('maximum_gap = "10 min"', 'maximum_gap = "2 d"')
    folder.site.write_text(text, encoding="utf-8")
    two_meters(folder, ENVELOPE.replace(', "energy"', ""))
    folder.log("FT-1_00.csv", hour_log(7).replace("2026-10-02T07", "2026-10-01T06"))
    folder.log("FT-1_01.csv", hour_log(6).replace("2026-10-02T06", "2026-10-03T06"))
    folder.process(AFTER)
    return folder


def test_energy_of_a_part_of_the_day_is_not_shown_as_the_day_s(part_energy):
    """A calorific value from the third hour on: no energy of the day and month, and for how long.

    The two measured hours before are those without energy. Mass and base volume stand.
    """
    hours = part_energy.json("totals", "--by", "hour", "--meter", "FT-1")
    known = [hour for hour in hours if hour["energy_MJ"] is not None]
    assert [hour["period_start"] for hour in known] == ["2026-10-02T09:00:00Z"]
    lacking = [hour for hour in hours if hour["mass_kg"] is not None and hour["energy_MJ"] is None]
    seconds = math.fsum(hour["measured_fraction"] * 3600.0 for hour in lacking)
    assert seconds == 7200.0
    for by in ("gas-day", "month"):
        (row,) = part_energy.json("totals", "--by", by, "--meter", "FT-1")
        assert row["mass_kg"] > 0
        assert row["base_volume_m3"] > 0
        assert row["energy_MJ"] is None
        assert row["calorific_value_kind"] is None
        assert row["combustion_reference_temperature_degC"] is None
        reason = "no energy for 7200.0 s of the measured time (no calorific value)"
        assert reason in row["reason"]
        assert "base volume" not in row["reason"]
        text = " ".join(part_energy.text("totals", "--by", by).split())
        assert "no energy for 7200 s of the measured time (no calorific value)" in text


def test_the_balance_of_energy_that_is_partly_known_is_not_judged(part_energy):
    """Neither the gas day nor the hours without a calorific value have an inflow of energy."""
    (day,) = [row for row in part_energy.json("balances") if row["quantity"] == "energy"]
    assert (day["in"], day["imbalance"], day["tolerance"]) == (None, None, None)
    assert day["beyond_tolerance"].startswith("cannot be judged: missing input: FT-1")
    assert "no energy for 7200.0 s of the measured time" in day["reason"]
    hours = {
        row["period_start"][11:13]: row
        for row in part_energy.json("balances", "--by", "hour")
        if row["quantity"] == "energy"
    }
    assert (hours["07"]["in"], hours["08"]["in"]) == (None, None)
    assert hours["09"]["in"] > 0
    assert "no energy for 3600.0 s of the measured time" in hours["07"]["reason"]
    assert "no energy" not in hours["09"]["reason"]


def test_a_partly_known_ledger_is_proved(part_energy, two_bases, invoke):
    """What lacks is replayed like any figure."""
    for folder in (part_energy, two_bases):
        invoke("verify", "--site", folder.site)


def test_base_volumes_at_two_base_conditions_have_no_month(two_bases):
    """Each gas day's balance stands at its own conditions; the month of m3 has no figure."""
    days = {row["gas_day"]: row for row in two_bases.json("balances") if row["unit"] == "m3"}
    assert days["2026-10-01"]["in"] > 0
    assert days["2026-10-02"]["base_temperature_degC"] == 15.0
    months = {row["quantity"]: row for row in two_bases.json("balances", "--by", "month")}
    volume = months["base_volume"]
    for name in ("in", "out", "vented", "imbalance", "tolerance"):
        assert volume[name] is None
    why = "the base conditions change within the period"
    assert volume["beyond_tolerance"] == f"cannot be judged: {why}"
    assert why in volume["reason"]
    assert (volume["base_pressure_kPa"], volume["base_temperature_degC"]) == (None, None)
    assert months["mass"]["in"] > 0
    assert why not in months["mass"]["reason"]
    (total,) = two_bases.json("totals", "--by", "month", "--meter", "FT-1")
    assert (total["base_volume_m3"], total["base_temperature_degC"]) == (None, None)
    assert f"base volume: {why}" in total["reason"]


def test_a_base_temperature_reads_back(two_bases):
    """60 degF is shown in degC with the digits that it takes to read it back, and no fewer."""
    where = {"meter": "FT-1", "kind": "gas_day", "gas_day": "2026-10-01"}
    (row,) = stored(two_bases, "total_revision", **where)
    assert row["base_temperature_K"] == units.parse("60 degF", "temperature")
    for what in ("totals", "balances"):
        rows = [r for r in two_bases.json(what) if r["gas_day"] == "2026-10-01"]
        for shown in rows:
            if shown.get("unit") == "kg":
                continue
            again = units.parse(f"{shown['base_temperature_degC']!r} degC", "temperature")
            assert again == row["base_temperature_K"]
            assert f"{shown['base_temperature_degC']:.9f}" == "15.555555556"


def test_measured_lost_and_absent_time_add_up(works, part_energy, two_bases):
    """Of every stored total: measured + lost + absent = duration; a month's absence is shown."""
    months = 0
    for folder in (works, part_energy, two_bases):
        for table in ("open_total", "total_revision"):
            for row in stored(folder, table):
                parts = [row["measured_time_s"], *json.loads(row["missing"]).values()]
                assert math.fsum(parts) == pytest.approx(row["duration_s"], abs=1e-6)
                if row["kind"] == "month":
                    months += 1
                    absent = json.loads(row["missing"])["absent"]
                    (shown,) = folder.json("totals", "--by", "month", "--meter", row["meter"])
                    assert f"not yet over {absent!r} s" in shown["reason"]
    assert months >= 13


def test_a_month_s_reason_names_gaps_and_absent_days(part_energy):
    """A gap on one gas day does not hide the thirty that have no figures at all."""
    (row,) = part_energy.json("totals", "--by", "month", "--meter", "FT-1")
    assert "missing differential pressure" in row["reason"]
    assert f"gas days without readings or not yet over {30 * 86400.0!r} s" in row["reason"]
    assert f"not yet over {30 * 86400} s" in " ".join(
        part_energy.text("totals", "--by", "month").split()
    )


@pytest.mark.parametrize("by", ["hour", "gas-day", "month"])
def test_balances_say_what_they_stand_at(works, by):
    """Base conditions beside m3, kind and combustion reference beside MJ, nothing beside kg."""
    names = ("base_pressure_kPa", "base_temperature_degC", "calorific_value_kind")
    expected = {
        "mass": (None, None, None, None),
        "base_volume": (101.325, 15.0, None, None),
        "energy": (None, None, "gross", 15.0),
    }
    for row in works.json("balances", "--by", by):
        stands_at = (*(row[name] for name in names), row["combustion_reference_temperature_degC"])
        assert stands_at == expected[row["quantity"]]
    for what in ("balances", "totals"):
        head = " ".join(works.text(what, "--by", by).split()[:60])
        assert "Base volume at 101.325 kPa and 15 degC;" in head
        assert "energy: gross, combustion reference 15 degC;" in head


def test_energy_totals_say_their_combustion_reference(works):
    """15 degC beside every energy, nothing where there is none."""
    for by in ("hour", "gas-day", "month"):
        for row in works.json("totals", "--by", by):
            expected = None if row["energy_MJ"] is None else 15.0
            assert row["combustion_reference_temperature_degC"] == expected


def test_balances_stand_at_what_was_in_force_when_stored(own_works):
    """A later edit of the site file does not change what stored figures are said to stand at."""
    before = own_works.json("balances")
    assert {row["base_temperature_degC"] for row in before} == {None, 15.0}
    text = own_works.site.read_text(encoding="utf-8")
    edited = text.replace('temperature = "15 degC"', 'temperature = "20 degC"', 1)
    assert edited != text
    own_works.site.write_text(edited, encoding="utf-8")
    assert own_works.json("balances") == before


def test_a_month_s_verdict_says_on_how_many_days(works):
    """Three gas days of thirty-one: the table's verdict and the reason say so; the word stays."""
    for row in works.json("balances", "--by", "month"):
        assert row["beyond_tolerance"] == "no"
        assert "beyond tolerance: on 3 of 31 gas days" in row["reason"]
        assert "left out: 2026-10-04 to 2026-10-31;" in row["reason"]
    assert "no, on 3 of 31" in works.text("balances", "--by", "month")


def test_a_table_of_balances_shows_measured_share_and_revision(works):
    """Both stand beside the verdict."""
    (heading,) = [x for x in works.text("balances").splitlines() if x.startswith("envelope")]
    assert re.search(r"measured +rev$", heading.rstrip())


def test_flags_carry_every_digit(works):
    """Each share in CSV and JSON is the stored float to the bit."""
    shares = {
        (row["meter"], row["gas_day"]): json.loads(row["flags"])["shares"]
        for table in ("open_total", "total_revision")
        for row in stored(works, table, kind="gas_day")
    }
    flagged = 0
    for row in works.json("totals"):
        parts = (part.split(" ") for part in row["flags"].split("; ") if part)
        shown = {name: float(share) for name, share in parts}
        assert shown == shares[row["meter"], row["gas_day"]]
        flagged += bool(shown)
    assert flagged
