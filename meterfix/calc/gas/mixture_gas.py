"""Line and base states by a mixture equation with one composition put in."""

from __future__ import annotations

from typing import Generic, TypeVar

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.density_roots import (
    dense_density,
    gas_density,
    mechanical_critical_temperature,
)
from meterfix.calc.gas.helmholtz import Mixture
from meterfix.calc.gas.state import GasStates, not_known
from meterfix.frames import Floats, Integers, Truths

_CHUNK = 8192
"""States computed together, so that memory stays bounded; no bit depends on it."""

AnyMixture = TypeVar("AnyMixture", bound=Mixture)


class MixtureGas(Generic[AnyMixture]):
    """A mixture equation with one composition put in, as an equation of state.

    Parameters
    ----------
    mixture
        The equation with its composition.
    """

    def __init__(self, mixture: AnyMixture) -> None:
        self.mixture = mixture
        self._two_roots_below = mechanical_critical_temperature(mixture)

    @property
    def gas_constant(self) -> float:
        """The equation's own [J/(mol K)]."""
        return self.mixture.gas_constant

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
        # far below its range an equation overflows; what comes of it is NaN, which is no root
        with np.errstate(over="ignore", invalid="ignore"):
            for start in range(0, len(where), _CHUNK):
                part = where[start : start + _CHUNK]
                self._fill(part, p, T, columns, found, dense_root=dense_root)
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

    def _fill(
        self,
        part: Integers,
        p: Floats,
        T: Floats,
        columns: Floats,
        found: Truths,
        *,
        dense_root: bool,
    ) -> None:
        """Write the properties of some of the states where there is a root."""
        roots = (
            dense_density(self.mixture, p[part], T[part])
            if dense_root
            else gas_density(self.mixture, p[part], T[part], two_roots_below=self._two_roots_below)
        )
        there = part[roots.found]
        if len(there) == 0:
            return
        density = roots.density[roots.found]
        given = self.mixture.properties(T[there], density)
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

    def ideal_isentropic_exponent(self, temperature: Floats) -> Floats:
        """Return cp0/cv0 of the ideal gas at (n,) temperatures [K]."""
        cp = self.mixture.ideal_heat_capacity(contiguous(temperature))
        result: Floats = cp / (cp - 1.0)
        return result
