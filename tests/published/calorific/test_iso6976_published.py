"""ISO 6976:2016 against every worked example of its annex D; each CSV opens with its source."""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest

from meterfix.calc.gas.iso6976 import GasQuality, gas_quality, outside_limits
from meterfix.calc.gas.iso6976_tables import (
    ReferenceConditions,
    component_table,
    table_uncertainty,
)
from meterfix.calc.gas.iso6976_uncertainty import gas_quality_uncertainty

HERE = Path(__file__).parent
QUANTITIES = {
    "M": "molar_mass",
    "Z": "compression_factor",
    "Hcg": "gross_molar_calorific_value",
    "Hmg": "gross_mass_calorific_value",
    "Hvg": "gross_volume_calorific_value",
    "Hvn": "net_volume_calorific_value",
    "D": "density",
    "G": "relative_density",
    "Wg": "gross_wobbe_index",
    "Wn": "net_wobbe_index",
}
UNITS = {"kg/kmol": 1e-3, "kJ/mol": 1e3, "MJ/kg": 1e6, "MJ/m3": 1e6, "kg/m3": 1.0, "1": 1.0}


def lines(name: str) -> list[str]:
    text = (HERE / name).read_text(encoding="utf-8")
    return [line for line in text.splitlines() if not line.startswith("#")]


RESULTS = list(csv.DictReader(lines("annex_d_results.csv")))
COMPOSITIONS = list(csv.DictReader(lines("annex_d_compositions.csv")))
CORRELATION = list(csv.reader(lines("annex_d4_correlation.csv")))


def found(row: dict[str, str], *, uncertainty: bool) -> GasQuality:
    mixture = [line for line in COMPOSITIONS if line["example"] == row["example"]]
    components = tuple(line["component"] for line in mixture)
    conditions = ReferenceConditions(
        combustion_temperature=273.15 + float(row["t_combustion"]),
        metering_temperature=273.15 + float(row["t_metering"]),
        metering_pressure=1e3 * float(row["p_kPa"]),
    )
    table = component_table(components, conditions)
    x = np.array([[float(line["mole_fraction"])] for line in mixture])
    limits = outside_limits(x, table)
    assert not (limits.compression_factor | limits.pressure | limits.fractions).any()
    if not uncertainty:
        return gas_quality(x, table, oxidation_factor=1.0)
    matrix = None
    if row["correlation"] == "full":
        assert tuple(CORRELATION[0][1:]) == components
        matrix = np.array([[float(cell) for cell in line[1:]] for line in CORRELATION[1:]])
    return gas_quality_uncertainty(
        x,
        np.array([[float(line["u_mole_fraction"])] for line in mixture]),
        table,
        table_uncertainty(components, conditions),
        correlation=matrix,
        oxidation_factor=1.0,
    )


@pytest.mark.parametrize("row", RESULTS, ids=lambda row: f"{row['clause']}-{row['quantity']}")
def test_annex_d(row: dict[str, str]) -> None:
    """Every result and every uncertainty of examples D.2, D.3 and D.4 comes out as printed."""
    uncertainty = row["quantity"].startswith("u_")
    name = QUANTITIES[row["quantity"].removeprefix("u_")]
    value = getattr(found(row, uncertainty=uncertainty), name)[0] / UNITS[row["unit"]]
    assert abs(value - float(row["expected"])) <= float(row["abs_tol"]) * (1.0 + 1e-9)


def test_every_example_is_there() -> None:
    """All clauses with results are tested, and only the noted row of D.3 has a wide tolerance."""
    clauses = {row["clause"] for row in RESULTS}
    assert clauses == {"D.2", "D.3", "D.4.3.1", "D.4.3.2", "D.4.4.1", "D.4.4.2"}
    wide = [
        (row["clause"], row["quantity"])
        for row in RESULTS
        if float(row["abs_tol"]) > 0.51 * 10.0 ** -len(row["expected"].partition(".")[2])
    ]
    assert wide == [("D.3", "Hvg")]
