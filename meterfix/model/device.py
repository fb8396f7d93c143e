"""Primary devices: geometry and material, SI, at a stated temperature."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


class Tappings(StrEnum):
    """Pressure tappings of an orifice plate, ISO 5167-2:2003, 5.2."""

    CORNER = "corner"
    D_AND_D_2 = "D_and_D/2"
    FLANGE = "flange"


class NozzleForm(StrEnum):
    """Nozzles of ISO 5167-3:2003."""

    ISA_1932 = "ISA_1932"
    LONG_RADIUS = "long_radius"
    VENTURI_NOZZLE = "Venturi_nozzle"


class VenturiForm(StrEnum):
    """Convergent sections of the classical Venturi tube, ISO 5167-4:2003, 5.2."""

    AS_CAST = "as_cast"
    MACHINED = "machined"
    ROUGH_WELDED = "rough_welded"


@dataclass(frozen=True, slots=True)
class Calibration:
    """A discharge coefficient from a calibration instead of the standard."""

    discharge_coefficient: float
    """Constant [-]."""
    relative_standard_uncertainty: float
    """From the certificate (k = 1) [-]."""
    certificate: str
    reynolds_number_range: tuple[float, float] | None = None
    """Lowest and highest Re_D of the calibration [-]; None: not stated, then the standard's
    limits of use of the device stand."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Device:
    """What all primary devices have: a throat in a pipe."""

    bore: float
    """Bore or throat diameter d at `bore_reference_temperature` [m]."""
    pipe_diameter: float
    """Internal diameter D at `pipe_reference_temperature` [m]."""
    bore_expansion: float
    """Linear thermal expansion coefficient of the plate or throat [1/K]."""
    pipe_expansion: float
    """Linear thermal expansion coefficient of the pipe [1/K]."""
    bore_reference_temperature: float
    """K."""
    pipe_reference_temperature: float
    """K."""
    calibration: Calibration | None = None
    pressure_loss_ratio: float | None = None
    """Permanent pressure loss over dp, as stated [-]; None: by the standard's equation, which
    orifice plates, ISA 1932 and long radius nozzles have. Needed for the others, for which the
    standards give a range only."""
    short_straight_lengths: bool = False
    """Straight lengths that the standard allows with an additional 0.5 % uncertainty."""
    label: str = ""
    """Tells the plates of one meter apart: '' for the first, 'from INSTANT' or a given serial."""


@dataclass(frozen=True, slots=True, kw_only=True)
class OrificePlate(Device):
    """A square-edged concentric orifice plate."""

    tappings: Tappings


@dataclass(frozen=True, slots=True, kw_only=True)
class Nozzle(Device):
    """A nozzle or Venturi nozzle."""

    form: NozzleForm


@dataclass(frozen=True, slots=True, kw_only=True)
class VenturiTube(Device):
    """A classical Venturi tube."""

    form: VenturiForm
