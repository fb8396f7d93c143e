"""The tables of ISO 6976:2016, and the figures of them that one set of conditions needs."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from functools import cache
from importlib import resources

import numpy as np

from meterfix.errors import GasError
from meterfix.frames import Floats

ZERO_CELSIUS = 273.15
"""0 degC [K]."""

ELEMENTS = ("C", "H", "N", "O", "S", "He", "Ne", "Ar")
"""The elements whose atomic masses the molar masses are made of, in the order of `atoms`."""

_COMBUSTION = {"0": 273.15, "15": 288.15, "15.55": 288.70, "20": 293.15, "25": 298.15}
_METERING = {"0": 273.15, "15": 288.15, "15.55": 288.70, "20": 293.15}
_SAME_TEMPERATURE = 0.01
"""Distance [K] up to which a temperature is a tabulated one; 60 degF is 0.006 K from 15.55 degC."""


@dataclass(frozen=True, slots=True)
class ReferenceConditions:
    """Where the combustion is reckoned, and where the gas is metered."""

    combustion_temperature: float
    """Of the calorific value: 0, 15, 15.55 (or 60 degF), 20 or 25 degC. [K]"""
    metering_temperature: float
    """Of the volume: 0, 15, 15.55 (or 60 degF) or 20 degC. [K]"""
    metering_pressure: float
    """Of the volume, absolute; stated for 90 to 110 kPa. [Pa]"""


@dataclass(frozen=True, slots=True)
class ComponentTable:
    """The tabulated figures of k components at one set of conditions, and the constants, SI.

    The fields of components are (k, 1) arrays, so that they meet mole fractions of shape (k, n);
    a Monte Carlo draw may replace any field by an array of shape (k, n), or (n,) for a constant.
    """

    components: tuple[str, ...]
    conditions: ReferenceConditions
    molar_mass: Floats
    """kg/mol."""
    summation_factor: Floats
    """At the metering temperature and the reference pressure [-]."""
    heat: Floats
    """Gross molar calorific value at the combustion temperature [J/mol]."""
    atoms: Floats
    """(k, 8) atoms per molecule, in the order of `ELEMENTS`."""
    gas_constant: Floats
    """J/(mol K)."""
    air_molar_mass: Floats
    """kg/mol."""
    air_compression_factor: Floats
    """Dry air at the metering temperature and the reference pressure [-]."""
    vaporisation: Floats
    """Enthalpy of vaporisation of water at the combustion temperature [J/mol]."""
    reference_pressure: float
    """Of the summation factors and of the air's compression factor [Pa]."""
    carbon_dioxide_molar_mass: float
    """kg/mol."""


@dataclass(frozen=True, slots=True)
class TableUncertainty:
    """Standard uncertainties of the tabulated figures, same units and order as the table's."""

    summation_factor: Floats
    """(k, 1)."""
    heat: Floats
    """(k, 1)."""
    atomic_mass: tuple[float, ...]
    """Of each of `ELEMENTS` [kg/mol]."""
    gas_constant: float
    air_molar_mass: float
    air_compression_factor: float
    vaporisation: float


def known_components() -> tuple[str, ...]:
    """Return the names of the 60 components of the standard's tables."""
    return tuple(_component_rows())


def component_table(components: tuple[str, ...], conditions: ReferenceConditions) -> ComponentTable:
    """Return the table's figures of some components at some conditions.

    Parameters
    ----------
    components
        Names, spelled as in the coefficient table; each once.
    conditions
        Their temperatures must be tabulated ones: the standard gives no other.

    Raises
    ------
    GasError
        If a component is unknown or named twice, a temperature is not tabulated, or the
        pressure is not positive.

    References
    ----------
    .. [1] ISO 6976:2016, tables 1, 2 and 3 and annex A.
    """
    rows = _chosen(components)
    burning, metering = _columns(conditions)
    constants = _constants()
    return ComponentTable(
        components=components,
        conditions=conditions,
        molar_mass=_column(rows, "molar_mass", 1e-3),
        summation_factor=_column(rows, f"s_{metering}"),
        heat=_column(rows, f"H_{burning}", 1e3),
        atoms=np.array([[float(row[element]) for element in ELEMENTS] for row in rows]),
        gas_constant=np.array([constants["R"][0]]),
        air_molar_mass=np.array([1e-3 * constants["M_air"][0]]),
        air_compression_factor=np.array([constants[f"Z_air_{metering}"][0]]),
        vaporisation=np.array([1e3 * constants[f"L_{burning}"][0]]),
        reference_pressure=1e3 * constants["p_reference"][0],
        carbon_dioxide_molar_mass=1e-3 * float(_component_rows()["carbon_dioxide"]["molar_mass"]),
    )


def table_uncertainty(
    components: tuple[str, ...], conditions: ReferenceConditions
) -> TableUncertainty:
    """Return the standard uncertainties of what `component_table` returns.

    Raises
    ------
    GasError
        As `component_table`.

    References
    ----------
    .. [1] ISO 6976:2016, tables 2 and 3 and annex A.
    """
    rows = _chosen(components)
    burning, metering = _columns(conditions)
    constants = _constants()
    return TableUncertainty(
        summation_factor=_column(rows, "u_s"),
        heat=_column(rows, "u_H", 1e3),
        atomic_mass=tuple(1e-3 * constants[f"A_{element}"][1] for element in ELEMENTS),
        gas_constant=constants["R"][1],
        air_molar_mass=1e-3 * constants["M_air"][1],
        air_compression_factor=constants[f"Z_air_{metering}"][1],
        vaporisation=1e3 * constants[f"L_{burning}"][1],
    )


def _rows(name: str) -> list[dict[str, str]]:
    folder = resources.files("meterfix.calc.gas") / "coefficients"
    text = (folder / f"{name}.csv").read_text(encoding="utf-8")
    return list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))


@cache
def _component_rows() -> dict[str, dict[str, str]]:
    return {row["component"]: row for row in _rows("iso6976_2016_components")}


@cache
def _constants() -> dict[str, tuple[float, float]]:
    return {
        row["symbol"]: (float(row["value"]), float(row["u"]))
        for row in _rows("iso6976_2016_constants")
    }


def _chosen(components: tuple[str, ...]) -> list[dict[str, str]]:
    """Return the rows of some components, or raise for the first that is not one."""
    known = _component_rows()
    for at, component in enumerate(components):
        if component not in known:
            raise GasError(
                f"{component!r} is no component of ISO 6976:2016; its components are "
                f"{sorted(known)}"
            )
        if component in components[:at]:
            raise GasError(f"component {component!r} is named twice in a composition")
    return [known[component] for component in components]


def _column(rows: list[dict[str, str]], name: str, factor: float = 1.0) -> Floats:
    """Return one column of the table as a (k, 1) array."""
    return np.array([[factor * float(row[name])] for row in rows]).reshape(len(rows), 1)


def _columns(conditions: ReferenceConditions) -> tuple[str, str]:
    """Return the names of the columns of combustion and metering temperature."""
    if not conditions.metering_pressure > 0.0:
        raise GasError(f"metering pressure is {conditions.metering_pressure!r} Pa; it must be > 0")
    return (
        _tabulated(conditions.combustion_temperature, _COMBUSTION, "combustion"),
        _tabulated(conditions.metering_temperature, _METERING, "metering"),
    )


def _tabulated(temperature: float, table: dict[str, float], of: str) -> str:
    for name, tabulated in table.items():
        if abs(temperature - tabulated) <= _SAME_TEMPERATURE:
            return name
    raise GasError(
        f"{of} temperature is {temperature - ZERO_CELSIUS:.6g} degC; ISO 6976:2016 tabulates "
        f"{', '.join(table)} degC"
    )
