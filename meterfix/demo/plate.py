"""The simulator's own orifice plate: the dp it shows at a flow, and the flow behind a dp.

One equation ties flow and dp together (ISO 5167-1:2003, equation 1, with the discharge
coefficient and expansibility of ISO 5167-2:2003); it is solved for either side by repeated
substitution, which shrinks the error at least twentyfold a round within the limits of use.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from meterfix.errors import GasError

Floats = NDArray[np.float64]

_ROUNDS = 14
_AGREEMENT = 1e-12


@dataclass(frozen=True, slots=True)
class Plate:
    """An orifice plate in its pipe; lengths [m] at the reference temperature [K]."""

    bore: float
    pipe_diameter: float
    tappings: str
    """'corner', 'D_and_D/2' or 'flange'."""
    bore_expansion: float = 16e-6
    pipe_expansion: float = 11e-6
    """1/K."""
    reference_temperature: float = 293.15

    def warm_diameters(self, temperature: Floats) -> tuple[Floats, Floats]:
        """Return bore and pipe diameter [m] at the upstream temperature [K]."""
        rise = temperature - self.reference_temperature
        return (
            self.bore * (1.0 + self.bore_expansion * rise),
            self.pipe_diameter * (1.0 + self.pipe_expansion * rise),
        )


@dataclass(frozen=True, slots=True)
class Stream:
    """What flows through a plate: density [kg/m3], absolute upstream pressure [Pa], ... (n,)."""

    density: Floats
    static_pressure: Floats
    temperature: Floats
    dynamic_viscosity: float
    """Pa s."""
    isentropic_exponent: float


def discharge_coefficient(plate: Plate, reynolds: Floats, ratio: Floats, pipe: Floats) -> Floats:
    """Return the Reader-Harris/Gallagher discharge coefficient.

    Parameters
    ----------
    plate : Plate
        Its tappings choose the tapping terms.
    reynolds, ratio, pipe : (n,) array
        Pipe Reynolds number [-], diameter ratio [-], pipe diameter [m], all while working.

    Returns
    -------
    (n,) array
        C. [-]

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.2.1, equation (4).
    """
    if plate.tappings == "corner":
        upstream = downstream = np.zeros_like(pipe)
    elif plate.tappings == "D_and_D/2":
        upstream, downstream = np.ones_like(pipe), np.full_like(pipe, 0.47)
    else:
        upstream = downstream = 0.0254 / pipe
    beta_2 = ratio * ratio
    beta_4 = beta_2 * beta_2
    beta_8 = beta_4 * beta_4
    contraction = np.power(19000.0 * ratio / reynolds, 0.8)
    throat = 2.0 * downstream / (1.0 - ratio)
    coefficient = (
        0.5961
        + 0.0261 * beta_2
        - 0.216 * beta_8
        + 0.000521 * np.power(1e6 * ratio / reynolds, 0.7)
        + (0.0188 + 0.0063 * contraction) * np.power(ratio, 3.5) * np.power(1e6 / reynolds, 0.3)
        + (0.043 + 0.080 * np.exp(-10.0 * upstream) - 0.123 * np.exp(-7.0 * upstream))
        * (1.0 - 0.11 * contraction)
        * beta_4
        / (1.0 - beta_4)
        - 0.031 * (throat - 0.8 * np.power(throat, 1.1)) * np.power(ratio, 1.3)
    )
    small = 0.011 * (0.75 - ratio) * (2.8 - pipe / 0.0254)
    return np.asarray(coefficient + np.where(pipe < 0.07112, small, 0.0), dtype=np.float64)


def expansibility(stream: Stream, differential_pressure: Floats, ratio: Floats) -> Floats:
    """Return the expansibility [expansion] factor [-]; ISO 5167-2:2003, 5.3.2.2, equation (5)."""
    beta_4 = ratio**4
    left = 1.0 - differential_pressure / stream.static_pressure
    return np.asarray(
        1.0
        - (0.351 + 0.256 * beta_4 + 0.93 * beta_4 * beta_4)
        * (1.0 - np.power(left, 1.0 / stream.isentropic_exponent)),
        dtype=np.float64,
    )


def _throat(plate: Plate, stream: Stream) -> tuple[Floats, Floats, Floats]:
    """Return diameter ratio, pipe diameter and bore area over sqrt(1 - beta^4), while working."""
    bore, pipe = plate.warm_diameters(stream.temperature)
    ratio = bore / pipe
    return ratio, pipe, 0.25 * np.pi * bore * bore / np.sqrt(1.0 - ratio**4)


def _reynolds(mass_flow: Floats, pipe: Floats, stream: Stream) -> Floats:
    """Return the pipe Reynolds number [-]; ISO 5167-1:2003, 3.3.2."""
    return 4.0 * mass_flow / (np.pi * stream.dynamic_viscosity * pipe)


def differential_pressure_of(plate: Plate, stream: Stream, mass_flow: Floats) -> Floats:
    """Return the differential pressure that the plate shows.

    Parameters
    ----------
    plate : Plate
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
    ratio, pipe, area = _throat(plate, stream)
    flowing = mass_flow > 0.0
    flow = np.where(flowing, mass_flow, 1.0)
    coefficient = discharge_coefficient(plate, _reynolds(flow, pipe, stream), ratio, pipe)
    incompressible = (flow / (coefficient * area)) ** 2 / (2.0 * stream.density)
    shown = np.where(flowing, incompressible, 0.0)
    before = shown
    for _ in range(_ROUNDS):
        before = shown
        shown = np.where(flowing, incompressible / expansibility(stream, shown, ratio) ** 2, 0.0)
    _settled(before, shown, "differential pressure")
    return shown


def mass_flow_of(plate: Plate, stream: Stream, differential_pressure: Floats) -> Floats:
    """Return the mass flow behind a differential pressure.

    Parameters
    ----------
    plate : Plate
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
    ratio, pipe, area = _throat(plate, stream)
    flowing = differential_pressure > 0.0
    shown = np.where(flowing, differential_pressure, 1000.0)
    unit_flow = area * expansibility(stream, shown, ratio) * np.sqrt(2.0 * shown * stream.density)
    flow = 0.6 * unit_flow
    before = flow
    for _ in range(_ROUNDS):
        before = flow
        reynolds = _reynolds(flow, pipe, stream)
        flow = discharge_coefficient(plate, reynolds, ratio, pipe) * unit_flow
    _settled(before, flow, "mass flow")
    return np.where(flowing, flow, 0.0)


def pressure_loss(
    plate: Plate, stream: Stream, differential_pressure: Floats, mass_flow: Floats
) -> Floats:
    """Return the pressure loss [Pa] that stays; ISO 5167-2:2003, 5.4, equation (7)."""
    ratio, pipe, _ = _throat(plate, stream)
    flow = np.where(mass_flow > 0.0, mass_flow, 1.0)
    coefficient = discharge_coefficient(plate, _reynolds(flow, pipe, stream), ratio, pipe)
    root = np.sqrt(1.0 - ratio**4 * (1.0 - coefficient * coefficient))
    contracted = coefficient * ratio * ratio
    lost = differential_pressure * (root - contracted) / (root + contracted)
    return np.where(mass_flow > 0.0, lost, 0.0)


def _settled(before: Floats, after: Floats, what: str) -> None:
    if not np.all(np.abs(after - before) <= _AGREEMENT * np.abs(after)):
        raise GasError(f"the simulated {what} did not settle; the plate is far outside its use")
