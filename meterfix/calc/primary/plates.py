"""The plates of a batch of records: one plate's figures beside each record."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np

from meterfix.calc.primary.orifice import TAPPINGS_CODES, diameter_at
from meterfix.frames import Floats, Integers, Truths
from meterfix.model.device import OrificePlate


@dataclass(frozen=True, slots=True)
class Plates:
    """The plate of each record at its reference temperatures, (n,) arrays; see OrificePlate."""

    bore: Floats
    bore_expansion: Floats
    bore_reference_temperature: Floats
    pipe_diameter: Floats
    pipe_expansion: Floats
    pipe_reference_temperature: Floats
    tappings: Integers
    """Codes, see `TAPPINGS_CODES`."""

    def chosen(self, which: Integers | Truths) -> Plates:
        """Return the plates of some of the records."""
        return Plates(*(getattr(self, field.name)[which] for field in fields(self)))

    def diameters_at(self, temperature: Floats) -> tuple[Floats, Floats]:
        """Return bore and pipe diameter at working temperature.

        Parameters
        ----------
        temperature : (n,) array
            [K]

        Returns
        -------
        (n,) array, (n,) array
            [m]; the bore is NaN where only an absurd temperature makes the plate impossible:
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


def plates_of(devices: Sequence[OrificePlate], counts: Integers) -> Plates:
    """Return the plates of records, `counts[k]` of them behind `devices[k]`.

    Raises
    ------
    ValueError
        If a bore is not greater than 0 and smaller than its pipe.
    """
    for device in devices:
        if not 0.0 < device.bore < device.pipe_diameter:
            message = (
                f"bore is {device.bore * 1000:.6g} mm in a pipe of "
                f"{device.pipe_diameter * 1000:.6g} mm; it must be greater than 0 and smaller "
                f"than the pipe"
            )
            raise ValueError(message)
    codes = np.array([TAPPINGS_CODES[device.tappings] for device in devices], dtype=np.int64)
    lengths = {
        field.name: np.repeat(
            np.array([getattr(device, field.name) for device in devices], dtype=np.float64), counts
        )
        for field in fields(Plates)
        if field.name != "tappings"
    }
    return Plates(**lengths, tappings=np.repeat(codes, counts))
