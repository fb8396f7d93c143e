"""GERG-2008 against its published check values; sources stand in the CSV files."""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest

from meterfix.calc.gas.gerg_gas import GergGas
from meterfix.calc.gas.gerg_tables import GAS_CONSTANT

TABLE = "gerg2008_check_values.csv"
TABLE_DIGITS = {"Z": 5e-7, "W": 5e-4}
"""Half the last printed digit."""
LIQUID_OR_BELOW_TWO_ROOTS = {
    # dense states that no isotherm reaches from the gas without falling: the dense root is asked
    "ISO20765_G1_T180_p10",
    "ISO20765_G2_T180_p13",
    "ISO20765_G2_T220_p11",
    "ISO20765_G6_T180_p10",
    "ISO20765_G6_T250_p10",
    "ISO20765_G6_T300_p25",
    "ISO20765_G6_T400_p5",
}


@cache
def _gas(composition: tuple[tuple[str, float], ...]) -> GergGas:
    return GergGas(composition)


def _array(text: str, scale: float = 1.0) -> np.ndarray:
    return np.array([float(text) * scale])


def test_gerg_21_components_case(published, compositions):
    """All 21 components at 400 K and 50 MPa: every published property to 1e-9 relative."""
    gas = GergGas(compositions["NIST21"])
    states = gas.states(np.array([50e6]), np.array([400.0]))
    density = states.density / gas.molar_mass / 1e3
    Z, slope = gas.mixture.isotherms(np.array([400.0])).pressure_terms(density)
    assert Z[0] == pytest.approx(states.compression_factor[0], rel=1e-12)
    # (dp/dT)_D = R D (Z + T dZ/dT), by central differences at constant density
    step = 0.01
    warm, cold = (
        gas.mixture.isotherms(np.array([400.0 + sign * step])).pressure_terms(density)[0][0]
        * (400.0 + sign * step)
        for sign in (1.0, -1.0)
    )
    dp_dT = GAS_CONSTANT * density[0] * (warm - cold) / (2.0 * step)
    computed = {
        "molar_mass": 1e3 * gas.molar_mass,
        "density": density[0],
        "Z": states.compression_factor[0],
        "dP_dD": slope[0] * GAS_CONSTANT * 400.0,
        "Cv": states.isochoric_heat_capacity[0] * gas.molar_mass,
        "Cp": states.isobaric_heat_capacity[0] * gas.molar_mass,
        "W": states.speed_of_sound[0],
        "JT": states.joule_thomson_coefficient[0] * 1e3,
        "kappa": states.isentropic_exponent[0],
    }
    rows = {
        row["property"]: float(row["expected"])
        for row in published(TABLE)
        if row["case_id"] == "NIST21_GERG2008"
    }
    assert set(rows) - set(computed) == {"dP_dT"}
    assert dp_dT == pytest.approx(rows["dP_dT"], rel=1e-8)
    for name, value in computed.items():
        assert value == pytest.approx(rows[name], rel=1e-9), name


def test_gerg_compression_factor_and_speed_of_sound_tables(published, compositions):
    """Z and w of the SI tables of three reference gases: to half the last printed digit.

    That is 5e-7 in Z and 5e-4 m/s in w.
    """
    rows = [row for row in published(TABLE) if row["case_id"].startswith("AGA8_SI")]
    assert len(rows) == 72
    for row in rows:
        gas = _gas(compositions[row["comp_id"]])
        states = gas.states(_array(row["p_kPa"], 1e3), _array(row["T_K"]))
        computed = states.compression_factor if row["property"] == "Z" else states.speed_of_sound
        assert computed[0] == pytest.approx(
            float(row["expected"]), abs=TABLE_DIGITS[row["property"]]
        )
        assert float(row["abs_tol"]) == TABLE_DIGITS[row["property"]]


def test_gerg_temperature_and_density_points(published, compositions):
    """P, Cv, Cp and w of seven field gases at printed temperature and density.

    Not to half the printed digit, which most rows miss, unexplained: by up to 7e-6 of P, 0.0002
    J/(mol K) and 0.0008 m/s. (NIST's code gives what meterfix gives, see tests/calc/gas;
    these rows are of the spreadsheet beside it.) Held to the rows' own tolerance: 1e-4 of P;
    0.0005 and 0.005 J/(mol K) for Cv and Cp; 0.005 m/s.
    """
    rows = [row for row in published(TABLE) if row["case_id"].startswith("NIST_NG")]
    assert len(rows) == 84
    for row in rows:
        gas = _gas(compositions[row["comp_id"]])
        T, D = _array(row["T_K"]), _array(row["density_mol_L"])
        found = gas.mixture.properties(T, D)
        computed = {
            "P": found.compression_factor * D * GAS_CONSTANT * T,
            "Cv": found.isochoric_heat_capacity,
            "Cp": found.isobaric_heat_capacity,
            "W": np.sqrt(found.squared_speed_of_sound),
        }[row["property"]]
        assert computed[0] == pytest.approx(float(row["expected"]), abs=float(row["abs_tol"])), row


def test_iso20765_2_properties(published, compositions):
    """ISO 20765-2: density, Z, cv, cp, w and JT of four gases to half the last printed digit.

    Gas, dense fluid and liquid; the dense root is asked for where there is no gas.
    """
    rows = published("iso20765_2_properties.csv")
    assert len(rows) == 24
    dense_needed = set()
    for row in rows:
        gas = _gas(compositions[row["comp_id"]])
        p, T = _array(row["p_MPa"], 1e6), _array(row["T_K"])
        states = gas.states(p, T)
        if states.no_gas[0]:
            dense_needed.add(row["case_id"])
            states = gas.states(p, T, dense_root=True)
        computed = {
            "density_kg_m3": states.density[0],
            "Z": states.compression_factor[0],
            "cv_kJ_kgK": states.isochoric_heat_capacity[0] * 1e-3,
            "cp_kJ_kgK": states.isobaric_heat_capacity[0] * 1e-3,
            "w_m_s": states.speed_of_sound[0],
            "JT_K_MPa": states.joule_thomson_coefficient[0] * 1e6,
        }
        for name, value in computed.items():
            printed = float(row[name])
            digit = 10.0 ** (math.floor(math.log10(abs(printed))) - int(row["sig_digits"]) + 1)
            assert value == pytest.approx(printed, abs=0.5 * digit), (row["case_id"], name)
    assert dense_needed == LIQUID_OR_BELOW_TWO_ROOTS
