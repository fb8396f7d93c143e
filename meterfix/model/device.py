"""Primary devices: geometry and material, SI, at a stated temperature."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class Tappings(StrEnum):
    """Pressure tappings of an orifice plate, ISO 5167-2:2003, 5.2."""

    CORNER = "corner"
    D_AND_D_2 = "D_and_D/2"
    FLANGE = "flange"


@dataclass(frozen=True, slots=True)
class OrificePlate:
    """A square-edged concentric orifice plate in its pipe."""

    bore: float
    """Diameter d at `bore_reference_temperature` [m]."""
    pipe_diameter: float
    """Internal diameter D at `pipe_reference_temperature` [m]."""
    tappings: Tappings
    bore_expansion: float
    """Linear thermal expansion coefficient of the plate [1/K]."""
    pipe_expansion: float
    """Linear thermal expansion coefficient of the pipe [1/K]."""
    bore_reference_temperature: float
    """K."""
    pipe_reference_temperature: float
    """K."""
