"""The simulator's rates: its forward physics from flow to signals, and from signals to flow."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from meterfix.demo.air import air_density
from meterfix.demo.calorific import gross_calorific_value
from meterfix.demo.detail import DetailGas
from meterfix.demo.device import Device, Stream
from meterfix.demo.flow import differential_pressure_of, mass_flow_of, pressure_loss
from meterfix.demo.works import AFTER, BASE_PRESSURE, BASE_TEMPERATURE, BEFORE, Month, Run

Floats = NDArray[np.float64]
Instants = NDArray[np.int64]

_THERMOMETER_ROUNDS = 3


@dataclass(frozen=True, slots=True)
class Signals:
    """What a run's three transmitters measure; pressure is gauge, at its own tapping; SI."""

    differential_pressure: Floats
    static_pressure: Floats
    temperature: Floats


@dataclass(frozen=True, slots=True)
class Period:
    """An interval [start, end) [UTC us] in which a run's device and gas stand still."""

    start: int
    end: int
    device: Device
    gas: DetailGas | None
    """None for air."""
    base_density: float
    """kg/m3 at base conditions."""
    calorific_value: float
    """Gross, per volume at base conditions [J/m3]; NaN for air."""


@cache
def _gases() -> tuple[DetailGas, DetailGas]:
    return DetailGas(BEFORE), DetailGas(AFTER)


def periods(run: Run, month: Month, start: int, end: int) -> tuple[Period, ...]:
    """Return the periods of a run that cover [start, end) without a gap."""
    before, after = _gases()
    natural = run.name.startswith("FT")
    edges = {start, end}
    if natural:
        edges.add(month.composition_change)
    if run.spare is not None:
        edges.add(month.tube_exchange)
    inside = sorted(edge for edge in edges if start <= edge <= end)
    found = []
    for first, last in pairwise(inside):
        gas = None
        if natural:
            gas = after if first >= month.composition_change else before
        device = run.device
        if run.spare is not None and first >= month.tube_exchange:
            device = run.spare
        base = density(gas, np.array([BASE_PRESSURE]), np.array([BASE_TEMPERATURE]))
        value = math.nan if gas is None else gross_calorific_value(gas.fractions)
        found.append(Period(first, last, device, gas, float(base[0]), value))
    return tuple(found)


def density(gas: DetailGas | None, static_pressure: Floats, temperature: Floats) -> Floats:
    """Return the density [kg/m3] of a natural gas, or of air where the gas is None."""
    if gas is None:
        return air_density(static_pressure, temperature)
    return gas.density(static_pressure, temperature)


def signals_of(
    run: Run,
    period: Period,
    mass_flow: Floats,
    upstream: Floats,
    temperature: Floats,
    atmosphere: Floats,
) -> Signals:
    """Return what perfect transmitters would measure.

    Parameters
    ----------
    run, period : Run, Period
        The metering run, its device and gas.
    mass_flow : (n,) array
        True flow. [kg/s]
    upstream, temperature : (n,) array
        True gauge pressure [Pa] and temperature [K] at the upstream tapping.
    atmosphere : (n,) array
        Absolute. [Pa]

    Returns
    -------
    Signals
        Each at its own place: the pressure at its tapping, the thermometer in its pocket.
    """
    absolute = upstream + atmosphere
    medium = run.medium
    stream = Stream(
        density(period.gas, absolute, temperature),
        absolute,
        temperature,
        medium.dynamic_viscosity,
        medium.isentropic_exponent,
    )
    shown = differential_pressure_of(period.device, stream, mass_flow)
    felt = temperature
    if run.thermometer_downstream and period.gas is not None:
        lost = pressure_loss(period.device, stream, shown, mass_flow)
        felt = temperature - period.gas.joule_thomson(absolute, temperature) * lost
    tapped = upstream - shown if run.pressure_downstream else upstream
    return Signals(shown, tapped, felt)


def rates_of(run: Run, period: Period, signals: Signals, atmosphere: Floats) -> Floats:
    """Return the mass flow behind signals, by the contract's terms.

    Parameters
    ----------
    run, period : Run, Period
        The metering run, its device and gas.
    signals : Signals
        Noise-free values, with or without calibration errors.
    atmosphere : (n,) array
        Absolute, as the barometer has it. [Pa]

    Returns
    -------
    (n,) array
        Exactly 0 where |dp| is below the low-flow cut-off. [kg/s]
    """
    shown = signals.differential_pressure
    absolute = signals.static_pressure + atmosphere
    if run.pressure_downstream:
        absolute = absolute + shown
    counted = np.where(np.abs(shown) < run.cut_off, 0.0, shown)
    upstream = signals.temperature
    flow = np.zeros_like(shown)
    downstream = run.thermometer_downstream and period.gas is not None
    for _ in range(_THERMOMETER_ROUNDS if downstream else 1):
        stream = Stream(
            density(period.gas, absolute, upstream),
            absolute,
            upstream,
            run.medium.dynamic_viscosity,
            run.medium.isentropic_exponent,
        )
        flow = mass_flow_of(period.device, stream, counted)
        if downstream and period.gas is not None:
            lost = pressure_loss(period.device, stream, counted, flow)
            gained = period.gas.joule_thomson(absolute, upstream) * lost
            upstream = signals.temperature + gained
    return flow
