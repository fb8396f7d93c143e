"""Classical Venturi tubes: as cast, machined, rough-welded, ISO 5167-4:2003.

Their expansibility is `adiabatic_expansibility`, their thermal expansion that of the orifice
plate (`diameter_at`). Every kernel is element-wise and broadcasts. NaN in gives NaN out, and
counts as outside the limits of use.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.calc.primary.discharge import DischargeTerms
from meterfix.calc.primary.discharge_forms import constant_discharge_terms
from meterfix.frames import Floats, Truths


@dataclass(frozen=True, slots=True)
class ClassicalVenturi:
    """A way of making the convergent part, with its constants and limits of use."""

    discharge_coefficient: float
    """Within the limits of use [-]."""
    relative_uncertainty: float
    """Of the discharge coefficient, as the standard states it (95 %) [-]."""
    pipe_diameter: tuple[float, float]
    """Lowest and highest D [m]."""
    diameter_ratio: tuple[float, float]
    reynolds_number: tuple[float, float]
    """Lowest and highest Re_D."""


AS_CAST = ClassicalVenturi(0.984, 0.007, (0.1, 0.8), (0.3, 0.75), (2e5, 2e6))
"""ISO 5167-4:2003, 5.5.2 and 5.7.1 (from memory)."""
MACHINED = ClassicalVenturi(0.995, 0.010, (0.05, 0.25), (0.4, 0.75), (2e5, 1e6))
"""ISO 5167-4:2003, 5.5.3 and 5.7.2 (from memory)."""
ROUGH_WELDED = ClassicalVenturi(0.985, 0.015, (0.2, 1.2), (0.4, 0.7), (2e5, 2e6))
"""ISO 5167-4:2003, 5.5.4 and 5.7.3 (from memory)."""

LOWEST_RELATIVE_PRESSURE_LOSS = 0.05
HIGHEST_RELATIVE_PRESSURE_LOSS = 0.20
"""Usual share of the differential pressure that is lost; ISO 5167-4:2003, 5.9 (from memory).
At beta of 0.7 and more it may be down to 4 %."""


def venturi_discharge_terms(kind: ClassicalVenturi, *, diameter_ratio: Floats) -> DischargeTerms:
    """Return the terms of the discharge coefficient: a constant, whatever beta and Re_D.

    Parameters
    ----------
    kind
        `AS_CAST`, `MACHINED` or `ROUGH_WELDED`.
    diameter_ratio : (n,) array
        At working conditions; only its shape and its NaN matter. [-]

    Returns
    -------
    DischargeTerms
        (n,) arrays; also outside the limits of use, where the value has no stated uncertainty.

    Raises
    ------
    ValueError
        If a diameter ratio is not between 0 and 1.

    References
    ----------
    .. [1] ISO 5167-4:2003, 5.5.
    """
    beta = contiguous(diameter_ratio)
    impossible = (beta <= 0.0) | (beta >= 1.0)
    if impossible.any():
        first = beta[np.flatnonzero(impossible)[0]]
        raise ValueError(f"diameter ratio is {first:.6g}; it must be between 0 and 1")
    return constant_discharge_terms(np.where(np.isnan(beta), np.nan, kind.discharge_coefficient))


def pressure_loss_range(differential_pressure: Floats) -> tuple[Floats, Floats]:
    """Return the range that the permanent pressure loss usually lies in.

    The standard gives no equation: the loss depends on the divergent's angle and cut.

    Parameters
    ----------
    differential_pressure : (n,) array
        [Pa]

    Returns
    -------
    (n,) array, (n,) array
        Lowest and highest usual loss, of Venturi tubes and Venturi nozzles. [Pa]

    References
    ----------
    .. [1] ISO 5167-4:2003, 5.9 (from memory): usually 5 to 20 % of the differential pressure.
    """
    return (
        LOWEST_RELATIVE_PRESSURE_LOSS * differential_pressure,
        HIGHEST_RELATIVE_PRESSURE_LOSS * differential_pressure,
    )


def venturi_outside_limits(
    kind: ClassicalVenturi, reynolds_number: Floats, *, bore: Floats, pipe_diameter: Floats
) -> Truths:
    """Return whether a classical Venturi tube is outside its limits of use.

    Parameters
    ----------
    kind
        `AS_CAST`, `MACHINED` or `ROUGH_WELDED`.
    reynolds_number : (n,) array
        Re_D. [-]
    bore, pipe_diameter : (n,) arrays
        Throat and entrance cylinder, at working conditions. [m]

    Returns
    -------
    (n,) boolean array
        D, beta or Re_D outside the kind's limits.

    References
    ----------
    .. [1] ISO 5167-4:2003, 5.5.2, 5.5.3 and 5.5.4 (from memory).
    """
    beta = bore / pipe_diameter
    inside: Truths = (
        (pipe_diameter >= kind.pipe_diameter[0])
        & (pipe_diameter <= kind.pipe_diameter[1])
        & (beta >= kind.diameter_ratio[0])
        & (beta <= kind.diameter_ratio[1])
        & (reynolds_number >= kind.reynolds_number[0])
        & (reynolds_number <= kind.reynolds_number[1])
    )
    return ~inside
