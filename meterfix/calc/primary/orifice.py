"""Orifice plates with corner, D and D/2, or flange tappings, ISO 5167-2:2003.

Every kernel is element-wise and broadcasts, so that one call may mix the records of a thousand
different plates; the tappings are a code per record. NaN in gives NaN out.
"""

from __future__ import annotations

import numpy as np

from meterfix.calc.elementary import contiguous, exponential, power
from meterfix.calc.primary.discharge import DischargeTerms
from meterfix.frames import Floats, Integers, Truths
from meterfix.model.device import Tappings

TAPPINGS_CODES: dict[Tappings, int] = {
    Tappings.CORNER: 0,
    Tappings.D_AND_D_2: 1,
    Tappings.FLANGE: 2,
}
"""The code by which a kernel knows the tappings of each record."""

LOWEST_PRESSURE_RATIO = 0.75
"""p2/p1 down to which the expansibility equation holds; ISO 5167-2:2003, 5.3.2.2."""

_FLANGE_DISTANCE = 0.0254
"""From the plate to a flange tapping [m]; ISO 5167-2:2003, 5.2.3."""
_UPSTREAM_DISTANCE = np.array([0.0, 1.0, 0.0])
"""L1 by code, distance over pipe diameter; that of flange tappings depends on the pipe."""
_DOWNSTREAM_DISTANCE = np.array([0.0, 0.47, 0.0])
"""L2' by code."""

# 10^1.8, 10^4.2 and 19000^0.8, written out so that no platform's own power enters
_MILLION_03 = 63.09573444801932494
_MILLION_07 = 15848.93192461113485
_NINETEEN_THOUSAND_08 = 2648.517706696731573


def diameter_at(
    temperature: Floats,
    *,
    diameter: Floats | float,
    expansion: Floats | float,
    reference_temperature: Floats | float,
) -> Floats:
    """Return a bore or pipe diameter at the working temperature.

    Parameters
    ----------
    temperature : (n,) array
        Of plate and pipe, taken as that of the gas. [K]
    diameter : (n,) array or float
        At the reference temperature. [m]
    expansion : (n,) array or float
        Linear thermal expansion coefficient. [1/K]
    reference_temperature : (n,) array or float
        At which the diameter was measured. [K]

    Returns
    -------
    (n,) array
        [m]

    References
    ----------
    .. [1] ISO 5167-1:2003, 5.4.4.1 (clause from memory): d and D are those at working
       conditions; linear law: common practice.
    """
    return diameter * (1.0 + expansion * (temperature - reference_temperature))


def discharge_terms(*, bore: Floats, pipe_diameter: Floats, tappings: Integers) -> DischargeTerms:
    """Return the terms of the Reader-Harris/Gallagher discharge coefficient.

    Parameters
    ----------
    bore, pipe_diameter : (n,) arrays
        Diameters d and D at working conditions. [m]
    tappings : (n,) integer array
        Codes, see `TAPPINGS_CODES`.

    Returns
    -------
    DischargeTerms
        (n,) arrays; also outside the limits of use, where the value has no stated uncertainty.

    Raises
    ------
    ValueError
        If a diameter is not positive or a bore is not smaller than its pipe.

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.2.1, equation (4), with the added term for D < 71.12 mm.
    """
    d, D = contiguous(bore), contiguous(pipe_diameter)
    _refuse_impossible(d, D)
    beta = d / D
    tenth = power(beta, 0.1)  # the broken powers of beta are whole powers of this and of beta
    tenth2 = tenth * tenth
    tenth3 = tenth2 * tenth
    tenth5 = tenth3 * tenth2
    beta2 = beta * beta
    beta4 = beta2 * beta2
    beta08 = tenth5 * tenth3
    beta35 = beta2 * beta * tenth5

    flange = tappings == TAPPINGS_CODES[Tappings.FLANGE]
    flange_distance = _FLANGE_DISTANCE / D
    L1 = np.where(flange, flange_distance, _UPSTREAM_DISTANCE[tappings])
    L2 = np.where(flange, flange_distance, _DOWNSTREAM_DISTANCE[tappings])

    decay = exponential(-L1)
    decay3 = decay * decay * decay
    decay7 = decay3 * decay3 * decay
    upstream = (
        (0.043 + decay7 * (0.080 * decay3 - 0.123)) * beta4 / (1.0 - beta4)
    )  # exp(-10 L1) = exp(-7 L1) exp(-3 L1)
    M2 = 2.0 * L2 / (1.0 - beta)
    downstream = 0.031 * M2 * (1.0 - 0.8 * power(M2, 0.1)) * beta * tenth3
    small_pipe = 0.011 * (0.75 - beta) * np.maximum(2.8 - D / 0.0254, 0.0)

    A08 = _NINETEEN_THOUSAND_08 * beta08  # A = A08 u^8
    return DischargeTerms(
        constant=0.5961
        + 0.0261 * beta2
        - 0.216 * (beta4 * beta4)
        + upstream
        - downstream
        + small_pipe,
        c3=0.0188 * _MILLION_03 * beta35,
        c7=0.000521 * _MILLION_07 * (tenth5 * tenth2),
        c8=-0.11 * A08 * upstream,
        c11=0.0063 * _MILLION_03 * A08 * beta35,
    )


def discharge_coefficient(
    reynolds_number: Floats, *, bore: Floats, pipe_diameter: Floats, tappings: Integers
) -> Floats:
    """Return the Reader-Harris/Gallagher discharge coefficient at a known Reynolds number.

    Parameters
    ----------
    reynolds_number : (n,) array
        Re_D, referred to the pipe diameter. [-]
    bore, pipe_diameter, tappings
        As in `discharge_terms`.

    Returns
    -------
    (n,) array
        [-]

    Raises
    ------
    ValueError
        As `discharge_terms`.

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.2.1, equation (4).
    """
    terms = discharge_terms(bore=bore, pipe_diameter=pipe_diameter, tappings=tappings)
    return terms.at(power(reynolds_number, -0.1))


def expansibility(
    differential_pressure: Floats,
    static_pressure: Floats,
    isentropic_exponent: Floats,
    *,
    diameter_ratio: Floats,
) -> Floats:
    """Return the expansibility [expansion] factor of a gas through an orifice plate.

    Parameters
    ----------
    differential_pressure : (n,) array
        Upstream minus downstream tapping. [Pa]
    static_pressure : (n,) array
        Absolute, at the upstream tapping. [Pa]
    isentropic_exponent : (n,) array
        kappa of the gas at the upstream tapping. [-]
    diameter_ratio : (n,) array
        At working conditions. [-]

    Returns
    -------
    (n,) array
        Exactly 1 at zero differential pressure; NaN where an input is NaN or the differential
        pressure exceeds the static pressure. Stated for p2/p1 >= 0.75. [-]

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.2.2, equation (5).
    """
    beta2 = diameter_ratio * diameter_ratio
    beta4 = beta2 * beta2
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = (static_pressure - differential_pressure) / static_pressure
        falling = power(ratio, 1.0 / isentropic_exponent)
    return 1.0 - (0.351 + 0.256 * beta4 + 0.93 * (beta4 * beta4)) * (1.0 - falling)


def pressure_loss(
    differential_pressure: Floats, discharge_coefficient: Floats, *, diameter_ratio: Floats
) -> Floats:
    """Return the permanent pressure loss of an orifice plate.

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
        From one pipe diameter upstream to six downstream. [Pa]

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.4.1, equation (7).
    """
    beta2 = diameter_ratio * diameter_ratio
    contracted = discharge_coefficient * beta2
    root = np.sqrt(1.0 - beta2 * beta2 * (1.0 - discharge_coefficient * discharge_coefficient))
    loss: Floats = (root - contracted) / (root + contracted) * differential_pressure
    return loss


def geometry_outside_limits(*, bore: Floats, pipe_diameter: Floats) -> Truths:
    """Return whether bore, pipe diameter or diameter ratio is outside the limits of use.

    Parameters
    ----------
    bore, pipe_diameter : (n,) arrays
        [m]

    Returns
    -------
    (n,) boolean array
        Not: d >= 12.5 mm, 50 mm <= D <= 1000 mm, 0.1 <= beta <= 0.75.

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.1.
    """
    beta = bore / pipe_diameter
    inside: Truths = (
        (bore >= 0.0125)
        & (pipe_diameter >= 0.05)
        & (pipe_diameter <= 1.0)
        & (beta >= 0.1)
        & (beta <= 0.75)
    )
    return ~inside


def reynolds_number_outside_limits(
    reynolds_number: Floats, *, bore: Floats, pipe_diameter: Floats, tappings: Integers
) -> Truths:
    """Return whether the Reynolds number is outside the limits of use of the tappings.

    Parameters
    ----------
    reynolds_number : (n,) array
        Re_D. [-]
    bore, pipe_diameter : (n,) arrays
        [m]
    tappings : (n,) integer array
        Codes, see `TAPPINGS_CODES`.

    Returns
    -------
    (n,) boolean array
        Corner, D and D/2: below 5 000 for beta <= 0.56, below 16 000 beta^2 for greater ones.
        Flange: below 5 000 or below 170 beta^2 D with D in mm. True where Re_D is NaN.

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.1.
    """
    beta = bore / pipe_diameter
    beta2 = beta * beta
    flange = np.maximum(5000.0, 170.0 * beta2 * (1000.0 * pipe_diameter))
    others = np.where(beta <= 0.56, 5000.0, 16000.0 * beta2)
    lowest = np.where(tappings == TAPPINGS_CODES[Tappings.FLANGE], flange, others)
    inside: Truths = reynolds_number >= lowest
    return ~inside


def _refuse_impossible(bore: Floats, pipe_diameter: Floats) -> None:
    """Raise for the first diameter that no plate and pipe can have; NaN passes."""
    impossible = (bore <= 0.0) | (bore >= pipe_diameter)
    if impossible.any():
        d, D = np.broadcast_arrays(bore, pipe_diameter)
        first = int(np.flatnonzero(impossible)[0])
        message = (
            f"bore is {d.flat[first] * 1000:.6g} mm in a pipe of {D.flat[first] * 1000:.6g} mm; "
            f"it must be greater than 0 and smaller than the pipe"
        )
        raise ValueError(message)
