"""Property tiles against the exact equation: bounds, edges, no-gas limits and bits."""

from __future__ import annotations

import numpy as np
import pytest

from meterfix.calc.gas.detail_gas import DetailGas
from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.gas.pure import PureGas
from meterfix.calc.gas.tiles import Bound, PropertyTiles
from meterfix.model.gas import Composition, DensityModel, GasTerms, PropertyChoice, StateModel

ROWS = (
    "density",
    "compression_factor",
    "isentropic_exponent",
    "joule_thomson_coefficient",
    "dynamic_viscosity",
    "outside_range",
    "no_gas",
)


def _terms(fractions, model: StateModel, viscosity: str | float) -> GasTerms:
    stated = isinstance(viscosity, float)
    return GasTerms(
        composition=Composition("mole", fractions, 1.0),
        line_model=DensityModel(model),
        base_model=DensityModel(model),
        dynamic_viscosity=PropertyChoice(
            value=viscosity if stated else None, method=None if stated else viscosity
        ),
        isentropic_exponent=PropertyChoice(method="equation_of_state"),
        calorific_value=None,
    )


def _case(name: str, mixtures):
    """Return terms and the exact equation."""
    if name in mixtures:
        gas = DetailGas(mixtures[name])
        return _terms(mixtures[name], StateModel.AGA8_DETAIL, 1.1e-5), gas.states
    pure = PureGas(name)
    terms = _terms(((name, 1.0),), StateModel.REFERENCE, "reference_equation")
    return terms, lambda p, T: pure.states(p, T, viscosity=True)


@pytest.mark.parametrize(
    ("name", "count"),
    [
        ("natural_gas", 25_000),
        ("rich_gas", 25_000),
        ("hydrogen_blend", 25_000),
        ("carbon_dioxide", 10_000),
        ("air", 5_000),
        ("hydrogen", 5_000),
        ("methane", 5_000),
    ],
)
def test_tiles_keep_their_bounds_on_random_states(name, count, mixtures, random):
    """On 100,000 random states in all: Z to 2e-7, kappa to 2e-6, JT to 1e-5 K/MPa.

    0.02 to 25 MPa and 250 to 340 K, a rich gas and CO2 among the gases. Viscosity to 1e-5 of
    itself. Where there is no gas is decided exactly alike.
    """
    terms, exact_states = _case(name, mixtures)
    p, T = random.uniform(2e4, 25e6, count), random.uniform(250.0, 340.0, count)
    exact = exact_states(p, T)
    tiled = GasLibrary().properties(terms).line_state(p, T)
    assert np.array_equal(tiled.no_gas, exact.no_gas)
    gas = ~exact.no_gas
    assert gas.mean() > 0.4
    for field, bound in (
        ("compression_factor", 2e-7),
        ("isentropic_exponent", 2e-6),
        ("joule_thomson_coefficient", 1e-11),
    ):
        error = np.abs(getattr(tiled, field) - getattr(exact, field))[gas]
        assert error.max() < bound, field
        assert error.max() > 0.0, "the tiles were not used at all"
    relative = np.abs(tiled.density / exact.density - 1.0)[gas]
    assert (relative * exact.compression_factor[gas]).max() < 3e-7
    if terms.dynamic_viscosity.value is None:
        viscosity = np.abs(tiled.dynamic_viscosity / exact.dynamic_viscosity - 1.0)[gas]
        assert viscosity.max() < 1e-5


def test_tiles_serve_most_states(mixtures, random):
    """Of a rich gas's random states nearly all come from tiles, and no tile is made twice."""
    calls: list[int] = []
    gas = DetailGas(mixtures["rich_gas"])

    def exact(p, T):
        calls.append(len(p))
        states = gas.states(p, T)
        return np.array([states.compression_factor])

    tiles = PropertyTiles(exact, (Bound(2e-7),))
    p, T = random.uniform(2e4, 10e6, 5000), random.uniform(270.0, 330.0, 5000)
    first = tiles.evaluate(p, T)
    calls.clear()
    again = tiles.evaluate(p, T)
    assert sum(calls) < 100
    assert first.tobytes() == again.tobytes()


@pytest.mark.parametrize("name", ["rich_gas", "carbon_dioxide", "air"])
def test_a_record_has_the_same_bits_whatever_else_is_computed(name, mixtures, random):
    """Batches of 1, 7 and 1,000, other states before and beside: identical bits."""
    terms, _ = _case(name, mixtures)
    p, T = random.uniform(2e4, 25e6, 1000), random.uniform(250.0, 340.0, 1000)
    whole = GasLibrary().properties(terms).line_state(p, T)
    other = GasLibrary().properties(terms)
    order = random.permutation(1000)
    sevens = [other.line_state(p[order[n : n + 7]], T[order[n : n + 7]]) for n in range(0, 1000, 7)]
    lonely = GasLibrary().properties(terms)
    alone = [lonely.line_state(p[n : n + 1], T[n : n + 1]) for n in range(200)]
    for row in ROWS:
        values = getattr(whole, row)
        assert (
            np.concatenate([getattr(s, row) for s in sevens]).tobytes() == values[order].tobytes()
        )
        assert np.concatenate([getattr(s, row) for s in alone]).tobytes() == values[:200].tobytes()


@pytest.mark.parametrize("name", ["natural_gas", "rich_gas", "air", "carbon_dioxide"])
def test_jumps_at_tile_edges(name, mixtures, random):
    """Across edges of whole and halved tiles Z jumps by less than 3e-7."""
    terms, _ = _case(name, mixtures)
    properties = GasLibrary().properties(terms)
    count = 1500
    edge_p = random.integers(1, 100, count) * 0.25e6
    any_T = random.uniform(250.0, 340.0, count)
    edge_T = random.integers(134, 182, count) * 1.875
    any_p = random.uniform(2e4, 25e6, count)
    for below_p, above_p, below_T, above_T in (
        (np.nextafter(edge_p, 0.0), edge_p, any_T, any_T),
        (any_p, any_p, np.nextafter(edge_T, 0.0), edge_T),
    ):
        below = properties.line_state(below_p, below_T)
        above = properties.line_state(above_p, above_T)
        gas = ~(below.no_gas | above.no_gas)
        assert gas.sum() > 0.3 * count
        jump = np.abs(above.compression_factor - below.compression_factor)[gas]
        assert jump.max() < 3e-7


def test_no_gas_beyond_the_saturation_curve_of_carbon_dioxide(mixtures):
    """Just below the vapour pressure the exact gas, at it and above none; dense above Tc."""
    terms, _ = _case("carbon_dioxide", mixtures)
    limit = PureGas("carbon_dioxide").saturation_pressure(288.15)
    # vapour pressure of CO2 at 15 degC: 5.087 MPa (Span and Wagner 1996, auxiliary equation)
    assert limit == pytest.approx(5.087e6, rel=1e-3)
    p = limit * np.array([0.999, 0.9999, 1.0, 1.0001, 2.0])
    state = GasLibrary().properties(terms).line_state(p, np.full(5, 288.15))
    assert state.no_gas.tolist() == [False, False, True, True, True]
    assert np.isnan(state.density).tolist() == [False, False, True, True, True]
    dense = GasLibrary().properties(terms).line_state(np.array([20e6]), np.array([310.0]))
    assert not dense.no_gas[0]
    assert dense.density[0] > 700.0


def test_far_and_strange_states_reach_the_exact_equation(mixtures):
    """Temperatures below one tile, huge pressures, NaN and infinity neither crash nor pass."""
    terms, _ = _case("natural_gas", mixtures)
    p = np.array([1e5, 1e12, np.nan, np.inf, -1.0, 0.0, 1e5])
    T = np.array([5.0, 300.0, 300.0, 300.0, 300.0, 300.0, np.nan])
    state = GasLibrary().properties(terms).line_state(p, T)
    assert np.isnan(state.density).all()
    assert state.no_gas.tolist() == [True, True, False, True, True, True, False]
