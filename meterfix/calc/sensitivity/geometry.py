"""How each device's discharge coefficient changes with Reynolds number, beta and pipe diameter.

In Re_D the terms of the coefficient are differentiated term by term. In beta and D each term is
differentiated once per device by a difference of fourth order, whatever the family; the result
runs linearly with temperature between two nodes, as the diameters do.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from meterfix.calc.elementary import exponential
from meterfix.calc.primary.devices import Devices
from meterfix.calc.primary.discharge import DischargeTerms
from meterfix.calc.primary.forms import discharge_terms
from meterfix.frames import Floats, Integers

_STEP = 2e-3
"""Of ln beta and ln D [-]; the difference's error is about its fourth power."""
_STENCIL = ((1.0, 8.0 / 12.0), (-1.0, -8.0 / 12.0), (2.0, -1.0 / 12.0), (-2.0, 1.0 / 12.0))
"""Steps and weights of a derivative of fourth order."""
_NODES = (248.15, 338.15)
"""K."""
_TERMS = tuple(field.name for field in fields(DischargeTerms))


@dataclass(frozen=True, slots=True)
class _Line:
    """A value per device that runs linearly with temperature."""

    at_first_node: Floats
    per_kelvin: Floats

    def of(self, first: int, last: int) -> _Line:
        """Return the devices [first, last)."""
        return _Line(self.at_first_node[first:last], self.per_kelvin[first:last])


@dataclass(frozen=True, slots=True)
class DischargeSlopes:
    """Terms of the discharge coefficient, and of its derivatives by ln beta and ln D, by device."""

    terms: dict[str, _Line]
    by_diameter_ratio: dict[str, _Line]
    by_pipe_diameter: dict[str, _Line]

    def of(self, first: int, last: int) -> DischargeSlopes:
        """Return the devices [first, last)."""
        return DischargeSlopes(
            *(
                {name: line.of(first, last) for name, line in lines.items()}
                for lines in (self.terms, self.by_diameter_ratio, self.by_pipe_diameter)
            )
        )

    def at(self, u: Floats, temperature: Floats, counts: Integers) -> tuple[Floats, Floats, Floats]:
        """Return dC/d ln Re_D, dC/d ln beta and dC/d ln D.

        Parameters
        ----------
        u : (n,) array
            Re_D ** -0.1. [-]
        temperature : (n,) array
            [K]
        counts : (devices,) integer array
            Successive records of each device.

        Returns
        -------
        (n,) arrays
            The first at constant geometry, the second at constant Re_D and D, the third at
            constant Re_D and beta. [-]
        """
        warmer = temperature - _NODES[0]
        nothing = np.zeros(len(u))

        def terms(lines: dict[str, _Line]) -> DischargeTerms:
            spread = {
                name: np.repeat(line.at_first_node, counts)
                + np.repeat(line.per_kelvin, counts) * warmer
                for name, line in lines.items()
            }
            broken = "c5" in spread or "c23_2" in spread
            return DischargeTerms(
                **{
                    name: spread.get(
                        name, None if name in {"c5", "c23_2"} and not broken else nothing
                    )
                    for name in _TERMS
                }  # type: ignore[arg-type]
            )

        return (
            -0.1 * terms(self.terms).slope(u),
            terms(self.by_diameter_ratio).at(u),
            terms(self.by_pipe_diameter).at(u),
        )


def discharge_slopes(devices: Devices) -> DischargeSlopes:
    """Return the derivatives of each device's discharge coefficient.

    Parameters
    ----------
    devices : Devices
        One entry per device, not per record.
    """
    count = len(devices.form)
    nodes: list[list[dict[str, Floats]]] = []
    for temperature in _NODES:
        bore, pipe_diameter = devices.diameters_at(np.full(count, temperature))
        nodes.append(
            [
                _terms(devices, bore, pipe_diameter),
                _difference(devices, bore, pipe_diameter, pipe=False),
                _difference(devices, bore, pipe_diameter, pipe=True),
            ]
        )
    lines: list[dict[str, _Line]] = []
    for first, second in zip(*nodes, strict=True):
        lines.append(
            {
                name: _Line(first[name], (second[name] - first[name]) / (_NODES[1] - _NODES[0]))
                for name in first
                # terms that no device has are left out: they would only add zeros
                if np.any(first[name] != 0.0)
            }
        )
    return DischargeSlopes(*lines)


def _terms(devices: Devices, bore: Floats, pipe_diameter: Floats) -> dict[str, Floats]:
    """Return the terms of the discharge coefficients at given diameters; NaN if impossible."""
    terms = discharge_terms(
        bore=np.where(bore < pipe_diameter, bore, np.nan),
        pipe_diameter=pipe_diameter,
        form=devices.form,
        calibrated=devices.calibrated,
    )
    found = {name: getattr(terms, name) for name in _TERMS}
    return {name: values for name, values in found.items() if values is not None}


def _difference(
    devices: Devices, bore: Floats, pipe_diameter: Floats, *, pipe: bool
) -> dict[str, Floats]:
    """Return the terms' derivatives by ln beta at constant D, or by ln D at constant beta."""
    total: dict[str, Floats] = {}
    for step, weight in _STENCIL:
        factor = float(exponential(step * _STEP)[0])
        moved = _terms(devices, bore * factor, pipe_diameter * (factor if pipe else 1.0))
        for name, values in moved.items():
            part = (weight / _STEP) * values
            total[name] = total[name] + part if name in total else part
    return total
