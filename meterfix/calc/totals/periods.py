"""Totals of gas days and months, from stored hours alone."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from math import fsum, isnan

from meterfix.frames import FLAGS, HOURLY_INDEX, MISSING, TOTALS, HourlyRecord


@dataclass(frozen=True, slots=True)
class PeriodTotal:
    """The totals of one meter over a gas day or a month; measured time only, never scaled up."""

    mass: float | None
    """kg; None unless all the measured time has it, and where none is. So are the other totals."""
    line_volume: float | None
    """m3."""
    base_volume: float | None
    """m3 at the base conditions in force."""
    energy: float | None
    """J."""
    duration: float
    """s."""
    measured_time: float
    """s."""
    flow_time: float
    """s."""
    measured_fraction: float
    """measured_time / duration [-]; 0 for a period without duration."""
    flag_shares: Mapping[str, float | None]
    """Share of the flow time, by the names of `frames.FLAGS`; None without flow."""
    lost: Mapping[str, float]
    """s, by the names of `frames.MISSING`."""
    without: Mapping[str, float]
    """Measured time of the hours that have no such total [s], by the names of `frames.TOTALS`."""
    disputed_readings: int


def _sum(values: Iterable[float | None], without: float) -> float | None:
    """Return the exactly rounded sum of the known values; None if measured time is without one.

    A part of a total looks like the whole of it: where some of the measured time has no number,
    the period has none.
    """
    known = [value for value in values if value is not None and not isnan(value)]
    return fsum(known) + 0.0 if known and without == 0.0 else None


def _shares(
    flow_times: Sequence[float], shares_of: Callable[[str], Sequence[float | None]]
) -> dict[str, float | None]:
    """Return the flags' shares of several parts of a period, weighted by their flow time."""
    flow_time = fsum(flow_times)
    result: dict[str, float | None] = {}
    for name, _ in FLAGS:
        flagged = [
            share * time
            for share, time in zip(shares_of(name), flow_times, strict=True)
            if share is not None and not isnan(share)
        ]
        result[name] = fsum(flagged) / flow_time if flow_time > 0.0 else None
    return result


def _fraction(measured_time: float, duration: float) -> float:
    return measured_time / duration if duration > 0.0 else 0.0


def day_total(record: HourlyRecord) -> PeriodTotal:
    """Return a gas day's total: fsum over its hours, those without measured time left out.

    Parameters
    ----------
    record : HourlyRecord
        An hour that is measured but has no number (NaN), as energy without a calorific value,
        takes the day's total of that name with it; `without` says how long that is.

    Returns
    -------
    PeriodTotal
    """

    def column(name: str) -> list[float]:
        values: list[float] = record.statistics[:, HOURLY_INDEX[name]].tolist()
        return values

    times = column("measured_time")
    without = {
        name: fsum(time for value, time in zip(column(name), times, strict=True) if isnan(value))
        for name in TOTALS
    }
    totals = {name: _sum(column(name), without[name]) for name in TOTALS}
    duration, measured_time = fsum(column("duration")), fsum(times)
    return PeriodTotal(
        mass=totals["mass"],
        line_volume=totals["line_volume"],
        base_volume=totals["base_volume"],
        energy=totals["energy"],
        duration=duration,
        measured_time=measured_time,
        flow_time=fsum(column("flow_time")),
        measured_fraction=_fraction(measured_time, duration),
        flag_shares=_shares(column("flow_time"), lambda name: column(f"share_{name}")),
        lost={name: fsum(column(f"lost_{name}")) for name, _ in MISSING},
        without=without,
        disputed_readings=int(fsum(column("disputed_readings"))),
    )


def month_total(days: Sequence[PeriodTotal]) -> PeriodTotal:
    """Return the total of several gas days of one meter: fsum over the days.

    Parameters
    ----------
    days : sequence of PeriodTotal
        Totals of the gas days; one that is not measured at all is left out of the sums, one that
        is measured but has no total takes the month's with it.

    Returns
    -------
    PeriodTotal
    """
    without = {name: fsum(day.without[name] for day in days) for name in TOTALS}
    totals = {name: _sum((getattr(day, name) for day in days), without[name]) for name in TOTALS}
    duration = fsum(day.duration for day in days)
    measured_time = fsum(day.measured_time for day in days)
    return PeriodTotal(
        mass=totals["mass"],
        line_volume=totals["line_volume"],
        base_volume=totals["base_volume"],
        energy=totals["energy"],
        duration=duration,
        measured_time=measured_time,
        flow_time=fsum(day.flow_time for day in days),
        measured_fraction=_fraction(measured_time, duration),
        flag_shares=_shares(
            [day.flow_time for day in days],
            lambda name: [day.flag_shares[name] for day in days],
        ),
        lost={name: fsum(day.lost[name] for day in days) for name, _ in MISSING},
        without=without,
        disputed_readings=sum(day.disputed_readings for day in days),
    )
