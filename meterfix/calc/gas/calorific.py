"""A calorific value, stated or by ISO 6976, brought to what the contract reckons energy with."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from meterfix.calc.gas.composition import MoleFractions
from meterfix.calc.gas.iso6976 import GasQuality, gas_quality, outside_limits
from meterfix.calc.gas.iso6976_tables import (
    ReferenceConditions,
    component_table,
    table_uncertainty,
)
from meterfix.calc.gas.iso6976_uncertainty import gas_quality_uncertainty
from meterfix.errors import GasError
from meterfix.frames import Floats
from meterfix.model.gas import BaseConditions, CalorificBasis, CalorificKind, CalorificValue
from meterfix.model.site import EnergyTerms

_OXIDATION_FACTOR = 1.0
"""Of no consequence for a calorific value."""
_NO_VOLUME = BaseConditions(101_325.0, 288.15)
"""Metering conditions of a value per mass, on which it does not depend."""


@dataclass(frozen=True, slots=True)
class ComputedValue:
    """A calorific value computed from a composition by ISO 6976:2016."""

    value: float
    """J/m3 of real gas at the volume's base conditions, or J/kg."""
    relative_standard_uncertainty: float
    """Of the standard's own tabulated figures; that of the composition comes on top [-]."""
    outside_limits: bool
    """The composition is outside the standard's range of natural gases, or Z is 0.9 or less."""


def computed_value(terms: CalorificValue, fractions: MoleFractions) -> ComputedValue:
    """Return the calorific value of a composition by ISO 6976:2016.

    Parameters
    ----------
    terms
        Kind, basis and conditions; its own value is not looked at.
    fractions
        Mole fractions, normalised.

    Returns
    -------
    ComputedValue

    Raises
    ------
    GasError
        If the standard has no such component or does not tabulate one of the temperatures, or a
        value per volume lacks its base conditions.

    References
    ----------
    .. [1] ISO 6976:2016, mass and real-gas volumetric basis; annex B for the uncertainty.
    """
    conditions, names, x = _asked(terms, fractions)
    table = component_table(names, conditions)
    value = _chosen(terms, gas_quality(x, table, oxidation_factor=_OXIDATION_FACTOR))
    uncertainty = _chosen(
        terms,
        gas_quality_uncertainty(
            x,
            np.zeros_like(x),
            table,
            table_uncertainty(names, conditions),
            oxidation_factor=_OXIDATION_FACTOR,
        ),
    )
    limits = outside_limits(x, table)
    outside = bool(limits.composition[0]) or (
        terms.basis is CalorificBasis.VOLUME and bool(limits.compression_factor[0])
    )
    return ComputedValue(value, uncertainty / value if value > 0.0 else 0.0, outside)


def _asked(
    terms: CalorificValue, fractions: MoleFractions
) -> tuple[ReferenceConditions, tuple[str, ...], Floats]:
    """Return the conditions, components and (k, 1) fractions for the standard's tables."""
    base = terms.volume_base
    if base is None:
        if terms.basis is CalorificBasis.VOLUME:
            raise GasError(
                "a calorific value per volume must state the base conditions of the volume"
            )
        base = _NO_VOLUME
    conditions = ReferenceConditions(
        combustion_temperature=terms.combustion_reference_temperature,
        metering_temperature=base.base_temperature,
        metering_pressure=base.base_pressure,
    )
    names = tuple(name for name, _ in fractions)
    return conditions, names, np.array([[fraction] for _, fraction in fractions])


def _chosen(terms: CalorificValue, quality: GasQuality) -> float:
    """Return the property of a composition that the terms ask for."""
    gross = terms.kind is CalorificKind.GROSS
    if terms.basis is CalorificBasis.MASS:
        found = quality.gross_mass_calorific_value if gross else quality.net_mass_calorific_value
    else:
        found = (
            quality.gross_volume_calorific_value if gross else quality.net_volume_calorific_value
        )
    return float(found[0])


def stated_or_computed(terms: CalorificValue, fractions: MoleFractions) -> CalorificValue:
    """Return the terms with their value, by ISO 6976:2016 where they state none.

    Raises
    ------
    GasError
        As `computed_value`.
    """
    if terms.value is not None:
        return terms
    conditions, names, x = _asked(terms, fractions)
    table = component_table(names, conditions)
    value = _chosen(terms, gas_quality(x, table, oxidation_factor=_OXIDATION_FACTOR))
    return replace(terms, value=value)


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
        The contract's calorific value, with its number; its combustion reference temperature
        and its gross or net kind must be the contract's own: no conversion between those is
        made.
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
        If there is no value or number, a volumetric one lacks its base conditions, or it
        differs from the contract in gross/net or combustion reference temperature (about 11 %
        and up to 0.3 % of a natural gas's energy).

    References
    ----------
    .. [1] ISO 6976:2016: gross and net calorific value, combustion and metering reference
       conditions (definitions).
    .. [2] ISO 13443:1996: standard reference conditions and conversion between them.
    """
    if value is None or value.value is None:
        raise GasError("the gas states no calorific value; energy cannot be reckoned")
    number = value.value
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
            return number, CalorificBasis.MASS
        return number * base_density(base), CalorificBasis.VOLUME
    own = value.volume_base
    if own is None:
        raise GasError("a calorific value per volume must state the base conditions of the volume")
    if energy.way is CalorificBasis.MASS:
        return number / base_density(own), CalorificBasis.MASS
    if own == base:
        return number, CalorificBasis.VOLUME
    return number * (base_density(base) / base_density(own)), CalorificBasis.VOLUME
