"""What ISO 5167 states as the uncertainty of C, of the expansibility and of the mass flow.

All results are relative expanded uncertainties, as fractions, at a level of confidence of about
95 % (k = 2): the standard uncertainty is half of them. NaN outside the limits of use: there the
standard claims none. Every function is element-wise and broadcasts.

Short straight lengths and a slight eccentricity are facts of the installation, one truth value
per record; what the standard adds for them is added arithmetically, not in quadrature.
"""

from __future__ import annotations

import numpy as np

from meterfix.calc.primary import adiabatic, nozzle, orifice, venturi
from meterfix.calc.primary.venturi import ClassicalVenturi
from meterfix.frames import Floats, Integers, Truths

SHORT_STRAIGHT_LENGTHS = 0.005
"""Added for straight lengths below those of zero additional uncertainty, but not below those of
0.5 %; ISO 5167-2:2003, 6.2.4, ISO 5167-3:2003, 6.2.4, ISO 5167-4:2003, 6.2.4 (from memory)."""
SLIGHT_ECCENTRICITY = 0.003
"""Added for an orifice plate off the pipe's axis by one to two times what is free of it;
ISO 5167-2:2003, 6.4.3 (from memory)."""


def orifice_discharge_uncertainty(
    reynolds_number: Floats,
    *,
    bore: Floats,
    pipe_diameter: Floats,
    tappings: Integers,
    short_straight_lengths: Truths | bool = False,
    slightly_eccentric: Truths | bool = False,
) -> Floats:
    """Return the relative expanded uncertainty of an orifice plate's discharge coefficient.

    Parameters
    ----------
    reynolds_number : (n,) array
        Re_D. [-]
    bore, pipe_diameter : (n,) arrays
        At working conditions. [m]
    tappings : (n,) integer array
        Codes, see `meterfix.calc.primary.orifice.TAPPINGS_CODES`.
    short_straight_lengths, slightly_eccentric : (n,) boolean arrays or bool
        See `SHORT_STRAIGHT_LENGTHS` and `SLIGHT_ECCENTRICITY`.

    Returns
    -------
    (n,) array
        [-]

    Notes
    -----
    (0.7 - beta) % below 0.2, 0.5 % from there to 0.6, (1.667 beta - 0.5) % above;
    + 0.9 (0.75 - beta) (2.8 - D/25.4 mm) % for D < 71.12 mm; + 0.5 % where beta > 0.5 and
    Re_D < 10 000.

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.3.1 (traced but for the two lower branches: from memory).
    """
    beta = bore / pipe_diameter
    percent = np.where(beta < 0.2, 0.7 - beta, np.where(beta <= 0.6, 0.5, 1.667 * beta - 0.5))
    percent = percent + 0.9 * (0.75 - beta) * np.maximum(2.8 - pipe_diameter / 0.0254, 0.0)
    percent = percent + np.where((beta > 0.5) & (reynolds_number < 1e4), 0.5, 0.0)
    outside = orifice.geometry_outside_limits(
        bore=bore, pipe_diameter=pipe_diameter
    ) | orifice.reynolds_number_outside_limits(
        reynolds_number, bore=bore, pipe_diameter=pipe_diameter, tappings=tappings
    )
    return _with_installation(
        0.01 * percent, outside, short=short_straight_lengths, eccentric=slightly_eccentric
    )


def orifice_expansibility_uncertainty(
    differential_pressure: Floats, static_pressure: Floats, isentropic_exponent: Floats
) -> Floats:
    """Return the relative expanded uncertainty of an orifice plate's expansibility.

    Parameters
    ----------
    differential_pressure : (n,) array
        [Pa]
    static_pressure : (n,) array
        Absolute, at the upstream tapping. [Pa]
    isentropic_exponent : (n,) array
        [-]

    Returns
    -------
    (n,) array
        3.5 dp/(kappa p1) %; NaN where p2/p1 < 0.75. [-]

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.3.2.
    """
    share = _pressure_share(differential_pressure, static_pressure)
    return 0.035 * share / isentropic_exponent


def isa_1932_discharge_uncertainty(
    reynolds_number: Floats,
    *,
    bore: Floats,
    pipe_diameter: Floats,
    short_straight_lengths: Truths | bool = False,
) -> Floats:
    """Return the relative expanded uncertainty of an ISA 1932 nozzle's discharge coefficient.

    Parameters
    ----------
    reynolds_number : (n,) array
        Re_D. [-]
    bore, pipe_diameter : (n,) arrays
        Throat and pipe, at working conditions. [m]
    short_straight_lengths : (n,) boolean array or bool
        See `SHORT_STRAIGHT_LENGTHS`.

    Returns
    -------
    (n,) array
        0.8 % for beta <= 0.6, (2 beta - 0.4) % above. [-]

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.1.7.1 (from memory).
    """
    beta = bore / pipe_diameter
    percent = np.where(beta <= 0.6, 0.8, 2.0 * beta - 0.4)
    outside = nozzle.isa_1932_outside_limits(
        reynolds_number, bore=bore, pipe_diameter=pipe_diameter
    )
    return _with_installation(0.01 * percent, outside, short=short_straight_lengths)


def long_radius_discharge_uncertainty(
    reynolds_number: Floats,
    *,
    bore: Floats,
    pipe_diameter: Floats,
    short_straight_lengths: Truths | bool = False,
) -> Floats:
    """Return the relative expanded uncertainty of a long-radius nozzle's discharge coefficient.

    Parameters
    ----------
    reynolds_number, bore, pipe_diameter, short_straight_lengths
        As in `isa_1932_discharge_uncertainty`.

    Returns
    -------
    (n,) array
        2 % at every beta. [-]

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.2.7.1 (from memory).
    """
    outside = nozzle.long_radius_outside_limits(
        reynolds_number, bore=bore, pipe_diameter=pipe_diameter
    )
    return _with_installation(np.full(outside.shape, 0.02), outside, short=short_straight_lengths)


def venturi_nozzle_discharge_uncertainty(
    reynolds_number: Floats,
    *,
    bore: Floats,
    pipe_diameter: Floats,
    short_straight_lengths: Truths | bool = False,
) -> Floats:
    """Return the relative expanded uncertainty of a Venturi nozzle's discharge coefficient.

    Parameters
    ----------
    reynolds_number, bore, pipe_diameter, short_straight_lengths
        As in `isa_1932_discharge_uncertainty`.

    Returns
    -------
    (n,) array
        (1.2 + 1.5 beta^4) %. [-]

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.3.5.1 (from memory).
    """
    beta = bore / pipe_diameter
    beta2 = beta * beta
    outside = nozzle.venturi_nozzle_outside_limits(
        reynolds_number, bore=bore, pipe_diameter=pipe_diameter
    )
    return _with_installation(
        0.012 + 0.015 * (beta2 * beta2), outside, short=short_straight_lengths
    )


def venturi_discharge_uncertainty(
    kind: ClassicalVenturi,
    reynolds_number: Floats,
    *,
    bore: Floats,
    pipe_diameter: Floats,
    short_straight_lengths: Truths | bool = False,
) -> Floats:
    """Return the relative expanded uncertainty of a classical Venturi's discharge coefficient.

    Parameters
    ----------
    kind
        `AS_CAST`, `MACHINED` or `ROUGH_WELDED` of `meterfix.calc.primary.venturi`.
    reynolds_number, bore, pipe_diameter, short_straight_lengths
        As in `isa_1932_discharge_uncertainty`.

    Returns
    -------
    (n,) array
        0.7 % as cast, 1 % machined, 1.5 % rough-welded. [-]

    References
    ----------
    .. [1] ISO 5167-4:2003, 5.7 (from memory).
    """
    outside = venturi.venturi_outside_limits(
        kind, reynolds_number, bore=bore, pipe_diameter=pipe_diameter
    )
    return _with_installation(
        np.full(outside.shape, kind.relative_uncertainty), outside, short=short_straight_lengths
    )


def nozzle_expansibility_uncertainty(
    differential_pressure: Floats, static_pressure: Floats
) -> Floats:
    """Return the relative expanded uncertainty of an ISA 1932 or long-radius expansibility.

    Parameters
    ----------
    differential_pressure : (n,) array
        [Pa]
    static_pressure : (n,) array
        Absolute, at the upstream tapping. [Pa]

    Returns
    -------
    (n,) array
        2 dp/p1 %; NaN where p2/p1 < 0.75. [-]

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.1.7.2 and 5.2.7.2 (from memory).
    """
    return 0.02 * _pressure_share(differential_pressure, static_pressure)


def venturi_expansibility_uncertainty(
    differential_pressure: Floats, static_pressure: Floats, *, diameter_ratio: Floats
) -> Floats:
    """Return the relative expanded uncertainty of a Venturi nozzle's or tube's expansibility.

    Parameters
    ----------
    differential_pressure, static_pressure
        As in `nozzle_expansibility_uncertainty`.
    diameter_ratio : (n,) array
        At working conditions. [-]

    Returns
    -------
    (n,) array
        (4 + 100 beta^8) dp/p1 %; NaN where p2/p1 < 0.75. [-]

    References
    ----------
    .. [1] ISO 5167-3:2003, 5.3.5.2; ISO 5167-4:2003, 5.8 (from memory).
    """
    beta2 = diameter_ratio * diameter_ratio
    beta4 = beta2 * beta2
    share = _pressure_share(differential_pressure, static_pressure)
    return (0.04 + beta4 * beta4) * share


def mass_flow_uncertainty(
    *,
    diameter_ratio: Floats,
    discharge_coefficient: Floats,
    expansibility: Floats,
    pipe_diameter: Floats,
    bore: Floats,
    differential_pressure: Floats,
    density: Floats,
) -> Floats:
    """Return the relative uncertainty of one mass flow from those of its inputs, uncorrelated.

    The standard's own working formula for a single flow; totals are not made with it.

    Parameters
    ----------
    diameter_ratio : (n,) array
        [-]
    discharge_coefficient, expansibility, pipe_diameter, bore, differential_pressure, density
        (n,) arrays: relative uncertainties, all at the same level of confidence. [-]

    Returns
    -------
    (n,) array
        At that level of confidence. [-]

    References
    ----------
    .. [1] ISO 5167-1:2003, 8.2.2.1, equation (3).
    """
    beta2 = diameter_ratio * diameter_ratio
    beta4 = beta2 * beta2
    pipe_part = 2.0 * beta4 / (1.0 - beta4) * pipe_diameter
    bore_part = 2.0 / (1.0 - beta4) * bore
    found: Floats = np.sqrt(
        discharge_coefficient * discharge_coefficient
        + expansibility * expansibility
        + pipe_part * pipe_part
        + bore_part * bore_part
        + 0.25 * (differential_pressure * differential_pressure)
        + 0.25 * (density * density)
    )
    return found


def _with_installation(
    stated: Floats,
    outside: Truths,
    *,
    short: Truths | bool,
    eccentric: Truths | bool = False,
) -> Floats:
    """Return the stated uncertainty with what the installation adds; NaN outside the limits."""
    total = (
        stated
        + np.where(short, SHORT_STRAIGHT_LENGTHS, 0.0)
        + np.where(eccentric, SLIGHT_ECCENTRICITY, 0.0)
    )
    return np.where(outside, np.nan, total)


def _pressure_share(differential_pressure: Floats, static_pressure: Floats) -> Floats:
    """Return dp/p1 where the expansibility has a stated uncertainty, else NaN."""
    with np.errstate(invalid="ignore", divide="ignore"):
        share = differential_pressure / static_pressure
    inside = (share >= 0.0) & (share <= 1.0 - adiabatic.LOWEST_PRESSURE_RATIO)
    return np.where(inside, share, np.nan)
