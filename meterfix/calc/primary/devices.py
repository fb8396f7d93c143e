"""The primary devices of a batch of records: one device's figures beside each record."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields

import numpy as np

from meterfix.calc.primary.forms import (
    FORM_CODES,
    Form,
    geometry_outside_limits,
    reynolds_number_outside_limits,
)
from meterfix.calc.primary.orifice import diameter_at
from meterfix.frames import Floats, Integers, Truths
from meterfix.model.device import (
    Device,
    Nozzle,
    NozzleForm,
    OrificePlate,
    VenturiForm,
    VenturiTube,
)


@dataclass(frozen=True, slots=True)
class Devices:
    """The device of each record at its reference temperatures, (n,) arrays; see model.device."""

    bore: Floats
    bore_expansion: Floats
    bore_reference_temperature: Floats
    pipe_diameter: Floats
    pipe_expansion: Floats
    pipe_reference_temperature: Floats
    form: Integers
    """Codes, see `forms.FORM_CODES`."""
    calibrated: Floats
    """Discharge coefficient from a certificate [-]; NaN: by the standard."""
    lowest_reynolds_number: Floats
    """Of the calibration; NaN: not stated, as also the highest."""
    highest_reynolds_number: Floats
    calibration_uncertainty: Floats
    """Relative standard uncertainty of the calibrated coefficient [-]; NaN: not calibrated."""
    short_straight_lengths: Floats
    """1 where the standard adds to the uncertainty of C for short straight lengths, else 0."""
    pressure_loss_ratio: Floats
    """Permanent pressure loss over dp, as stated [-]; NaN: by the standard's equation."""

    def chosen(self, which: Integers | Truths) -> Devices:
        """Return the devices of some of the records."""
        return Devices(*(getattr(self, field.name)[which] for field in fields(self)))

    def diameters_at(self, temperature: Floats) -> tuple[Floats, Floats]:
        """Return bore and pipe diameter at working temperature.

        Parameters
        ----------
        temperature : (n,) array
            [K]

        Returns
        -------
        (n,) array, (n,) array
            [m]; the bore is NaN where only an absurd temperature makes the device impossible:
            a bad reading is a value, never an error.
        """
        bore = diameter_at(
            temperature,
            diameter=self.bore,
            expansion=self.bore_expansion,
            reference_temperature=self.bore_reference_temperature,
        )
        pipe_diameter = diameter_at(
            temperature,
            diameter=self.pipe_diameter,
            expansion=self.pipe_expansion,
            reference_temperature=self.pipe_reference_temperature,
        )
        return np.where((bore > 0.0) & (bore < pipe_diameter), bore, np.nan), pipe_diameter

    def geometry_outside_limits(self) -> Truths:
        """Return whether a device's geometry is outside the limits of its standard.

        Judged at the reference temperatures, else a plate of exactly 12.5 mm would go in and out
        of them with the weather. A calibrated device is free of them: the limits are those of
        the standard's discharge coefficient.
        """
        outside = geometry_outside_limits(
            bore=self.bore, pipe_diameter=self.pipe_diameter, form=self.form
        )
        return outside & np.isnan(self.calibrated)

    def reynolds_number_outside_limits(self, reynolds_number: Floats) -> Truths:
        """Return whether Re_D is outside the calibration's range, or else the standard's limits.

        Parameters
        ----------
        reynolds_number : (n,) array
            Re_D. [-]

        Returns
        -------
        (n,) boolean array
            True where Re_D is NaN.
        """
        inside_range = (reynolds_number >= self.lowest_reynolds_number) & (
            reynolds_number <= self.highest_reynolds_number
        )
        return np.where(
            np.isnan(self.lowest_reynolds_number),
            reynolds_number_outside_limits(
                reynolds_number, bore=self.bore, pipe_diameter=self.pipe_diameter, form=self.form
            ),
            ~inside_range,
        )


def devices_of(devices: Sequence[Device], counts: Integers) -> Devices:
    """Return the devices of records, `counts[k]` of them behind `devices[k]`.

    Raises
    ------
    ValueError
        If a bore is not greater than 0 and smaller than its pipe, or a device whose standard
        has no equation for the pressure loss states no ratio.
    """
    for device in devices:
        _refuse_impossible(device)

    def spread(constant: Callable[[Device], float | None]) -> Floats:
        """Return a constant of each device, one per record; NaN for None."""
        values = np.array([constant(device) for device in devices], dtype=np.float64)
        return np.repeat(values, counts)

    codes = np.array([FORM_CODES[form_of(device)] for device in devices], dtype=np.int64)
    return Devices(
        bore=spread(lambda device: device.bore),
        bore_expansion=spread(lambda device: device.bore_expansion),
        bore_reference_temperature=spread(lambda device: device.bore_reference_temperature),
        pipe_diameter=spread(lambda device: device.pipe_diameter),
        pipe_expansion=spread(lambda device: device.pipe_expansion),
        pipe_reference_temperature=spread(lambda device: device.pipe_reference_temperature),
        form=np.repeat(codes, counts),
        calibrated=spread(
            lambda device: device.calibration.discharge_coefficient if device.calibration else None
        ),
        lowest_reynolds_number=spread(lambda device: _calibrated_range(device)[0]),
        highest_reynolds_number=spread(lambda device: _calibrated_range(device)[1]),
        calibration_uncertainty=spread(
            lambda device: (
                device.calibration.relative_standard_uncertainty if device.calibration else None
            )
        ),
        short_straight_lengths=spread(lambda device: float(device.short_straight_lengths)),
        pressure_loss_ratio=spread(lambda device: device.pressure_loss_ratio),
    )


def form_of(device: Device) -> Form:
    """Return what tells a device's equations: an orifice plate's tappings, or the form."""
    if isinstance(device, OrificePlate):
        return device.tappings
    if isinstance(device, Nozzle | VenturiTube):
        return device.form
    message = f"no equations are known for a {type(device).__name__}"
    raise TypeError(message)


def _calibrated_range(device: Device) -> tuple[float | None, float | None]:
    known = device.calibration.reynolds_number_range if device.calibration else None
    return (None, None) if known is None else known


def _refuse_impossible(device: Device) -> None:
    if not 0.0 < device.bore < device.pipe_diameter:
        message = (
            f"bore is {device.bore * 1000:.6g} mm in a pipe of "
            f"{device.pipe_diameter * 1000:.6g} mm; it must be greater than 0 and smaller "
            f"than the pipe"
        )
        raise ValueError(message)
    form = form_of(device)
    without = isinstance(form, VenturiForm) or form is NozzleForm.VENTURI_NOZZLE
    if without and device.pressure_loss_ratio is None:
        message = (
            f"a {form.value} device states no pressure loss; its standard has no equation for "
            "it, so that a ratio to dp is needed"
        )
        raise ValueError(message)
