"""Property tiles over GERG-2008: their bounds against the exact equation, and their bits."""

from __future__ import annotations

import numpy as np
import pytest

from meterfix.calc.gas.gerg_gas import GergGas
from meterfix.calc.gas.properties import GasLibrary
from meterfix.model.gas import (
    BaseConditions,
    Composition,
    DensityModel,
    GasTerms,
    PropertyChoice,
    StateModel,
)

CARBON_DIOXIDE_RICH = (("carbon_dioxide", 0.94), ("methane", 0.04), ("nitrogen", 0.02))


def _terms(fractions, line=StateModel.GERG_2008, base=StateModel.GERG_2008) -> GasTerms:
    return GasTerms(
        composition=Composition("mole", fractions, 1.0),
        line_model=DensityModel(line),
        base_model=DensityModel(base),
        dynamic_viscosity=PropertyChoice(value=1.1e-5),
        isentropic_exponent=PropertyChoice(method="equation_of_state"),
        calorific_value=None,
    )


def _gas(name: str, mixtures):
    return CARBON_DIOXIDE_RICH if name == "carbon_dioxide_rich" else mixtures[name]


@pytest.mark.parametrize(
    "name", ["natural_gas", "rich_gas", "hydrogen_blend", "carbon_dioxide_rich"]
)
def test_gerg_tiles_keep_their_bounds_on_random_states(name, mixtures, random):
    """On 20,000 random states in all: Z to 2e-7, kappa to 2e-6, JT to 1e-5 K/MPa.

    0.02 to 25 MPa and 250 to 340 K; where there is no gas is decided exactly alike.
    """
    fractions = _gas(name, mixtures)
    p, T = random.uniform(2e4, 25e6, 5000), random.uniform(250.0, 340.0, 5000)
    exact = GergGas(fractions).states(p, T)
    tiled = GasLibrary().properties(_terms(fractions)).line_state(p, T)
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


@pytest.mark.parametrize("name", ["rich_gas", "carbon_dioxide_rich"])
def test_gerg_records_have_the_same_bits_whatever_else_is_computed(name, mixtures, random):
    """Batches of 1, 7 and 1,000, other states before and beside: identical bits."""
    terms = _terms(_gas(name, mixtures))
    p, T = random.uniform(2e4, 20e6, 1000), random.uniform(270.0, 330.0, 1000)
    whole = GasLibrary().properties(terms).line_state(p, T)
    other, lonely = GasLibrary().properties(terms), GasLibrary().properties(terms)
    order = random.permutation(1000)[:210]
    sevens = [other.line_state(p[order[n : n + 7]], T[order[n : n + 7]]) for n in range(0, 210, 7)]
    alone = [lonely.line_state(p[n : n + 1], T[n : n + 1]) for n in range(30)]
    for row in (
        "density",
        "compression_factor",
        "isentropic_exponent",
        "joule_thomson_coefficient",
        "outside_range",
        "no_gas",
    ):
        values = getattr(whole, row)
        assert (
            np.concatenate([getattr(s, row) for s in sevens]).tobytes() == values[order].tobytes()
        )
        assert np.concatenate([getattr(s, row) for s in alone]).tobytes() == values[:30].tobytes()


def test_each_model_has_its_own_tiles_and_each_use_its_own_model(mixtures):
    """In one library DETAIL and GERG-2008 of one composition do not mix; line and base differ."""
    library = GasLibrary()
    rich = mixtures["rich_gas"]
    p, T = np.array([9e6]), np.array([283.15])
    base = BaseConditions(101325.0, 288.15)
    found = {}
    for line in (StateModel.AGA8_DETAIL, StateModel.GERG_2008):
        for other in (StateModel.AGA8_DETAIL, StateModel.GERG_2008):
            gas = library.properties(_terms(rich, line, other))
            found[line, other] = (gas.line_state(p, T).density[0], gas.base_density(base))
    detail, gerg = StateModel.AGA8_DETAIL, StateModel.GERG_2008
    assert found[gerg, detail][0] == found[gerg, gerg][0]
    assert found[gerg, detail][1] == found[detail, detail][1]
    assert found[detail, gerg][1] == found[gerg, gerg][1]
    assert abs(found[gerg, gerg][0] / found[detail, detail][0] - 1.0) > 3e-4
    exact = GergGas(rich).states(p, T).density[0]
    assert found[gerg, gerg][0] == pytest.approx(exact, rel=5e-7)
