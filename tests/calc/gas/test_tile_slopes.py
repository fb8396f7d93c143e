"""Derivatives of property tiles and by composition, where tiles fit and where none does."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from meterfix.calc.gas.gradients import CompositionGradients
from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.gas.tiles import Bound, PropertyTiles
from meterfix.model.gas import Composition, DensityModel, GasTerms, PropertyChoice, StateModel

RICH = (("methane", 0.6), ("propane", 0.3), ("n_butane", 0.1))


@pytest.fixture(scope="module")
def library():
    return GasLibrary()


@pytest.fixture(scope="module")
def rich():
    model = DensityModel(StateModel.AGA8_DETAIL)
    return GasTerms(
        composition=Composition("mole", RICH, 1.0),
        line_model=model,
        base_model=model,
        dynamic_viscosity=PropertyChoice(value=1e-5),
        isentropic_exponent=PropertyChoice(method="equation_of_state"),
        calorific_value=None,
    )


@pytest.fixture(scope="module")
def states(library, rich):
    """Return states of a rich gas, and those of them that no tile serves."""
    draw = np.random.default_rng(11)
    p, T = draw.uniform(2e5, 5e6, 500), draw.uniform(275.0, 315.0, 500)
    properties = library.properties(rich)
    gas = ~properties.line_state(p, T).no_gas
    p, T = p[gas], T[gas]
    exact = np.zeros(len(p), dtype=np.bool_)
    exact[properties.tiles.serving(p, T)[1]] = True
    return p, T, exact


def smooth(p, T):
    return np.array([1.0 - 2e-8 * p * (300.0 / T) ** 2, np.sin(p / 5e6) + 1e3 / T])


def test_slopes_are_those_of_the_function():
    """On tiles that fit, derivatives agree with the function's own within the property's bound."""
    tiles = PropertyTiles(smooth, (Bound(2e-7), Bound(2e-6)))
    draw = np.random.default_rng(1)
    p, T = draw.uniform(1e5, 1e7, 500), draw.uniform(255.0, 330.0, 500)
    first, second = tiles.slopes(p, T, (0, 1))
    assert np.allclose(first[0] * 1e6, -0.02 * (300.0 / T) ** 2, rtol=0.0, atol=4e-7)
    assert np.allclose(first[1] * 7.5, 3e-7 * p * 300.0**2 / T**3, rtol=0.0, atol=4e-7)
    assert np.allclose(second[0] * 1e6, np.cos(p / 5e6) / 5.0, rtol=0.0, atol=2e-5)
    assert np.allclose(second[1] * 7.5, -7.5e3 / T**2, rtol=0.0, atol=2e-5)


def test_asking_for_one_property_gives_the_same_bits():
    """Which properties are asked for does not matter to any of them, nor does the batch."""
    tiles = PropertyTiles(smooth, (Bound(2e-7), Bound(2e-6)))
    p, T = np.array([1.1e6, 3.2e6, 5.3e6]), np.array([280.0, 299.0, 311.0])
    both = tiles.slopes(p, T, (0, 1))
    assert tiles.slopes(p, T, (1,)).tobytes() == both[1:].tobytes()
    for n in range(3):
        assert tiles.slopes(p[n : n + 1], T[n : n + 1], (0,)).tobytes() == both[:1, :, n].tobytes()


def test_where_no_tile_fits_differences_of_the_equation_stand_in():
    """A property that no polynomial follows: central differences, one-sided at the gas's end."""

    def rough(p, T):
        return np.where(p > 3e6, np.nan, np.abs(np.sin(p / 3e3)) + 1e-3 * T)[np.newaxis]

    tiles = PropertyTiles(rough, (Bound(1e-9),))
    p, T = np.array([1e6, 3e6]), np.array([300.0, 300.0])
    by_p, by_T = tiles.slopes(p, T, (0,))[0]
    assert np.isfinite(by_p).all()
    assert np.allclose(by_T, 1e-3, rtol=1e-9)
    assert np.isnan(tiles.slopes(np.array([4e6, np.nan]), T, (0,))).all()


@pytest.mark.parametrize("served", ["tiles", "equation"])
def test_line_slopes_agree_with_differences(library, rich, states, served):
    """Density's derivatives of a rich gas: by tiles to 1e-6, near its dew curve by differences.

    There the slope itself changes over the steps of the difference: 0.1 % at the worst.
    """
    p, T, exact = states
    which = exact if served == "equation" else ~exact
    p, T = p[which], T[which]
    assert len(p) > 10
    properties = library.properties(rich)
    state = properties.line_state(p, T)
    slopes = properties.line_slopes(p, T, state.compression_factor, throttled=False)
    step = 2e-6

    def difference(a, b):
        return np.log(a.density / b.density) / (2.0 * step)

    by_p = difference(
        properties.line_state(p * (1 + step), T), properties.line_state(p * (1 - step), T)
    )
    by_T = difference(
        properties.line_state(p, T * (1 + step)), properties.line_state(p, T * (1 - step))
    )
    for ours, theirs in (
        (slopes.log_density_by_pressure * p, by_p),
        (slopes.log_density_by_temperature * T, by_T),
    ):
        error = np.abs(ours - theirs) / np.abs(theirs)
        # a step may cross a tile's edge: jumps below 3e-7 over steps of 4e-6
        if served == "tiles":
            assert np.median(error) < 1e-6
        assert error.max() < (1e-3 if served == "equation" else 0.1)


@pytest.mark.parametrize("served", ["tiles", "equation"])
def test_composition_gradients_agree_with_differences(library, rich, states, served):
    """By propane: more of it, all normalised again, against the equation of both compositions."""
    p, T, exact = states
    which = np.flatnonzero(exact if served == "equation" else ~exact)[:60]
    p, T = p[which], T[which]
    gradients = CompositionGradients(rich, ("propane", "n_butane"), library)
    ours = gradients.log_density(p, T)[0]
    kappa = gradients.isentropic_exponent(p, T)[0]
    states_of = []
    for step in (5e-6, -5e-6):
        moved = dict(RICH) | {"propane": 0.3 + step}
        fractions = tuple((name, x / (1.0 + step)) for name, x in moved.items())
        terms = replace(rich, composition=Composition("mole", fractions, 1.0 + step))
        states_of.append(library.properties(terms).line_state(p, T))
    theirs = (np.log(states_of[0].density) - np.log(states_of[1].density)) / 1e-5
    tolerance = 1e-4 if served == "equation" else 1e-6
    assert np.allclose(ours, theirs, rtol=tolerance, atol=0.0)
    by_kappa = (states_of[0].isentropic_exponent - states_of[1].isentropic_exponent) / 1e-5
    assert np.allclose(kappa, by_kappa, rtol=10 * tolerance, atol=1e-4)


def test_a_stated_sum_scales_the_fractions(library, rich):
    """Fractions stated to a sum of 1.02: one more of a component weighs 1/1.02 of it."""
    scaled = replace(rich, composition=replace(rich.composition, sum_as_given=1.02))
    p, T = np.array([1.5e6]), np.array([300.0])
    plain = CompositionGradients(rich, ("propane",), library).log_density(p, T)
    less = CompositionGradients(scaled, ("propane",), library).log_density(p, T)
    assert np.allclose(less * 1.02, plain, rtol=1e-7)
