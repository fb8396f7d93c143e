"""A calculation with one thing changed: what if a zero were off, a bore worn, a gas heavier.

A disturbance moves what the calculation reads, is told or computes on its way; everything that
follows from it follows. It serves what-if replays, Monte Carlo runs and the check of the
sensitivities. Where there is none, nothing is touched, to the last bit.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, fields, replace

import numpy as np

from meterfix.calc.primary.devices import Devices
from meterfix.calc.primary.flow import Flow
from meterfix.calc.primary.forms import discharge_uncertainty, expansibility_uncertainty
from meterfix.calc.primary.stated_uncertainty import SHORT_STRAIGHT_LENGTHS
from meterfix.frames import Floats, Integers, Truths

_COVERAGE_FACTOR = 2.0
"""Of what the standards state."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Disturbance:
    """What is changed for the records of one meter and era: a number, or one per record.

    The names are those of `frames.PARAMETERS`, with their units; the four that are stated in
    multiples of their stated standard uncertainty can be given as a relative change as well.
    Where no uncertainty is stated, a multiple of it that is not 0 leaves nothing known.
    """

    differential_pressure_zero: float | Floats = 0.0
    """Pa, added after unrooting and after the span."""
    differential_pressure_span: float | Floats = 0.0
    static_pressure_zero: float | Floats = 0.0
    """Pa."""
    static_pressure_span: float | Floats = 0.0
    """Of the reading as logged."""
    temperature_zero: float | Floats = 0.0
    """K."""
    atmospheric_pressure: float | Floats = 0.0
    """Pa."""
    bore: float | Floats = 0.0
    pipe_diameter: float | Floats = 0.0
    discharge_coefficient: float | Floats = 0.0
    """Stated standard uncertainties, as `expansibility` and the two densities."""
    discharge_coefficient_relative: float | Floats = 0.0
    expansibility: float | Floats = 0.0
    expansibility_relative: float | Floats = 0.0
    line_density: float | Floats = 0.0
    line_density_relative: float | Floats = 0.0
    base_density: float | Floats = 0.0
    base_density_relative: float | Floats = 0.0
    dynamic_viscosity: float | Floats = 0.0
    isentropic_exponent: float | Floats = 0.0
    calorific_value: float | Floats = 0.0
    """Of the energy per base volume or mass."""
    calorific_method: float | Floats = 0.0
    """Stated standard uncertainties of the value by ISO 6976; of no effect on a stated one."""


def discharge_standard_uncertainty(devices: Devices, reynolds_number: Floats) -> Floats:
    """Return the stated relative standard uncertainty of each discharge coefficient.

    Parameters
    ----------
    devices : Devices
        (n,) arrays.
    reynolds_number : (n,) array
        Re_D. [-]

    Returns
    -------
    (n,) array
        The certificate's for a calibrated device, with what short straight lengths add; NaN
        outside the certificate's range of Re_D, or the standard's limits where it states none.
        Else the standard's, NaN outside the limits of use, judged at the reference temperatures
        as everywhere. [-]
    """
    by_standard = discharge_uncertainty(
        reynolds_number,
        bore=devices.bore,
        pipe_diameter=devices.pipe_diameter,
        form=devices.form,
        short_straight_lengths=devices.short_straight_lengths > 0.0,
    )
    # a calibration was made in good flow: what disturbs it on site comes on top of it
    added = np.where(devices.short_straight_lengths > 0.0, SHORT_STRAIGHT_LENGTHS, 0.0)
    by_certificate = np.where(
        devices.reynolds_number_outside_limits(reynolds_number),
        np.nan,
        devices.calibration_uncertainty + added / _COVERAGE_FACTOR,
    )
    return np.where(np.isnan(devices.calibrated), by_standard / _COVERAGE_FACTOR, by_certificate)


def expansibility_standard_uncertainty(
    devices: Devices,
    differential_pressure: Floats,
    static_pressure: Floats,
    isentropic_exponent: Floats,
) -> Floats:
    """Return the standard's relative standard uncertainty of each expansibility.

    Parameters
    ----------
    devices : Devices
        (n,) arrays.
    differential_pressure, static_pressure, isentropic_exponent : (n,) arrays
        [Pa], [Pa], [-]

    Returns
    -------
    (n,) array
        NaN outside the limits of use. [-]
    """
    expanded = expansibility_uncertainty(
        differential_pressure,
        static_pressure,
        isentropic_exponent,
        diameter_ratio=devices.bore / devices.pipe_diameter,
        form=devices.form,
    )
    return expanded / _COVERAGE_FACTOR


class Disturbed:
    """The disturbances of a batch of records: (n,) arrays of what is changed anywhere."""

    def __init__(self, columns: dict[str, Floats]) -> None:
        self._columns = columns

    def chosen(self, which: Integers | Truths) -> Disturbed:
        """Return those of some of the records."""
        return Disturbed({name: values[which] for name, values in self._columns.items()})

    def moved(self, values: Floats, name: str) -> Floats:
        """Return readings with their signal's span and zero changed."""
        spanned = self._scaled(values, f"{name}_span")
        return self.added(spanned, f"{name}_zero")

    def added(self, values: Floats, name: str) -> Floats:
        """Return the values with what is to be added."""
        return values + self._columns[name] if name in self._columns else values

    def devices(self, devices: Devices) -> Devices:
        """Return the devices with their diameters changed."""
        return replace(
            devices,
            bore=self._scaled(devices.bore, "bore"),
            pipe_diameter=self._scaled(devices.pipe_diameter, "pipe_diameter"),
        )

    def scaled(
        self, values: Floats, name: str, stated: Callable[[], Floats] | None = None
    ) -> Floats:
        """Return the values changed relatively.

        Parameters
        ----------
        values : (n,) array
        name : str
            Of the disturbance.
        stated : callable, optional
            Gives the relative standard uncertainties (n,) that `name` is in multiples of;
            called where it is needed only. `name` plus '_relative' is then a plain change.
        """
        if stated is None:
            return self._scaled(values, name)
        return self.multiplied(self._scaled(values, f"{name}_relative"), name, stated)

    def multiplied(self, values: Floats, name: str, stated: Callable[[], Floats]) -> Floats:
        """Return the values changed by multiples of their stated standard uncertainty."""
        if name not in self._columns:
            return values
        multiple = self._columns[name]
        return values * np.where(multiple == 0.0, 1.0, 1.0 + multiple * stated())

    def flow(
        self,
        solve: Callable[[Floats], Flow],
        density: Floats,
        discharge_uncertainty: Callable[[Flow], Floats],
        expansibility_uncertainty: Callable[[Flow], Floats],
    ) -> Flow:
        """Return the flow with discharge coefficient and expansibility changed.

        Both only multiply the flow equation, as the root of the density does, which enters
        nowhere else in it: the density takes their squares, and the solver is not touched.

        Parameters
        ----------
        solve : callable
            Gives the flow at a density.
        density : (n,) array
            [kg/m3]
        discharge_uncertainty, expansibility_uncertainty : callable
            Give the stated relative standard uncertainties that belong to a flow.
        """
        flow = solve(density)
        one = np.ones(len(density))
        C = self.scaled(one, "discharge_coefficient", lambda: discharge_uncertainty(flow))
        epsilon = self.scaled(one, "expansibility", lambda: expansibility_uncertainty(flow))
        both = C * epsilon
        if (both == 1.0).all():
            return flow
        changed = solve(density * (both * both))
        return replace(
            changed,
            discharge_coefficient=changed.discharge_coefficient * C,
            expansibility=changed.expansibility * epsilon,
        )

    def _scaled(self, values: Floats, name: str) -> Floats:
        return values * (1.0 + self._columns[name]) if name in self._columns else values


def disturbed(
    disturbances: Sequence[Disturbance | None] | None, lengths: Integers
) -> Disturbed | None:
    """Return the disturbances of records, `lengths[k]` of them under `disturbances[k]`.

    Returns
    -------
    Disturbed or None
        None where there is none at all.
    """
    if disturbances is None or all(one is None for one in disturbances):
        return None
    columns: dict[str, Floats] = {}
    for field in fields(Disturbance):
        parts = [
            np.broadcast_to(0.0 if one is None else getattr(one, field.name), count)
            for one, count in zip(disturbances, lengths.tolist(), strict=True)
        ]
        values = np.concatenate([np.zeros(0), *parts])
        if (values != 0.0).any():
            columns[field.name] = values
    return Disturbed(columns)
