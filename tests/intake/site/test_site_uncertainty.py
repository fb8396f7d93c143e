"""What is stated of accuracy becomes independent sources with sizes in SI, one each."""

from __future__ import annotations

import math
from datetime import datetime

import pytest

from meterfix.intake.site import read_site, site_from_text
from meterfix.intake.site.accuracy import SECONDS_OF_A_YEAR
from meterfix.model.calendar import to_microseconds
from meterfix.model.uncertainty import Part, Repeatability

ROOT3 = math.sqrt(3.0)
CHANGE = "2026-10-20T07:30:00Z"
ZERO = 'acts_on = "zero"\nsize = "0.04 % of span"\nk = 2'


def us(text: str) -> int:
    return to_microseconds(datetime.fromisoformat(text))


def parts_of(site, name):
    (source,) = [source for source in site.uncertainty if source.name == name]
    return source.parts


def only(site, name):
    (part,) = parts_of(site, name)
    return part


@pytest.fixture(scope="module")
def example(example_path):
    return read_site(example_path)


@pytest.fixture(scope="module")
def site_of(edited):
    def build(*edits):
        return site_from_text(edited(*edits), "site.toml")

    return build


# --- the example -------------------------------------------------------------------------------

ON_PDT = ("differential_pressure_zero", "PDT-101")
SPAN_PDT = ("differential_pressure_span", "PDT-101")
EXPECTED = {
    # 250 mbar: 0.04 % are 10 Pa
    "PDT-101 zero": (*ON_PDT, 10.0 / 2),
    "PDT-101 span": (*SPAN_PDT, 0.0005 / 2),
    # 0.02 % of 250 mbar per 10 K over 15 K are 7.5 Pa
    "PDT-101 zero, ambient temperature": (*ON_PDT, 7.5 / ROOT3),
    "PDT-101 span, static pressure": (*SPAN_PDT, 0.0005 * 16 / 70 / ROOT3),
    # 25 bar: 0.05 % are 1250 Pa
    "PT-101 zero": ("static_pressure_zero", "PT-101", 1250.0 / 2),
    "PT-101 span": ("static_pressure_span", "PT-101", 0.0005 / 2),
    "TT-101 sensor": ("temperature_zero", "TT-101", 0.15),
    # 80 K: 0.1 % are 0.08 K
    "TT-101 zero": ("temperature_zero", "TT-101", 0.08 / ROOT3),
    "PDT-201 zero": ("differential_pressure_zero", "PDT-201", 5.0),
    "PT-201 zero": ("static_pressure_zero", "PT-201", 500.0),
    "TT-201 zero": ("temperature_zero", "TT-201", 0.5 / ROOT3),
    "FT-101 bore": ("bore", "FT-101", 0.01 / 92.417),
    "FT-101 pipe diameter": ("pipe_diameter", "FT-101", 0.0015),
    "FT-201 bore, ISO 5167-1 maximum": ("bore", "FT-201", 0.00035),
    f"FT-201 from {CHANGE} bore, ISO 5167-1 maximum": (
        "bore",
        f"FT-201 from {CHANGE}",
        0.00035,
    ),
    "FT-101 discharge coefficient, ISO 5167-2": ("discharge_coefficient", "FT-101", 1.0),
    "FT-101 expansibility, ISO 5167-2": ("expansibility", "FT-101", 1.0),
    "natural_gas composition: propane": ("fraction:propane", "natural_gas", 0.0001),
    "natural_gas composition: nitrogen": ("fraction:nitrogen", "natural_gas", 0.00015),
    "natural_gas composition: carbon_dioxide": (
        "fraction:carbon_dioxide",
        "natural_gas",
        0.0001,
    ),
    "natural_gas dynamic viscosity": ("dynamic_viscosity", "natural_gas", 0.025),
    "natural_gas isentropic exponent": ("isentropic_exponent", "natural_gas", 0.005),
    "natural_gas calorific value": ("calorific_value", "natural_gas", 0.0025),
    "natural_gas line density, AGA8 DETAIL": ("line_density", "natural_gas", 1.0),
    "natural_gas base density, AGA8 DETAIL": ("base_density", "natural_gas", 1.0),
    "atmospheric pressure": ("atmospheric_pressure", "site", 2000.0 / ROOT3),
}


@pytest.mark.parametrize("name", EXPECTED)
def test_each_source_of_the_example_has_its_size(example, name):
    """Percentages of span and reading, amounts and coverages are one standard deviation in SI.

    The bore's and pipe's own maxima: 0.07 % and 0.4 %, ISO 5167-1:2003, 8.2.2.2 (from memory).
    """
    parameter, subject, size = EXPECTED[name]
    part = only(example, name)
    assert part == Part(parameter, subject, part.size)
    assert part.size == pytest.approx(size, rel=1e-14)


def test_the_example_has_no_other_sources(example):
    """What several parts act on is told below; everything has a name of its own."""
    names = [source.name for source in example.uncertainty]
    assert len(names) == len(set(names))
    assert set(names) - set(EXPECTED) == {
        "PDT-101 drift",
        "PDT-201 span",
        "pressure calibrator PC-3",
        "FT-201 pipe diameter, ISO 5167-1 maximum",
        "FT-201 discharge coefficient, ISO 5167-2",
        "FT-201 expansibility, ISO 5167-2",
        "natural_gas composition: methane",
        "natural_gas composition: ethane",
    }
    assert example.repeatability == (Repeatability("PDT-101", 2.5),)
    assert example.notes == ()


def test_a_drift_grows_from_its_calibration(example):
    """0.1 % of 620 mbar in 5 years of 365.25 days, rectangular: nothing before and at its date."""
    since = us("2026-03-02T10:00:00+01:00")
    part = only(example, "PDT-101 drift")
    growth = 62.0 / ROOT3 / (5 * 365.25 * 86_400)
    assert part == Part(*ON_PDT, 0.0, growth=part.growth, since=since, start=since)
    assert part.growth == pytest.approx(growth, rel=1e-14)
    assert pytest.approx(365.25 * 86_400) == SECONDS_OF_A_YEAR


def test_a_shared_cause_moves_all_its_parts(example):
    """A calibrator is one source with a part for each signal that it calibrated."""
    shared = parts_of(example, "pressure calibrator PC-3")
    assert [(part.parameter, part.subject) for part in shared] == [
        ("static_pressure_span", "PT-101"),
        ("differential_pressure_span", "PDT-101"),
        ("differential_pressure_span", "PDT-201"),
    ]
    assert [part.size for part in shared] == pytest.approx([1.5e-4, 1e-4, 1e-4], rel=1e-14)


def test_a_changed_plate_has_an_error_of_its_own_and_the_pipe_stays(example):
    """A plate that is changed: another bore, the same pipe, the same equation for C."""
    both = ["FT-201", f"FT-201 from {CHANGE}"]
    for name, parameter, size in (
        ("pipe diameter, ISO 5167-1 maximum", "pipe_diameter", 0.002),
        ("discharge coefficient, ISO 5167-2", "discharge_coefficient", 1.0),
        ("expansibility, ISO 5167-2", "expansibility", 1.0),
    ):
        assert parts_of(example, f"FT-201 {name}") == tuple(
            Part(parameter, subject, size) for subject in both
        )


def test_correlated_fractions(example):
    """Methane and ethane, -0.6 correlated: one source moves both, the rest is ethane's own."""
    common = parts_of(example, "natural_gas composition: methane")
    own = only(example, "natural_gas composition: ethane")
    assert [part.parameter for part in common] == ["fraction:methane", "fraction:ethane"]
    methane, ethane = (part.size for part in common)
    assert methane == pytest.approx(0.0005, rel=1e-14)
    assert math.hypot(ethane, own.size) == pytest.approx(0.0002, rel=1e-14)
    assert methane * ethane == pytest.approx(-0.6 * 0.0005 * 0.0002, rel=1e-14)


# --- transmitters ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("entry", "expected"),
    [
        ('acts_on = "zero"\nsize = "40 Pa"\nk = 3', {"zero": 40.0 / 3}),
        ('acts_on = "zero"\nsize = "0.1 % of upper range value"\nk = 1', {"zero": 25.0}),
        ('acts_on = "zero"\nsize = "0.1 % of upper range limit"\nk = 2', {"zero": 31.0}),
        (
            'acts_on = "zero"\nsize = "6 Pa"\ndistribution = "triangular"',
            {"zero": 6.0 / math.sqrt(6.0)},
        ),
        (
            'acts_on = "zero"\nsize = "6 Pa"\ndistribution = "normal"\nk = 1.96',
            {"zero": 6.0 / 1.96},
        ),
        ('acts_on = "span"\nsize = "0.1 % of span"\nk = 2', {"span": 0.0005}),
        # 25 Pa at the upper range value of 25 kPa
        ('acts_on = "span"\nsize = "25 Pa"\nk = 1', {"span": 0.001}),
        ('acts_on = "span"\nsize = "0.1 % of upper range limit"\nk = 1', {"span": 0.00248}),
        ('acts_on = "span"\nsize = "0.05 % of reading"\nk = 1', {"span": 0.0005}),
        ('acts_on = "zero"\nsize = "1 Pa per K"\nover = "18 degF"\nk = 1', {"zero": 10.0}),
        ('acts_on = "zero"\nsize = "0 Pa"\nk = 1', {}),
    ],
)
def test_sizes_of_an_entry(site_of, entry, expected):
    """Every base and coverage, by hand, for a range of 0 to 250 mbar and a limit of 620 mbar."""
    site = site_of((ZERO, f'name = "it"\n{entry}'))
    found = {
        part.parameter.removeprefix("differential_pressure_"): part.size
        for source in site.uncertainty
        if source.name == "it"
        for part in source.parts
    }
    assert found == pytest.approx(expected, rel=1e-14)


def test_an_elevated_range_pivots_at_its_lower_value(site_of):
    """A span error is nothing at the lower range value: -5 kPa to 25 kPa, 0.1 % of span at 25."""
    site = site_of(
        (ZERO, 'name = "it"\nacts_on = "span"\nsize = "0.1 % of span"\nk = 1'),
        ('range = ["0 mbar", "250 mbar"]', 'range = ["-50 mbar", "250 mbar"]'),
    )
    sizes = {part.parameter: part.size for part in parts_of(site, "it")}

    def error(reading):
        return sizes["differential_pressure_zero"] + reading * sizes["differential_pressure_span"]

    assert error(-5000.0) == pytest.approx(0.0, abs=1e-12)
    assert error(25_000.0) == pytest.approx(30.0, rel=1e-14)


def test_a_changed_range_rescales_what_is_of_span(site_of):
    """0.04 % of span is 10 Pa before the change of range and 4 Pa after it, as one cause."""
    at = "2026-10-20T06:00:00+02:00"
    site = site_of(
        (
            'range = ["0 mbar", "250 mbar"]',
            (
                'range = [{ value = ["0 mbar", "250 mbar"] }, '
                f'{{ since = "{at}", value = ["0 mbar", "100 mbar"] }}]'
            ),
        )
    )
    assert parts_of(site, "PDT-101 zero") == (
        Part(*ON_PDT, 5.0, end=us(at)),
        Part(*ON_PDT, 2.0, start=us(at)),
    )
    assert only(site, "PDT-101 span") == Part(*SPAN_PDT, 0.00025)
    drift = parts_of(site, "PDT-101 drift")
    assert [part.start for part in drift] == [us("2026-03-02T10:00:00+01:00"), us(at)]
    assert {part.since for part in drift} == {us("2026-03-02T10:00:00+01:00")}
    assert drift[0].growth == drift[1].growth
    assert site.repeatability == (Repeatability("PDT-101", 2.5),)


def test_an_entry_can_be_limited_in_time(site_of):
    """`since` and `until` bound any entry, ranges that change meanwhile included."""
    at, until = "2026-10-20T06:00:00+02:00", "2026-11-01T06:00:00+01:00"
    site = site_of(
        (ZERO, f'{ZERO}\nsince = "{at}"\nuntil = "{until}"'),
    )
    assert only(site, "PDT-101 zero") == Part(*ON_PDT, 5.0, start=us(at), end=us(until))


def test_names_that_nobody_gave_are_numbered(site_of):
    """Two entries of one kind without names are two sources."""
    site = site_of((ZERO, f"{ZERO}\n\n[[signal.PDT-101.uncertainty]]\n{ZERO}"))
    assert only(site, "PDT-101 zero (2)") == only(site, "PDT-101 zero") == Part(*ON_PDT, 5.0)


def test_a_barometer_is_a_source_of_its_own(site_of):
    """A barometer's entries act on the atmospheric pressure that it gives; the site has none."""
    site = site_of(
        (
            (
                'elevation = "112 m"\n'
                'uncertainty = { size = "20 mbar", distribution = "rectangular" } '
            ),
            'barometer = "BT-1" ',
        ),
        (
            "[signal.PDT-101]\n",
            (
                '[source.station.column.b]\nquantity = "barometric_pressure"\nunit = "hPa"\n'
                '[signal.BT-1]\nfrom = [{ source = "station", binding = "BT-1", column = "b" }]\n'
                'uncertainty = [{ acts_on = "zero", size = "0.6 hPa", k = 2 }]\n[signal.PDT-101]\n'
            ),
        ),
    )
    (source,) = [s for s in site.uncertainty if s.kind == "barometer"]
    assert (source.name, source.parts) == (
        "BT-1 zero",
        (Part("atmospheric_pressure", "barometer BT-1", 30.0),),
    )
    assert not any(p.subject == "site" for s in site.uncertainty for p in s.parts)


def test_the_atmosphere_can_be_known_better_later(site_of):
    """Each value of the atmospheric pressure has its own uncertainty, as one cause."""
    at = "2026-10-20T06:00:00+02:00"
    site = site_of(
        (
            "[site.atmospheric_pressure] ",
            (
                '[[site.atmospheric_pressure]]\nvalue = "1 bar"\n'
                'uncertainty = { size = "10 mbar", k = 2 }\n[[site.atmospheric_pressure]]\n'
                f'since = "{at}"\n#'
            ),
        )
    )
    (first, second) = parts_of(site, "atmospheric pressure")
    assert first == Part("atmospheric_pressure", "site", 500.0, end=us(at))
    assert second == Part("atmospheric_pressure", "site", 2000.0 / ROOT3, start=us(at))


# --- shared causes -----------------------------------------------------------------------------

PARTS = "part = [\n"


def test_parts_of_a_shared_cause(site_of):
    """Each kind of subject, its unit and its sign; a meter's diameters for each of its plates."""
    at = "2026-10-01T00:00:00Z"
    site = site_of(
        (
            PARTS,
            PARTS + '{ signal = "TT-101", acts_on = "zero", size = "-0.2 K" },\n'
            '{ meter = "FT-201", acts_on = "bore", size = "0.01 mm" },\n'
            '{ meter = "FT-101", acts_on = "pipe_diameter", size = "-0.1 %" },\n'
            '{ gas = "natural_gas", component = "hydrogen", acts_on = "fraction", '
            'size = "0.05 %" },\n'
            '{ gas = "natural_gas", acts_on = "calorific_value", size = "0.4 %" },\n'
            '{ acts_on = "atmospheric_pressure", size = "2 mbar" },\n'
            '{ signal = "PT-201", acts_on = "zero", size = "1 mbar per year", '
            f'since = "{at}" }},\n',
        )
    )
    found = {(p.parameter, p.subject): p for p in parts_of(site, "pressure calibrator PC-3")}
    assert found["temperature_zero", "TT-101"].size == pytest.approx(-0.1, rel=1e-14)
    assert found["bore", "FT-201"].size == pytest.approx(0.005 / 80.05, rel=1e-14)
    assert found["bore", f"FT-201 from {CHANGE}"].size == pytest.approx(0.005 / 80.02, rel=1e-14)
    assert found["pipe_diameter", "FT-101"].size == pytest.approx(-0.0005, rel=1e-14)
    assert found["fraction:hydrogen", "natural_gas"].size == pytest.approx(0.00025, rel=1e-14)
    assert found["calorific_value", "natural_gas"].size == pytest.approx(0.002, rel=1e-14)
    assert found["atmospheric_pressure", "site"].size == pytest.approx(100.0, rel=1e-14)
    drift = found["static_pressure_zero", "PT-201"]
    assert (drift.size, drift.since, drift.start) == (0.0, us(at), us(at))
    assert drift.growth == pytest.approx(50.0 / SECONDS_OF_A_YEAR, rel=1e-14)


# --- what nobody stated ------------------------------------------------------------------------


def test_what_counts_as_exact_is_noted(site_of):
    """A signal without any entry and a value without uncertainty are told, not passed over."""
    site = site_of(
        ('uncertainty = [{ acts_on = "zero", size = "10 mbar", k = 2 }]\n', ""),
        ('dynamic_viscosity_uncertainty = { size = "5 %", k = 2 }', ""),
        ('uncertainty = { size = "0.5 %", k = 2 } # or an amount', "#"),
    )
    assert site.notes == (
        (
            "counted as exact, for no uncertainty is stated: signals PT-201; "
            "dynamic viscosity of gas natural_gas; calorific value of gas natural_gas"
        ),
    )


def test_many_signals_without_uncertainty_are_counted(edited):
    """The note names the first twelve and counts the rest."""
    text = edited()
    meter = text[text.index("[meter.FT-101]") : text.index("[meter.FT-201]")]
    signals = "".join(
        f'[signal.{kind}-9{n:02}]\nfrom = [{{ source = "station", binding = "FT-9{n:02}", '
        f'column = "{column}" }}]\nrange = ["0 {unit}", "50 {unit}"]\n'
        for n in range(5)
        for kind, column, unit in (
            ("PDT", "dp", "mbar"),
            ("PT", "p", "bar"),
            ("TT", "t", "degC"),
        )
    )
    meters = "".join(meter.replace("-101", f"-9{n:02}") for n in range(5))
    (note,) = site_from_text(f"{text}\n{signals}{meters}", "site.toml").notes
    assert "signals PDT-900, PT-900, TT-900, PDT-901" in note
    assert note.endswith("TT-903 and 3 more")
