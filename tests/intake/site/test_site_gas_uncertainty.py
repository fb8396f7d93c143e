"""Uncertainty of compositions, models and calorific values; calorific values by ISO 6976."""

from __future__ import annotations

from datetime import datetime

import numpy as np
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from meterfix.intake.site import site_from_text
from meterfix.intake.site.gas_uncertainty import root_of
from meterfix.model.calendar import to_microseconds
from meterfix.model.gas import CalorificBasis, CalorificKind, DensityModel, StateModel
from meterfix.model.uncertainty import Part

AT = "2026-11-01T06:00:00+01:00"
AT_US = to_microseconds(datetime.fromisoformat(AT))
VALUE = 'value = "38.9 MJ/m3"  '
ACCURACY = 'uncertainty = { size = "0.5 %", k = 2 } # or an amount'
METHOD = 'method = "ISO 6976:2016"\nbasis = "volume" #'
VOLUME_BASE = 'volume_base = { pressure = "101.325 kPa", temperature = "15 degC" }'


@pytest.fixture(scope="module")
def site_of(edited):
    def build(*edits):
        return site_from_text(edited(*edits), "site.toml")

    return build


def parts_of(site, name):
    (source,) = [source for source in site.uncertainty if source.name == name]
    return source.parts


# --- composition -------------------------------------------------------------------------------


def test_a_later_composition_keeps_or_changes_the_uncertainty(site_of):
    """The chromatograph is one cause: what a later composition does not say stays as it was."""
    later = "\n".join(
        f"[[gas.natural_gas.composition]]\nsince = {since}\nbasis = 'mole'\nunit = '1'\n"
        f"methane = {methane}\nethane = {1 - methane:.2f}\n{more}"
        for since, methane, more in (
            (AT, 0.95, ""),
            ("2026-12-01T06:00:00+01:00", 0.96, "uncertainty = { k = 1, ethane = 0.0003 }\n"),
        )
    )
    site = site_of(("# --- Meters", f"{later}\n# --- Meters"))
    end = to_microseconds(datetime.fromisoformat("2026-12-01T06:00:00+01:00"))
    methane = parts_of(site, "natural_gas composition: methane")
    assert methane[0] == Part("fraction:methane", "natural_gas", 0.0005, end=end)
    ethane = parts_of(site, "natural_gas composition: ethane")
    assert [(part.start, part.end) for part in ethane] == [(None, end), (end, None)]
    assert ethane[1].size == 0.0003


def test_a_composition_without_uncertainty_is_noted(site_of):
    """Without [...composition.uncertainty] the fractions count as exact, and that is told."""
    site = site_of(
        ("[gas.natural_gas.composition.uncertainty] ", "[gas.natural_gas.unused] # "),
        ("[gas.natural_gas.unused]", "#"),
        *(
            (f"{line}", "#")
            for line in ("k = 2\nmethane = 0.10", "ethane = 0.04", "propane = 0.02")
        ),
        *((line, "#") for line in ("nitrogen = 0.03", "carbon_dioxide = 0.02")),
        ("correlation = [  ", "#"),
        ('  { between = ["methane", "ethane"], coefficient = -0.6 },\n]', "#"),
    )
    assert site.notes == (
        "counted as exact, for no uncertainty is stated: composition of gas natural_gas",
    )
    assert not any(source.kind == "composition" for source in site.uncertainty)


@given(
    st.lists(st.floats(-1.0, 1.0), min_size=16, max_size=16),
    st.integers(1, 4),
)
@example([0.0, 1.0, 0.0, 0.0, 0.75, 0.75, *[0.0] * 6, 1.0, 0.0, 0.0, 0.0], 2)
def test_the_root_gives_the_matrix_back(values, rank):
    """L L^T is the matrix, also where it has not full rank, to the variance that is left out."""
    factors = np.array(values).reshape(4, 4)[:, :rank]
    factors[np.abs(factors).max(axis=1) < 1e-3] = 1.0
    factors /= np.sqrt((factors * factors).sum(axis=1))[:, np.newaxis]
    matrix = factors @ factors.T
    root = root_of(matrix.tolist())
    assert root is not None
    found = np.array(root)
    assert found @ found.T == pytest.approx(matrix, abs=3e-9)


def test_coefficients_may_be_rounded():
    """Coefficients of a normalised composition to two digits still give a root, within them."""
    draw = np.random.default_rng(4)
    factors = draw.normal(size=(6, 5))
    factors /= np.sqrt((factors * factors).sum(axis=1))[:, np.newaxis]
    for digits in (2, 3, 4):
        matrix = np.round(factors @ factors.T, digits)
        root = root_of(matrix.tolist())
        assert root is not None
        assert np.array(root) @ np.array(root).T == pytest.approx(matrix, abs=0.03)


def test_a_matrix_that_is_none_has_no_root():
    """Three components cannot all be -0.9 correlated with each other."""
    assert root_of([[1, -0.9, -0.9], [-0.9, 1, -0.9], [-0.9, -0.9, 1]]) is None
    assert root_of([[1.0, -1.0], [-1.0, 1.0]]) == [[1.0, 0.0], [-1.0, 0.0]]


# --- models ------------------------------------------------------------------------------------


def test_each_model_is_a_source_while_it_holds(site_of):
    """A change of model ends one source and begins another; the base model's stays."""
    site = site_of(
        ("# [[gas.natural_gas.change]]", (f'[[gas.natural_gas.change]]\nsince = "{AT}"\n'
         'line_model = "gerg_2008"\n#'))
    )  # fmt: skip
    assert parts_of(site, "natural_gas line density, AGA8 DETAIL") == (
        Part("line_density", "natural_gas", 1.0, end=AT_US),
    )
    assert parts_of(site, "natural_gas line density, GERG-2008") == (
        Part("line_density", "natural_gas", 1.0, start=AT_US),
    )
    assert parts_of(site, "natural_gas base density, AGA8 DETAIL") == (
        Part("base_density", "natural_gas", 1.0),
    )


def test_a_model_with_an_uncertainty_of_its_own(site_of):
    """A stated uncertainty of density takes the place of the model's; size stays 1."""
    site = site_of(
        (
            'line_model = "aga8_detail"',
            ('line_model = { fixed_compression_factor = 0.95, uncertainty = '
            '{ size = "0.8 %", distribution = "rectangular" } }'),
        ),
        ('isentropic_exponent = "equation_of_state"', "isentropic_exponent = 1.3"),
        (
            'base_model = "aga8_detail"',
            'base_model = { model = "gerg_2008", uncertainty = { size = "0.04 %", k = 2 } }',
        ),
    )  # fmt: skip
    terms = site.gases[0].terms.in_force(0)
    assert terms.line_model.model is StateModel.FIXED
    assert terms.line_model.relative_standard_uncertainty == pytest.approx(0.008 / 3**0.5)
    assert terms.base_model == DensityModel(StateModel.GERG_2008, None, 0.0002)
    (part,) = parts_of(site, "natural_gas line density, fixed compression factor")
    assert part == Part("line_density", "natural_gas", 1.0)


def test_the_ideal_gas_states_no_uncertainty(site_of):
    """What stands in for an equation of state has none unless the site file says so: noted."""
    site = site_of(('line_model = "aga8_detail"', 'line_model = "ideal"'))
    assert site.notes == (
        (
            "counted as exact, for no uncertainty is stated: "
            "line density of gas natural_gas (ideal gas)"
        ),
    )


# --- calorific value ---------------------------------------------------------------------------


def test_a_calorific_value_by_iso_6976(site_of):
    """A method has no value of its own; its uncertainty is the standard's, size 1."""
    site = site_of((VALUE, METHOD), (ACCURACY, "#"))
    value = site.gases[0].terms.in_force(0).calorific_value
    assert (value.value, value.basis, value.kind) == (
        None,
        CalorificBasis.VOLUME,
        CalorificKind.GROSS,
    )
    assert value.combustion_reference_temperature == 288.15
    assert parts_of(site, "natural_gas calorific value, ISO 6976:2016") == (
        Part("calorific_method", "natural_gas", 1.0),
    )
    assert site.notes == ()


def test_a_method_by_mass_and_with_an_uncertainty_of_its_own(site_of):
    """By mass there is no volume base; a stated uncertainty takes the method's place."""
    site = site_of(
        ('way = "volume"', 'way = "mass"'),
        (VALUE, METHOD.replace("volume", "mass")),
        (VOLUME_BASE, ""),
    )
    value = site.gases[0].terms.in_force(0).calorific_value
    assert (value.basis, value.volume_base) == (CalorificBasis.MASS, None)
    assert parts_of(site, "natural_gas calorific value") == (
        Part("calorific_value", "natural_gas", 0.0025),
    )


def test_an_amount_and_a_change_of_value(site_of):
    """0.2 MJ/m3 of 38.9 at k = 2, then another value with another certainty: one cause."""
    site = site_of(
        ("[gas.natural_gas.calorific_value] ", "[[gas.natural_gas.calorific_value]] "),
        (ACCURACY, 'uncertainty = { size = "0.2 MJ/m3", k = 2 } #'),
        (
            "[[gas.natural_gas.composition]]",
            (
                f'[[gas.natural_gas.calorific_value]]\nsince = "{AT}"\nvalue = "39.1 MJ/m3"\n'
                f'kind = "gross"\ncombustion_reference_temperature = "15 degC"\n{VOLUME_BASE}\n'
                'uncertainty = { size = "0.3 %", k = 1 }\n[[gas.natural_gas.composition]]'
            ),
        ),
    )
    first, second = parts_of(site, "natural_gas calorific value")
    assert first == Part("calorific_value", "natural_gas", first.size, end=AT_US)
    assert first.size == pytest.approx(0.1 / 38.9, rel=1e-14)
    assert second == Part("calorific_value", "natural_gas", 0.003, start=AT_US)


@pytest.mark.parametrize("text", ["0 degC", "15 degC", "60 degF", "15.55 degC", "20 degC"])
def test_conditions_that_iso_6976_tabulates(site_of, text):
    """Each metering temperature of its tables, also as combustion temperature."""
    key = 'combustion_reference_temperature = "15 degC"'
    other = key.replace("15 degC", text)
    site = site_of(
        (VALUE, METHOD),
        (ACCURACY, "#"),
        (VOLUME_BASE, VOLUME_BASE.replace("15 degC", text)),
        (f'kind = "gross"\n{key}', f'kind = "gross" \n{other}'),
        (f'kind = "gross"\n{key}', f'kind = "gross" \n{other}'),
    )
    value = site.gases[0].terms.in_force(0).calorific_value
    assert value.volume_base.base_temperature == value.combustion_reference_temperature
