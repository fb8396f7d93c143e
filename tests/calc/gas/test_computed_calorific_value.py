"""A calorific value by ISO 6976:2016 as the energy of a meter's gas."""

from __future__ import annotations

from dataclasses import replace

import pytest

from meterfix.calc.gas.properties import GasLibrary
from meterfix.errors import GasError
from meterfix.model.gas import (
    BaseConditions,
    CalorificBasis,
    CalorificKind,
    CalorificValue,
    Composition,
    DensityModel,
    GasTerms,
    PropertyChoice,
    StateModel,
)
from meterfix.model.site import EnergyTerms

ISO = BaseConditions(101_325.0, 288.15)
NORMAL = BaseConditions(101_325.0, 273.15)
FRACTIONS = (
    ("methane", 0.933212),
    ("ethane", 0.025656),
    ("propane", 0.015368),
    ("nitrogen", 0.010350),
    ("carbon_dioxide", 0.015414),
)
"""ISO 6976:2016, annex D.2."""
GROSS = CalorificValue(None, CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15, ISO)
PER_MASS = replace(GROSS, basis=CalorificBasis.MASS, volume_base=None)


@pytest.fixture(scope="module")
def library() -> GasLibrary:
    return GasLibrary()


def terms(value: CalorificValue, **changes: object) -> GasTerms:
    return replace(
        GasTerms(
            composition=Composition("mole", FRACTIONS, 1.0),
            line_model=DensityModel(StateModel.GERG_2008),
            base_model=DensityModel(StateModel.GERG_2008),
            dynamic_viscosity=PropertyChoice(value=1.1e-5),
            isentropic_exponent=PropertyChoice(value=1.3),
            calorific_value=value,
        ),
        **changes,
    )


def way(value: CalorificValue) -> EnergyTerms:
    return EnergyTerms(value.basis, value.kind, value.combustion_reference_temperature)


def test_the_worked_example_by_volume_and_by_mass(library):
    """38.410611 MJ/m3 and 52.113961 MJ/kg, to half the last printed digit; ISO 6976:2016, D.2."""
    by_volume = library.properties(terms(GROSS)).energy_factor(ISO, way(GROSS))
    assert by_volume[1] is CalorificBasis.VOLUME
    assert by_volume[0] == pytest.approx(38.410611e6, abs=0.5)
    by_mass = library.properties(terms(PER_MASS)).energy_factor(ISO, way(PER_MASS))
    assert by_mass[1] is CalorificBasis.MASS
    assert by_mass[0] == pytest.approx(52.113961e6, abs=0.5)


def test_the_composition_and_kind_count(library):
    """Net is lower by the heat of vaporisation; with more nitrogen there is less to burn.

    Natural gas: net is 90 to 91 % of gross (common practice).
    """
    net = replace(GROSS, kind=CalorificKind.NET)
    gross_value = library.properties(terms(GROSS)).energy_factor(ISO, way(GROSS))[0]
    net_value = library.properties(terms(net)).energy_factor(ISO, way(net))[0]
    assert 0.90 < net_value / gross_value < 0.91
    lean = Composition("mole", (("methane", 0.9), ("nitrogen", 0.1)), 1.0)
    poor = Composition("mole", (("methane", 0.8), ("nitrogen", 0.2)), 1.0)
    values = [
        library.properties(terms(GROSS, composition=one)).energy_factor(ISO, way(GROSS))[0]
        for one in (lean, poor)
    ]
    assert values[1] / values[0] == pytest.approx(8.0 / 9.0, rel=1e-3)


def test_a_mass_basis_is_the_same_gas(library):
    """The same gas stated in mass fractions has the same calorific value, to 1e-6."""
    masses = {"methane": 16.04246, "ethane": 30.06904, "propane": 44.09562}
    masses |= {"nitrogen": 28.0134, "carbon_dioxide": 44.0095}  # ISO 6976:2016, table 1
    total = sum(x * masses[name] for name, x in FRACTIONS)
    by_mass = Composition("mass", tuple((n, x * masses[n] / total) for n, x in FRACTIONS), 1.0)
    found = library.properties(terms(GROSS, composition=by_mass)).energy_factor(ISO, way(GROSS))
    assert found[0] == pytest.approx(38.410611e6, rel=1e-6)


def test_volumes_at_other_base_conditions(library):
    """Stated for 15 degC, used for volumes at 0 degC: 1.0554 times, by the ratio of densities."""
    found = library.properties(terms(GROSS)).energy_factor(NORMAL, way(GROSS))[0]
    assert found / 38.410611e6 == pytest.approx(1.0554, abs=2e-4)


def test_what_the_method_itself_leaves_open(library):
    """The standard's own uncertainty is 0.01 to 0.03 % of a natural gas's value.

    Table 3: 0.19 kJ/mol of methane's 891.51 kJ/mol is 0.021 %; a mixture has less than its
    most uncertain component, ethane 0.033 %.
    """
    computed = library.properties(terms(GROSS)).computed_calorific_value()
    assert computed.value == pytest.approx(38.410611e6, abs=0.5)
    assert 0.0001 < computed.relative_standard_uncertainty < 0.0003
    assert not computed.outside_limits
    stated = replace(GROSS, value=38e6)
    assert library.properties(terms(stated)).computed_calorific_value() is None


@pytest.mark.parametrize("value", [GROSS, PER_MASS])
def test_a_gas_beyond_usual_natural_gas_is_told(library, value):
    """Half hydrogen is outside the standard's range of composition, by volume and by mass."""
    composition = Composition("mole", (("methane", 0.5), ("hydrogen", 0.5)), 1.0)
    odd = library.properties(terms(value, composition=composition))
    assert odd.computed_calorific_value().outside_limits


@pytest.mark.parametrize(
    ("changes", "names"),
    [
        ({"combustion_reference_temperature": 283.15}, "combustion temperature is 10 degC"),
        ({"volume_base": BaseConditions(101_325.0, 298.15)}, "metering temperature is 25 degC"),
        ({"volume_base": None}, "base conditions"),
    ],
)
def test_conditions_that_are_not_tabulated_are_refused(library, changes, names):
    """A temperature outside the standard's tables, or a volume without conditions, is refused."""
    value = replace(GROSS, **changes)
    with pytest.raises(GasError, match=names):
        library.properties(terms(value)).energy_factor(ISO, way(value))
