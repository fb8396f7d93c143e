"""Gases that no model can compute are mistakes of the site file, told before any pass."""

from __future__ import annotations

import json
from datetime import UTC, datetime

import pytest

from meterfix.errors import SiteFileError
from meterfix.intake.site import site_from_text
from meterfix.run.gas_check import check_gases

NITROGEN = "nitrogen = 79\noxygen = 21"
LINE = 'line_model = "ideal"'
BASE = 'base_model = "ideal"'
VISCOSITY = 'dynamic_viscosity = "0.018 mPa s"'


def mistakes(folder, *edits):
    text = folder.site.read_text(encoding="utf-8")
    for old, new in edits:
        assert text.count(old) == 1
        text = text.replace(old, new)
    folder.site.write_text(text, encoding="utf-8")
    site = site_from_text(text, str(folder.site))
    try:
        check_gases(site, folder.site)
    except SiteFileError as error:
        return error.mistakes
    return ()


def test_a_good_gas_is_no_mistake(one_meter):
    """The ideal gas of the one-meter site can be computed."""
    assert mistakes(one_meter) == ()


def test_a_viscosity_that_has_no_equation(one_meter, invoke):
    """Carbon monoxide has no reference equation of viscosity: `check` says so, exit 2."""
    (mistake,) = mistakes(
        one_meter,
        (NITROGEN, "carbon_monoxide = 100"),
        (VISCOSITY, 'dynamic_viscosity = "reference_equation"'),
    )
    assert mistake.where == "site.toml, [gas.air]"
    assert "viscosity of 'carbon_monoxide'" in mistake.given
    assert "state a value" in mistake.allowed
    found = json.loads(
        invoke("check", "--site", one_meter.site, "--format", "json", exit_code=2).stdout
    )
    assert found["mistakes"] == [
        {"where": mistake.where, "given": mistake.given, "allowed": mistake.allowed}
    ]
    result = invoke("process", "--site", one_meter.site, exit_code=2)
    assert "viscosity of 'carbon_monoxide'" in result.stderr
    assert not (one_meter.path / "meterfix.sqlite").exists()


def test_no_gas_at_base_conditions(one_meter):
    """Water is no gas at 15 degC and 101.325 kPa: a base volume has no meaning."""
    (mistake,) = mistakes(
        one_meter,
        (NITROGEN, "water = 100"),
        (BASE, 'base_model = "reference_equation"'),
    )
    assert "no gas at the base conditions" in mistake.given
    assert "101325" in mistake.given


@pytest.mark.parametrize(
    ("conditions", "count"),
    [
        (('{ pressure = "2 MPa", temperature = "15 degC" }',), 1),
        (('{ pressure = "100 kPa", temperature = "15 degC" }',), 0),
        (
            (
                '{ pressure = "100 kPa", temperature = "15 degC" }',
                '{ since = "2026-11-01T06:00:00Z", pressure = "2 MPa", temperature = "15 degC" }',
            ),
            1,
        ),
    ],
)
def test_every_base_condition_in_force_is_looked_at(one_meter, conditions, count):
    """Propane is a gas at 100 kPa and a liquid at 2 MPa, now or from a later date on.

    Vapour pressure of propane at 15 degC about 732 kPa (from memory; NIST Chemistry WebBook).
    """
    base = "[site.base_conditions]\n" + 'pressure = "101.325 kPa"\ntemperature = "15 degC"\n'
    found = mistakes(
        one_meter,
        (base, ""),
        (
            'archive = "archive"',
            f'archive = "archive"\nbase_conditions = [{", ".join(conditions)}]',
        ),
        (NITROGEN, "propane = 100"),
        (BASE, 'base_model = "reference_equation"'),
    )
    assert len(found) == count


def test_a_site_in_use_is_not_checked_again(one_meter, hour_log, monkeypatch):
    """A site file that a pass has used needs no second look; a changed one gets it."""
    looked = []

    def count(site, path):
        looked.append((site.digest, path))

    monkeypatch.setattr("meterfix.run.opening.check_gases", count)
    one_meter.log("FT-1_07.csv", hour_log(7))
    one_meter.process()
    assert len(looked) == 1
    one_meter.process()
    assert len(looked) == 1
    with one_meter.site.open("a", encoding="utf-8") as file:
        file.write(f"\n# {datetime(2026, 1, 1, tzinfo=UTC)}\n")
    one_meter.process()
    assert len(looked) == 2
