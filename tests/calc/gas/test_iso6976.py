"""ISO 6976: laws of mixing, consistency of its bases, limits, uncertainty by Monte Carlo."""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.calc.gas.iso6976 import (
    GasQuality,
    gas_quality,
    outside_limits,
)
from meterfix.calc.gas.iso6976_tables import (
    ELEMENTS,
    ComponentTable,
    ReferenceConditions,
    component_table,
    known_components,
    table_uncertainty,
)
from meterfix.calc.gas.iso6976_uncertainty import (
    fraction_sensitivities,
    gas_quality_uncertainty,
)
from meterfix.errors import GasError

AT_15 = ReferenceConditions(288.15, 288.15, 101325.0)
NAMES = tuple(field.name for field in fields(GasQuality))
COMPONENTS = ("methane", "ethane", "propane", "nitrogen", "carbon_dioxide", "hydrogen")
FRACTIONS = np.array([[0.80], [0.05], [0.02], [0.02], [0.01], [0.10]])

amounts = st.lists(st.floats(0.001, 1.0), min_size=6, max_size=6)


def conditions(combustion: float, metering: float, pressure_kPa: float) -> ReferenceConditions:
    return ReferenceConditions(273.15 + combustion, 273.15 + metering, 1e3 * pressure_kPa)


def table_of(*components: str, at: ReferenceConditions = AT_15) -> ComponentTable:
    return component_table(components, at)


def quality(components: tuple[str, ...], x: np.ndarray, at: ReferenceConditions) -> GasQuality:
    return gas_quality(x, component_table(components, at), oxidation_factor=1.0)


@given(amounts, amounts, st.floats(0.0, 1.0))
def test_molar_figures_mix_in_proportion_to_amount(
    first: list[float], second: list[float], share: float
) -> None:
    """Molar mass and molar calorific values of a mixture of two gases lie on their line."""
    a, b = (np.array([x]).T / sum(x) for x in (first, second))
    one, two, both = (quality(COMPONENTS, x, AT_15) for x in (a, b, share * a + (1.0 - share) * b))
    for name in ("molar_mass", "gross_molar_calorific_value", "net_molar_calorific_value"):
        line = share * getattr(one, name) + (1.0 - share) * getattr(two, name)
        assert getattr(both, name) == pytest.approx(line, rel=1e-13)


@given(
    amounts,
    st.sampled_from([0.0, 15.0, 15.55, 20.0, 25.0]),
    st.sampled_from([0.0, 15.0, 15.55, 20.0]),
    st.floats(90.0, 110.0),
)
def test_bases_agree(x: list[float], burning: float, metering: float, pressure: float) -> None:
    """Mass, volume and Wobbe figures are one another's, through density and molar mass.

    At every combustion and metering temperature; ideal ones are the real ones with Z = 1, and
    the net value is below the gross one by the water's heat of vaporisation.
    """
    table = table_of(*COMPONENTS, at=conditions(burning, metering, pressure))
    fractions = np.array([x]).T / sum(x)
    q = gas_quality(fractions, table, oxidation_factor=0.99)
    for kind in ("gross", "net"):
        molar = getattr(q, f"{kind}_molar_calorific_value")
        mass = getattr(q, f"{kind}_mass_calorific_value")
        volume = getattr(q, f"{kind}_volume_calorific_value")
        ideal = getattr(q, f"ideal_{kind}_volume_calorific_value")
        assert mass * q.molar_mass == pytest.approx(molar, rel=1e-13)
        assert mass * q.density == pytest.approx(volume, rel=1e-13)
        assert volume * q.compression_factor == pytest.approx(ideal, rel=1e-13)
        wobbe = getattr(q, f"{kind}_wobbe_index")
        assert wobbe * np.sqrt(q.relative_density) == pytest.approx(volume, rel=1e-13)
        factor = getattr(q, f"{kind}_carbon_dioxide_factor")
        carbon = sum(n * y for n, y in zip(table.atoms[:, 0], fractions[:, 0], strict=True))
        assert factor * molar == pytest.approx(0.99 * 0.0440095 * carbon, rel=1e-13)
    water = sum(n * y / 2.0 for n, y in zip(table.atoms[:, 1], fractions[:, 0], strict=True))
    heat = q.gross_molar_calorific_value - q.net_molar_calorific_value
    assert heat == pytest.approx(table.vaporisation[0] * water, rel=1e-9)
    assert q.density == pytest.approx(q.ideal_density / q.compression_factor, rel=1e-14)


def test_no_water_no_difference_between_gross_and_net() -> None:
    """Carbon monoxide has one calorific value; water vapour's net value is nothing."""
    q = quality(("carbon_monoxide", "water"), np.eye(2), AT_15)
    assert q.gross_molar_calorific_value[0] == q.net_molar_calorific_value[0]
    assert q.net_molar_calorific_value[1] == 0.0


def test_compression_factors_are_those_of_reference_equations() -> None:
    """Z of eight pure gases is that of the reference equation within its own uncertainty.

    Source: reference equations of state by CoolProp; allowed: twice the standard's uncertainty,
    and 2e-5 for the rounding of s. At 0, 15 and 20 degC.
    """
    from CoolProp.CoolProp import PropsSI

    names = {
        "methane": "Methane",
        "ethane": "Ethane",
        "propane": "Propane",
        "nitrogen": "Nitrogen",
        "carbon_dioxide": "CarbonDioxide",
        "oxygen": "Oxygen",
        "hydrogen": "Hydrogen",
        "argon": "Argon",
    }
    for celsius in (0.0, 15.0, 20.0):
        at = conditions(celsius, celsius, 101.325)
        table = component_table(tuple(names), at)
        spread = table_uncertainty(tuple(names), at)
        found = gas_quality(np.eye(8), table, oxidation_factor=1.0).compression_factor
        expected = [
            PropsSI("Z", "T", 273.15 + celsius, "P", 101325.0, fluid) for fluid in names.values()
        ]
        s, u = table.summation_factor[:, 0], spread.summation_factor[:, 0]
        allowed = 2.0 * 2.0 * np.abs(s) * u + u * u + 2e-5
        assert (np.abs(found - expected) <= allowed).all()


def test_air_of_its_components_is_as_dense_as_the_standards_air() -> None:
    """Dry air made of its components has a relative density of 1, and does not burn.

    Ideal within 1e-5 (the traces left out); real within 6e-5, twice the uncertainty of its Z.

    Source: composition of dry air of CIPM-2007 (Picard et al., Metrologia 45 (2008) 149, table
    1), whose molar mass the standard takes; from memory, krypton and traces left out.
    """
    q = quality(
        ("nitrogen", "oxygen", "argon", "carbon_dioxide", "neon", "helium"),
        np.array([[0.780848], [0.209390], [0.009332], [0.000400], [18.2e-6], [5.2e-6]]),
        AT_15,
    )
    assert q.ideal_relative_density == pytest.approx(1.0, abs=1e-5)
    assert q.relative_density == pytest.approx(1.0, abs=6e-5)
    assert q.gross_volume_calorific_value == 0.0
    assert np.isnan(q.net_carbon_dioxide_factor).all()


def test_carbon_dioxide_factor_of_natural_gas() -> None:
    """A usual natural gas gives 54.3 to 58.3 kg of carbon dioxide per GJ net; hydrogen none.

    Source: IPCC 2006 Guidelines, volume 2, table 1.4 (range of the default factor), from memory.
    """
    x = np.array([[0.93, 0.0], [0.03, 0.0], [0.01, 0.0], [0.02, 0.0], [0.01, 0.0], [0.0, 1.0]])
    q = quality(COMPONENTS, x, conditions(25.0, 0.0, 101.325))
    assert 54.3 < 1e9 * q.net_carbon_dioxide_factor[0] < 58.3
    assert q.gross_carbon_dioxide_factor[0] < q.net_carbon_dioxide_factor[0]
    assert q.net_carbon_dioxide_factor[1] == 0.0
    half = gas_quality(x, table_of(*COMPONENTS), oxidation_factor=0.5)
    full = gas_quality(x, table_of(*COMPONENTS), oxidation_factor=1.0)
    assert (half.net_carbon_dioxide_factor == 0.5 * full.net_carbon_dioxide_factor).all()


def test_batching_changes_no_bit() -> None:
    """A thousand compositions at once have the bits of each alone, uncertainties included."""
    random = np.random.default_rng(6976)
    x = random.dirichlet(np.ones(6), 1000).T
    u = 1e-3 * random.random((6, 1000))
    table, spread = table_of(*COMPONENTS), table_uncertainty(COMPONENTS, AT_15)
    together = (
        gas_quality(x, table, oxidation_factor=1.0),
        gas_quality_uncertainty(x, u, table, spread, oxidation_factor=1.0),
    )
    for at in range(0, 1000, 7):
        one = x[:, at : at + 1]
        alone = (
            gas_quality(one, table, oxidation_factor=1.0),
            gas_quality_uncertainty(one, u[:, at : at + 1], table, spread, oxidation_factor=1.0),
        )
        for whole, part in zip(together, alone, strict=True):
            for name in NAMES:
                assert getattr(whole, name)[at] == getattr(part, name)[0]


@given(amounts, st.floats(90.0, 110.0))
def test_sensitivities_are_the_slopes(x: list[float], pressure: float) -> None:
    """Each derivative with respect to a mole fraction is the central difference quotient."""
    table = table_of(*COMPONENTS, at=conditions(25.0, 0.0, pressure))
    fractions = np.array([x]).T / sum(x)
    slopes = fraction_sensitivities(fractions, table, oxidation_factor=0.98)
    assert set(slopes) == set(NAMES)
    step = 1e-5
    for at in range(6):
        up, down = fractions.copy(), fractions.copy()
        up[at] += step
        down[at] -= step
        above = gas_quality(up, table, oxidation_factor=0.98)
        below = gas_quality(down, table, oxidation_factor=0.98)
        for name in NAMES:
            size = abs(getattr(above, name)[0])
            slope = (getattr(above, name)[0] - getattr(below, name)[0]) / (2.0 * step)
            assert slopes[name][at, 0] == pytest.approx(slope, rel=1e-6, abs=1e-7 * size)


def normalised_covariance(x: np.ndarray, u: np.ndarray) -> np.ndarray:
    """Covariance of fractions that were measured one by one, then divided by their sum."""
    jacobian = np.eye(len(x)) - np.outer(x, np.ones(len(x)))
    return jacobian @ np.diag(u * u) @ jacobian.T


def test_uncertainty_by_monte_carlo_with_correlated_fractions() -> None:
    """Drawing fractions (correlated), tables, atoms and constants gives each stated uncertainty.

    JCGM 101: 200,000 draws, whose standard deviation is known to 0.16 %; 1 % allowed. Every
    table figure is drawn: calorific values, summation factors, atomic masses shared by all
    components, gas constant, air, heat of vaporisation.
    """
    random, count = np.random.default_rng(20160800), 200_000
    u_raw = np.array([1.5e-3, 4e-4, 2e-4, 3e-4, 2e-4, 1e-3])
    covariance = normalised_covariance(FRACTIONS[:, 0], u_raw)
    u = np.sqrt(np.diagonal(covariance))
    correlation = covariance / np.outer(u, u)
    correlation = 0.5 * (correlation + correlation.T)
    np.fill_diagonal(correlation, 1.0)

    table, spread = table_of(*COMPONENTS), table_uncertainty(COMPONENTS, AT_15)
    stated = gas_quality_uncertainty(
        FRACTIONS,
        u[:, np.newaxis],
        table,
        spread,
        correlation=correlation,
        oxidation_factor=1.0,
    )
    normal = random.standard_normal
    atomic = np.array(spread.atomic_mass)[:, np.newaxis] * normal((8, count))
    drawn_table = replace(
        table,
        molar_mass=table.molar_mass + table.atoms @ atomic,
        summation_factor=table.summation_factor + spread.summation_factor * normal((6, count)),
        heat=table.heat + spread.heat * normal((6, count)),
        gas_constant=table.gas_constant + spread.gas_constant * normal(count),
        air_molar_mass=table.air_molar_mass + spread.air_molar_mass * normal(count),
        air_compression_factor=table.air_compression_factor
        + spread.air_compression_factor * normal(count),
        vaporisation=table.vaporisation + spread.vaporisation * normal(count),
        carbon_dioxide_molar_mass=table.carbon_dioxide_molar_mass
        + atomic[ELEMENTS.index("C")]
        + 2.0 * atomic[ELEMENTS.index("O")],
    )
    raw = FRACTIONS + u_raw[:, np.newaxis] * normal((6, count))
    drawn = gas_quality(raw / raw.sum(axis=0), drawn_table, oxidation_factor=1.0)
    for name in NAMES:
        assert np.std(getattr(drawn, name)) == pytest.approx(getattr(stated, name)[0], rel=0.01)


def test_each_table_figure_counts() -> None:
    """With exact fractions, each tabulated uncertainty alone gives what its slope says.

    Slopes by central differences of the table's own figures.
    """
    table, spread = table_of(*COMPONENTS), table_uncertainty(COMPONENTS, AT_15)
    nothing = replace(
        spread,
        summation_factor=0.0 * spread.summation_factor,
        heat=0.0 * spread.heat,
        atomic_mass=(0.0,) * 8,
        gas_constant=0.0,
        air_molar_mass=0.0,
        air_compression_factor=0.0,
        vaporisation=0.0,
    )
    for name in ("gas_constant", "air_molar_mass", "air_compression_factor", "vaporisation"):
        u = getattr(spread, name)
        stated = gas_quality_uncertainty(
            FRACTIONS,
            np.zeros((6, 1)),
            table,
            replace(nothing, **{name: u}),
            oxidation_factor=1.0,
        )
        up, down = (
            gas_quality(
                FRACTIONS,
                replace(table, **{name: getattr(table, name) + sign * u}),
                oxidation_factor=1.0,
            )
            for sign in (1.0, -1.0)
        )
        moved = 0
        for field in NAMES:
            half = abs(getattr(up, field)[0] - getattr(down, field)[0]) / 2.0
            size = abs(getattr(up, field)[0])
            assert getattr(stated, field)[0] == pytest.approx(half, rel=1e-6, abs=1e-12 * size)
            moved += half > 1e-12 * size
        assert moved > 0


def test_a_gas_that_does_not_burn_has_an_uncertain_nothing() -> None:
    """Traces of methane that may be in nitrogen give its calorific value of 0 an uncertainty."""
    components = ("nitrogen", "methane")
    table, spread = table_of(*components), table_uncertainty(components, AT_15)
    x, u = np.array([[1.0], [0.0]]), np.array([[0.0], [1e-4]])
    found = gas_quality_uncertainty(x, u, table, spread, oxidation_factor=1.0)
    assert found.gross_molar_calorific_value == pytest.approx(89.151, rel=1e-9)
    assert found.gross_wobbe_index[0] > 0.0


def test_limits_are_flagged() -> None:
    """Z, pressure, composition and sum outside the standard's limits each set their own flag."""
    components = ("methane", "nitrogen", "methanol")
    x = np.array(
        [
            [0.9, 0.60, 0.2, 0.90, 0.9, np.nan],
            [0.1, 0.39, 0.0, 0.10, 0.2, 0.1],
            [0.0, 0.01, 0.8, 0.0, -0.1, 0.0],
        ]
    )
    limits = outside_limits(x, table_of(*components))
    # a real methanol vapour is no gas at 15 degC; its Z of 1 - (0.8 x 0.4464 + ...)^2 is 0.87
    assert limits.compression_factor.tolist() == [False, False, True, False, False, True]
    assert limits.composition.tolist() == [False, True, True, False, False, True]
    assert limits.fractions.tolist() == [False, False, False, False, True, True]
    assert not limits.pressure.any()
    for kPa, outside in ((89.9, True), (90.0, False), (110.0, False), (110.1, True)):
        table = table_of(*components, at=conditions(15.0, 15.0, kPa))
        assert (outside_limits(x, table).pressure == outside).all()


def test_sixty_fahrenheit_takes_the_table_of_15_55() -> None:
    """At 60 degF the molar figures are those of 15.55 degC and the volume has its own size."""
    fahrenheit = (60.0 - 32.0) / 1.8
    a = quality(COMPONENTS, FRACTIONS, conditions(15.55, 15.55, 101.325))
    b = quality(COMPONENTS, FRACTIONS, conditions(fahrenheit, fahrenheit, 101.325))
    assert (a.gross_molar_calorific_value == b.gross_molar_calorific_value).all()
    assert a.density / b.density == pytest.approx((273.15 + fahrenheit) / 288.70, rel=1e-12)


@pytest.mark.parametrize(
    ("components", "at", "message"),
    [
        (("methane", "petrol"), AT_15, "'petrol' is no component"),
        (("methane", "methane"), AT_15, "named twice"),
        (("methane",), conditions(10.0, 15.0, 101.325), "combustion temperature is 10 degC"),
        (("methane",), conditions(25.0, 25.0, 101.325), "metering temperature is 25 degC"),
        (("methane",), conditions(25.0, 15.0, 0.0), "metering pressure is 0.0 Pa"),
    ],
)
def test_what_the_standard_does_not_know_is_named(
    components: tuple[str, ...], at: ReferenceConditions, message: str
) -> None:
    """An unknown or doubled component, or a temperature without a table, raises with its value."""
    with pytest.raises(GasError, match=message):
        component_table(components, at)
    with pytest.raises(GasError):
        table_uncertainty(components, at)


def test_what_cannot_be_is_refused() -> None:
    """Wrong shapes, impossible correlations and oxidation factors raise with their value."""
    table, spread = table_of(*COMPONENTS), table_uncertainty(COMPONENTS, AT_15)
    with pytest.raises(ValueError, match=r"shape \(5, 1\)"):
        gas_quality(FRACTIONS[:5], table, oxidation_factor=1.0)
    with pytest.raises(ValueError, match=r"oxidation factor is 1\.2"):
        gas_quality(FRACTIONS, table, oxidation_factor=1.2)
    lopsided, loose = np.eye(6), np.eye(6)
    lopsided[0, 1] = 0.5
    loose[2, 2] = 0.9
    for matrix in (np.eye(5), 2.0 * np.eye(6), np.full((6, 6), np.nan), lopsided, loose):
        with pytest.raises(ValueError, match="correlation"):
            gas_quality_uncertainty(
                FRACTIONS,
                np.zeros((6, 1)),
                table,
                spread,
                correlation=matrix,
                oxidation_factor=1.0,
            )


def test_molar_masses_are_those_of_the_atoms() -> None:
    """Each of the 60 molar masses is the sum of its atoms' masses, to the table's digits.

    Source: atomic masses of ISO 6976:2016, annex A.
    """
    masses = [12.0107, 1.00794, 14.0067, 15.9994, 32.065, 4.002602, 20.1797, 39.948]
    names = known_components()
    table = component_table(names, AT_15)
    assert len(names) == 60
    made = [sum(n * m for n, m in zip(row, masses, strict=True)) for row in table.atoms]
    assert 1e3 * table.molar_mass[:, 0] == pytest.approx(made, abs=5e-6)
