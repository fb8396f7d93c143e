"""Effective-dated terms, presets, compositions, atmosphere, rooted and interval sources."""

from __future__ import annotations

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.intake.site import site_from_text
from meterfix.intake.site.terms import standard_atmosphere
from meterfix.model.gas import BaseConditions, CalorificBasis, StateModel
from meterfix.model.source import Between, Holds, Stamp, Transmitter

SECOND = 1_000_000
METHANE = "methane = 93.12"
VOLUME_BASE = 'volume_base = { pressure = "101.325 kPa", temperature = "15 degC" }'
US_CONDITIONS = '{ pressure = "14.73 psi", temperature = "60 degF" }'
EDGE = "2026-10-20T06:00:00+02:00"
EDGE_US = 1_792_468_800 * SECOND


def without_table(text, header):
    """Return the text without the table that begins with the header, up to the next blank line."""
    shorter, count = re.subn(rf"(?m)^{re.escape(header)}.*\n(?:.+\n)*", "", text, count=1)
    assert count == 1
    return shorter


@pytest.mark.parametrize(
    ("elevation", "pressure", "half_digit"),
    [
        (-400.0, 106_220.0, 5.0),
        (0.0, 101_325.0, 0.5),
        (1000.0, 89_876.0, 0.5),
        (2000.0, 79_501.0, 0.5),
        (5000.0, 54_048.0, 0.5),
    ],
)
def test_standard_atmosphere(elevation, pressure, half_digit):
    """Printed values by geometric height, US Standard Atmosphere 1976, table I (from memory).

    Up to 32 km it is ISO 2533:1975.
    """
    assert standard_atmosphere(elevation) == pytest.approx(pressure, abs=half_digit, rel=0)


def test_standard_atmosphere_against_a_reference_library():
    """The same as fluids' US Standard Atmosphere 1976 from -500 m to 6 km, to 2e-6."""
    fluids = pytest.importorskip("fluids")
    for elevation in range(-500, 6001, 250):
        expected = fluids.ATMOSPHERE_1976(float(elevation)).P
        assert standard_atmosphere(float(elevation)) == pytest.approx(expected, rel=2e-6)


@pytest.mark.parametrize(
    ("preset", "kelvin"),
    [("ISO 13443", 288.15), ("normal", 273.15)],
)
def test_base_conditions_by_name(edited, preset, kelvin):
    """A preset's name gives the same as its values, for the site and for a calorific value."""
    text = edited(
        ('archive = "archive"', f'archive = "archive"\nbase_conditions = "{preset}"'),
        (VOLUME_BASE, f'volume_base = "{preset}"'),
    )
    site = site_from_text(without_table(text, "[site.base_conditions]"), "site.toml")
    expected = BaseConditions(101_325.0, kelvin)
    assert site.base_conditions.in_force(0) == expected
    assert site.gases[0].terms.in_force(0).calorific_value.volume_base == expected


def test_base_conditions_in_degf_and_psi(edited):
    """60 degF and 14.73 psi: 288.7056 K, 101.5598 kPa (exact arithmetic)."""
    text = edited(
        ('archive = "archive"', 'archive = "archive"\nbase_conditions = ' + US_CONDITIONS),
    )
    base = site_from_text(
        without_table(text, "[site.base_conditions]"), "site.toml"
    ).base_conditions.in_force(0)
    assert base.base_pressure == pytest.approx(101_559.8, abs=0.06)
    assert base.base_temperature == pytest.approx(288.705556, abs=5e-7)


DATED_TERMS = f"""
gas_day_start = [{{ value = "06:00" }}, {{ since = "{EDGE}", value = "06:00" }}]
base_conditions = [
  {{ preset = "ISO 13443" }},
  {{ since = "{EDGE}", preset = "normal" }},
]
atmospheric_pressure = [
  {{ value = "1000 mbar" }},
  {{ since = 2026-10-20T07:00:00+02:00, value = "990 mbar" }},
]
"""
DATED_RANGE = f"""
range = [
  {{ value = ["0 mbar", "250 mbar"] }},
  {{ since = "{EDGE}", value = ["0 mbar", "100 mbar"] }},
]
"""
DATED_METHODS = f"""
[[gas.natural_gas.change]]
since = "{EDGE}"
dynamic_viscosity = "0.012 mPa s"
base_model = {{ fixed_compression_factor = 0.997 }}

[[gas.natural_gas.composition]]
"""
SECOND_COMPOSITION = """
carbon_dioxide = 1.09
[[gas.natural_gas.composition]]
since = "2026-10-25T06:00:00+01:00"
basis = "mass"
unit = "1"
methane = 1
"""


ELEVATION = 'elevation = "112 m"\nuncertainty = { size = "20 mbar", distribution = "rectangular" } '
BAROMETER = """
[source.station.column.b]
quantity = "barometric_pressure"
unit = "hPa"
[signal.BT-1]
from = [{ source = "station", binding = "BT-1", column = "b" }]
[signal.PDT-101]
"""


def dated(first, later):
    return f'[{{ value = "{first}" }}, {{ since = "{EDGE}", value = "{later}" }}]'


def test_every_term_can_change(edited):
    """Lists of versions, the first without `since`: each is in force from its own instant on."""
    text = edited(
        ('gas_day_start = "06:00"', DATED_TERMS),
        ('price = "38.50 per MWh"', "price = " + dated("38.50 per MWh", "11 per GJ")),
        ('tolerance = "1.5 %"', "tolerance = " + dated("1.5 %", "2 %")),
        ('range = ["0 mbar", "250 mbar"]', DATED_RANGE),
        ("[[gas.natural_gas.composition]]", DATED_METHODS),
        ("carbon_dioxide = 1.09", SECOND_COMPOSITION),
    )
    for header in ("[site.base_conditions]", "[site.atmospheric_pressure]"):
        text = without_table(text, header)
    site = site_from_text(text, "site.toml")
    assert site.base_conditions.in_force(EDGE_US - 1).base_temperature == 288.15
    assert site.base_conditions.in_force(EDGE_US).base_temperature == 273.15
    assert site.atmosphere.in_force(EDGE_US).value == 100_000.0
    assert site.atmosphere.in_force(EDGE_US + 3600 * SECOND).value == 99_000.0
    assert site.contract.price.in_force(EDGE_US) == pytest.approx(11e-9, rel=1e-15)
    assert site.envelopes[0].tolerance.in_force(EDGE_US).fraction_of_in == 0.02
    dp = next(signal for signal in site.signals if signal.name == "PDT-101")
    assert dp.transmitter.in_force(EDGE_US) == Transmitter(0.0, 10_000.0)
    first, second, third = site.gases[0].terms.entries
    assert (first.since, second.since) == (None, EDGE_US)
    assert first.value.base_model.model is StateModel.AGA8_DETAIL
    assert second.value.base_model.fixed_compression_factor == 0.997
    assert second.value.composition == first.value.composition
    assert third.value.dynamic_viscosity.value == 1.2e-5
    assert (third.value.composition.basis, third.value.composition.fractions) == (
        "mass",
        (("methane", 1.0),),
    )


def test_normalising_is_noted(edited):
    """Fractions that sum to 1.0004 within the tolerance are normalised, and the note says so."""
    site = site_from_text(edited((METHANE, "methane = 93.16")), "site.toml")
    composition = site.gases[0].terms.in_force(0).composition
    assert composition.sum_as_given == 1.0004
    assert dict(composition.fractions)["methane"] == pytest.approx(0.9316 / 1.0004, rel=1e-15)
    assert site.notes == (
        "gas natural_gas from the beginning: mole fractions sum to 1.0004; normalised",
    )


@given(st.lists(st.integers(1, 10_000), min_size=3, max_size=3))
def test_normalised_fractions_sum_to_one(edited, parts):
    """Whatever is written within the tolerance, the fractions sum to 1 within rounding."""
    total = sum(parts)
    methane, ethane, propane = (round(100 * part / total, 3) for part in parts)
    text = edited(
        (METHANE, f"methane = {methane}"),
        ("ethane = 3.85", f"ethane = {ethane}"),
        ("propane = 0.92", f"propane = {propane}"),
        ("nitrogen = 1.02\n", ""),
        ("carbon_dioxide = 1.09\n", ""),
    )
    composition = site_from_text(text, "site.toml").gases[0].terms.in_force(0).composition
    assert sum(value for _, value in composition.fractions) == pytest.approx(1.0, abs=4e-16)


def test_air_by_its_reference_equation(edited):
    """Air stands alone, with the reference equation for density and viscosity."""
    text = edited() + (
        '\n[gas.air]\nline_model = "reference_equation"\nbase_model = "ideal"\n'
        'dynamic_viscosity = "reference_equation"\nisentropic_exponent = 1.4\n'
        'composition = { basis = "mole", unit = "1", air = 1 }\n'
    )
    air = site_from_text(text, "site.toml").gases[1].terms.in_force(0)
    assert air.composition.fractions == (("air", 1.0),)
    assert air.line_model.model is StateModel.REFERENCE
    assert air.dynamic_viscosity.method == "reference_equation"
    assert air.isentropic_exponent.value == 1.4
    assert air.calorific_value is None


def test_energy_by_mass(edited):
    """A value per kg has no volume base and fits a contract that reckons by mass."""
    text = edited(
        ('way = "volume"', 'way = "mass"'),
        ('value = "38.9 MJ/m3"', 'value = "50.1 MJ/kg"'),
        (VOLUME_BASE, ""),
    )
    value = site_from_text(text, "site.toml").gases[0].terms.in_force(0).calorific_value
    assert (value.value, value.basis, value.volume_base) == (50.1e6, CalorificBasis.MASS, None)


def test_a_rooted_column_and_interval_stamps(edited):
    """A rooted cell is a fraction of full scale; interval stamps carry their length and hold."""
    text = edited(
        ('stamp = "instant"', 'stamp = "interval_end"\ninterval = "1 min"'),
        ('between = "linear"', ""),
        ('unit = "mbar"', 'unit = "%"'),
        ('root = "not_taken"', 'root = "taken"'),
        ('holds = "sample"', 'holds = "mean"'),
    )
    site = site_from_text(text, "site.toml")
    source = site.sources[0]
    assert (source.stamp, source.interval) == (Stamp.INTERVAL_END, 60 * SECOND)
    column = source.layout.columns[0]
    assert (column.rooted, column.scale, column.holds) == (True, 0.01, Holds.MEAN)
    dp = next(signal for signal in site.signals if signal.name == "PDT-101")
    assert (dp.rooted, dp.holds, dp.between, dp.interval) == (
        True,
        Holds.MEAN,
        Between.HOLD,
        60 * SECOND,
    )
    assert dp.transmitter.in_force(0) == Transmitter(0.0, 25_000.0)


def test_a_barometer_gives_the_atmosphere(edited):
    """The atmospheric pressure may be a signal's, absolute without saying so."""
    text = edited((ELEVATION, 'barometer = "BT-1" '), ("[signal.PDT-101]", BAROMETER))
    site = site_from_text(text, "site.toml")
    assert site.atmosphere.in_force(0).signal == "BT-1"
    barometer = next(signal for signal in site.signals if signal.name == "BT-1")
    assert not barometer.gauge


def test_a_meter_that_begins_later(edited):
    """A meter's `since` is the start of its first terms."""
    since = '# since = "2026-01-01T06:00:00+01:00"'
    site = site_from_text(edited((since, since.removeprefix("# "))), "site.toml")
    assert site.meters[0].terms.entries[0].since == 1_767_243_600 * SECOND
