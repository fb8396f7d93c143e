"""ISA 1932 nozzles, long-radius nozzles and Venturi nozzles, ISO 5167-3:2003.

Their expansibility is `adiabatic_expansibility`, their thermal expansion that of the orifice
plate (`diameter_at`). Every kernel is element-wise and broadcasts. NaN in gives NaN out, and
counts as outside the limits of use.
"""

from __future__ import annotations

import numpy as np

from meterfix.calc.elementary import contiguous, power
from meterfix.calc.primary import orifice
from meterfix.calc.primary.discharge import DischargeTerms
from meterfix.calc.primary.discharge_forms import (
    NozzleDischargeTerms,
    constant_discharge_terms,
)
from meterfix.frames import Floats, Truths

# (10^6)^1.15 and (10^6)^0.5, written out so that no platform's own power enters
_MILLION_115 = 7943282.347242815021
_MILLION_05 = 1000.0


def isa_1932_discharge_terms(*, diameter_ratio: Floats) -> NozzleDischargeTerms:
    """Return the terms of the discharge coefficient of ISA 1932 nozzles.

    Parameters
    ----------
    diameter_ratio : (n,) array
        At working conditions. [-]

    Returns
    -------
    NozzleDischargeTerms
        (n,) arrays; also outside the limits of use, where the value has no stated uncertainty.

    Raises
    ------
    ValueError
        If a diameter ratio is not between 0 and 1.

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.1.6.2: C = 0.9900 - 0.2262 beta^4.1
       - (0.00175 beta^2 - 0.0033 beta^4.15) (10^6/Re_D)^1.15.
    """
    beta = _possible(diameter_ratio)
    tenth = power(beta, 0.1)
    beta2 = beta * beta
    beta4 = beta2 * beta2
    falling = 0.00175 * beta2 - 0.0033 * (beta4 * tenth * np.sqrt(tenth))
    return NozzleDischargeTerms(
        constant=0.9900 - 0.2262 * (beta4 * tenth),
        c5=np.zeros_like(beta),
        c11_5=-_MILLION_115 * falling,
    )


def long_radius_discharge_terms(*, diameter_ratio: Floats) -> NozzleDischargeTerms:
    """Return the terms of the discharge coefficient of long-radius nozzles, high or low ratio.

    Parameters
    ----------
    diameter_ratio : (n,) array
        At working conditions. [-]

    Returns
    -------
    NozzleDischargeTerms
        (n,) arrays; also outside the limits of use.

    Raises
    ------
    ValueError
        If a diameter ratio is not between 0 and 1.

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.2.6.2: C = 0.9965 - 0.00653 (10^6 beta/Re_D)^0.5.
    """
    beta = _possible(diameter_ratio)
    return NozzleDischargeTerms(
        constant=np.full_like(beta, 0.9965),
        c5=-0.00653 * _MILLION_05 * np.sqrt(beta),
        c11_5=np.zeros_like(beta),
    )


def venturi_nozzle_discharge_terms(*, diameter_ratio: Floats) -> DischargeTerms:
    """Return the terms of the discharge coefficient of Venturi nozzles: constant in Re_D.

    Parameters
    ----------
    diameter_ratio : (n,) array
        At working conditions. [-]

    Returns
    -------
    DischargeTerms
        (n,) arrays; also outside the limits of use.

    Raises
    ------
    ValueError
        If a diameter ratio is not between 0 and 1.

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.3.4.2: C = 0.9858 - 0.196 beta^4.5.
    """
    beta = _possible(diameter_ratio)
    beta2 = beta * beta
    return constant_discharge_terms(0.9858 - 0.196 * (beta2 * beta2 * np.sqrt(beta)))


def pressure_loss(
    differential_pressure: Floats, discharge_coefficient: Floats, *, diameter_ratio: Floats
) -> Floats:
    """Return the permanent pressure loss of an ISA 1932 or long-radius nozzle.

    A Venturi nozzle recovers more, by its divergent part: see
    `meterfix.calc.primary.venturi.pressure_loss_range`.

    Parameters
    ----------
    differential_pressure : (n,) array
        [Pa]
    discharge_coefficient : (n,) array
        [-]
    diameter_ratio : (n,) array
        At working conditions. [-]

    Returns
    -------
    (n,) array
        [Pa]

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.1.8 and 5.2.8 (from memory): the equation of the orifice plate.
    """
    return orifice.pressure_loss(
        differential_pressure, discharge_coefficient, diameter_ratio=diameter_ratio
    )


def isa_1932_outside_limits(
    reynolds_number: Floats, *, bore: Floats, pipe_diameter: Floats
) -> Truths:
    """Return whether an ISA 1932 nozzle is outside its limits of use.

    Parameters
    ----------
    reynolds_number : (n,) array
        Re_D. [-]
    bore, pipe_diameter : (n,) arrays
        Throat and pipe, at working conditions. [m]

    Returns
    -------
    (n,) boolean array
        Not: 50 mm <= D <= 500 mm; 0.3 <= beta <= 0.8; 70 000 <= Re_D <= 10^7 for beta < 0.44,
        20 000 <= Re_D <= 10^7 for greater ones.

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.1.6.1 (from memory). The pipe's roughness is not looked at.
    """
    beta = bore / pipe_diameter
    lowest = np.where(beta < 0.44, 7e4, 2e4)
    inside: Truths = (
        _between(pipe_diameter, 0.05, 0.5)
        & _between(beta, 0.3, 0.8)
        & (reynolds_number >= lowest)
        & (reynolds_number <= 1e7)
    )
    return ~inside


def long_radius_outside_limits(
    reynolds_number: Floats, *, bore: Floats, pipe_diameter: Floats
) -> Truths:
    """Return whether a long-radius nozzle is outside its limits of use.

    Parameters
    ----------
    reynolds_number, bore, pipe_diameter
        As in `isa_1932_outside_limits`.

    Returns
    -------
    (n,) boolean array
        Not: 50 mm <= D <= 630 mm; 0.2 <= beta <= 0.8; 10^4 <= Re_D <= 10^7.

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.2.6.1 (from memory). The pipe's roughness is not looked at.
    """
    inside: Truths = (
        _between(pipe_diameter, 0.05, 0.63)
        & _between(bore / pipe_diameter, 0.2, 0.8)
        & _between(reynolds_number, 1e4, 1e7)
    )
    return ~inside


def venturi_nozzle_outside_limits(
    reynolds_number: Floats, *, bore: Floats, pipe_diameter: Floats
) -> Truths:
    """Return whether a Venturi nozzle is outside its limits of use.

    Parameters
    ----------
    reynolds_number, bore, pipe_diameter
        As in `isa_1932_outside_limits`.

    Returns
    -------
    (n,) boolean array
        Not: d >= 50 mm; 65 mm <= D <= 500 mm; 0.316 <= beta <= 0.775;
        1.5 x 10^5 <= Re_D <= 2 x 10^6.

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.3.4.1 (from memory). The pipe's roughness is not looked at.
    """
    inside: Truths = (
        (bore >= 0.05)
        & _between(pipe_diameter, 0.065, 0.5)
        & _between(bore / pipe_diameter, 0.316, 0.775)
        & _between(reynolds_number, 1.5e5, 2e6)
    )
    return ~inside


def _between(values: Floats, low: float, high: float) -> Truths:
    inside: Truths = (values >= low) & (values <= high)
    return inside


def _possible(diameter_ratio: Floats) -> Floats:
    """Return the ratios as an array, or raise for the first that none can have; NaN passes."""
    beta = contiguous(diameter_ratio)
    impossible = (beta <= 0.0) | (beta >= 1.0)
    if impossible.any():
        first = beta[np.flatnonzero(impossible)[0]]
        raise ValueError(f"diameter ratio is {first:.6g}; it must be between 0 and 1")
    return beta
