"""Compositions, models, methods and calorific values as the contract states them."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meterfix.calc.gas.composition import (
    component_molar_mass,
    known_components,
    molar_mass,
    mole_fractions,
)
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

BASE = BaseConditions(101325.0, 288.15)
NORMAL = BaseConditions(101325.0, 273.15)
DETAIL = DensityModel(StateModel.AGA8_DETAIL)
REFERENCE = DensityModel(StateModel.REFERENCE)
IDEAL = DensityModel(StateModel.IDEAL)
FIXED = DensityModel(StateModel.FIXED, 0.95)
GROSS_15 = CalorificValue(38.9e6, CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15, BASE)
VOLUME_15 = EnergyTerms(CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15)
MASS_15 = EnergyTerms(CalorificBasis.MASS, CalorificKind.GROSS, 288.15)
AIR = Composition("mole", (("air", 1.0),), 1.0)


def _terms(composition, line=DETAIL, base=DETAIL, **changes) -> GasTerms:
    terms = GasTerms(
        composition=composition,
        line_model=line,
        base_model=base,
        dynamic_viscosity=PropertyChoice(1.1e-5),
        isentropic_exponent=PropertyChoice(method="equation_of_state"),
        calorific_value=GROSS_15,
    )
    return dataclasses.replace(terms, **changes)


@pytest.fixture(scope="module")
def natural_gas(mixtures) -> Composition:
    return Composition("mole", mixtures["natural_gas"], 1.0)


@pytest.fixture(scope="module")
def library() -> GasLibrary:
    return GasLibrary()


# --- composition -------------------------------------------------------------------------------


@settings(max_examples=60, deadline=None)
@given(
    st.dictionaries(
        st.sampled_from(known_components(StateModel.AGA8_DETAIL)),
        st.floats(1e-6, 1.0),
        min_size=1,
        max_size=8,
    )
)
def test_mass_and_mole_fractions_round_trip(amounts):
    """Mole fractions turned into mass fractions by hand come back from a mass basis."""
    total = sum(amounts.values())
    moles = {name: x / total for name, x in amounts.items()}
    model = StateModel.AGA8_DETAIL
    masses = {name: x * component_molar_mass(name, model) for name, x in moles.items()}
    whole = sum(masses.values())
    by_mass = Composition("mass", tuple((n, m / whole) for n, m in masses.items()), 1.0)
    assert dict(mole_fractions(by_mass, model)) == pytest.approx(moles, rel=1e-13)
    by_mole = Composition("mole", tuple(moles.items()), 1.0)
    assert molar_mass(by_mass, model) == pytest.approx(molar_mass(by_mole, model), rel=1e-13)


def test_known_components():
    """DETAIL knows the 21 components, the ideal gas also 'air', the reference equations both."""
    detail = known_components(StateModel.AGA8_DETAIL)
    assert len(detail) == 21
    assert known_components(StateModel.IDEAL) == (*detail, "air")
    assert set(known_components(StateModel.REFERENCE)) == {*detail, "air"}


@pytest.mark.parametrize(
    ("composition", "line", "names"),
    [
        (Composition("mole", (("xenon", 1.0),), 1.0), DETAIL, "xenon"),
        (Composition("mole", (("air", 1.0),), 1.0), DETAIL, "air"),
        (Composition("mole", (("methane", 0.5), ("methane", 0.5)), 1.0), DETAIL, "twice"),
        (Composition("mole", (("methane", -0.5), ("ethane", 1.5)), 1.0), DETAIL, "-0.5"),
        (Composition("mole", (("methane", float("nan")),), 1.0), DETAIL, "nan"),
        (Composition("mole", (("methane", 0.0),), 1.0), DETAIL, "above 0"),
        (Composition("volume", (("methane", 1.0),), 1.0), DETAIL, "volume"),
        (Composition("mole", (("methane", 0.5), ("ethane", 0.5)), 1.0), REFERENCE, "ethane"),
        (Composition("mole", (("air", 0.5), ("ethane", 0.5)), 1.0), IDEAL, "dry air alone"),
        (AIR, DensityModel(StateModel.FIXED, 0.0), "above 0"),
        (AIR, DensityModel(StateModel.FIXED), "None"),
    ],
)
def test_an_impossible_gas_is_refused(composition, line, names, library):
    """A composition or model that cannot be computed raises GasError and names what is wrong."""
    with pytest.raises(GasError, match=names):
        library.properties(_terms(composition, line, line, isentropic_exponent=PropertyChoice(1.3)))


# --- models and methods ------------------------------------------------------------------------


def test_ideal_and_fixed_models_say_so(natural_gas, library):
    """Density is p M / (Z R T) with Z = 1 or the stated one, JT = 0, marked as simplified.

    18.0153 g/mol of water and 101.325 kPa, 15 degC give 0.76191 kg/m3 of an ideal gas
    (p M / R T with R = 8.314463 J/(mol K), by hand).
    """
    water = Composition("mole", (("water", 1.0),), 1.0)
    ideal = library.properties(_terms(water, IDEAL, IDEAL))
    state = ideal.line_state(np.array([101325.0]), np.array([288.15]))
    assert state.density[0] == pytest.approx(0.76191, abs=5e-6)
    assert state.joule_thomson_coefficient[0] == 0.0
    assert ideal.simplified
    fixed = library.properties(
        _terms(water, FIXED, IDEAL, isentropic_exponent=PropertyChoice(1.3))
    ).line_state(np.array([101325.0, -1.0]), np.array([288.15, 288.15]))
    assert fixed.density[0] == pytest.approx(0.76191 / 0.95, abs=5e-6)
    assert fixed.compression_factor[0] == 0.95
    assert fixed.no_gas.tolist() == [False, True]
    assert library.properties(_terms(natural_gas, DETAIL, IDEAL)).simplified
    assert not library.properties(_terms(natural_gas)).simplified


def test_isentropic_exponent_methods(natural_gas, library):
    """A value stays itself; 'ideal_gas' is cp0/cv0; the equation's own depends on pressure.

    cp0/cv0 of air near 15 degC is 1.40 (handbooks), of natural gas about 1.30.
    """
    p, T = np.array([1e5, 6e6]), np.array([288.15, 288.15])

    def kappa(composition, model, choice):
        properties = library.properties(
            _terms(composition, model, model, isentropic_exponent=choice)
        )
        return properties.line_state(p, T).isentropic_exponent

    ideal = PropertyChoice(method="ideal_gas")
    assert kappa(natural_gas, DETAIL, PropertyChoice(1.27)).tolist() == [1.27, 1.27]
    for composition, models, expected in (
        (natural_gas, (DETAIL, IDEAL, FIXED), 1.30),
        (AIR, (REFERENCE, IDEAL, FIXED), 1.40),
    ):
        found = [kappa(composition, model, ideal) for model in models]
        assert found[0] == pytest.approx([expected, expected], abs=0.01)
        assert found[0][0] == pytest.approx(found[0][1], abs=1e-7)
        for other in found[1:]:
            assert other == pytest.approx(found[0], abs=1e-6)
    real = kappa(natural_gas, DETAIL, PropertyChoice(method="equation_of_state"))
    assert real[1] - real[0] > 0.03


def test_viscosity_methods(natural_gas, library):
    """Air at 0.1 MPa and 300 K has 18.5 uPa s (Lemmon and Jacobsen 2004); a mixture is refused."""
    method = PropertyChoice(method="reference_equation")
    for model in (REFERENCE, IDEAL):
        air = library.properties(_terms(AIR, model, model, dynamic_viscosity=method))
        state = air.line_state(np.array([1e5]), np.array([300.0]))
        assert state.dynamic_viscosity[0] == pytest.approx(18.5e-6, abs=0.05e-6)
    stated = library.properties(_terms(AIR, REFERENCE, REFERENCE))
    assert stated.line_state(np.array([1e5]), np.array([300.0])).dynamic_viscosity[0] == 1.1e-5
    with pytest.raises(GasError, match="mixture"):
        library.properties(_terms(natural_gas, dynamic_viscosity=method))
    carbon_monoxide = Composition("mole", (("carbon_monoxide", 1.0),), 1.0)
    with pytest.raises(GasError, match="carbon_monoxide"):
        library.properties(_terms(carbon_monoxide, REFERENCE, dynamic_viscosity=method))


@pytest.mark.parametrize(
    "changes",
    [
        {"isentropic_exponent": PropertyChoice(method="guess")},
        {"dynamic_viscosity": PropertyChoice(method="guess")},
        {"dynamic_viscosity": PropertyChoice()},
        {"dynamic_viscosity": PropertyChoice(1e-5, "reference_equation")},
        {"isentropic_exponent": PropertyChoice(float("nan"))},
        {"dynamic_viscosity": PropertyChoice(-1e-5)},
    ],
)
def test_an_impossible_choice_is_refused(natural_gas, library, changes):
    """Unknown methods, none or both of value and method, and impossible values raise."""
    with pytest.raises(GasError):
        library.properties(_terms(natural_gas, **changes))


def test_a_fixed_factor_has_no_isentropic_exponent(natural_gas, library):
    """'equation_of_state' with a fixed compression factor is refused: it is no such equation."""
    with pytest.raises(GasError, match="ideal_gas"):
        library.properties(_terms(natural_gas, FIXED))


def test_equal_terms_share_their_work(natural_gas, library):
    """The library gives one object for equal terms, and its numbers for new calorific values."""
    one = library.properties(_terms(natural_gas))
    assert library.properties(_terms(natural_gas)) is one
    other = library.properties(_terms(natural_gas, calorific_value=None))
    p, T = np.array([2e6]), np.array([290.0])
    assert other.line_state(p, T).density == one.line_state(p, T).density


def test_unknown_states_stay_unknown(natural_gas, library):
    """NaN in any input gives NaN in every property and neither flag."""
    state = library.properties(_terms(natural_gas)).line_state(
        np.array([np.nan, 2e6]), np.array([290.0, np.nan])
    )
    for row in ("density", "isentropic_exponent", "dynamic_viscosity", "compression_factor"):
        assert np.isnan(getattr(state, row)).all()
    assert not state.no_gas.any()
    assert not state.outside_range.any()


def test_base_conditions_without_gas_are_refused(library):
    """Water by its reference equation is liquid at 15 degC: no base density, and said so."""
    water = library.properties(
        _terms(Composition("mole", (("water", 1.0),), 1.0), REFERENCE, REFERENCE)
    )
    with pytest.raises(GasError, match="no gas at the base conditions"):
        water.base_density(BASE)


# --- calorific value ---------------------------------------------------------------------------


def test_energy_does_not_depend_on_the_way_it_is_reckoned(natural_gas, library):
    """1,000 kg give the same energy by mass, by volume at 15 degC and by volume at 0 degC."""
    gas = library.properties(_terms(natural_gas))
    energies = []
    for base in (BASE, NORMAL, BaseConditions(101560.0, 288.7056)):
        factor, basis = gas.energy_factor(base, VOLUME_15)
        assert basis is CalorificBasis.VOLUME
        energies.append(factor * (1000.0 / gas.base_density(base)))
    factor, basis = gas.energy_factor(NORMAL, MASS_15)
    assert basis is CalorificBasis.MASS
    energies.append(factor * 1000.0)
    assert energies == pytest.approx([energies[0]] * 4, rel=1e-14)
    # at its own base conditions the stated value is used to the bit
    assert gas.energy_factor(BASE, VOLUME_15)[0] == 38.9e6
    # a value per cubic metre at 0 degC is higher: more gas in the same volume, 1.0554 times
    assert gas.energy_factor(NORMAL, VOLUME_15)[0] / 38.9e6 == pytest.approx(1.0554, abs=2e-4)


def test_a_mass_value_serves_both_ways(natural_gas, library):
    """50 MJ/kg: per kg as it is; per m3 times the base density."""
    by_mass = CalorificValue(50e6, CalorificBasis.MASS, CalorificKind.GROSS, 288.15, None)
    gas = library.properties(_terms(natural_gas, calorific_value=by_mass))
    assert gas.energy_factor(BASE, MASS_15) == (50e6, CalorificBasis.MASS)
    factor, _ = gas.energy_factor(BASE, VOLUME_15)
    assert factor == pytest.approx(50e6 * gas.base_density(BASE), rel=1e-15)


@pytest.mark.parametrize(
    ("changes", "names"),
    [
        ({"kind": CalorificKind.NET}, "net.*gross"),
        ({"combustion_reference_temperature": 298.15}, "298.15 K.*288.15 K"),
        ({"volume_base": None}, "base conditions"),
    ],
)
def test_a_calorific_value_of_another_kind_is_refused(natural_gas, library, changes, names):
    """Net for gross, 25 degC for 15 degC, or a volume without conditions: refused, both named."""
    value = dataclasses.replace(GROSS_15, **changes)
    gas = library.properties(_terms(natural_gas, calorific_value=value))
    with pytest.raises(GasError, match=names):
        gas.energy_factor(BASE, VOLUME_15)


def test_a_gas_without_a_calorific_value_has_no_energy(natural_gas, library):
    """Energy of a gas that states no calorific value is refused, never 0."""
    gas = library.properties(_terms(natural_gas, calorific_value=None))
    with pytest.raises(GasError, match="no calorific value"):
        gas.energy_factor(BASE, VOLUME_15)
