"""Calorific values, density and Wobbe index from composition, ISO 6976:2016.

Mole fractions have the shape (k, n): k components, n compositions. Sums over components are
loops over the k in the order given, so that batching the n cannot change a bit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.gas.iso6976_tables import ComponentTable
from meterfix.frames import Floats, Truths

LOWEST_COMPRESSION_FACTOR = 0.9
"""Z above which the volumetric calculation holds; ISO 6976:2016, scope."""
LOWEST_METERING_PRESSURE = 90e3
HIGHEST_METERING_PRESSURE = 110e3
"""Between which the summation factors hold [Pa]; ISO 6976:2016, table 2."""

LARGEST_SUM_ERROR = 1e-4
"""Distance of the sum of the mole fractions from 1 up to which they count as normalised; from
memory (ISO 6976:2016 wants a composition normalised to 1 within 0.0001)."""

_USUAL_FRACTION = {"methane": 1.0, "nitrogen": 0.3, "carbon_dioxide": 0.15, "ethane": 0.15}
_USUAL_FRACTION_OF_OTHERS = 0.05


@dataclass(frozen=True, slots=True)
class GasQuality:
    """What a composition is worth, (n,) arrays; the same shape holds standard uncertainties.

    Ideal: of the gas as an ideal one; without that word, of the real gas. Volumes are those of
    the metering conditions, relative densities those to dry air at the same conditions.
    """

    molar_mass: Floats
    """kg/mol."""
    compression_factor: Floats
    """At metering conditions [-]."""
    gross_molar_calorific_value: Floats
    net_molar_calorific_value: Floats
    """J/mol."""
    gross_mass_calorific_value: Floats
    net_mass_calorific_value: Floats
    """J/kg."""
    ideal_gross_volume_calorific_value: Floats
    ideal_net_volume_calorific_value: Floats
    gross_volume_calorific_value: Floats
    net_volume_calorific_value: Floats
    """J/m3."""
    ideal_density: Floats
    density: Floats
    """kg/m3."""
    ideal_relative_density: Floats
    relative_density: Floats
    """-."""
    ideal_gross_wobbe_index: Floats
    ideal_net_wobbe_index: Floats
    gross_wobbe_index: Floats
    net_wobbe_index: Floats
    """J/m3."""
    gross_carbon_dioxide_factor: Floats
    net_carbon_dioxide_factor: Floats
    """Carbon dioxide per energy, gross or net [kg/J]; NaN for a gas that does not burn."""


@dataclass(frozen=True, slots=True)
class QualityLimits:
    """Where the standard's conditions are not met, (n,) boolean arrays; True is outside."""

    compression_factor: Truths
    """Z <= 0.9, or not known: volumetric figures are outside the standard."""
    pressure: Truths
    """Metering pressure outside 90 to 110 kPa: volumetric figures are outside the standard."""
    composition: Truths
    """More than 0.3 nitrogen, 0.15 carbon dioxide, 0.15 ethane or 0.05 of another component:
    beyond the usual natural gases, for which the method's own error in a volume is at most
    0.015 %. From memory (ISO 6976, statement on the accuracy of the method)."""
    fractions: Truths
    """A fraction is negative, not known, or their sum is not 1 within 0.0001."""


@dataclass(frozen=True, slots=True)
class Sums:
    """The sums over the components that everything else is made of, (n,) arrays."""

    molar_mass: Floats
    """M [kg/mol]."""
    summation_factor: Floats
    """Sum of x_j s_j [-]."""
    compression_factor: Floats
    """Z [-]."""
    gross: Floats
    """Gross molar calorific value [J/mol]."""
    hydrogen: Floats
    """Atoms of hydrogen per molecule of gas [-]."""
    net: Floats
    """Net molar calorific value [J/mol]."""
    carbon: Floats
    """Atoms of carbon per molecule of gas [-]."""
    air_compression_factor: Floats
    """Of dry air at metering conditions [-]."""
    molar_volume: Floats
    """Of the ideal gas at metering conditions [m3/mol]."""


def gas_quality(fractions: Floats, table: ComponentTable, *, oxidation_factor: float) -> GasQuality:
    """Return calorific values, densities, Wobbe indices and carbon dioxide factors.

    Parameters
    ----------
    fractions : (k, n) array
        Mole fractions, normalised, in the order of the table's components. [-]
    table
        `component_table` of those components at the contract's reference conditions.
    oxidation_factor
        Part of the carbon that leaves as carbon dioxide, by the contract or the reporting rule:
        it multiplies all carbon, that of carbon dioxide already in the gas included. 0 to 1 [-]

    Returns
    -------
    GasQuality
        (n,) arrays; also outside the standard's limits (see `outside_limits`). NaN where a
        fraction is NaN.

    Raises
    ------
    ValueError
        If the fractions' shape does not fit the table, or the oxidation factor is not between
        0 and 1.

    Notes
    -----
    60 degF takes the table columns of 15.55 degC, and its own temperature in the molar volume.

    References
    ----------
    .. [1] ISO 6976:2016, molar, mass and volumetric basis, and associated properties.
    .. [2] Carbon dioxide from the carbon atoms per energy: stoichiometry; an oxidation factor
       that multiplies all carbon: common practice of emission reporting.
    """
    if not 0.0 <= oxidation_factor <= 1.0:
        raise ValueError(f"oxidation factor is {oxidation_factor!r}; it must be between 0 and 1")
    sums = component_sums(fractions, table)
    M, Z, V = sums.molar_mass, sums.compression_factor, sums.molar_volume
    with np.errstate(divide="ignore", invalid="ignore"):
        ideal_relative = M / table.air_molar_mass
        relative = ideal_relative * (sums.air_compression_factor / Z)
        ideal_root, root = np.sqrt(ideal_relative), np.sqrt(relative)
        carbon = oxidation_factor * table.carbon_dioxide_molar_mass * sums.carbon
        return GasQuality(
            molar_mass=M,
            compression_factor=Z,
            gross_molar_calorific_value=sums.gross,
            net_molar_calorific_value=sums.net,
            gross_mass_calorific_value=sums.gross / M,
            net_mass_calorific_value=sums.net / M,
            ideal_gross_volume_calorific_value=sums.gross / V,
            ideal_net_volume_calorific_value=sums.net / V,
            gross_volume_calorific_value=sums.gross / (Z * V),
            net_volume_calorific_value=sums.net / (Z * V),
            ideal_density=M / V,
            density=M / (Z * V),
            ideal_relative_density=ideal_relative,
            relative_density=relative,
            ideal_gross_wobbe_index=sums.gross / V / ideal_root,
            ideal_net_wobbe_index=sums.net / V / ideal_root,
            gross_wobbe_index=sums.gross / (Z * V) / root,
            net_wobbe_index=sums.net / (Z * V) / root,
            gross_carbon_dioxide_factor=np.where(sums.gross > 0.0, carbon / sums.gross, np.nan),
            net_carbon_dioxide_factor=np.where(sums.net > 0.0, carbon / sums.net, np.nan),
        )


def outside_limits(fractions: Floats, table: ComponentTable) -> QualityLimits:
    """Return which of the standard's conditions a composition does not meet.

    Parameters
    ----------
    fractions : (k, n) array
        Mole fractions, in the order of the table's components. [-]
    table
        As in `gas_quality`.

    Returns
    -------
    QualityLimits
        (n,) boolean arrays.

    Raises
    ------
    ValueError
        As `gas_quality`.

    References
    ----------
    .. [1] ISO 6976:2016, scope; each limit's own is beside its field.
    """
    x = _checked(fractions, table)
    sums = component_sums(x, table)
    inside = np.ones(x.shape[1], dtype=np.bool_)
    sound = np.ones(x.shape[1], dtype=np.bool_)
    total = np.zeros(x.shape[1])
    for at, component in enumerate(table.components):
        inside &= x[at] <= _USUAL_FRACTION.get(component, _USUAL_FRACTION_OF_OTHERS)
        sound &= x[at] >= 0.0
        total = total + x[at]
    pressure = table.conditions.metering_pressure
    return QualityLimits(
        compression_factor=~(sums.compression_factor > LOWEST_COMPRESSION_FACTOR),
        pressure=np.full(
            x.shape[1],
            not LOWEST_METERING_PRESSURE <= pressure <= HIGHEST_METERING_PRESSURE,
        ),
        composition=~inside,
        fractions=~(sound & (np.abs(total - 1.0) <= LARGEST_SUM_ERROR)),
    )


def component_sums(fractions: Floats, table: ComponentTable) -> Sums:
    """Return the sums over the components, in the order of the table.

    Parameters
    ----------
    fractions : (k, n) array
        Mole fractions. [-]
    table
        As in `gas_quality`; a field may be (k, n).

    Returns
    -------
    Sums

    Raises
    ------
    ValueError
        If the fractions' shape does not fit the table.

    References
    ----------
    .. [1] ISO 6976:2016: M = sum of x_j M_j; Z = 1 - (p/p0) (sum of x_j s_j)^2;
       H = sum of x_j H_j; net = gross - (L/2) sum of x_j b_j with b_j atoms of hydrogen.
    """
    x = _checked(fractions, table)
    conditions = table.conditions
    pressure_ratio = conditions.metering_pressure / table.reference_pressure
    M, S, gross = np.zeros(x.shape[1]), np.zeros(x.shape[1]), np.zeros(x.shape[1])
    hydrogen, carbon = np.zeros(x.shape[1]), np.zeros(x.shape[1])
    for at in range(len(table.components)):
        M = M + x[at] * table.molar_mass[at]
        S = S + x[at] * table.summation_factor[at]
        gross = gross + x[at] * table.heat[at]
        carbon = carbon + x[at] * table.atoms[at, 0]
        hydrogen = hydrogen + x[at] * table.atoms[at, 1]
    return Sums(
        molar_mass=M,
        summation_factor=S,
        compression_factor=1.0 - pressure_ratio * (S * S),
        gross=gross,
        hydrogen=hydrogen,
        net=gross - 0.5 * table.vaporisation * hydrogen,
        carbon=carbon,
        air_compression_factor=1.0 - pressure_ratio * (1.0 - table.air_compression_factor),
        molar_volume=table.gas_constant
        * (conditions.metering_temperature / conditions.metering_pressure),
    )


def _checked(fractions: Floats, table: ComponentTable) -> Floats:
    x = np.ascontiguousarray(fractions, dtype=np.float64)
    if x.ndim != 2 or x.shape[0] != len(table.components):
        raise ValueError(
            f"mole fractions have the shape {x.shape}; it must be "
            f"({len(table.components)}, n) for {', '.join(table.components)}"
        )
    return x
