"""A stated calorific value brought to what the contract reckons energy with, or refused."""

from __future__ import annotations

from collections.abc import Callable

from meterfix.errors import GasError
from meterfix.model.gas import BaseConditions, CalorificBasis, CalorificValue
from meterfix.model.site import EnergyTerms


def energy_factor(
    value: CalorificValue | None,
    energy: EnergyTerms,
    base: BaseConditions,
    base_density: Callable[[BaseConditions], float],
) -> tuple[float, CalorificBasis]:
    """Return energy per m3 at the base conditions, or per kg, as the contract reckons it.

    A volumetric value is energy per volume at its own base conditions, and so energy per
    amount of gas: between base conditions it changes by the ratio of the gas's densities
    there, real gas behaviour included; to a mass it changes by the density at its own base.

    Parameters
    ----------
    value
        The contract's calorific value; its combustion reference temperature and its gross or
        net kind must be the contract's own: no conversion between those is made.
    energy
        The contract's way of reckoning.
    base
        Base conditions of the volumes that the factor will multiply.
    base_density
        The gas's density [kg/m3] at base conditions, by its base model.

    Returns
    -------
    factor, basis
        J/m3 at `base` with VOLUME, J/kg with MASS.

    Raises
    ------
    GasError
        If there is no value, a volumetric one lacks its base conditions, or it differs from
        the contract in gross/net or combustion reference temperature (about 11 % and up
        to 0.3 % of a natural gas's energy).

    References
    ----------
    .. [1] ISO 6976:2016: gross and net calorific value, combustion and metering reference
       conditions (definitions).
    .. [2] ISO 13443:1996: standard reference conditions and conversion between them.
    """
    if value is None:
        raise GasError("the gas states no calorific value; energy cannot be reckoned")
    if value.kind is not energy.kind:
        raise GasError(
            f"the calorific value is {value.kind.value}, the contract reckons energy with "
            f"{energy.kind.value} values; state a {energy.kind.value} one"
        )
    stated = value.combustion_reference_temperature
    wanted = energy.combustion_reference_temperature
    if abs(stated - wanted) > 1e-6:
        raise GasError(
            f"the calorific value's combustion reference temperature is {stated:.6g} K, the "
            f"contract's is {wanted:.6g} K; state the value at {wanted:.6g} K"
        )
    if value.basis is CalorificBasis.MASS:
        if energy.way is CalorificBasis.MASS:
            return value.value, CalorificBasis.MASS
        return value.value * base_density(base), CalorificBasis.VOLUME
    own = value.volume_base
    if own is None:
        raise GasError("a calorific value per volume must state the base conditions of the volume")
    if energy.way is CalorificBasis.MASS:
        return value.value / base_density(own), CalorificBasis.MASS
    if own == base:
        return value.value, CalorificBasis.VOLUME
    return value.value * (base_density(base) / base_density(own)), CalorificBasis.VOLUME
