"""What the mixture equations share: the shape of an isotherm, and properties from its sums.

An equation of this kind gives the residual Helmholtz energy of a mixture as a function of
temperature and amount density [kmol/m3]; everything else follows by differentiation.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, Self

import numpy as np

from meterfix.calc.elementary import exponential
from meterfix.frames import Floats


class Isotherms(Protocol):
    """An equation with composition and n temperatures put in: functions of density alone."""

    def part(self, chosen: np.ndarray) -> Self:
        """Return the isotherms of the chosen states."""
        ...

    def pressure_terms(self, density: Floats) -> tuple[Floats, Floats]:
        """Return Z and (dp/dD)_T / (R T), at (n,) amount densities [kmol/m3]."""
        ...

    def residual_helmholtz_energy(self, density: Floats) -> Floats:
        """Return the residual Helmholtz energy over R T [-], at (n,) amount densities."""
        ...


class Mixture(Protocol):
    """An equation of state with one composition put in."""

    @property
    def gas_constant(self) -> float:
        """The equation's own [J/(mol K)]."""
        ...

    @property
    def molar_mass(self) -> float:
        """The equation's own [kg/mol]."""
        ...

    @property
    def temperature_scale(self) -> float:
        """A temperature near the mixture's critical region [K]."""
        ...

    @property
    def size_cubed(self) -> float:
        """Reduced density over amount density [m3/kmol]; liquids reach about 3 in it."""
        ...

    @property
    def free_step(self) -> float:
        """Largest step in reduced density of a search where every isotherm rises [-]."""
        ...

    def isotherms(self, temperature: Floats) -> Isotherms:
        """Return the isotherms at (n,) temperatures [K]."""
        ...

    def properties(self, temperature: Floats, density: Floats) -> Properties:
        """Return the properties at (n,) temperatures [K] and amount densities [kmol/m3]."""
        ...

    def ideal_heat_capacity(self, temperature: Floats) -> Floats:
        """Return the isobaric heat capacity of the ideal gas over R [-]."""
        ...


class IdealComponent(Protocol):
    """A component's heat capacity as an ideal gas, in the form of Jaeschke and Schley."""

    @property
    def ideal_coefficients(self) -> tuple[float, float, float, float, float]:
        """n0_3 to n0_7 [-]; the first is cp0/R at rest."""
        ...

    @property
    def ideal_temperatures(self) -> tuple[float, float, float, float]:
        """th0_4 to th0_7 [K]."""
        ...


@dataclass(frozen=True, slots=True)
class Properties:
    """Properties per amount at given temperature and amount density; all (n,)."""

    compression_factor: Floats
    isochoric_heat_capacity: Floats
    """J/(mol K)."""
    isobaric_heat_capacity: Floats
    """J/(mol K)."""
    isentropic_exponent: Floats
    squared_speed_of_sound: Floats
    """m2/s2."""
    joule_thomson_coefficient: Floats
    """K/Pa."""


@dataclass(frozen=True, slots=True)
class ResidualSums:
    """Derivatives of the residual Helmholtz energy over R T; all (n,) and without unit."""

    Z: Floats
    Z_D: Floats
    """Density times dZ/dD."""
    Z_T: Floats
    """Temperature times dZ/dT."""
    A_T: Floats
    """Temperature times the Helmholtz energy's derivative by it."""
    A_TT: Floats
    """Temperature squared times the Helmholtz energy's second derivative by it."""


def properties_from_sums(
    sums: ResidualSums,
    ideal_heat_capacity: Floats,
    temperature: Floats,
    density: Floats,
    *,
    gas_constant: float,
    molar_mass: float,
) -> Properties:
    """Return the properties that follow from the residual and the ideal part.

    Parameters
    ----------
    ideal_heat_capacity : (n,) array
        Isobaric, of the ideal gas, over R [-].
    temperature, density : (n,) arrays
        K and kmol/m3; at density 0 the Joule-Thomson coefficient is NaN.
    gas_constant, molar_mass
        J/(mol K) and kg/mol.
    """
    slope_D = sums.Z + sums.Z_D
    slope_T = sums.Z + sums.Z_T
    cv = ideal_heat_capacity - 1.0 - 2.0 * sums.A_T - sums.A_TT
    cp = cv + slope_T * slope_T / slope_D
    ratio = cp / cv
    # written with the residual terms alone: nothing cancels as the density vanishes
    with np.errstate(divide="ignore", invalid="ignore"):
        joule_thomson = (sums.Z_T - sums.Z_D) / (slope_D * cp * density * (1e3 * gas_constant))
    return Properties(
        compression_factor=sums.Z,
        isochoric_heat_capacity=gas_constant * cv,
        isobaric_heat_capacity=gas_constant * cp,
        isentropic_exponent=ratio * slope_D / sums.Z,
        squared_speed_of_sound=ratio * slope_D * temperature * (gas_constant / molar_mass),
        joule_thomson_coefficient=joule_thomson,
    )


def ideal_mixture_heat_capacity(
    terms: tuple[tuple[float, IdealComponent], ...], temperature: Floats
) -> Floats:
    """Return the isobaric heat capacity of an ideal-gas mixture over R [-], per amount.

    Parameters
    ----------
    terms
        Mole fraction and component.
    temperature : (n,) array
        K.

    References
    ----------
    .. [1] Jaeschke and Schley, Int. J. Thermophysics 16 (1995) 1381, as AGA 8 uses it.
    """
    total: Floats = np.zeros_like(temperature)
    for x, component in terms:
        part = np.full_like(temperature, component.ideal_coefficients[0])
        thetas = component.ideal_temperatures
        for n, (coefficient, theta) in enumerate(
            zip(component.ideal_coefficients[1:], thetas, strict=True)
        ):
            if coefficient == 0.0:
                continue
            ratio = theta / temperature
            small = exponential(-2.0 * ratio)
            # (t/sinh t)^2 for the even terms, (t/cosh t)^2 for the odd ones, without overflow
            base = (1.0 - small) if n % 2 == 0 else (1.0 + small)
            part = part + coefficient * (4.0 * ratio * ratio * small / (base * base))
        total = total + x * part
    return total
