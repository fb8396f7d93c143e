"""ISO 5167's stated uncertainties against figures worked by hand from its rules, none printed.

The CSV names the rules, and which of their numbers are from memory.
"""

from __future__ import annotations

import csv
from pathlib import Path

import numpy as np
import pytest

from meterfix.calc.primary.stated_uncertainty import (
    mass_flow_uncertainty,
    orifice_discharge_uncertainty,
    orifice_expansibility_uncertainty,
)

TABLE = Path(__file__).parent / "iso5167_relative_uncertainty.csv"
ROWS = list(
    csv.DictReader(
        line for line in TABLE.read_text(encoding="utf-8").splitlines() if not line.startswith("#")
    )
)


def inputs(text: str) -> dict[str, np.ndarray]:
    pairs = (part.split("=") for part in text.split(";"))
    return {name.strip(): np.array([float(value)]) for name, value in pairs}


@pytest.mark.parametrize("row", ROWS, ids=lambda row: f"{row['case']} {row['inputs']}")
def test_every_row(row: dict[str, str]) -> None:
    """The relative uncertainty of C, of the expansibility or of the mass flow is the row's."""
    given = inputs(row["inputs"])
    if row["case"] == "ISO5167-2_u(C)":
        D = given["D"]
        bore = np.nextafter(given["beta"] * D, 0.0)  # its ratio must not round above the limit
        found = orifice_discharge_uncertainty(
            given["Re_D"], bore=bore, pipe_diameter=D, tappings=np.array([0])
        )
    elif row["case"] == "ISO5167-2_u(eps)":
        found = orifice_expansibility_uncertainty(given["dp"], given["p1"], given["kappa"])
    else:
        found = mass_flow_uncertainty(
            diameter_ratio=given["beta"],
            discharge_coefficient=given["dC"] / 100.0,
            expansibility=given["deps"] / 100.0,
            pipe_diameter=given["dD"] / 100.0,
            bore=given["dd"] / 100.0,
            differential_pressure=given["ddp"] / 100.0,
            density=given["drho"] / 100.0,
        )
    allowed = float(row["rel_tol"]) * float(row["expected"])
    assert abs(100.0 * found[0] - float(row["expected"])) <= allowed


def test_all_three_rules_are_there() -> None:
    """The table holds rows for the discharge coefficient, the expansibility and the mass flow."""
    assert {row["case"].partition("_")[2].rstrip("124").rstrip("_") for row in ROWS} == {
        "u(C)",
        "u(eps)",
        "qm",
    }
