"""The simulator's gases against outside sources: AGA Report No. 8, pyaga8, CoolProp."""

import csv
from pathlib import Path

import numpy as np
import pytest

from meterfix.demo.air import MOLAR_MASS, air_density
from meterfix.demo.detail import DetailGas
from meterfix.demo.works import AFTER, BEFORE
from meterfix.errors import GasError

ROOT = Path(__file__).parents[2]

CHECK_CASE = {
    "methane": 0.77824, "nitrogen": 0.02, "carbon_dioxide": 0.06, "ethane": 0.08,
    "propane": 0.03, "isobutane": 0.0015, "n_butane": 0.003, "isopentane": 0.0005,
    "n_pentane": 0.00165, "n_hexane": 0.00215, "n_heptane": 0.00088, "n_octane": 0.00024,
    "n_nonane": 0.00015, "n_decane": 0.00009, "hydrogen": 0.004, "oxygen": 0.005,
    "carbon_monoxide": 0.002, "water": 0.0001, "hydrogen_sulfide": 0.0025, "helium": 0.007,
    "argon": 0.001,
}  # fmt: skip
"""AGA Report No. 8 Part 1:2017, 21-component check case at 400 K and 50 MPa, as in the
public-domain reference code of NIST (usnistgov/AGA8, C/Detail_test_01.cpp)."""


def _oracle(fractions):
    pyaga8 = pytest.importorskip("pyaga8", reason="no wheel for this platform")
    composition = pyaga8.Composition()
    long = ("n_hexane", "n_heptane", "n_octane", "n_nonane", "n_decane")
    for name, x in fractions.items():
        setattr(composition, name.removeprefix("n_") if name in long else name, x)
    detail = pyaga8.Detail()
    detail.set_composition(composition)
    return detail


def test_the_published_check_case_is_met():
    """Density and Joule-Thomson coefficient of the 21-component case, to 1e-9."""
    gas = DetailGas(CHECK_CASE)
    p, temperature = np.array([50e6]), np.array([400.0])
    assert gas.molar_mass * 1000.0 == pytest.approx(20.54333051, abs=5e-9)
    assert gas.molar_density(p, temperature)[0] == pytest.approx(12.80792403648801, rel=1e-9)
    jt = gas.joule_thomson(p, temperature)[0] * 1000.0
    assert jt == pytest.approx(7.432969304794577e-05, rel=1e-9)


@pytest.mark.parametrize("fractions", [BEFORE, AFTER], ids=["before", "after"])
def test_the_works_gas_agrees_with_pyaga8(fractions):
    """Density to 1e-9 and Joule-Thomson coefficient to 1e-8 on 200 states of the works."""
    rng = np.random.default_rng(11)
    p = rng.uniform(0.1e6, 1.8e6, 200)
    temperature = rng.uniform(270.0, 305.0, 200)
    gas = DetailGas(fractions)
    density = gas.density(p, temperature)
    throttling = gas.joule_thomson(p, temperature)
    oracle = _oracle(fractions)
    for n in range(p.size):
        oracle.pressure, oracle.temperature = p[n] / 1000.0, temperature[n]
        oracle.calc_density()
        oracle.calc_properties()
        assert density[n] == pytest.approx(oracle.d * oracle.mm, rel=1e-9)
        assert throttling[n] * 1000.0 == pytest.approx(oracle.jt, rel=1e-8)


def test_a_composition_that_is_none_is_refused():
    """An unknown component, or fractions that do not sum to 1, are named."""
    with pytest.raises(GasError, match="marsh_gas"):
        DetailGas({"marsh_gas": 1.0})
    with pytest.raises(GasError, match=r"sum to 0\.900"):
        DetailGas({"methane": 0.9})


def test_air_agrees_with_the_reference_equation():
    """The packaged series gives CoolProp's density of air to 1e-8 over its window."""
    from CoolProp.CoolProp import PropsSI

    rng = np.random.default_rng(12)
    p = np.append(rng.uniform(80e3, 1.2e6, 400), 101_325.0)
    temperature = np.append(rng.uniform(262.0, 332.0, 400), 288.15)
    found = air_density(p, temperature)
    expected = PropsSI("D", "P", p, "T", temperature, "Air")
    np.testing.assert_allclose(found, expected, rtol=1e-8)
    assert PropsSI("M", "Air") == pytest.approx(MOLAR_MASS, rel=1e-12)


def test_air_outside_its_window_is_refused():
    """No number where the series means nothing."""
    with pytest.raises(GasError, match="Pa"):
        air_density(np.array([2e6]), np.array([300.0]))


@pytest.mark.parametrize("table", ["terms", "pure", "binary", "ideal"])
def test_both_copies_of_the_coefficients_agree(table):
    """The simulator's own copy of a DETAIL table holds the numbers that the calculation's has."""
    folders = (ROOT / "meterfix/demo/coefficients", ROOT / "meterfix/calc/gas/coefficients")
    names = (f"detail_{table}.csv", f"aga8_detail_{table}.csv")
    copies = []
    for folder, name in zip(folders, names, strict=True):
        lines = (folder / name).read_text(encoding="utf-8").splitlines()
        rows = csv.reader(line for line in lines if line and not line.startswith("#"))
        copies.append([[_number(cell) for cell in row] for row in rows])
    assert len(copies[0]) > 20
    assert copies[0] == copies[1]


def _number(cell):
    try:
        return float(cell)
    except ValueError:
        return cell
