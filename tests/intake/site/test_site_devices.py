"""Nozzles, Venturi tubes, calibrations and changes of device in the site file."""

from __future__ import annotations

import re

import pytest

from meterfix.intake.site import site_from_text
from meterfix.intake.site.device_uncertainty import DeviceVersion
from meterfix.model.device import (
    Calibration,
    Nozzle,
    NozzleForm,
    OrificePlate,
    VenturiForm,
    VenturiTube,
)
from meterfix.model.uncertainty import Part

ORIFICE = "[meter.FT-101.orifice] "
TAPPINGS = 'tappings = "flange"  '
CHANGE = "2026-10-20T07:30:00Z"
CALIBRATION = (
    'discharge_coefficient = { value = 0.991, certificate = "C-17", '
    'uncertainty = { size = "0.3 %", k = 2 }, reynolds_number = [1e5, 2e6] }\n'
)
WHOLE = (
    'bore = "60 mm", pipe_diameter = "128.2 mm", bore_expansion = "12e-6 / K", '
    'pipe_expansion = "11e-6 / K", reference_temperature = "20 degC"'
)


@pytest.fixture(scope="module")
def site_of(edited):
    def build(*edits):
        return site_from_text(edited(*edits), "site.toml")

    return build


def device(site, meter=0, version=0):
    return site.meters[meter].terms.entries[version].value.device


def parts_of(site, name):
    (source,) = [source for source in site.uncertainty if source.name == name]
    return source.parts


@pytest.mark.parametrize("form", NozzleForm)
def test_nozzles(site_of, form):
    """Every form of nozzle; only the Venturi nozzle needs a pressure loss, 12.5 % of dp."""
    site = site_of((ORIFICE, "[meter.FT-101.nozzle] "), (TAPPINGS, f'form = "{form.value}"  '))
    nozzle = device(site)
    assert isinstance(nozzle, Nozzle)
    assert (nozzle.form, nozzle.bore, nozzle.pipe_diameter) == (form, 0.092417, 0.15408)
    assert nozzle.pressure_loss_ratio == (0.125 if form is NozzleForm.VENTURI_NOZZLE else None)
    assert any(s.name == "FT-101 discharge coefficient, ISO 5167-3" for s in site.uncertainty)


@pytest.mark.parametrize("form", VenturiForm)
def test_venturi_tubes(site_of, form):
    """Every form of Venturi tube, its pressure loss stated or the middle of 5 % to 20 %.

    The usual range: ISO 5167-4:2003, 5.9 (from memory).
    """
    table = (ORIFICE, "[meter.FT-101.venturi_tube] ")
    tube = device(site_of(table, (TAPPINGS, f'form = "{form.value}"  ')))
    assert isinstance(tube, VenturiTube)
    assert (tube.form, tube.pressure_loss_ratio) == (form, 0.125)
    stated = f'pressure_loss = "9 %"\nform = "{form.value}"  '
    assert device(site_of(table, (TAPPINGS, stated))).pressure_loss_ratio == 0.09


def test_a_calibration_replaces_the_standard(site_of):
    """C, its uncertainty (k = 1) and range are the certificate's, which is then the source."""
    site = site_of((TAPPINGS, f"{CALIBRATION}{TAPPINGS}"))
    assert device(site).calibration == Calibration(0.991, 0.0015, "C-17", (1e5, 2e6))
    assert parts_of(site, "certificate C-17") == (Part("discharge_coefficient", "FT-101", 1.0),)
    assert not any("FT-101 discharge" in source.name for source in site.uncertainty)
    assert any("FT-201 discharge" in source.name for source in site.uncertainty)


def test_an_absolute_uncertainty_of_a_coefficient(site_of):
    """An amount is relative to the coefficient: 0.004 of 0.991 at k = 2."""
    text = CALIBRATION.replace('"0.3 %"', '"0.004"').replace(", reynolds_number = [1e5, 2e6]", "")
    calibration = device(site_of((TAPPINGS, f"{text}{TAPPINGS}"))).calibration
    expected = 0.002 / 0.991
    assert calibration.relative_standard_uncertainty == pytest.approx(expected, rel=1e-14)
    assert calibration.reynolds_number_range is None


def test_meters_that_name_one_certificate_share_its_error(site_of):
    """One certificate behind two meters is one cause."""
    second = 'tappings = "corner"\n'
    site = site_of((TAPPINGS, f"{CALIBRATION}{TAPPINGS}"), (second, f"{CALIBRATION}{second}"))
    assert [part.subject for part in parts_of(site, "certificate C-17")] == [
        "FT-101",
        "FT-201",
        f"FT-201 from {CHANGE}",
    ]


def test_short_straight_lengths(site_of):
    """They are a fact of the installation that the coefficient's uncertainty follows from."""
    site = site_of((TAPPINGS, f"short_straight_lengths = true\n{TAPPINGS}"))
    assert device(site).short_straight_lengths
    assert not device(site, meter=1).short_straight_lengths


def test_plates_that_are_changed_to_and_fro(site_of):
    """With serials a plate that comes back is the same one: its bore's error is the same cause."""
    second = 'tappings = "corner"\n'
    site = site_of(
        (second, f'serial = "A"\n{second}'),
        (
            'orifice = { bore = "80.02 mm" }',
            (
                'orifice = { serial = "B", bore = "80.02 mm" }\n[[meter.FT-201.change]]\n'
                'since = "2026-10-27T09:30:00+01:00"\n'
                'orifice = { serial = "A", bore = "80.05 mm" }'
            ),
        ),
    )
    labels = [version.value.device.label for version in site.meters[1].terms.entries]
    assert labels == ["A", "B", "A"]
    assert parts_of(site, "FT-201 A bore, ISO 5167-1 maximum") == (
        Part("bore", "FT-201 A", 0.00035),
    )
    assert parts_of(site, "FT-201 B bore, ISO 5167-1 maximum") == (
        Part("bore", "FT-201 B", 0.00035),
    )
    assert parts_of(site, "FT-201 pipe diameter, ISO 5167-1 maximum") == (
        Part("pipe_diameter", "FT-201 A", 0.002),
        Part("pipe_diameter", "FT-201 B", 0.002),
    )


def test_a_new_certificate_of_the_same_plate(site_of):
    """A plate measured anew stays the same plate, with another uncertainty from then on."""
    at = 1_792_481_400_000_000
    site = site_of(
        (
            'orifice = { bore = "80.02 mm" }',
            'orifice = { bore_uncertainty = { size = "0.03 %", k = 2 } }',
        )
    )
    before, after = site.meters[1].terms.entries
    assert before.value == after.value
    bore = parts_of(site, "FT-201 bore, ISO 5167-1 maximum")
    assert bore == (
        Part("bore", "FT-201", 0.00035, end=at),
        Part("bore", "FT-201", 0.00015, start=at),
    )


def test_a_plate_replaced_by_a_nozzle(site_of):
    """A device of another family replaces the former whole; nothing of it is left."""
    site = site_of(
        ('orifice = { bore = "80.02 mm" }', f'nozzle = {{ form = "long_radius", {WHOLE} }}')
    )
    before, after = device(site, meter=1), device(site, meter=1, version=1)
    assert isinstance(before, OrificePlate)
    assert isinstance(after, Nozzle)
    assert after.bore_expansion == 12e-6
    assert after.label == f"from {CHANGE}"
    for standard, subject in (("2", "FT-201"), ("3", f"FT-201 from {CHANGE}")):
        for what, parameter in (
            ("discharge coefficient", "discharge_coefficient"),
            ("expansibility", "expansibility"),
        ):
            (part,) = parts_of(site, f"FT-201 {what}, ISO 5167-{standard}")
            assert part == Part(parameter, subject, 1.0)


def test_what_another_family_lacks_is_told(edited, mistakes_of):
    """A change to another family must give it whole: each key that is missing is a mistake."""
    found = mistakes_of(edited(('orifice = { bore = "80.02 mm" }', 'nozzle = { bore = "60 mm" }')))
    place = "site.toml, [meter.FT-201.change #1.nozzle] "
    assert all(m.where.startswith(place) for m in found)
    missing = {m.where.removeprefix(place) for m in found if m.given == "missing"}
    assert {"pipe_diameter", "bore_expansion", "pipe_expansion", "form"} < missing


def test_a_meter_without_a_device_is_told(edited, mistakes_of):
    """No device at all is one mistake that names the three."""
    text = edited()
    shorter, count = re.subn(r"(?m)^\[meter\.FT-101\.orifice\].*\n(?:.+\n)*", "", text, count=1)
    assert count == 1
    (mistake,) = mistakes_of(shorter)
    assert mistake.where == "site.toml, [meter.FT-101]"
    assert mistake.given == "no device"
    assert "orifice, nozzle, venturi_tube" in mistake.allowed


def test_subjects_are_meter_and_label(site_of):
    """Parameters of the first plate are called by the meter alone."""
    version = site_of().meters[1].terms.entries[0].value
    assert DeviceVersion("FT-201", None, version.device, None, None).subject == "FT-201"
