"""The dp that a device of the simulated works shows at a flow, and the flow behind a dp.

One equation ties flow and dp together (ISO 5167-1:2003, equation 1); it is solved for either
side by repeated substitution, which shrinks the error at least tenfold a round within the limits
of use.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from meterfix.demo.device import Device, Stream, discharge_coefficient, expansibility
from meterfix.errors import GasError

Floats = NDArray[np.float64]

VENTURI_PRESSURE_LOSS = 0.125
"""Of dp: what the works states of its Venturi tube; ISO 5167-4:2003, 5.9, has a range."""

_ROUNDS = 18
_AGREEMENT = 1e-12


def _throat(device: Device, stream: Stream) -> tuple[Floats, Floats, Floats]:
    """Return diameter ratio, pipe diameter and bore area over sqrt(1 - beta^4), while working."""
    bore, pipe = device.warm_diameters(stream.temperature)
    ratio = bore / pipe
    return ratio, pipe, 0.25 * np.pi * bore * bore / np.sqrt(1.0 - ratio**4)


def _reynolds(mass_flow: Floats, pipe: Floats, stream: Stream) -> Floats:
    """Return the pipe Reynolds number [-]; ISO 5167-1:2003, 3.3.2."""
    return 4.0 * mass_flow / (np.pi * stream.dynamic_viscosity * pipe)


def differential_pressure_of(device: Device, stream: Stream, mass_flow: Floats) -> Floats:
    """Return the differential pressure that the device shows.

    Parameters
    ----------
    device : Device
        The device.
    stream : Stream
        State at the upstream tapping.
    mass_flow : (n,) array
        0 or more. [kg/s]

    Returns
    -------
    (n,) array
        Upstream minus downstream tapping; exactly 0 at no flow. [Pa]

    Raises
    ------
    GasError
        If some flow is beyond what the equation can carry: the search does not settle.
    """
    ratio, pipe, area = _throat(device, stream)
    flowing = mass_flow > 0.0
    flow = np.where(flowing, mass_flow, 1.0)
    coefficient = discharge_coefficient(device, _reynolds(flow, pipe, stream), ratio, pipe)
    incompressible = (flow / (coefficient * area)) ** 2 / (2.0 * stream.density)
    shown = np.where(flowing, incompressible, 0.0)
    before = shown
    for _ in range(_ROUNDS):
        before = shown
        factor = expansibility(device, stream, shown, ratio)
        shown = np.where(flowing, incompressible / factor**2, 0.0)
    _settled(before, shown, "differential pressure")
    return shown


def mass_flow_of(device: Device, stream: Stream, differential_pressure: Floats) -> Floats:
    """Return the mass flow behind a differential pressure.

    Parameters
    ----------
    device : Device
        The device.
    stream : Stream
        State at the upstream tapping.
    differential_pressure : (n,) array
        0 or more. [Pa]

    Returns
    -------
    (n,) array
        Exactly 0 where the differential pressure is 0. [kg/s]

    Raises
    ------
    GasError
        If the search does not settle, as at very small Reynolds numbers.
    """
    ratio, pipe, area = _throat(device, stream)
    flowing = differential_pressure > 0.0
    shown = np.where(flowing, differential_pressure, 1000.0)
    factor = expansibility(device, stream, shown, ratio)
    unit_flow = area * factor * np.sqrt(2.0 * shown * stream.density)
    flow = 0.6 * unit_flow
    before = flow
    for _ in range(_ROUNDS):
        before = flow
        reynolds = _reynolds(flow, pipe, stream)
        flow = discharge_coefficient(device, reynolds, ratio, pipe) * unit_flow
    _settled(before, flow, "mass flow")
    return np.where(flowing, flow, 0.0)


def pressure_loss(
    device: Device, stream: Stream, differential_pressure: Floats, mass_flow: Floats
) -> Floats:
    """Return the pressure loss that stays.

    Parameters
    ----------
    device : Device
        The device.
    stream : Stream
        State at the upstream tapping.
    differential_pressure, mass_flow : (n,) array
        [Pa], [kg/s]

    Returns
    -------
    (n,) array
        0 where nothing flows. [Pa]

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.4, equation (7), which also serves nozzles (ISO 5167-3:2003, 5.1.8
       and 5.2.8); of Venturi tubes the stated share of dp.
    """
    if device.family == "venturi_tube":
        return np.where(mass_flow > 0.0, VENTURI_PRESSURE_LOSS * differential_pressure, 0.0)
    ratio, pipe, _ = _throat(device, stream)
    flow = np.where(mass_flow > 0.0, mass_flow, 1.0)
    coefficient = discharge_coefficient(device, _reynolds(flow, pipe, stream), ratio, pipe)
    root = np.sqrt(1.0 - ratio**4 * (1.0 - coefficient * coefficient))
    contracted = coefficient * ratio * ratio
    lost = differential_pressure * (root - contracted) / (root + contracted)
    return np.where(mass_flow > 0.0, lost, 0.0)


def _settled(before: Floats, after: Floats, what: str) -> None:
    if not np.all(np.abs(after - before) <= _AGREEMENT * np.abs(after)):
        raise GasError(f"the simulated {what} did not settle; the device is far outside its use")
