"""AGA8 DETAIL as an equation of state of line and base states."""

from __future__ import annotations

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.density_roots import (
    dense_density,
    gas_density,
    mechanical_critical_temperature,
)
from meterfix.calc.gas.detail import (
    GAS_CONSTANT,
    detail_mixture,
    ideal_heat_capacity,
    properties,
)
from meterfix.calc.gas.state import GasStates, not_known
from meterfix.frames import Floats, Truths

_CHUNK = 8192
"""States computed together, so that memory stays bounded; no bit depends on it."""

RANGE_PRESSURE = 30e6
"""Highest absolute pressure [Pa]; ISO 20765-1:2005, pipeline-quality gas (from memory)."""
RANGE_TEMPERATURE = (250.0, 350.0)
"""K; ISO 20765-1:2005, pipeline-quality gas (from memory)."""
RANGE_LEAST_METHANE = 0.7
RANGE_COMPOSITION: tuple[tuple[tuple[str, ...], float], ...] = (
    (("nitrogen",), 0.20),
    (("carbon_dioxide",), 0.20),
    (("ethane",), 0.10),
    (("propane",), 0.035),
    (("isobutane", "n_butane"), 0.015),
    (("isopentane", "n_pentane"), 0.005),
    (("n_hexane",), 0.001),
    (("n_heptane",), 0.0005),
    (("n_octane", "n_nonane", "n_decane"), 0.0005),
    (("hydrogen",), 0.10),
    (("carbon_monoxide",), 0.03),
    (("helium",), 0.005),
    (("water",), 0.00015),
    (("oxygen",), 0.0002),
    (("hydrogen_sulfide",), 0.0002),
    (("argon",), 0.0002),
)
"""Components and the largest mole fraction of their sum; ISO 20765-1:2005 and ISO 12213-2:2006,
pipeline-quality gas (from memory)."""


def composition_outside_range(mole_fractions: tuple[tuple[str, float], ...]) -> bool:
    """Return whether a composition is outside the pipeline-quality range of ISO 20765-1:2005."""
    given = dict(mole_fractions)
    if given.get("methane", 0.0) < RANGE_LEAST_METHANE:
        return True
    for names, limit in RANGE_COMPOSITION:
        total = 0.0
        for name in names:
            total += given.get(name, 0.0)
        if total > limit:
            return True
    return False


class DetailGas:
    """AGA8 DETAIL with one composition put in.

    Parameters
    ----------
    mole_fractions
        Components of the equation and their mole fractions, normalised to a sum of 1.

    Raises
    ------
    GasError
        If a component is unknown.

    References
    ----------
    .. [1] AGA Report No. 8 Part 1:2017, DETAIL; ISO 20765-1:2005.
    """

    def __init__(self, mole_fractions: tuple[tuple[str, float], ...]) -> None:
        self.mixture = detail_mixture(mole_fractions)
        self._two_roots_below = mechanical_critical_temperature(self.mixture)
        self._outside = composition_outside_range(self.mixture.mole_fractions)

    @property
    def gas_constant(self) -> float:
        """8.31451 J/(mol K), the equation's own."""
        return GAS_CONSTANT

    @property
    def molar_mass(self) -> float:
        """Of the mixture, by the equation's own table [kg/mol]."""
        return self.mixture.molar_mass

    def states(
        self, pressure: Floats, temperature: Floats, *, dense_root: bool = False
    ) -> GasStates:
        """Return the properties at pressure and temperature.

        Parameters
        ----------
        pressure, temperature : (n,) arrays
            Absolute pressure [Pa] and temperature [K].
        dense_root
            True: the densest stable root, be it gas or not; False: the gas.

        Returns
        -------
        GasStates
            NaN and `no_gas` where there is no gas (what that means is documented in
            `density_roots`), the equation's heat capacity cv is not positive, or pressure or
            temperature is not positive or infinite; NaN alone where either is NaN.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        usable = np.isfinite(p) & np.isfinite(T) & (p > 0.0) & (T > 0.0)
        columns = np.full((7, len(p)), np.nan)
        found = np.zeros(len(p), dtype=np.bool_)
        where = np.flatnonzero(usable)
        for start in range(0, len(where), _CHUNK):
            part = where[start : start + _CHUNK]
            roots = (
                dense_density(self.mixture, p[part], T[part])
                if dense_root
                else gas_density(
                    self.mixture, p[part], T[part], two_roots_below=self._two_roots_below
                )
            )
            there = part[roots.found]
            if len(there) == 0:
                continue
            density = roots.density[roots.found]
            given = properties(self.mixture, T[there], density)
            mass = self.mixture.molar_mass
            # cv <= 0 is no stable state either: the equation is far outside its range there
            stable = given.isochoric_heat_capacity > 0.0
            found[there] = stable
            columns[0, there] = 1e3 * mass * density
            columns[1, there] = given.compression_factor
            columns[2, there] = given.isochoric_heat_capacity / mass
            columns[3, there] = given.isobaric_heat_capacity / mass
            columns[4, there] = given.isentropic_exponent
            columns[5, there] = np.sqrt(np.where(stable, given.squared_speed_of_sound, np.nan))
            columns[6, there] = given.joule_thomson_coefficient
        columns[:, ~found] = np.nan
        return GasStates(
            density=columns[0],
            compression_factor=columns[1],
            isochoric_heat_capacity=columns[2],
            isobaric_heat_capacity=columns[3],
            isentropic_exponent=columns[4],
            speed_of_sound=columns[5],
            joule_thomson_coefficient=columns[6],
            dynamic_viscosity=np.full(len(p), np.nan),
            no_gas=~found & ~not_known(p, T),
        )

    def ideal_isentropic_exponent(self, temperature: Floats) -> Floats:
        """Return cp0/cv0 of the ideal gas at (n,) temperatures [K]."""
        cp = ideal_heat_capacity(self.mixture, contiguous(temperature))
        result: Floats = cp / (cp - 1.0)
        return result

    def outside_range(self, pressure: Floats, temperature: Floats) -> Truths:
        """Return where composition, pressure or temperature is outside the normal range.

        The range is that of pipeline-quality gas, ISO 20765-1:2005: up to 30 MPa, 250 K to
        350 K and the compositions of `RANGE_COMPOSITION`. NaN is not outside.
        """
        low, high = RANGE_TEMPERATURE
        p, T = contiguous(pressure), contiguous(temperature)
        result: Truths = (p > RANGE_PRESSURE) | (low > T) | (high < T)
        if self._outside:
            result = result | ~not_known(p, T)
        return result
