"""The commented example becomes the model, in SI."""

from __future__ import annotations

import hashlib
from dataclasses import replace
from datetime import date
from pathlib import Path

import pytest

from meterfix.errors import SiteFileError
from meterfix.intake.site import anchored, read_site, resolve_secrets, site_from_text
from meterfix.model.device import OrificePlate, Tappings
from meterfix.model.gas import BaseConditions, CalorificBasis, CalorificKind, StateModel
from meterfix.model.site import EnergyTerms, Tapping, Thermometer
from meterfix.model.source import (
    Between,
    Delivery,
    Excluded,
    Holds,
    Origin,
    Quantity,
    Stamp,
    Transmitter,
)

SECOND = 1_000_000


@pytest.fixture(scope="module")
def site(example_path):
    return read_site(example_path)


def test_calendar_and_base_conditions(site):
    """The gas day begins at 06:00 in Berlin; base conditions are 101.325 kPa and 15 degC."""
    assert site.calendar.start(date(2026, 10, 14)) == 1_791_950_400 * SECOND  # 04:00 UTC
    assert site.calendar.start(date(2026, 11, 14)) == 1_794_632_400 * SECOND  # 05:00 UTC
    assert site.base_conditions.in_force(0) == BaseConditions(101_325.0, 288.15)


def test_atmosphere_keeps_the_elevation(site):
    """112 m gives the standard atmosphere's pressure; the elevation is kept beside it.

    US Standard Atmosphere 1976, which is ISO 2533:1975 below 32 km: 100 m 1001.29 mbar,
    200 m 989.45 mbar (printed tables, from memory); between them by the interpolated logarithm.
    """
    atmosphere = site.atmosphere.in_force(0)
    expected = 100_129.0 * (98_945.0 / 100_129.0) ** 0.12
    assert atmosphere.value == pytest.approx(expected, rel=2e-5)
    assert atmosphere.elevation == 112.0
    assert atmosphere.signal is None


def test_source_and_layout(site):
    """Durations are microseconds, columns carry their scale to SI, defaults are filled in."""
    (source,) = site.sources
    assert (source.name, source.folder, source.file_pattern) == (
        "station",
        "logs/station",
        "{binding}_*.csv*",
    )
    assert (source.delivery, source.stamp, source.interval) == (Delivery.WHOLE, Stamp.INSTANT, None)
    assert source.between is Between.LINEAR
    assert source.maximum_gap == 300 * SECOND
    assert source.maximum_age == 900 * SECOND
    assert source.settle_time == 5 * SECOND
    assert source.unfinished_wait == 3600 * SECOND
    layout = source.layout
    assert layout.bad_values == (("BAD", "transmitter fault"), ("-9999", "no reading"))
    assert layout.earliest == 631_152_000 * SECOND
    assert layout.final_line_end_required
    dp, p, t = layout.columns
    assert (dp.header, dp.quantity, dp.scale, dp.offset) == (
        "dp",
        Quantity.DIFFERENTIAL_PRESSURE,
        100.0,
        0.0,
    )
    assert (p.scale, p.gauge) == (1e5, True)
    assert (p.plausible_minimum, p.plausible_maximum) == (-2e4, 4e6)
    assert (t.scale, t.offset, t.holds) == (1.0, 273.15, Holds.SAMPLE)
    assert not dp.gauge
    assert not dp.rooted


def test_signals(site):
    """A signal knows its column's meaning, its transmitter's range, what is excluded."""
    signals = {signal.name: signal for signal in site.signals}
    dp, p, t = signals["PDT-101"], signals["PT-101"], signals["TT-101"]
    assert dp.origins == (Origin("station", "FT-101", "dp"),)
    assert dp.transmitter.in_force(0) == Transmitter(0.0, 25_000.0)
    assert dp.excluded == (Excluded(1_791_957_600 * SECOND, 1_791_960_000 * SECOND, "zero check"),)
    assert p.gauge
    assert p.transmitter.in_force(0) == Transmitter(0.0, 2_500_000.0)
    assert p.maximum_age == 900 * SECOND
    assert t.transmitter.in_force(0) == Transmitter(253.15, 333.15)
    assert t.maximum_age == 1800 * SECOND, "a column's own maximum age outranks its source's"
    assert signals["PT-201"].transmitter.entries == ()


def test_gas(site):
    """Fractions are exact decimals over their sum; the calorific value keeps its meaning."""
    (gas,) = site.gases
    (version,) = gas.terms.entries
    terms = version.value
    assert version.since is None
    assert dict(terms.composition.fractions) == {
        "methane": 0.9312,
        "ethane": 0.0385,
        "propane": 0.0092,
        "nitrogen": 0.0102,
        "carbon_dioxide": 0.0109,
    }
    assert terms.composition.sum_as_given == 1.0
    assert terms.line_model.model is StateModel.AGA8_DETAIL
    assert terms.dynamic_viscosity.value == 1.11e-5
    assert terms.isentropic_exponent.method == "equation_of_state"
    value = terms.calorific_value
    assert (value.value, value.basis, value.kind) == (
        38.9e6,
        CalorificBasis.VOLUME,
        CalorificKind.GROSS,
    )
    assert value.combustion_reference_temperature == 288.15
    assert value.volume_base == BaseConditions(101_325.0, 288.15)
    assert site.notes == ()


def test_meters_and_the_change_of_a_plate(site):
    """A partial change of the orifice leaves everything else of the meter as it was."""
    first, second = site.meters
    (version,) = first.terms.entries
    assert version.value.device == OrificePlate(
        bore=0.092417,
        pipe_diameter=0.15408,
        tappings=Tappings.FLANGE,
        bore_expansion=16e-6,
        pipe_expansion=11e-6,
        bore_reference_temperature=293.15,
        pipe_reference_temperature=293.15,
    )
    assert version.value.low_flow_cut_off == 100.0
    assert version.value.static_pressure_tapping is Tapping.UPSTREAM
    assert version.value.thermometer is Thermometer.DOWNSTREAM
    before, after = second.terms.entries
    assert (before.since, after.since) == (None, 1_792_481_400 * SECOND)
    changed = replace(before.value.device, bore=0.08002, label="from 2026-10-20T07:30:00Z")
    assert after.value == replace(before.value, device=changed)
    assert before.value.device.bore == 0.08005


def test_envelope_and_contract(site):
    """Tolerance is a fraction, the price money per joule."""
    (envelope,) = site.envelopes
    assert (envelope.inflow, envelope.outflow, envelope.vented) == (("FT-101",), ("FT-201",), ())
    assert envelope.quantities == ("mass", "base_volume", "energy")
    assert envelope.tolerance.in_force(0).fraction_of_in == 0.015
    contract = site.contract
    assert contract.price.in_force(0) == pytest.approx(38.50 / 3.6e9, rel=1e-15)
    assert contract.currency == "EUR"
    assert contract.provisional_after == 12 * 3600 * SECOND
    assert contract.energy == EnergyTerms(CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15)


def test_digest_is_that_of_the_bytes_and_a_replay_gives_the_same_site(tmp_path, example_path):
    """The stored text alone gives the same model again, whatever its line ends or first mark."""
    plain = example_path.read_bytes()
    for content in (plain, b"\xef\xbb\xbf" + plain, plain.replace(b"\n", b"\r\n")):
        path = tmp_path / "site.toml"
        path.write_bytes(content)
        site = read_site(path)
        assert site.digest == hashlib.sha256(content).hexdigest()
        replayed = site_from_text(site.text, str(path))
        assert anchored(replayed, tmp_path) == site
        assert replayed.text.encode() == content


def test_paths_are_made_absolute_beside_the_site_file(tmp_path, edited):
    """A relative SQLite file and archive lie beside the site file; absolute ones stay."""
    path = tmp_path / "site.toml"
    path.write_text(edited(), encoding="utf-8")
    site = read_site(path)
    assert site.database_url == f"sqlite:///{(tmp_path.resolve() / 'meterfix.sqlite').as_posix()}"
    assert Path(site.archive_folder) == tmp_path.resolve() / "archive"
    path.write_text(
        edited(
            ("sqlite:///meterfix.sqlite", "sqlite:////srv/x/ledger.sqlite"),
            ('archive = "archive"', 'archive = "/srv/x/archive"'),
        ),
        encoding="utf-8",
    )
    site = read_site(path)
    assert site.database_url == "sqlite:////srv/x/ledger.sqlite"
    assert site.archive_folder == "/srv/x/archive"


def test_secrets_stay_references_until_somebody_looks_them_up(edited):
    """The site keeps '${env:NAME}' as written; resolving asks the given lookup, nothing else."""
    url = "postgresql+psycopg://meterfix:${env:METERFIX_PASSWORD}@db.example/meterfix"
    site = site_from_text(edited(("sqlite:///meterfix.sqlite", url)), "site.toml")
    assert site.database_url == url
    asked = []

    def lookup(kind, name):
        asked.append((kind, name))
        return "s3cret"

    assert "meterfix:s3cret@" in resolve_secrets(url, lookup)
    assert resolve_secrets("${file:/run/url}", lookup) == "s3cret"
    assert asked == [("env", "METERFIX_PASSWORD"), ("file", "/run/url")]


def test_a_file_that_is_not_there_or_not_text_is_told_as_such(tmp_path):
    """A missing site file and one that is not UTF-8 are mistakes with a place, not tracebacks."""
    with pytest.raises(SiteFileError, match=r"nowhere\.toml: cannot be read"):
        read_site(tmp_path / "nowhere.toml")
    path = tmp_path / "site.toml"
    path.write_bytes(b"[site]\nname = '\xff'\n")
    with pytest.raises(SiteFileError, match=r"line 2: bytes that are not UTF-8"):
        read_site(path)
