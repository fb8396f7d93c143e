"""Standard uncertainty of calorific values, density and Wobbe index, ISO 6976:2016, annex B.

Every property is a product of powers of a few sums over the components and of constants; its
derivatives follow from the powers alone. They serve the standard uncertainty here and, as
`fraction_sensitivities`, a composition that is shared with other figures of a meter.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace

import numpy as np

from meterfix.calc.gas.iso6976 import GasQuality, Sums, component_sums, gas_quality
from meterfix.calc.gas.iso6976_tables import ELEMENTS, ComponentTable, TableUncertainty
from meterfix.frames import Floats

_CARBON_DIOXIDE_ATOMS = {"C": 1.0, "O": 2.0}


@dataclass(frozen=True, slots=True)
class _Powers:
    """A property as a product of powers of these (temperature and pressure are exact)."""

    heat: int = 0
    net: bool = False
    M: float = 0.0
    Z: float = 0.0
    R: float = 0.0
    M_air: float = 0.0
    Z_air: float = 0.0
    carbon: int = 0


def _both(name: str, powers: _Powers) -> dict[str, _Powers]:
    """Return the powers of a gross and a net property, `name` with a place for the word."""
    return {name.format("gross"): powers, name.format("net"): replace(powers, net=True)}


_POWERS: dict[str, _Powers] = {
    "molar_mass": _Powers(M=1),
    "compression_factor": _Powers(Z=1),
    **_both("{}_molar_calorific_value", _Powers(heat=1)),
    **_both("{}_mass_calorific_value", _Powers(heat=1, M=-1)),
    **_both("ideal_{}_volume_calorific_value", _Powers(heat=1, R=-1)),
    **_both("{}_volume_calorific_value", _Powers(heat=1, Z=-1, R=-1)),
    "ideal_density": _Powers(M=1, R=-1),
    "density": _Powers(M=1, Z=-1, R=-1),
    "ideal_relative_density": _Powers(M=1, M_air=-1),
    "relative_density": _Powers(M=1, Z=-1, M_air=-1, Z_air=1),
    **_both("ideal_{}_wobbe_index", _Powers(heat=1, M=-0.5, R=-1, M_air=0.5)),
    **_both("{}_wobbe_index", _Powers(heat=1, M=-0.5, Z=-0.5, R=-1, M_air=0.5, Z_air=-0.5)),
    **_both("{}_carbon_dioxide_factor", _Powers(heat=-1, carbon=1)),
}


def gas_quality_uncertainty(
    fractions: Floats,
    fraction_uncertainties: Floats,
    table: ComponentTable,
    table_uncertainty: TableUncertainty,
    *,
    correlation: Floats | None = None,
    oxidation_factor: float,
) -> GasQuality:
    """Return the standard uncertainty of each property that `gas_quality` returns.

    Parameters
    ----------
    fractions : (k, n) array
        Mole fractions, in the order of the table's components. [-]
    fraction_uncertainties : (k, n) or (k, 1) array
        Their standard uncertainties. [-]
    table, table_uncertainty
        `component_table` and `table_uncertainty` of the same components and conditions.
    correlation : (k, k) array, optional
        Correlation coefficients of the mole fractions; without it they count as uncorrelated,
        which overstates the uncertainty of a normalised composition.
    oxidation_factor
        As in `gas_quality`, taken as exact. [-]

    Returns
    -------
    GasQuality
        Standard uncertainties (k = 1), in the properties' own units.

    Raises
    ------
    ValueError
        If a shape does not fit, a correlation coefficient is not between -1 and 1, the matrix
        is not symmetric or its diagonal is not 1.

    Notes
    -----
    Included: mole fractions with their correlations; calorific values and summation factors of
    the components; atomic masses, shared by all components that hold the element; gas constant;
    molar mass and compression factor of air; enthalpy of vaporisation of water.

    References
    ----------
    .. [1] ISO 6976:2016, annex B; JCGM 100:2008, 5.2.2.
    """
    x = np.ascontiguousarray(fractions, dtype=np.float64)
    sums = component_sums(x, table)
    spread = np.ascontiguousarray(
        np.broadcast_to(np.asarray(fraction_uncertainties, dtype=np.float64), x.shape)
    )
    matrix = _checked_correlation(correlation, len(table.components))
    values = gas_quality(x, table, oxidation_factor=oxidation_factor)
    found = {}
    for name, powers in _POWERS.items():
        value: Floats = getattr(values, name)
        weighted = _by_fraction(powers, value, sums, table) * spread
        variance = _correlated(weighted, matrix) + _from_tables(
            powers, value, x, sums, table, table_uncertainty
        )
        found[name] = np.sqrt(np.maximum(variance, 0.0))
    return GasQuality(**found)


def fraction_sensitivities(
    fractions: Floats, table: ComponentTable, *, oxidation_factor: float
) -> dict[str, Floats]:
    """Return the derivative of each property with respect to each mole fraction.

    Parameters
    ----------
    fractions, table, oxidation_factor
        As in `gas_quality`.

    Returns
    -------
    dict of (k, n) arrays
        By the names of `GasQuality`, in the property's unit per unit mole fraction, each
        fraction varied alone (the sum not kept at 1, as in the standard).

    Raises
    ------
    ValueError
        As `gas_quality`.

    References
    ----------
    .. [1] ISO 6976:2016, annex B (sensitivity coefficients).
    """
    sums = component_sums(fractions, table)
    values = gas_quality(fractions, table, oxidation_factor=oxidation_factor)
    return {
        field.name: _by_fraction(_POWERS[field.name], getattr(values, field.name), sums, table)
        for field in fields(GasQuality)
    }


def _per_heat(powers: _Powers, value: Floats, sums: Sums, table: ComponentTable) -> Floats:
    """Return the derivative of a property with respect to its molar calorific value.

    Of a property proportional to it, that is the product of all its other powers, which a gas
    that does not burn has as well.
    """
    if powers.heat == 0:
        return np.zeros_like(value)
    if powers.heat < 0:
        with np.errstate(divide="ignore", invalid="ignore"):
            return -value / (sums.net if powers.net else sums.gross)
    rest = np.ones_like(value)
    for base, exponent in (
        (sums.molar_mass, powers.M),
        (sums.compression_factor, powers.Z),
        (sums.molar_volume, powers.R),  # the gas constant stands in the molar volume
        (table.air_molar_mass, powers.M_air),
        (sums.air_compression_factor, powers.Z_air),
    ):
        if exponent:
            positive = base if abs(exponent) == 1.0 else np.sqrt(base)
            rest = rest * positive if exponent > 0.0 else rest / positive
    return rest


def _by_fraction(powers: _Powers, value: Floats, sums: Sums, table: ComponentTable) -> Floats:
    """Return the (k, n) derivatives of one property with respect to the mole fractions."""
    pressure_ratio = table.conditions.metering_pressure / table.reference_pressure
    per_heat = _per_heat(powers, value, sums, table)
    relative_Z = -2.0 * pressure_ratio * sums.summation_factor / sums.compression_factor
    slopes = np.empty((len(table.components), len(value)))
    with np.errstate(divide="ignore", invalid="ignore"):
        for at in range(len(table.components)):
            heat = table.heat[at]
            if powers.net:
                heat = heat - 0.5 * table.vaporisation * table.atoms[at, 1]
            slope = per_heat * heat
            slope = slope + value * (powers.M * table.molar_mass[at] / sums.molar_mass)
            slope = slope + value * (powers.Z * relative_Z * table.summation_factor[at])
            if powers.carbon:
                slope = slope + powers.carbon * value * (table.atoms[at, 0] / sums.carbon)
            slopes[at] = slope
    return slopes


def _correlated(weighted: Floats, matrix: Floats | None) -> Floats:
    """Return the variance of a sum of correlated parts, (k, n) -> (n,)."""
    variance = np.zeros(weighted.shape[1])
    for i in range(weighted.shape[0]):
        variance = variance + weighted[i] * weighted[i]
        if matrix is not None:
            for j in range(i):
                variance = variance + 2.0 * matrix[i, j] * (weighted[i] * weighted[j])
    return variance


def _from_tables(
    powers: _Powers,
    value: Floats,
    x: Floats,
    sums: Sums,
    table: ComponentTable,
    spread: TableUncertainty,
) -> Floats:
    """Return the variance that comes from the tables and constants."""
    pressure_ratio = table.conditions.metering_pressure / table.reference_pressure
    per_heat = _per_heat(powers, value, sums, table)
    per_summation = (
        value * powers.Z * (-2.0 * pressure_ratio * sums.summation_factor / sums.compression_factor)
    )
    parts = [
        value * (powers.R * spread.gas_constant / table.gas_constant),
        value * (powers.M_air * spread.air_molar_mass / table.air_molar_mass),
        value
        * (
            powers.Z_air
            * pressure_ratio
            * spread.air_compression_factor
            / sums.air_compression_factor
        ),
    ]
    if powers.net:
        parts.append(per_heat * (-0.5 * sums.hydrogen) * spread.vaporisation)
    for at in range(len(table.components)):
        parts.extend(
            (
                per_heat * x[at] * spread.heat[at],
                per_summation * x[at] * spread.summation_factor[at],
            )
        )
    for which, element in enumerate(ELEMENTS):
        atoms = np.zeros(x.shape[1])
        for at in range(len(table.components)):
            atoms = atoms + x[at] * table.atoms[at, which]
        relative = powers.M * atoms / sums.molar_mass + powers.carbon * (
            _CARBON_DIOXIDE_ATOMS.get(element, 0.0) / table.carbon_dioxide_molar_mass
        )
        parts.append(value * relative * spread.atomic_mass[which])
    variance = np.zeros(x.shape[1])
    for part in parts:
        variance = variance + part * part
    return variance


def _checked_correlation(correlation: Floats | None, count: int) -> Floats | None:
    """Return the matrix as floats, or raise for what no correlation matrix can be."""
    if correlation is None:
        return None
    matrix = np.asarray(correlation, dtype=np.float64)
    if matrix.shape != (count, count):
        raise ValueError(
            f"correlation matrix has the shape {matrix.shape}; it must be ({count}, {count})"
        )
    if not (np.abs(matrix) <= 1.0).all():
        raise ValueError("a correlation coefficient is not between -1 and 1")
    if (matrix != matrix.T).any() or (np.diagonal(matrix) != 1.0).any():
        raise ValueError("a correlation matrix must be symmetric with a diagonal of 1")
    return matrix
