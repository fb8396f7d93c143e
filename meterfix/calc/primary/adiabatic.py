"""Expansibility of a gas in nozzles and Venturi tubes: frictionless adiabatic flow, ISO 5167."""

from __future__ import annotations

import numpy as np

from meterfix.calc.elementary import contiguous, exponential, logarithm
from meterfix.frames import Floats

LOWEST_PRESSURE_RATIO = 0.75
"""p2/p1 down to which the expansibility is stated; ISO 5167-3:2003 and ISO 5167-4:2003."""


def adiabatic_expansibility(
    differential_pressure: Floats,
    static_pressure: Floats,
    isentropic_exponent: Floats,
    *,
    diameter_ratio: Floats,
) -> Floats:
    """Return the expansibility [expansion] factor of a gas through a nozzle or Venturi tube.

    For ISA 1932, long-radius and Venturi nozzles and for classical Venturi tubes.

    Parameters
    ----------
    differential_pressure : (n,) array
        Upstream minus throat tapping. [Pa]
    static_pressure : (n,) array
        Absolute, at the upstream tapping. [Pa]
    isentropic_exponent : (n,) array
        kappa of the gas at the upstream tapping; 1 is no special case. [-]
    diameter_ratio : (n,) array
        At working conditions. [-]

    Returns
    -------
    (n,) array
        Exactly 1 at zero differential pressure; NaN where an input is NaN or the differential
        pressure is not below the static pressure. Stated for p2/p1 >= 0.75. [-]

    Notes
    -----
    The standard's quotients are 0/0 at zero differential pressure and at kappa = 1, and lose
    their digits near it. With L = ln(tau) they are regrouped as

        epsilon^2 = tau^(2/kappa) (1 - beta^4) / (1 - beta^4 tau^(2/kappa))
                    x [(e^z - 1)/z] x [-L/(1 - tau)],   z = L (kappa - 1)/kappa,

    and each bracket is evaluated from the rounded exponential or ratio itself, whose error then
    cancels.

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.1.6.3, 5.2.6.3 and 5.3.4.3 (from memory); ISO 5167-4:2003, 5.6.
    """
    p1, dp, kappa = (
        contiguous(values)
        for values in (static_pressure, differential_pressure, isentropic_exponent)
    )
    beta2 = diameter_ratio * diameter_ratio
    beta4 = beta2 * beta2
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        ratio = (p1 - dp) / p1
        ratio = np.where(ratio > 0.0, ratio, np.nan)
        L = logarithm(ratio)
        throat = exponential(2.0 * L / kappa)
        rising = exponential(L * (kappa - 1.0) / kappa)
        growth = np.where(rising == 1.0, 1.0, (rising - 1.0) / logarithm(rising))
        fall = np.where(ratio == 1.0, 1.0, L / (ratio - 1.0))
        approach = (1.0 - beta4) / (1.0 - beta4 * throat)
        found: Floats = np.sqrt(throat * approach * growth * fall)
    return found
