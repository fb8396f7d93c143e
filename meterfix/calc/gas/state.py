"""What every equation of state gives for an array of states."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from meterfix.frames import Floats, Truths


@dataclass(frozen=True, slots=True)
class GasStates:
    """Properties of n states by the exact equation; all arrays are (n,), NaN where no gas."""

    density: Floats
    """kg/m3."""
    compression_factor: Floats
    isochoric_heat_capacity: Floats
    """J/(kg K)."""
    isobaric_heat_capacity: Floats
    """J/(kg K)."""
    isentropic_exponent: Floats
    """Of the real gas: kappa = rho w^2 / p [-]."""
    speed_of_sound: Floats
    """m/s."""
    joule_thomson_coefficient: Floats
    """K/Pa."""
    dynamic_viscosity: Floats
    """Pa s; NaN where the model has none."""
    no_gas: Truths
    """True: there is no gas phase at this pressure and temperature, or none was found.
    False with NaN properties: the state itself was not known (NaN)."""


def not_known(pressure: Floats, temperature: Floats) -> Truths:
    """Return where a state is not known at all: pressure or temperature is NaN."""
    result: Truths = np.isnan(pressure) | np.isnan(temperature)
    return result


class EquationOfState(Protocol):
    """An equation of state with one composition put in; states in, properties out.

    Every result belongs to its own state alone: alone or in a batch, the same bits.
    """

    @property
    def gas_constant(self) -> float:
        """The model's own molar gas constant [J/(mol K)]."""
        ...

    @property
    def molar_mass(self) -> float:
        """The model's own molar mass [kg/mol]."""
        ...

    def states(self, pressure: Floats, temperature: Floats) -> GasStates:
        """Return the gas's properties at (n,) absolute pressures [Pa] and temperatures [K]."""
        ...

    def ideal_isentropic_exponent(self, temperature: Floats) -> Floats:
        """Return cp0/cv0 of the ideal gas at (n,) temperatures [K]."""
        ...

    def outside_range(self, pressure: Floats, temperature: Floats) -> Truths:
        """Return where composition, pressure or temperature is outside the model's range."""
        ...
