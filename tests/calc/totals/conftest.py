"""A laboratory for integration: meter-days from plain lists, and rates that are plain to see."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date
from types import SimpleNamespace

import numpy as np
import pytest

from meterfix.calc.correct import EraRecords
from meterfix.calc.totals import hourly
from meterfix.frames import FLAGS, HOURLY_INDEX, MISSING, Carry, Era, MeterDay, Series
from meterfix.model.device import OrificePlate, Tappings
from meterfix.model.gas import (
    BaseConditions,
    CalorificBasis,
    CalorificKind,
    Composition,
    DensityModel,
    GasTerms,
    PropertyChoice,
    StateModel,
)
from meterfix.model.site import EnergyTerms, MeterTerms, Tapping, Thermometer
from meterfix.model.source import Excluded, Transmitter

START = 1_768_453_200_000_000
"""2026-01-15 05:00 UTC."""
REASONS = [name for name, _ in MISSING]
FLAG_NAMES = [name for name, _ in FLAGS]


def us(seconds):
    return round(seconds * 1_000_000)


def at(seconds):
    return START + us(seconds)


def series(
    times,
    values,
    *,
    linear=True,
    maximum_gap=300,
    maximum_age=None,
    interval=None,
    disputed=(),
    implausible=(),
    excluded=(),
    mean_values=False,
):
    """Make a series; all times are seconds after the gas day's start."""
    times = list(times)
    return Series(
        instants=np.array([at(t) for t in times], dtype=np.int64),
        values=np.array(list(values), dtype=np.float64),
        disputed=np.array([t in disputed for t in times], dtype=np.bool_),
        implausible=np.array([t in implausible for t in times], dtype=np.bool_),
        carry=Carry(
            linear=linear,
            maximum_gap=us(maximum_gap),
            maximum_age=us(maximum_gap if maximum_age is None else maximum_age),
            interval=None if interval is None else us(interval),
        ),
        excluded=tuple(Excluded(at(a), at(b), "zero check") for a, b in excluded),
        mean_values=mean_values,
    )


def era(
    start=0,
    end=86_400,
    *,
    factor=1.0,
    energy=True,
    rooted=False,
    dp_range=1000.0,
    p_range=None,
    t_range=None,
    atmosphere=100_000.0,
):
    """Constants from `start` to `end`; the bore carries the factor of the plain rates."""
    plate = OrificePlate(
        bore=factor,
        pipe_diameter=100.0,
        tappings=Tappings.CORNER,
        bore_expansion=0.0,
        pipe_expansion=0.0,
        bore_reference_temperature=293.15,
        pipe_reference_temperature=293.15,
    )
    return Era(
        start=at(start),
        end=at(end),
        meter=MeterTerms(plate, "air", "", "", "", Tapping.UPSTREAM, Thermometer.UPSTREAM, 0.0),
        gas=GasTerms(
            Composition("mole", (("methane", 1.0),), 1.0),
            DensityModel(StateModel.IDEAL),
            DensityModel(StateModel.IDEAL),
            PropertyChoice(value=1e-5),
            PropertyChoice(value=1.3),
            None,
        ),
        base=BaseConditions(101_325.0, 288.15),
        energy=EnergyTerms(CalorificBasis.MASS, CalorificKind.GROSS, 288.15) if energy else None,
        atmospheric_pressure=atmosphere,
        static_pressure_gauge=True,
        differential_pressure_rooted=rooted,
        differential_pressure_range=Transmitter(0.0, dp_range),
        static_pressure_range=None if p_range is None else Transmitter(0.0, p_range),
        temperature_range=None if t_range is None else Transmitter(200.0, t_range),
    )


def day(dp, p=None, t=None, *, start=0, end=86_400, eras=None, barometer=(), meter="FT-1"):
    """Make a meter-day; p and T stand at the dp's instants with constant values unless given."""

    def parts(signal):
        if isinstance(signal, Series):
            return ((at(start), at(end), signal),)
        return tuple((at(a), at(b), one) for a, b, one in signal)

    dp_parts = parts(dp)

    def constant(value):
        instants = np.unique(np.concatenate([one.instants for _, _, one in dp_parts]))
        return series(((instants - START) / 1e6).tolist(), [value] * len(instants))

    return MeterDay(
        meter=meter,
        gas_day=date(2026, 1, 15),
        start=at(start),
        end=at(end),
        eras=tuple([era(start, end)] if eras is None else eras),
        differential_pressure=dp_parts,
        static_pressure=parts(constant(900_000.0) if p is None else p),
        temperature=parts(constant(290.0) if t is None else t),
        barometer=parts(barometer) if barometer else (),
    )


@dataclass
class PlainCorrected:
    offsets: np.ndarray
    mass_flow: np.ndarray
    line_volume_flow: np.ndarray
    base_volume_flow: np.ndarray
    energy_flow: np.ndarray
    differential_pressure: np.ndarray
    static_pressure_absolute: np.ndarray
    flags: np.ndarray
    missing: np.ndarray


def plain_correct(records: list[EraRecords], gases: object) -> PlainCorrected:
    """Take dp [Pa] as the mass rate [kg/s].

    Line volume is dp times absolute p in MPa, base volume dp times the era's factor, energy
    3 dp.
    """
    rows = []
    for one in records:
        dp, p, t = one.differential_pressure, one.static_pressure, one.temperature
        atmosphere = one.era.atmospheric_pressure
        if atmosphere is None:
            atmosphere = one.barometric_pressure
        atmosphere = np.broadcast_to(atmosphere, dp.shape)
        missing = np.full(len(dp), -1)
        for reason, found in (
            ("not_converged", dp == 666.0),
            ("missing_barometric_pressure", np.isnan(atmosphere)),
            ("missing_temperature", np.isnan(t)),
            ("missing_static_pressure", np.isnan(p)),
            ("reverse_flow", dp < 0.0),
        ):
            missing[found] = REASONS.index(reason)
        mass = np.where(missing < 0, dp, np.nan)
        over = dp >= one.era.differential_pressure_range.upper_range_value
        rows.append(
            (
                mass,
                mass * ((p + atmosphere) / 1e6),
                mass * one.era.meter.device.bore,
                mass * (3.0 if one.era.energy else np.nan),
                dp,
                p + atmosphere,
                np.where(over, 1 << FLAG_NAMES.index("over_range"), 0).astype(np.uint32),
                missing,
            )
        )
    offsets = np.cumsum([0, *(len(one.differential_pressure) for one in records)])
    return PlainCorrected(offsets, *(np.concatenate(column) for column in zip(*rows, strict=True)))


@pytest.fixture(scope="module")
def lab():
    """Plain rates in place of the flow equation, for the whole module."""
    real = hourly.correct
    hourly.correct = plain_correct

    def run(*days):
        return hourly.hourly_records(days, None, sensitive=False)

    def column(record, name):
        return record.statistics[:, HOURLY_INDEX[name]]

    yield SimpleNamespace(
        run=run,
        one=lambda *args, **kwargs: run(day(*args, **kwargs))[0],
        column=column,
        series=series,
        era=era,
        day=day,
        at=at,
        reasons=REASONS,
        flags=FLAG_NAMES,
    )
    hourly.correct = real
