"""Totals of the simulated month: the simulator's own rates, by the rule between instants.

The rule: a rate exists at every instant with a dp that counts (not lost, not excluded) and a
pressure and temperature that reach it. `linear`: rates run linearly between such instants no
further apart than `maximum_gap`; `hold`: a rate holds to the next one. All other time is
missing. Device and gas stand still within a period, and at a period's edge each side uses its
own.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import date

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from meterfix.demo.rates import Period, Signals, rates_of
from meterfix.demo.works import Run
from meterfix.model.calendar import SECOND, GasDayCalendar

Floats = NDArray[np.float64]
Instants = NDArray[np.int64]
Truths = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Records:
    """The instants at which a run has a rate, and what it is computed from."""

    instants: Instants
    signals: Signals
    atmosphere: Floats
    rows: NDArray[np.int64]
    """Which of the log's rows these are."""

    def part(self, start: int, end: int) -> Records:
        """Return the records from the last one at or before start to the first at or after end."""
        first = max(int(np.searchsorted(self.instants, start, side="right")) - 1, 0)
        last = int(np.searchsorted(self.instants, end, side="left")) + 1
        cut = slice(first, last)
        signals = Signals(
            self.signals.differential_pressure[cut],
            self.signals.static_pressure[cut],
            self.signals.temperature[cut],
        )
        return Records(self.instants[cut], signals, self.atmosphere[cut], self.rows[cut])


@dataclass(frozen=True, slots=True)
class Sources:
    """The readings behind a carried value; (m,) arrays of indices and shares."""

    used: Truths
    """False where the rule gives nothing."""
    first: NDArray[np.int64]
    second: NDArray[np.int64]
    share: Floats
    """Of the second reading in the value."""

    def of(self, values: Floats) -> Floats:
        """Return the carried values; NaN where the rule gives nothing."""
        first = values[self.first]
        between = first + self.share * (values[self.second] - first)
        return np.where(self.used, np.where(self.share > 0.0, between, first), np.nan)


def sources_of(instants: Instants, targets: Instants, *, linear: bool, reach: int) -> Sources:
    """Return which of a signal's readings serve other instants, by its own rule.

    Parameters
    ----------
    instants : (n,) array
        Of the signal's good readings, in order of time. [UTC us]
    targets : (m,) array
        Where values are wanted. [UTC us]
    linear : bool
        Between neighbours no further apart than `reach`; else held for at most `reach`.
    reach : int
        us.

    Returns
    -------
    Sources
        (m,) arrays.
    """
    before = np.searchsorted(instants, targets, side="right") - 1
    exists = before >= 0
    before = np.maximum(before, 0)
    age = targets - instants[before]
    if not linear:
        return Sources(exists & (age <= reach), before, before, np.zeros(targets.size))
    after = np.minimum(before + 1, instants.size - 1)
    width = instants[after] - instants[before]
    exact = exists & (age == 0)
    bridged = exists & ~exact & (width > 0) & (width <= reach)
    share = np.where(bridged, age / np.where(width > 0, width, 1), 0.0)
    return Sources(exact | bridged, before, after, share)


def carried(
    instants: Instants, values: Floats, targets: Instants, *, linear: bool, reach: int
) -> Floats:
    """Return a signal's values at other instants, by its own rule.

    Parameters
    ----------
    instants, values : (n,) array
        The signal's good readings in order of time. [UTC us]
    targets, linear, reach
        As of `sources_of`.

    Returns
    -------
    (m,) array
        NaN where the rule gives nothing.
    """
    return sources_of(instants, targets, linear=linear, reach=reach).of(values)


def integrate(
    instants: Instants, rates: Floats, start: int, end: int, *, linear: bool, maximum_gap: int
) -> tuple[float, float]:
    """Return the integral of a rate over [start, end), and the time measured in it [s].

    Parameters
    ----------
    instants, rates : (n,) array
        In order of time [UTC us]; rates per second.
    start, end : int
        UTC us; an interval across an edge is split there.
    linear : bool
        Rates run linearly between instants; else each holds to the next instant.
    maximum_gap : int
        Intervals longer than this are missing. [us]

    Returns
    -------
    tuple of float
        Integral and time; (0, 0) where nothing is measured.
    """
    left, right = instants[:-1], instants[1:]
    low, high = np.maximum(left, start), np.minimum(right, end)
    counts = (right - left <= maximum_gap) & (high > low)
    left, right, low, high = left[counts], right[counts], low[counts], high[counts]
    seconds = (high - low) / SECOND
    first = rates[:-1][counts]
    mean = first
    if linear:
        rise = rates[1:][counts] - first
        width = (right - left).astype(np.float64)
        mean = first + rise * (0.5 * ((low - left) + (high - left)) / width)
    return math.fsum((mean * seconds).tolist()), math.fsum(seconds.tolist())


def totals(
    run: Run,
    records: Records,
    run_periods: tuple[Period, ...],
    calendar: GasDayCalendar,
    days: tuple[date, ...],
) -> pd.DataFrame:
    """Return mass, base volume and energy per gas day from the simulator's own rates.

    Parameters
    ----------
    run : Run
        The metering run.
    records : Records
        Noise-free values that the rule lets count.
    run_periods : tuple of Period
        In order, covering the days.
    calendar, days : GasDayCalendar, tuple of date
        Which gas days.

    Returns
    -------
    pandas.DataFrame
        Indexed by gas day: mass_kg, base_volume_m3, energy_J (NaN for air), measured_time_s.
    """
    linear = run.feed.between == "linear"
    gap = run.feed.maximum_gap_s * SECOND
    sums: dict[date, list[tuple[float, float, float, float]]] = {day: [] for day in days}
    for period in run_periods:
        part = records.part(period.start, period.end)
        if not part.instants.size:
            continue
        rates = rates_of(run, period, part.signals, part.atmosphere)
        for day in days:
            start = max(calendar.start(day), period.start)
            end = min(calendar.end(day), period.end)
            if start >= end:
                continue
            mass, time = integrate(part.instants, rates, start, end, linear=linear, maximum_gap=gap)
            volume = mass / period.base_density
            sums[day].append((mass, volume, volume * period.calorific_value, time))
    rows = [[math.fsum(column) for column in zip(*sums[day], strict=True)] for day in days]
    return pd.DataFrame(
        rows,
        index=pd.Index(list(days), name="gas_day"),
        columns=["mass_kg", "base_volume_m3", "energy_J", "measured_time_s"],
    )
