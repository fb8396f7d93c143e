"""AGA8 DETAIL against its published check values; sources stand in the CSV files."""

from __future__ import annotations

import numpy as np
import pytest

from meterfix.calc.gas.detail import GAS_CONSTANT, pressure_terms, properties, temperature_sums
from meterfix.calc.gas.detail_gas import DetailGas

TABLE = "aga8_detail_check_values.csv"
TABLE_DIGITS = {"Z": 5e-7, "W": 5e-4}
"""Half the last printed digit."""
POINT_DIGITS = {"P": 0.05, "Cv": 5e-5, "Cp": 5e-5, "W": 5e-5}
"""Half the last printed digit. [kPa, J/(mol K), J/(mol K), m/s]"""
UNEXPLAINED_POINTS = {("NIST_NG181", T, "W") for T in ("198.375", "208.929", "213.908")}
"""Printed up to 0.00046 m/s beside the equation; held to the reference list's 0.005 m/s."""
BEYOND_HALF_A_DIGIT = {("ISO12213_G3", "120", "36.85")}
"""Printed 0.79698; the equation gives 0.7969747, as NIST's own code does; held to 1e-5."""
EXCEPTED = {("ISO12213_G2", "60", "36.85")}
"""Printed 0.90446, off the smooth curve through its neighbours; not compared."""


def _array(text: str, scale: float = 1.0) -> np.ndarray:
    return np.array([float(text) * scale])


def test_21_components_case(published, compositions):
    """All 21 components at 400 K and 50 MPa: every published property to 1e-9 relative."""
    gas = DetailGas(compositions["NIST21"])
    states = gas.states(np.array([50e6]), np.array([400.0]))
    density = states.density[0] / gas.molar_mass / 1e3
    sums = temperature_sums(gas.mixture, np.array([400.0]), orders=1)
    Z, slope = pressure_terms(gas.mixture, sums, np.array([density]))
    computed = {
        "molar_mass": 1e3 * gas.molar_mass,
        "density": density,
        "Z": states.compression_factor[0],
        "dP_dD": slope[0] * GAS_CONSTANT * 400.0,
        "Cv": states.isochoric_heat_capacity[0] * gas.molar_mass,
        "Cp": states.isobaric_heat_capacity[0] * gas.molar_mass,
        "W": states.speed_of_sound[0],
        "JT": states.joule_thomson_coefficient[0] * 1e3,
        "kappa": states.isentropic_exponent[0],
    }
    assert Z[0] == pytest.approx(computed["Z"], rel=1e-12)
    rows = {
        row["property"]: float(row["expected"])
        for row in published(TABLE)
        if row["case_id"] == "NIST21_DETAIL"
    }
    assert set(rows) - set(computed) == {"dP_dT"}  # not exposed; JT and Cp hold it
    for name, value in computed.items():
        assert value == pytest.approx(rows[name], rel=1e-9), name


def test_compression_factor_and_speed_of_sound_tables(published, compositions):
    """Z and w of the SI tables of four reference gases: to half the last printed digit.

    That is 5e-7 in Z and 5e-4 m/s in w.
    """
    rows = [row for row in published(TABLE) if row["case_id"].startswith("AGA8_SI")]
    assert len(rows) == 96
    for row in rows:
        gas = DetailGas(compositions[row["comp_id"]])
        states = gas.states(_array(row["p_kPa"], 1e3), _array(row["T_K"]))
        computed = states.compression_factor if row["property"] == "Z" else states.speed_of_sound
        assert computed[0] == pytest.approx(
            float(row["expected"]), abs=TABLE_DIGITS[row["property"]]
        )
        assert float(row["abs_tol"]) == TABLE_DIGITS[row["property"]]


def test_temperature_and_density_points(published, compositions):
    """P, Cv, Cp and w of seven field gases at printed temperature and density.

    To half the last printed digit, but for the three rows of `UNEXPLAINED_POINTS`.
    """
    rows = [row for row in published(TABLE) if row["case_id"].startswith("NIST_NG")]
    assert len(rows) == 84
    for row in rows:
        gas = DetailGas(compositions[row["comp_id"]])
        T, D = _array(row["T_K"]), _array(row["density_mol_L"])
        found = properties(gas.mixture, T, D)
        computed = {
            "P": found.compression_factor * D * GAS_CONSTANT * T,
            "Cv": found.isochoric_heat_capacity,
            "Cp": found.isobaric_heat_capacity,
            "W": np.sqrt(found.squared_speed_of_sound),
        }[row["property"]]
        assert computed[0] == pytest.approx(float(row["expected"]), abs=float(row["abs_tol"])), row
        named = (row["comp_id"], row["T_K"], row["property"]) in UNEXPLAINED_POINTS
        assert float(row["abs_tol"]) == (0.005 if named else POINT_DIGITS[row["property"]])


def test_iso12213_2_table(published, compositions):
    """ISO 12213-2 annex C: Z of test gases 1, 2, 3 and 6, 38 of 40 rows to half the last digit.

    Gas 3 at 120 bar and 36.85 degC (printed 0.79698) is not met to half a digit, only to one.
    Gas 2 at 60 bar and 36.85 degC is excepted: its printed 0.90446 is not met.
    """
    rows = published("iso12213_2_compression_factors.csv")
    assert len(rows) == 40
    held = {5e-6: 0, 1e-5: 0}
    for row in rows:
        gas = DetailGas(compositions[row["comp_id"]])
        states = gas.states(_array(row["p_bar"], 1e5), _array(row["t_C"]) + 273.15)
        name = (row["comp_id"], row["p_bar"], row["t_C"])
        printed, allowed = float(row["Z_expected"]), float(row["abs_tol"])
        difference = abs(states.compression_factor[0] - printed)
        if name in EXCEPTED:
            assert printed == 0.90446
            assert difference > allowed
            continue
        assert allowed == (1e-5 if name in BEYOND_HALF_A_DIGIT else 5e-6)
        assert difference <= allowed, row
        held[allowed] += 1
    assert held == {5e-6: 38, 1e-5: 1}
