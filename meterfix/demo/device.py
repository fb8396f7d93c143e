"""The simulator's own primary devices: discharge coefficient and expansibility of each form.

Orifice plates (ISO 5167-2:2003), nozzles (ISO 5167-3:2003) and classical Venturi tubes
(ISO 5167-4:2003), written out for the forms that the works has.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_FAMILIES = {
    "corner": "orifice",
    "D_and_D/2": "orifice",
    "flange": "orifice",
    "ISA_1932": "nozzle",
    "long_radius": "nozzle",
    "machined": "venturi_tube",
}


@dataclass(frozen=True, slots=True)
class Certificate:
    """A calibration's constant discharge coefficient, in place of the standard's."""

    number: str
    discharge_coefficient: float
    uncertainty: str
    """At k = 2, as the certificate has it."""
    reynolds_number: tuple[float, float]
    """Lowest and highest of the calibration."""


@dataclass(frozen=True, slots=True)
class Device:
    """A primary device in its pipe; lengths [m] at the reference temperature [K]."""

    bore: float
    """Of the plate, or the throat's diameter."""
    pipe_diameter: float
    form: str
    """Tappings of a plate: 'corner', 'D_and_D/2', 'flange'; a nozzle: 'ISA_1932',
    'long_radius'; a Venturi tube: 'machined'."""
    bore_expansion: float = 16e-6
    pipe_expansion: float = 11e-6
    """1/K."""
    reference_temperature: float = 293.15
    certificate: Certificate | None = None
    serial: str = ""

    @property
    def family(self) -> str:
        """'orifice', 'nozzle' or 'venturi_tube'."""
        return _FAMILIES[self.form]

    def warm_diameters(self, temperature: Floats) -> tuple[Floats, Floats]:
        """Return bore and pipe diameter [m] at the upstream temperature [K]."""
        rise = temperature - self.reference_temperature
        return (
            self.bore * (1.0 + self.bore_expansion * rise),
            self.pipe_diameter * (1.0 + self.pipe_expansion * rise),
        )


@dataclass(frozen=True, slots=True)
class Stream:
    """What flows through a device: density [kg/m3], absolute upstream pressure [Pa], ... (n,)."""

    density: Floats
    static_pressure: Floats
    temperature: Floats
    dynamic_viscosity: float
    """Pa s."""
    isentropic_exponent: float


def discharge_coefficient(device: Device, reynolds: Floats, ratio: Floats, pipe: Floats) -> Floats:
    """Return the discharge coefficient: the certificate's if there is one, else the standard's.

    Parameters
    ----------
    device : Device
        Its form chooses the equation.
    reynolds, ratio, pipe : (n,) array
        Pipe Reynolds number [-], diameter ratio [-], pipe diameter [m], all while working.

    Returns
    -------
    (n,) array
        C. [-]

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.2.1, equation (4) (Reader-Harris/Gallagher); ISO 5167-3:2003,
       5.1.6.2 (ISA 1932) and 5.2.6.2 (long radius); ISO 5167-4:2003, 5.5.3 (machined).
    """
    if device.certificate is not None:
        return np.full_like(reynolds, device.certificate.discharge_coefficient)
    if device.form == "machined":
        return np.full_like(reynolds, 0.995)
    if device.form == "long_radius":
        return np.asarray(0.9965 - 0.00653 * np.sqrt(1e6 * ratio / reynolds), dtype=np.float64)
    if device.form == "ISA_1932":
        falling = 0.00175 * ratio**2 - 0.0033 * np.power(ratio, 4.15)
        return np.asarray(
            0.9900 - 0.2262 * np.power(ratio, 4.1) - falling * np.power(1e6 / reynolds, 1.15),
            dtype=np.float64,
        )
    return _plate_coefficient(device.form, reynolds, ratio, pipe)


def _plate_coefficient(tappings: str, reynolds: Floats, ratio: Floats, pipe: Floats) -> Floats:
    if tappings == "corner":
        upstream = downstream = np.zeros_like(pipe)
    elif tappings == "D_and_D/2":
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


def expansibility(
    device: Device, stream: Stream, differential_pressure: Floats, ratio: Floats
) -> Floats:
    """Return the expansibility [expansion] factor.

    Parameters
    ----------
    device : Device
        A plate has the empirical equation; nozzles and Venturi tubes that of frictionless
        adiabatic flow.
    stream : Stream
        State at the upstream tapping.
    differential_pressure, ratio : (n,) array
        [Pa]; diameter ratio while working [-].

    Returns
    -------
    (n,) array
        1 where there is no differential pressure. [-]

    References
    ----------
    .. [1] ISO 5167-2:2003, 5.3.2.2, equation (5); ISO 5167-3:2003, 5.1.6.3; ISO 5167-4:2003,
       5.6.
    """
    kappa = stream.isentropic_exponent
    beta_4 = ratio**4
    dropped = differential_pressure / stream.static_pressure
    if device.family == "orifice":
        slope = 0.351 + 0.256 * beta_4 + 0.93 * beta_4 * beta_4
        return np.asarray(
            1.0 - slope * (1.0 - np.power(1.0 - dropped, 1.0 / kappa)), dtype=np.float64
        )
    flowing = dropped > 0.0
    dropped = np.where(flowing, dropped, 0.01)
    log_tau = np.log1p(-dropped)
    widened = np.exp(2.0 / kappa * log_tau)
    # 1 - tau^((kappa - 1)/kappa), without losing digits where tau is nearly 1
    worked = -np.expm1((kappa - 1.0) / kappa * log_tau)
    square = (
        kappa
        / (kappa - 1.0)
        * widened
        * (1.0 - beta_4)
        / (1.0 - beta_4 * widened)
        * (worked / dropped)
    )
    return np.where(flowing, np.sqrt(square), 1.0)
