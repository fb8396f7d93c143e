"""Equations of state by their names in a site file, for the line and for base conditions."""

from __future__ import annotations

import pytest

from meterfix.intake.site import site_from_text
from meterfix.model.gas import StateModel

LINE = 'line_model = "aga8_detail"'
BASE = 'base_model = "aga8_detail"'


@pytest.mark.parametrize("line", ["aga8_detail", "gerg_2008", "ideal"])
@pytest.mark.parametrize("base", ["aga8_detail", "gerg_2008", "ideal"])
def test_line_and_base_model_are_chosen_apart(edited, line, base):
    """Any mixture model may serve the line and any the base conditions; none is implied."""
    text = edited((LINE, f'line_model = "{line}"'), (BASE, f'base_model = "{base}"'))
    terms = site_from_text(text, "site.toml").gases[0].terms.in_force(0)
    assert terms.line_model.model is StateModel(line)
    assert terms.base_model.model is StateModel(base)


def test_gerg_2008_does_not_know_air(edited, mistakes_of):
    """Air as one substance is no component of GERG-2008; the mistake names what would do."""
    text = edited() + (
        '\n[gas.air]\nline_model = "gerg_2008"\nbase_model = "ideal"\n'
        'dynamic_viscosity = "reference_equation"\nisentropic_exponent = 1.4\n'
        'composition = { basis = "mole", unit = "1", air = 1 }\n'
    )
    (mistake,) = mistakes_of(text)
    assert mistake.given == "'gerg_2008' for air"
    assert "reference_equation" in mistake.allowed
    assert "line_model" in mistake.where
