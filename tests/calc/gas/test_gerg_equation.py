"""GERG-2008: against the reference code on random gases, its roots, its laws, its bits."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meterfix.calc.gas.composition import component_molar_mass, known_components, mole_fractions
from meterfix.calc.gas.density_roots import gas_density, mechanical_critical_temperature
from meterfix.calc.gas.detail_gas import DetailGas
from meterfix.calc.gas.equations import equation_of_state
from meterfix.calc.gas.gerg import gerg_mixture
from meterfix.calc.gas.gerg_gas import GergGas
from meterfix.calc.gas.gerg_tables import gerg_tables
from meterfix.errors import GasError
from meterfix.model.gas import Composition, DensityModel, StateModel

FIELDS = (
    "density",
    "compression_factor",
    "isochoric_heat_capacity",
    "isobaric_heat_capacity",
    "isentropic_exponent",
    "speed_of_sound",
    "joule_thomson_coefficient",
)
NAMES = tuple(component.name for component in gerg_tables().components)
LIGHT = (0, 1, 2, 3, 14, 15, 16, 19, 20)
"""Places of methane, nitrogen, CO2, ethane, hydrogen, oxygen, CO, helium and argon."""
CARBON_DIOXIDE_RICH = (("carbon_dioxide", 0.94), ("methane", 0.04), ("nitrogen", 0.02))


def _natural(random: np.random.Generator) -> tuple[tuple[str, float], ...]:
    """Return at least 55 % methane and up to eight others, heavy ones in small amounts."""
    others = random.choice(np.arange(1, 21), size=int(random.integers(1, 9)), replace=False)
    largest = dict.fromkeys(range(6, 14), 0.004) | {17: 0.0005}
    amounts = {int(n): random.uniform(0.0, largest.get(int(n), 0.06)) for n in others}
    rest = 1.0 - sum(amounts.values())
    return (("methane", rest), *((NAMES[n], x) for n, x in amounts.items()))


def _any_light(random: np.random.Generator) -> tuple[tuple[str, float], ...]:
    """Return one to five light components in any proportions."""
    chosen = random.choice(LIGHT, size=int(random.integers(1, 6)), replace=False)
    fractions = random.dirichlet(np.ones(len(chosen)))
    return tuple((NAMES[int(n)], float(x)) for n, x in zip(chosen, fractions, strict=True))


def _oracle(pyaga8, composition):
    given = pyaga8.Composition()
    for name, x in composition:
        heavy = name[2:] in {"hexane", "heptane", "octane", "nonane", "decane"}
        setattr(given, name.removeprefix("n_") if heavy else name, x)
    oracle = pyaga8.Gerg2008()
    oracle.set_composition(given)
    return oracle


@pytest.mark.parametrize("make", [_natural, _any_light])
def test_gerg_against_the_reference_code_on_random_gases(make, random):
    """Density, Z, cv, cp, kappa, w and JT equal pyaga8's (a port of NIST's code) to 1e-9.

    200 random compositions of each kind, 4 random states each, 250 to 450 K and up to 35 MPa;
    where there is no gas pyaga8 is not asked.
    """
    pyaga8 = pytest.importorskip("pyaga8")
    compared = 0
    for _ in range(200):
        composition = make(random)
        p = np.exp(random.uniform(np.log(2e4), np.log(35e6), 4))
        T = random.uniform(250.0, 450.0, 4)
        states = GergGas(composition).states(p, T)
        oracle = _oracle(pyaga8, composition)
        for n in np.flatnonzero(~states.no_gas):
            oracle.pressure, oracle.temperature = p[n] / 1e3, T[n]
            oracle.calc_density(0)
            oracle.calc_properties()
            expected = (
                oracle.d * oracle.mm,
                oracle.z,
                1e3 * oracle.cv / oracle.mm,
                1e3 * oracle.cp / oracle.mm,
                oracle.kappa,
                oracle.w,
                oracle.jt / 1e3,
            )
            for field, value in zip(FIELDS, expected, strict=True):
                # JT changes sign in blends with hydrogen and helium: absolute there
                limit = {"rel": 1e-9, "abs": 1e-14 if field.startswith("joule") else 0.0}
                assert getattr(states, field)[n] == pytest.approx(value, **limit), (field, n)
            compared += 1
    assert compared > 780


def test_gerg_one_state_has_the_same_bits_in_every_batch(random, mixtures):
    """Alone, in batches of 7, of 1,000 and backwards a state gives identical bits."""
    for composition in (mixtures["rich_gas"], CARBON_DIOXIDE_RICH, (("carbon_dioxide", 1.0),)):
        gas = GergGas(composition)
        p, T = random.uniform(2e4, 25e6, 1000), random.uniform(200.0, 350.0, 1000)
        whole = gas.states(p, T)
        backwards = gas.states(p[::-1], T[::-1])
        sevens = [gas.states(p[n : n + 7], T[n : n + 7]) for n in range(0, 280, 7)]
        alone = [gas.states(p[n : n + 1], T[n : n + 1]) for n in range(0, 1000, 50)]
        for field in (*FIELDS, "no_gas"):
            values = getattr(whole, field)
            assert getattr(backwards, field)[::-1].tobytes() == values.tobytes()
            few = np.concatenate([getattr(s, field) for s in sevens])
            assert few.tobytes() == values[:280].tobytes()
            single = np.concatenate([getattr(s, field) for s in alone])
            assert single.tobytes() == values[::50].tobytes()


def test_gerg_order_of_components_and_zeros_do_not_matter(mixtures):
    """A composition written backwards, or with zeros in it, gives identical bits."""
    composition = mixtures["rich_gas"]
    p, T = np.array([1e6, 8e6]), np.array([280.0, 300.0])
    given_states = GergGas(composition).states(p, T)
    other = GergGas((("helium", 0.0), *reversed(composition))).states(p, T)
    for field in FIELDS:
        assert getattr(given_states, field).tobytes() == getattr(other, field).tobytes()


def test_a_search_in_wide_steps_finds_what_small_steps_find(mixtures, random):
    """Where every isotherm rises, steps of 0.5 and of 0.05 in density meet the same root."""
    for composition in (*mixtures.values(), CARBON_DIOXIDE_RICH):
        mixture = gerg_mixture(composition)
        limit = mechanical_critical_temperature(mixture)
        p = np.exp(random.uniform(np.log(1e3), np.log(70e6), 1000))
        T = limit + np.exp(random.uniform(np.log(1e-3), np.log(400.0), 1000))
        wide = gas_density(mixture, p, T, two_roots_below=limit)
        assert wide.found.all()
        # taken for a mixture with two roots everywhere, the search walks in small steps
        small = gas_density(mixture, p, T, two_roots_below=np.inf)
        assert small.found.all()
        assert wide.density == pytest.approx(small.density, rel=1e-9)
        Z, slope = mixture.isotherms(T).pressure_terms(wide.density)
        assert (slope > 0.0).all()
        pressure = Z * wide.density * 1e3 * mixture.gas_constant * T
        assert pressure == pytest.approx(p, rel=1e-12)


@settings(max_examples=30, deadline=None)
@given(
    share=st.floats(0.0, 1.0),
    other=st.sampled_from(["ethane", "nitrogen", "hydrogen", "carbon_dioxide", "helium"]),
    temperature=st.floats(250.0, 450.0),
)
def test_gerg_at_vanishing_pressure_is_the_ideal_gas(share, other, temperature):
    """Z -> 1 and kappa -> cp0/cv0 as the pressure goes to 0, for any of these mixtures."""
    gas = GergGas((("methane", 1.0 - share), (other, share)))
    T = np.array([temperature])
    states = gas.states(np.array([1.0]), T)
    assert states.compression_factor[0] == pytest.approx(1.0, abs=5e-7)
    ideal = gas.ideal_isentropic_exponent(T)[0]
    assert states.isentropic_exponent[0] == pytest.approx(ideal, abs=2e-6)
    # w^2 = kappa R T / M of an ideal gas
    w2 = ideal * gas.gas_constant * temperature / gas.molar_mass
    assert states.speed_of_sound[0] ** 2 == pytest.approx(w2, rel=1e-6)


def test_gerg_joule_thomson_coefficient_is_the_slope_of_constant_enthalpy(mixtures):
    """JT = -(dh/dp)_T / cp: (dh/dp)_T = v - T (dv/dT)_p by central differences, to 1e-5."""
    gas = GergGas(mixtures["rich_gas"])
    p, T, step = np.array([0.5e6, 4e6, 9e6]), np.array([275.0, 290.0, 320.0]), 0.01
    middle = gas.states(p, T)
    up, down = gas.states(p, T + step), gas.states(p, T - step)
    slope = (1.0 / up.density - 1.0 / down.density) / (2.0 * step)
    expected = (T * slope - 1.0 / middle.density) / middle.isobaric_heat_capacity
    assert middle.joule_thomson_coefficient == pytest.approx(expected, rel=1e-5)


@pytest.mark.parametrize(
    ("component", "temperature", "vapour_pressure"),
    [
        ("carbon_dioxide", 290.0, 5.3177e6),  # Span and Wagner 1996
        ("propane", 300.0, 0.9978e6),  # Lemmon, McLinden and Wagner 2009
    ],
)
def test_gerg_has_no_gas_beyond_a_saturation_curve(component, temperature, vapour_pressure):
    """A pure gas ends within 0.3 % of its vapour pressure by its reference equation.

    On request the dense root is given there: a liquid, denser with pressure.
    """
    gas = GergGas(((component, 1.0),))
    p = vapour_pressure * np.array([0.997, 1.003, 1.5, 3.0])
    T = np.full(4, temperature)
    states = gas.states(p, T)
    assert states.no_gas.tolist() == [False, True, True, True]
    for field in FIELDS:
        assert np.isnan(getattr(states, field)).tolist() == [False, True, True, True]
    dense = gas.states(p, T, dense_root=True)
    assert not dense.no_gas.any()
    assert (np.diff(dense.density) > 0.0).all()
    assert dense.density[1] > 4.0 * states.density[0]


def test_gerg_and_detail_agree_within_what_both_state(mixtures, random):
    """Lean gas at 265 to 335 K and up to 12 MPa: densities within 0.14 %, 0.1 % each.

    On a rich gas above 6 MPa they part by more than 0.1 %: the model is a contract term.
    """
    p, T = random.uniform(1e5, 12e6, 500), random.uniform(265.15, 335.15, 500)
    lean = mixtures["natural_gas"]
    gerg, detail = GergGas(lean).states(p, T), DetailGas(lean).states(p, T)
    assert np.abs(gerg.density / detail.density - 1.0).max() < 1.4e-3
    assert np.abs(gerg.density / detail.density - 1.0).max() > 1e-6
    rich = mixtures["rich_gas"]
    p, T = np.linspace(6e6, 12e6, 20), np.full(20, 280.0)
    apart = GergGas(rich).states(p, T).density / DetailGas(rich).states(p, T).density - 1.0
    assert np.abs(apart).max() > 1e-3


def test_gerg_reaches_only_states_that_exist(mixtures):
    """NaN in gives NaN without a verdict; impossible and absurd states give 'no gas'."""
    gas = GergGas(mixtures["natural_gas"])
    p = np.array([np.nan, 1e6, 0.0, -1e5, np.inf, 1e6, 1e6, 1e5, 1e14])
    T = np.array([290.0, np.nan, 290.0, 290.0, 290.0, 0.0, 5.0, 1e-12, 300.0])
    states = gas.states(p, T)
    assert np.isnan(states.density).all()
    assert states.no_gas.tolist() == [False, False, *[True] * 7]


def test_gerg_range_flags(mixtures):
    """Outside 90 to 450 K, above 35 MPa or for an unusual composition the flag is raised."""
    p = np.array([1e6, 1e6, 1e6, 35e6, 35.1e6, np.nan])
    T = np.array([300.0, 89.0, 451.0, 300.0, 300.0, 300.0])
    for name in ("natural_gas", "rich_gas", "hydrogen_blend"):
        flags = GergGas(mixtures[name]).outside_range(p, T)
        assert flags.tolist() == [False, True, True, False, True, False]
    unusual = GergGas(CARBON_DIOXIDE_RICH).outside_range(p, T)
    assert unusual.tolist() == [True, True, True, True, True, False]


def test_gerg_is_served_by_its_name_with_its_own_molar_masses():
    """The model 'gerg_2008' knows 21 components; mass fractions use its own molar masses."""
    assert set(known_components(StateModel.GERG_2008)) == set(NAMES)
    assert len(NAMES) == 21
    # molar mass of methane: 16.04246 g/mol in AGA 8 Part 2, 16.043 in Part 1
    assert component_molar_mass("methane", StateModel.GERG_2008) == pytest.approx(16.04246e-3)
    assert component_molar_mass("methane", StateModel.AGA8_DETAIL) == pytest.approx(16.043e-3)
    composition = Composition("mass", (("methane", 0.9), ("ethane", 0.1)), 1.0)
    gas = equation_of_state(composition, DensityModel(StateModel.GERG_2008))
    methane, ethane = 0.9 / 16.04246, 0.1 / 30.06904
    assert gas.molar_mass == pytest.approx(1e-3 / (methane + ethane), rel=1e-12)
    fractions = dict(mole_fractions(composition, StateModel.GERG_2008))
    assert fractions["methane"] == pytest.approx(methane / (methane + ethane), rel=1e-12)
    with pytest.raises(GasError, match="air"):
        equation_of_state(
            Composition("mole", (("air", 1.0),), 1.0), DensityModel(StateModel.GERG_2008)
        )


def test_gerg_tables_are_whole():
    """21 components with 12 to 24 terms, all 210 pairs, 7 pairs' own departure models, one shared.

    Counts of Kunz and Wagner 2012 (tables A2, A3, A6, A8).
    """
    tables = gerg_tables()
    counts = {c.name: len(c.terms) for c in tables.components}
    assert counts == dict.fromkeys(NAMES, 12) | {
        "methane": 24,
        "nitrogen": 24,
        "ethane": 24,
        "carbon_dioxide": 22,
        "hydrogen": 14,
        "water": 16,
    }
    assert len(tables.pairs) == 210
    own = [pair.model for pair in tables.pairs.values() if 0 < pair.model < 10]
    assert sorted(own) == [1, 2, 3, 4, 5, 6, 7]
    assert sum(pair.model == 10 for pair in tables.pairs.values()) == 8
    assert all((pair.weight != 0.0) == (pair.model > 0) for pair in tables.pairs.values())


@pytest.mark.parametrize(
    ("composition", "names"),
    [
        ((("methane", 0.9), ("krypton", 0.1)), "krypton"),
        ((("methane", 0.5), ("methane", 0.5)), "twice"),
        ((("methane", 0.0),), "empty"),
    ],
)
def test_gerg_refuses_an_impossible_composition(composition, names):
    """Unknown or doubled components and an empty composition raise, naming what is wrong."""
    with pytest.raises(GasError, match=names):
        gerg_mixture(composition)
