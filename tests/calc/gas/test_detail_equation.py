"""AGA8 DETAIL: against the reference code on random gases, its roots, its laws, its bits."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meterfix.calc.gas.coefficient_tables import detail_tables
from meterfix.calc.gas.density_roots import mechanical_critical_temperature
from meterfix.calc.gas.detail import detail_mixture
from meterfix.calc.gas.detail_gas import DetailGas
from meterfix.errors import GasError

FIELDS = (
    "density",
    "compression_factor",
    "isochoric_heat_capacity",
    "isobaric_heat_capacity",
    "isentropic_exponent",
    "speed_of_sound",
    "joule_thomson_coefficient",
)
NAMES = tuple(component.name for component in detail_tables().components)


def _random_composition(random: np.random.Generator) -> tuple[tuple[str, float], ...]:
    """Return at least 55 % methane and up to eight others, heavy ones in small amounts."""
    others = random.choice(np.arange(1, 21), size=int(random.integers(1, 9)), replace=False)
    largest = dict.fromkeys(range(6, 14), 0.004) | {17: 0.0005}
    amounts = {int(n): random.uniform(0.0, largest.get(int(n), 0.06)) for n in others}
    rest = 1.0 - sum(amounts.values())
    return (("methane", rest), *((NAMES[n], x) for n, x in amounts.items()))


def test_against_the_reference_code_on_random_gases(random):
    """Density, Z, cv, cp, kappa, w and JT equal pyaga8's (a port of NIST's code) to 1e-9.

    250 random compositions of all 21 components, 4 random states each, 250 to 350 K and up to
    30 MPa; where there is no gas pyaga8 is not asked.
    """
    pyaga8 = pytest.importorskip("pyaga8")
    compared = 0
    for _ in range(250):
        composition = _random_composition(random)
        gas = DetailGas(composition)
        p = np.exp(random.uniform(np.log(2e4), np.log(30e6), 4))
        T = random.uniform(250.0, 350.0, 4)
        states = gas.states(p, T)
        oracle_composition = pyaga8.Composition()
        for name, x in composition:
            heavy = (
                name.removeprefix("n_")
                if name[2:] in {"hexane", "heptane", "octane", "nonane", "decane"}
                else name
            )
            setattr(oracle_composition, heavy, x)
        oracle = pyaga8.Detail()
        oracle.set_composition(oracle_composition)
        for n in np.flatnonzero(~states.no_gas):
            oracle.pressure, oracle.temperature = p[n] / 1e3, T[n]
            oracle.calc_density()
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
    assert compared > 990


def test_one_state_has_the_same_bits_in_every_batch(random, mixtures):
    """Alone, in batches of 7, of 1,000 and backwards a state gives identical bits."""
    for composition in (*mixtures.values(), (("carbon_dioxide", 1.0),)):
        gas = DetailGas(composition)
        p, T = random.uniform(2e4, 25e6, 1000), random.uniform(240.0, 350.0, 1000)
        whole = gas.states(p, T)
        backwards = gas.states(p[::-1], T[::-1])
        sevens = [gas.states(p[n : n + 7], T[n : n + 7]) for n in range(0, 1000, 7)]
        alone = [gas.states(p[n : n + 1], T[n : n + 1]) for n in range(0, 1000, 10)]
        for field in (*FIELDS, "no_gas"):
            bits = getattr(whole, field).tobytes()
            assert getattr(backwards, field)[::-1].tobytes() == bits
            assert np.concatenate([getattr(s, field) for s in sevens]).tobytes() == bits
            single = np.concatenate([getattr(s, field) for s in alone])
            assert single.tobytes() == getattr(whole, field)[::10].tobytes()


def test_order_of_components_and_zeros_do_not_matter(mixtures):
    """A composition written backwards, or with zeros in it, gives identical bits."""
    composition = mixtures["rich_gas"]
    p, T = np.array([1e6, 8e6]), np.array([280.0, 300.0])
    given = DetailGas(composition).states(p, T)
    other = DetailGas((("helium", 0.0), *reversed(composition))).states(p, T)
    for field in FIELDS:
        assert getattr(given, field).tobytes() == getattr(other, field).tobytes()


@settings(max_examples=40, deadline=None)
@given(
    share=st.floats(0.0, 1.0),
    other=st.sampled_from(["ethane", "nitrogen", "hydrogen", "carbon_dioxide", "helium"]),
    temperature=st.floats(250.0, 350.0),
)
def test_vanishing_pressure_is_the_ideal_gas(share, other, temperature):
    """Z -> 1 and kappa -> cp0/cv0 as the pressure goes to 0, for any of these mixtures."""
    gas = DetailGas((("methane", 1.0 - share), (other, share)))
    T = np.array([temperature])
    states = gas.states(np.array([1.0]), T)
    assert states.compression_factor[0] == pytest.approx(1.0, abs=5e-7)
    ideal = gas.ideal_isentropic_exponent(T)[0]
    assert states.isentropic_exponent[0] == pytest.approx(ideal, abs=2e-6)
    # w^2 = kappa R T / M of an ideal gas
    w2 = ideal * gas.gas_constant * temperature / gas.molar_mass
    assert states.speed_of_sound[0] ** 2 == pytest.approx(w2, rel=1e-6)


def test_joule_thomson_coefficient_is_the_slope_of_constant_enthalpy(mixtures):
    """JT = -(dh/dp)_T / cp: (dh/dp)_T = v - T (dv/dT)_p by central differences, to 1e-5."""
    gas = DetailGas(mixtures["rich_gas"])
    p, T, step = np.array([0.5e6, 4e6, 9e6]), np.array([275.0, 290.0, 320.0]), 0.01
    middle = gas.states(p, T)
    up, down = gas.states(p, T + step), gas.states(p, T - step)
    slope = (1.0 / up.density - 1.0 / down.density) / (2.0 * step)
    expected = (T * slope - 1.0 / middle.density) / middle.isobaric_heat_capacity
    assert middle.joule_thomson_coefficient == pytest.approx(expected, rel=1e-5)


def test_carbon_dioxide_has_no_gas_beyond_its_saturation_curve():
    """CO2 by DETAIL: gas below the vapour pressure, none above it, dense fluid above Tc.

    Vapour pressure of CO2 at 290 K: 5.3177 MPa (Span and Wagner 1996); DETAIL's own within 1 %.
    """
    gas = DetailGas((("carbon_dioxide", 1.0),))
    p = np.array([5.25e6, 5.40e6, 9.0e6, 25e6, 25e6])
    T = np.array([290.0, 290.0, 290.0, 290.0, 320.0])
    states = gas.states(p, T)
    assert states.no_gas.tolist() == [False, True, True, True, False]
    for field in FIELDS:
        assert np.isnan(getattr(states, field)).tolist() == [False, True, True, True, False]
    # on request the dense root: liquid of about 800 kg/m3, denser with pressure
    dense = gas.states(p, T, dense_root=True)
    assert not dense.no_gas.any()
    assert (dense.density > [700.0, 700.0, 850.0, 950.0, 600.0]).all()
    # the supercritical fluid has one root, whichever way it is sought
    assert dense.density[4] == pytest.approx(states.density[4], rel=1e-12)


def test_dense_root_on_request_meets_the_gas_where_there_is_one_root(random, mixtures):
    """At 260 K and above, walking down from high density finds the gas's own root."""
    gas = DetailGas(mixtures["natural_gas"])
    p, T = random.uniform(2e4, 25e6, 300), random.uniform(260.0, 350.0, 300)
    assert mechanical_critical_temperature(gas.mixture) < 250.0
    gaseous, dense = gas.states(p, T), gas.states(p, T, dense_root=True)
    assert not gaseous.no_gas.any()
    assert dense.density == pytest.approx(gaseous.density, rel=1e-12)


def test_a_state_that_is_not_known_is_not_called_no_gas(mixtures):
    """NaN in gives NaN without a verdict; a pressure or temperature that cannot be gives one."""
    gas = DetailGas(mixtures["natural_gas"])
    p = np.array([np.nan, 1e6, 0.0, -1e5, np.inf, 1e6])
    T = np.array([290.0, np.nan, 290.0, 290.0, 290.0, 0.0])
    states = gas.states(p, T)
    assert np.isnan(states.density).all()
    assert states.no_gas.tolist() == [False, False, True, True, True, True]


def test_range_flags(mixtures):
    """Outside 250 to 350 K, above 30 MPa or for an unusual composition the flag is raised."""
    p = np.array([1e6, 1e6, 1e6, 31e6, np.nan])
    T = np.array([300.0, 249.0, 351.0, 300.0, 300.0])
    assert DetailGas(mixtures["natural_gas"]).outside_range(p, T).tolist() == [
        False,
        True,
        True,
        True,
        False,
    ]
    unusual = DetailGas((("methane", 0.6), ("nitrogen", 0.4))).outside_range(p, T)
    assert unusual.tolist() == [True, True, True, True, False]
    assert DetailGas(mixtures["rich_gas"]).outside_range(p, T)[0]  # propane above 3.5 %


@pytest.mark.parametrize(
    ("composition", "names"),
    [
        ((("methane", 0.9), ("krypton", 0.1)), "krypton"),
        ((("methane", 0.5), ("methane", 0.5)), "twice"),
        ((("methane", 0.0),), "empty"),
    ],
)
def test_an_impossible_composition_is_refused(composition, names):
    """Unknown or doubled components and an empty composition raise, naming what is wrong."""
    with pytest.raises(GasError, match=names):
        detail_mixture(composition)
