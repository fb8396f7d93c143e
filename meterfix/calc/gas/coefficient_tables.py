"""The packaged coefficients of AGA8 DETAIL."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import cache
from importlib import resources


@dataclass(frozen=True, slots=True)
class DetailTerm:
    """One term of the equation: coefficient, exponents and flags."""

    number: int
    coefficient: float
    density_exponent: int
    exponential_exponent: int
    half_temperature_exponent: int
    """Twice the temperature exponent u, so that it is an integer."""
    flags: tuple[int, int, int, int, int]
    """g, q, f, s, w."""


@dataclass(frozen=True, slots=True)
class DetailComponent:
    """One component: molar mass [g/mol], E [K], K [(m3/kmol)^(1/3)], G, Q, F, S, W, cp0."""

    name: str
    molar_mass: float
    E: float
    K: float
    G: float
    Q: float
    F: float
    S: float
    W: float
    ideal_coefficients: tuple[float, float, float, float, float]
    """n0_3 to n0_7 [-]."""
    ideal_temperatures: tuple[float, float, float, float]
    """th0_4 to th0_7 [K]."""


@dataclass(frozen=True, slots=True)
class DetailTables:
    """Everything that the equation needs apart from a composition."""

    components: tuple[DetailComponent, ...]
    """The 21 components in the standard's order."""
    terms: tuple[DetailTerm, ...]
    """The 58 terms in the standard's order."""
    pairs: dict[tuple[str, str], tuple[float, float, float, float]]
    """E_ij, U_ij, K_ij, G_ij of the pairs that differ from 1."""


def coefficient_rows(name: str) -> list[dict[str, str]]:
    """Return the rows of a packaged table, its comment lines left out."""
    folder = resources.files("meterfix.calc.gas") / "coefficients"
    text = (folder / f"{name}.csv").read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if not line.startswith("#")]
    return list(csv.DictReader(lines))


@cache
def detail_tables() -> DetailTables:
    """Return the coefficients of AGA8 DETAIL, read once from the package and never changed.

    References
    ----------
    .. [1] AGA Report No. 8 Part 1:2017, DETAIL; ISO 20765-1:2005.
    """
    ideal = {row["component"]: row for row in coefficient_rows("aga8_detail_ideal")}
    components = tuple(
        DetailComponent(
            name=row["component"],
            molar_mass=float(row["molar_mass_g_mol"]),
            E=float(row["E"]),
            K=float(row["K"]),
            G=float(row["G"]),
            Q=float(row["Q"]),
            F=float(row["F"]),
            S=float(row["S"]),
            W=float(row["W"]),
            ideal_coefficients=(
                float(ideal[row["component"]]["n0_3"]),
                float(ideal[row["component"]]["n0_4"]),
                float(ideal[row["component"]]["n0_5"]),
                float(ideal[row["component"]]["n0_6"]),
                float(ideal[row["component"]]["n0_7"]),
            ),
            ideal_temperatures=(
                float(ideal[row["component"]]["th0_4"]),
                float(ideal[row["component"]]["th0_5"]),
                float(ideal[row["component"]]["th0_6"]),
                float(ideal[row["component"]]["th0_7"]),
            ),
        )
        for row in coefficient_rows("aga8_detail_pure")
    )
    terms = tuple(
        DetailTerm(
            number=int(row["n"]),
            coefficient=float(row["a"]),
            density_exponent=int(row["b"]),
            exponential_exponent=int(row["k"]),
            half_temperature_exponent=round(2.0 * float(row["u"])),
            flags=(int(row["g"]), int(row["q"]), int(row["f"]), int(row["s"]), int(row["w"])),
        )
        for row in coefficient_rows("aga8_detail_terms")
    )
    pairs = {
        (row["component_i"], row["component_j"]): (
            float(row["E_ij"]),
            float(row["U_ij"]),
            float(row["K_ij"]),
            float(row["G_ij"]),
        )
        for row in coefficient_rows("aga8_detail_binary")
    }
    return DetailTables(components=components, terms=terms, pairs=pairs)
