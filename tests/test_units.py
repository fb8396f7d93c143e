"""Quantities as people write them: published factors, offsets, refusals, round trips."""

from __future__ import annotations

import csv
import math
import subprocess
import sys
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.errors import UnitError
from meterfix.units import linear, parse, render

PUBLISHED = Path(__file__).parent / "published" / "units" / "unit_factors.csv"

WRITTEN = {
    "Btu_IT": ("Btu", "energy"),
    "therm (EC, 1e5 Btu_IT)": ("therm_EC", "energy"),
    "therm (EC)": ("therm_EC", "energy"),
    "therm (US, Btu_59F 1054.804 J)": ("therm_US", "energy"),
    "kWh": ("kWh", "energy"),
    "cal_IT": ("cal_IT", "energy"),
    "cal_th": ("cal_th", "energy"),
    "psi": ("psi", "pressure"),
    "atm": ("atm", "pressure"),
    "bar": ("bar", "pressure"),
    "kgf/cm2": ("kgf/cm2", "pressure"),
    "inch": ("inch", "length"),
    "ft3": ("ft3", "volume"),
    "lb": ("lb", "mass"),
    "60 degF": ("60 degF", "temperature"),
    "inH2O at 60 degF": ("inH2O @ 60 degF", "pressure"),
    "inH2O at 4 degC": ("inH2O @ 4 degC", "pressure"),
    "mmHg (conventional)": ("mmHg", "pressure"),
    "inHg at 0 degC": ("inHg @ 0 degC", "pressure"),
    "14.73 psia": ("14.73 psi", "pressure"),
    "14.696 psia": ("14.696 psi", "pressure"),
}


def published_rows():
    lines = [line for line in PUBLISHED.read_text().splitlines() if not line.startswith("#")]
    return list(csv.DictReader(lines))


@pytest.mark.parametrize("row", published_rows(), ids=lambda row: f"{row['from']}-{row['to']}")
def test_published_factors_are_met(row):
    """Every published factor is met within its own tolerance."""
    written, dimension = WRITTEN[row["from"]]
    text = written if written[0].isdigit() else f"1 {written}"
    found = render(parse(text, dimension), row["to"])
    assert found == pytest.approx(float(row["factor"]), rel=float(row["rel_tol"]), abs=0)


@pytest.mark.parametrize(
    ("text", "dimension", "value"),
    [
        ("25 kPa", "pressure", 25_000.0),
        ("100 inH2O @ 4 degC", "pressure", 24_908.891),
        ("1 inH2O@4degC", "pressure", 249.08891),
        ("1 mmH2O @ 4 degC", "pressure", 9.80665),
        ("1 mH2O @ 39.2 degF", "pressure", 9806.65),
        ("18 degC", "temperature", 291.15),
        ("-40 degF", "temperature", 233.15),
        ("-40 °C", "temperature", 233.15),
        ("300 K", "temperature", 300.0),
        ("9 degF", "temperature_difference", 5.0),
        ("154.08 mm", "length", 0.15408),
        ("5 min", "time", 300.0),
        ("38.9 MJ/m3", "energy_per_volume", 38.9e6),
        ("10.5 kWh/m³", "energy_per_volume", 37.8e6),
        ("38.9 MJ per m^3", "energy_per_volume", 38.9e6),
        ("50.1 MJ/kg", "energy_per_mass", 50.1e6),
        ("16e-6 / K", "per_temperature", 16e-6),
        ("16e-6 1/K", "per_temperature", 16e-6),
        ("9e-6 / degF", "per_temperature", 16.2e-6),
        ("1.5 %", "fraction", 0.015),
        ("0.015", "fraction", 0.015),
        ("0.0111 mPa s", "dynamic_viscosity", 1.11e-5),
        ("0.0111  mPa * s", "dynamic_viscosity", 1.11e-5),
        ("0.0111 cP", "dynamic_viscosity", 1.11e-5),
        ("36 per kWh", "per_energy", 1e-5),
        ("1 lbf/in**2", "pressure", 6894.757293168362),
        ("0 bar", "pressure", 0.0),
    ],
)
def test_quantities_are_read_exactly(text, dimension, value):
    """A quantity becomes the float nearest to its exact SI value, not one bit beside it."""
    assert parse(text, dimension) == value


def test_water_columns_differ_by_temperature_as_densities_do():
    """20 degC and 68 degF are one temperature; columns at 4, 20 degC and 60 degF all differ.

    Densities of water: 998.2067 kg/m3 at 20 degC, 999.016 kg/m3 at 60 degF (M. Tanaka et al.,
    Metrologia 38 (2001) 301, the formula computed here; coefficients from memory).
    """

    def density(t):
        return 999.97495 * (1 - (t - 3.983035) ** 2 * (t + 301.797) / (522528.9 * (t + 69.34881)))

    cold = parse("1 inH2O @ 4 degC", "pressure")
    for written, celsius in (("20 degC", 20.0), ("68 degF", 20.0), ("60 degF", 140 / 9)):
        ratio = parse(f"1 inH2O @ {written}", "pressure") / cold
        assert ratio == pytest.approx(density(celsius) / 1000, rel=5e-6)
    assert parse("1 inH2O @ 20 degC", "pressure") == parse("1 inH2O @ 68 degF", "pressure")


@pytest.mark.parametrize(
    ("text", "dimension", "words"),
    [
        ("25 kg", "pressure", ["mass", "'kg'", "pressure"]),
        ("25", "pressure", ["no unit", "pressure"]),
        ("100 inH2O", "pressure", ["temperature of the water", "@ 4 degC"]),
        ("100 mmH2O @ 5 degC", "pressure", ["5 degC", "60 degF"]),
        ("100 inH2O @", "pressure", ["temperature of the water"]),
        ("1 mmHg @ 20 degC", "pressure", ["0 degC"]),
        ("5 psig", "pressure", ["psig", "'psi'", "declared apart"]),
        ("5 barg", "pressure", ["barg", "'bar'", "declared apart"]),
        ("5 bar(a)", "pressure", ["'bar'", "declared apart"]),
        ("5 kPa abs", "pressure", ["'kPa'", "declared apart"]),
        ("5 Bar", "pressure", ["did you mean 'bar'"]),
        ("18 C", "temperature", ["degC"]),
        ("-300 degC", "temperature", ["absolute zero"]),
        ("38 MJ/m3", "pressure", ["MJ/m3", "pressure"]),
        ("38 kPa", "energy_per_volume", ["kPa", "energy per volume"]),
        ("38.5 per m3", "per_energy", ["per volume", "per energy"]),
        ("5 kcal", "energy", ["kcal_IT", "kcal_th"]),
        ("5 therm", "energy", ["therm_EC", "therm_US"]),
        ("5 Nm3", "volume", ["base conditions"]),
        ("1,5 bar", "pressure", ["cannot be read"]),
        ("nan bar", "pressure", ["number"]),
        ("inf bar", "pressure", ["number"]),
        ("1_000 bar", "pressure", ["cannot be read"]),
        ("٣ bar", "pressure", ["number"]),
        ("1e999 bar", "pressure", ["out of reach"]),
        ("1e300 GPa", "pressure", ["out of reach"]),
        ("1e-9999 bar", "pressure", ["out of reach"]),
        ("", "pressure", ["number"]),
        ("bar", "pressure", ["number"]),
        ("5 m/", "length", ["cannot be read"]),
        ("5 //m", "per_temperature", ["cannot be read"]),
        ("5 (m)", "length", ["cannot be read"]),
        ("5 m @ 4 degC", "length", ["'@'"]),
        ("5 candela", "pressure", ["candela"]),
        ("5 " + "m " * 60, "length", ["too long"]),
    ],
)
def test_what_cannot_be_meant_is_refused(text, dimension, words):
    """Ambiguous, unknown and wrong quantities are refused: what was given; what is allowed."""
    with pytest.raises(UnitError) as caught:
        parse(text, dimension)
    for word in words:
        assert word in str(caught.value)
    assert "; " in str(caught.value)


@pytest.mark.parametrize(
    ("unit", "dimension", "scale", "offset"),
    [
        ("mbar", "pressure", 100.0, 0.0),
        ("degC", "temperature", 1.0, 273.15),
        ("degF", "temperature", 5 / 9, float(Fraction(45967, 180))),
        ("K", "temperature", 1.0, 0.0),
        ("%", "fraction", 0.01, 0.0),
        ("1", "fraction", 1.0, 0.0),
        ("inH2O @ 4 degC", "pressure", 249.08891, 0.0),
        ("degF", "temperature_difference", 5 / 9, 0.0),
    ],
)
def test_columns_convert_by_scale_and_offset(unit, dimension, scale, offset):
    """A whole column converts as value x scale + offset, offset temperatures included."""
    assert linear(unit, dimension) == (scale, offset)


def test_a_column_of_the_wrong_dimension_is_refused():
    """A temperature column in mbar is refused, the unit and the dimension named."""
    with pytest.raises(UnitError, match=r"'mbar'.*temperature"):
        linear("mbar", "temperature")


UNITS = [
    ("kPa", "pressure"),
    ("mbar", "pressure"),
    ("psi", "pressure"),
    ("inH2O @ 60 degF", "pressure"),
    ("degC", "temperature"),
    ("degF", "temperature"),
    ("mm", "length"),
    ("in", "length"),
    ("MJ", "energy"),
    ("MWh", "energy"),
    ("%", "fraction"),
    ("ft3", "volume"),
]


@given(st.sampled_from(UNITS), st.floats(1e-6, 1e12))
def test_what_is_shown_reads_back_as_the_same_float(unit_and_dimension, value):
    """What render shows, written out and parsed, is the SI value within two steps of a float."""
    unit, dimension = unit_and_dimension
    shown = render(value, unit)
    again = parse(f"{shown!r} {unit}", dimension)
    # between 0 degC and the floats near 273.15 K the text has the finer grid, elsewhere one step
    assert abs(again - value) <= 2 * math.ulp(max(value, abs(shown)))


@given(st.sampled_from(UNITS), st.integers(-4000, 100_000))
def test_short_numbers_survive_the_round_trip(unit_and_dimension, hundredths):
    """What a person writes with two decimals is shown again exactly as written."""
    unit, dimension = unit_and_dimension
    written = hundredths / 100
    assert render(parse(f"{written!r} {unit}", dimension), unit) == written


@given(st.sampled_from(UNITS), st.floats(-50.0, 1e6))
def test_one_value_and_a_column_agree(unit_and_dimension, value):
    """A parsed value and a column differ by rounding only."""
    unit, dimension = unit_and_dimension
    scale, offset = linear(unit, dimension)
    single = parse(f"{value!r} {unit}", dimension)
    assert value * scale + offset == pytest.approx(single, rel=4e-16, abs=1e-13)


def test_numbers_that_are_not_known_stay_so():
    """NaN and infinity pass through render untouched."""
    assert math.isnan(render(math.nan, "kPa"))
    assert render(math.inf, "kPa") == math.inf


def test_the_units_library_is_loaded_only_when_a_unit_is_read():
    """Importing meterfix.units does not import pint, which costs 0.4 s."""
    code = "import sys, meterfix.units; print('pint' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
