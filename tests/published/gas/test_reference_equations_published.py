"""Pure gases, dry air and base conditions against published numbers; sources in the CSV files."""

from __future__ import annotations

from decimal import Decimal

import numpy as np
import pytest

from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.gas.pure import PureGas
from meterfix.model.gas import (
    BaseConditions,
    Composition,
    DensityModel,
    GasTerms,
    PropertyChoice,
    StateModel,
)

NAMES = {
    "Nitrogen": "nitrogen",
    "CarbonDioxide": "carbon_dioxide",
    "Argon": "argon",
    "Methane": "methane",
    "Air": "air",
}
UNEXPLAINED_SPEEDS = [("Air", "2000", "1e+07", "878.6")]
"""Not met to half the printed digit: printed 878.6 m/s, computed 878.534 m/s."""
PSI = 6894.757293168
"""Pa."""
BASES = {
    "0C 101.325kPa": BaseConditions(101325.0, 273.15),
    "15C 101.325kPa": BaseConditions(101325.0, 288.15),
    "20C 101.325kPa": BaseConditions(101325.0, 293.15),
    "60F 101.325kPa": BaseConditions(101325.0, (60.0 + 459.67) / 1.8),
    "60F 14.73psia": BaseConditions(14.73 * PSI, (60.0 + 459.67) / 1.8),
    "60F 14.696psia": BaseConditions(14.696 * PSI, (60.0 + 459.67) / 1.8),
}
D2 = (
    ("methane", 0.933212),
    ("ethane", 0.025656),
    ("propane", 0.015368),
    ("nitrogen", 0.010350),
    ("carbon_dioxide", 0.015414),
)


def _half_digit(printed: str) -> float:
    return 0.5 * 10.0 ** int(Decimal(printed).as_tuple().exponent)


def test_densities_of_the_papers(published):
    """Density and speed of sound of N2, CO2, Ar, CH4 and air to half the last printed digit.

    One speed of sound is excepted, see `UNEXPLAINED_SPEEDS`; it is no part of what passes here.
    The isentropic exponents are derived from the printed densities and speeds: they carry twice
    the relative rounding of the speed, that of the density, and that of their own five digits.
    """
    rows = published("pure_gas_densities.csv")
    assert len(rows) == 20
    missed = []
    for row in rows:
        gas = PureGas(NAMES[row["gas"]])
        states = gas.states(np.array([float(row["p_Pa"])]), np.array([float(row["T_K"])]))
        amount = states.density / gas.molar_mass / 1e3
        by_mass = bool(row["density_kg_m3"])
        printed = row["density_kg_m3"] if by_mass else row["density_mol_L"]
        computed = states.density[0] if by_mass else amount[0]
        assert computed == pytest.approx(float(printed), rel=0.0, abs=_half_digit(printed)), row
        speed = row["speed_of_sound_m_s"]
        allowed = _half_digit(speed)
        if abs(states.speed_of_sound[0] - float(speed)) > allowed:
            missed.append((row["gas"], row["T_K"], row["p_Pa"], speed))
            continue
        kappa = float(row["isentropic_exponent_derived"])
        rounding = 2.0 * allowed / float(speed) + _half_digit(printed) / float(printed) + 5e-5
        assert states.isentropic_exponent[0] == pytest.approx(kappa, rel=rounding), row
    assert missed == UNEXPLAINED_SPEEDS


def test_air_is_plausible(published):
    """Z of air, 200 to 400 K and 1 to 500 bar, is within 0.5 % of a table written from memory.

    No published check, one of plausibility: the table was not traced to its print, and its 0.5 %
    is no figure of its own. It was set to cover the table's difference from modern equations as
    CoolProp computes them, and CoolProp is what computes the values under test.
    """
    gas = PureGas("air")
    rows = published("air_compression_factors.csv")
    assert len(rows) == 51
    p = np.array([1e5 * float(row["p_bar"]) for row in rows])
    T = np.array([float(row["T_K"]) for row in rows])
    computed = gas.states(p, T).compression_factor
    for row, Z in zip(rows, computed, strict=True):
        assert pytest.approx(float(row["Z_expected"]), rel=float(row["rel_tol"])) == Z


def _base_density(fractions: tuple[tuple[str, float], ...], model: StateModel):
    terms = GasTerms(
        composition=Composition("mole", fractions, 1.0),
        line_model=DensityModel(model),
        base_model=DensityModel(model),
        dynamic_viscosity=PropertyChoice(1.1e-5),
        isentropic_exponent=PropertyChoice(1.3),
        calorific_value=None,
    )
    return GasLibrary().properties(terms).base_density


def test_ideal_volumes_between_base_conditions(published):
    """A volume changes between base conditions by the ratio of the gas's densities there.

    Ideal-gas rows to their 1e-6, for 0, 15 and 20 degC, 60 degF, 14.73 and 14.696 psia.
    """
    density = _base_density(D2, StateModel.IDEAL)
    rows = [row for row in published("base_conditions.csv") if row["quantity"] == "volume_ideal"]
    assert len(rows) == 16
    for row in rows:
        factor = density(BASES[row["from_base"]]) / density(BASES[row["to_base"]])
        assert factor == pytest.approx(float(row["factor"]), rel=float(row["rel_tol"])), row


@pytest.mark.parametrize(
    ("quantity", "fractions"),
    [("volume_real_methane", (("methane", 1.0),)), ("volume_real_ISO6976_D2", D2)],
)
def test_real_volumes_between_base_conditions(published, quantity, fractions):
    """Real-gas volume factors by AGA8 DETAIL agree with those by ISO 6976:2016 to 1e-5.

    The factors are computed from that standard's summation factors, not printed. The two compute
    Z each in its own way; 1e-5 is far inside the uncertainty of the summation factors (0.0005
    in s of methane near 0.045, which is 4.5e-5 in Z at each base).
    """
    density = _base_density(fractions, StateModel.AGA8_DETAIL)
    rows = [row for row in published("base_conditions.csv") if row["quantity"] == quantity]
    assert len(rows) in {4, 6}
    for row in rows:
        factor = density(BASES[row["from_base"]]) / density(BASES[row["to_base"]])
        assert factor == pytest.approx(float(row["factor"]), rel=1e-5), row
        # and the real part of the correction is really there: it is 4e-4 here
        a, b = BASES[row["from_base"]], BASES[row["to_base"]]
        ideal = a.base_pressure * b.base_temperature / (b.base_pressure * a.base_temperature)
        assert abs(factor / ideal - 1.0) > 5e-5


def test_14_65_psia_is_a_base_like_any():
    """From 14.73 to 14.65 psia at 60 degF a volume of real gas changes as NIST's code says.

    The factor is the ratio of base densities by AGA8 DETAIL; pyaga8, a port of that code, gives
    it to 1e-9. No printed value: none of the published rows has this base. The factor is not the
    ratio of the pressures: Z differs by 1.2e-5.
    """
    pyaga8 = pytest.importorskip("pyaga8")
    composition = pyaga8.Composition()
    for name, x in D2:
        setattr(composition, name, x)
    oracle = pyaga8.Detail()
    oracle.set_composition(composition)
    oracle.temperature = BASES["60F 14.73psia"].base_temperature
    expected = []
    for psia in (14.73, 14.65):
        oracle.pressure = psia * PSI / 1e3
        oracle.calc_density()
        expected.append(oracle.d)
    density = _base_density(D2, StateModel.AGA8_DETAIL)
    base = BASES["60F 14.73psia"]
    lower = BaseConditions(14.65 * PSI, base.base_temperature)
    factor = density(base) / density(lower)
    assert factor == pytest.approx(expected[0] / expected[1], rel=1e-9)
    assert factor / (14.73 / 14.65) - 1.0 > 1e-6
