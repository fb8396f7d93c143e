"""What the sources of the equations of state say of the uncertainty of their densities.

Every figure is a relative expanded uncertainty (k = 2, about 95 %), of the equation alone: that
of pressure, temperature and composition comes on top. An equation's error is systematic: the
same at the same state whatever the number of readings.

The figures bound the density, so they hold for base conditions too, where the equations are in
fact far closer (the whole correction by Z is 0.2 % or so of a natural gas there).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.composition_range import INTERMEDIATE_QUALITY, PIPELINE_QUALITY
from meterfix.calc.gas.gerg_gas import (
    EXTENDED_PRESSURE,
    EXTENDED_TEMPERATURE,
    RANGE_PRESSURE,
    RANGE_TEMPERATURE,
)
from meterfix.frames import Floats
from meterfix.model.gas import StateModel

COVERAGE_FACTOR = 2.0
"""Of every figure here [-]."""


@dataclass(frozen=True, slots=True)
class StatedRegion:
    """A region of pressure and temperature with one stated uncertainty."""

    lowest_temperature: float
    """K."""
    highest_temperature: float
    """K."""
    highest_pressure: float
    """Pa, absolute."""
    relative: float
    """Expanded uncertainty of the density, relative, k = 2."""
    source: str


_TARGETED = "AGA Report No. 8:1994, figure of targeted uncertainties of natural gas, region"

DETAIL_PIPELINE: tuple[StatedRegion, ...] = (
    StatedRegion(
        265.15,
        335.15,
        12e6,
        0.001,
        f"{_TARGETED} 1 (from memory); ISO 20765-1:2005, scope: about 0.1 %, 95 % confidence",
    ),
    StatedRegion(213.15, 393.15, 17e6, 0.003, f"{_TARGETED} 2 (from memory)"),
    StatedRegion(143.15, 473.15, 70e6, 0.005, f"{_TARGETED} 3 (from memory)"),
    StatedRegion(143.15, 673.15, 140e6, 0.01, f"{_TARGETED} 4 (from memory)"),
)
"""AGA8 DETAIL, pipeline-quality gas, the tightest region first."""

DETAIL_WIDER: tuple[StatedRegion, ...] = (
    StatedRegion(
        263.15,
        338.15,
        10e6,
        0.005,
        "ISO 12213-2:2006, annex E, wider ranges of composition: up to 0.5 % (from memory)",
    ),
    StatedRegion(
        225.15,
        350.15,
        30e6,
        0.01,
        "ISO 12213-2:2006, annex E, wider ranges of composition and pressure (from memory)",
    ),
)
"""AGA8 DETAIL, gas of intermediate quality. Against GERG-2008 it differs by up to 0.5 % on a
rich gas above 6 MPa."""

_GERG = "Kunz and Wagner 2012, ISO 20765-2:2015"

GERG_NATURAL: tuple[StatedRegion, ...] = (
    StatedRegion(250.0, 450.0, 35e6, 0.001, f"{_GERG}: gas density (from memory)"),
    StatedRegion(
        *RANGE_TEMPERATURE,
        RANGE_PRESSURE,
        0.005,
        f"{_GERG}: rest of the normal range (from memory)",
    ),
    StatedRegion(
        *EXTENDED_TEMPERATURE, EXTENDED_PRESSURE, 0.01, f"{_GERG}: extended range (from memory)"
    ),
)
"""GERG-2008, natural gas up to intermediate quality."""

GERG_OTHER: tuple[StatedRegion, ...] = (
    StatedRegion(
        *RANGE_TEMPERATURE,
        RANGE_PRESSURE,
        0.01,
        f"{_GERG}: mixtures known by few data, 0.5 % to 1 % (from memory)",
    ),
)
"""GERG-2008, any other composition: hydrogen, CO2 or a pure component among them."""

REFERENCE: tuple[StatedRegion, ...] = (
    StatedRegion(
        240.0,
        450.0,
        30e6,
        0.001,
        "upper bound of what the papers of these reference equations state for gas densities, "
        "0.02 % to 0.1 %, away from the critical point (from memory)",
    ),
)
REFERENCE_COMPONENTS = frozenset(
    {
        "air",
        "argon",
        "carbon_dioxide",
        "ethane",
        "helium",
        "hydrogen",
        "methane",
        "nitrogen",
        "oxygen",
        "propane",
    }
)
"""Components whose reference equation that statement covers."""


def stated_regions(
    model: StateModel, mole_fractions: tuple[tuple[str, float], ...]
) -> tuple[StatedRegion, ...]:
    """Return the regions for which a model's uncertainty is stated, the tightest first.

    Parameters
    ----------
    model
        How density is computed.
    mole_fractions
        Components and mole fractions, normalised to a sum of 1.

    Returns
    -------
    tuple of StatedRegion
        Empty where no source states an uncertainty for this model and composition: always for
        the ideal gas and a fixed compression factor.
    """
    present = {name for name, x in mole_fractions if x > 0.0}
    natural = not INTERMEDIATE_QUALITY.excludes(mole_fractions)
    if model is StateModel.AGA8_DETAIL:
        if not PIPELINE_QUALITY.excludes(mole_fractions):
            return DETAIL_PIPELINE
        return DETAIL_WIDER if natural else ()
    if model is StateModel.GERG_2008:
        return GERG_NATURAL if natural else GERG_OTHER
    if model is StateModel.REFERENCE and len(present) == 1 and present <= REFERENCE_COMPONENTS:
        return REFERENCE
    return ()


def density_relative_uncertainty(
    model: StateModel,
    mole_fractions: tuple[tuple[str, float], ...],
    pressure: Floats,
    temperature: Floats,
) -> Floats:
    """Return the stated relative expanded uncertainty of a model's density.

    Parameters
    ----------
    model
        How density is computed.
    mole_fractions
        Components and mole fractions, normalised to a sum of 1.
    pressure, temperature : (n,) arrays
        Absolute pressure [Pa] and temperature [K] of the gas.

    Returns
    -------
    (n,) array
        Expanded, k = `COVERAGE_FACTOR` [-]; NaN where the state is not known or nothing is
        stated. The source of each figure stands in `stated_regions`.
    """
    p, T = contiguous(pressure), contiguous(temperature)
    result = np.full(len(p), np.nan)
    for region in reversed(stated_regions(model, mole_fractions)):
        inside = (
            (p > 0.0)
            & (p <= region.highest_pressure)
            & (region.lowest_temperature <= T)
            & (region.highest_temperature >= T)
        )
        result = np.where(inside, region.relative, result)
    return result
