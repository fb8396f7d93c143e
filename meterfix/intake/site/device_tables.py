"""What a site file may say of a primary device: orifice plate, nozzle or Venturi tube."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field

from meterfix.intake.site.shapes import (
    AccuracyTable,
    Expansion,
    Length,
    Percent,
    Table,
    Temperature,
)

Coefficient = Annotated[float, Field(gt=0, le=1.5, allow_inf_nan=False)]
ReynoldsNumber = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Serial = Annotated[str, Field(min_length=1, max_length=64, description="tells plates apart")]


class CalibrationTable(Table):
    """A discharge coefficient from a calibration instead of the standard's."""

    value: Coefficient
    certificate: str = Field(min_length=1, max_length=100)
    uncertainty: AccuracyTable
    reynolds_number: Annotated[list[ReynoldsNumber], Field(min_length=2, max_length=2)] | None = (
        Field(None, description="[lowest, highest] Re_D of the calibration")
    )


class DeviceTable(Table):
    """What all primary devices have: a bore or throat in a pipe."""

    serial: Serial | None = None
    bore: Length
    pipe_diameter: Length
    bore_uncertainty: AccuracyTable | None = None
    pipe_diameter_uncertainty: AccuracyTable | None = None
    bore_expansion: Expansion
    pipe_expansion: Expansion
    reference_temperature: Temperature | None = None
    bore_reference_temperature: Temperature | None = None
    pipe_reference_temperature: Temperature | None = None
    discharge_coefficient: CalibrationTable | None = Field(
        None, description="from a calibration; left out: the standard's"
    )
    short_straight_lengths: bool = Field(
        False, description="lengths that the standard allows with 0.5 % more uncertainty"
    )


class DeviceChangeTable(Table):
    """What changed on a device; the rest stays, unless it is of another family."""

    serial: Serial | None = None
    bore: Length | None = None
    pipe_diameter: Length | None = None
    bore_uncertainty: AccuracyTable | None = None
    pipe_diameter_uncertainty: AccuracyTable | None = None
    bore_expansion: Expansion | None = None
    pipe_expansion: Expansion | None = None
    reference_temperature: Temperature | None = None
    bore_reference_temperature: Temperature | None = None
    pipe_reference_temperature: Temperature | None = None
    discharge_coefficient: CalibrationTable | None = None
    short_straight_lengths: bool | None = None


AnyTappings = Literal["corner", "D_and_D/2", "flange"]
AnyNozzle = Literal["ISA_1932", "long_radius", "Venturi_nozzle"]
AnyVenturi = Literal["as_cast", "machined", "rough_welded"]
PressureLoss = Annotated[Percent, Field(description="permanent pressure loss, of dp")]


class OrificeTable(DeviceTable):
    """An orifice plate in its pipe."""

    tappings: AnyTappings


class OrificeChangeTable(DeviceChangeTable):
    """What changed on an orifice plate."""

    tappings: AnyTappings | None = None


class NozzleTable(DeviceTable):
    """A nozzle or Venturi nozzle; `bore` is its throat."""

    form: AnyNozzle
    pressure_loss: PressureLoss | None = None


class NozzleChangeTable(DeviceChangeTable):
    """What changed on a nozzle."""

    form: AnyNozzle | None = None
    pressure_loss: PressureLoss | None = None


class VenturiTable(DeviceTable):
    """A classical Venturi tube; `bore` is its throat, `pipe_diameter` its entrance."""

    form: AnyVenturi
    pressure_loss: PressureLoss | None = None


class VenturiChangeTable(DeviceChangeTable):
    """What changed on a Venturi tube."""

    form: AnyVenturi | None = None
    pressure_loss: PressureLoss | None = None


FAMILIES: dict[str, type[DeviceTable]] = {
    "orifice": OrificeTable,
    "nozzle": NozzleTable,
    "venturi_tube": VenturiTable,
}
"""The key of each family of devices in a meter's table, and what may stand there."""
