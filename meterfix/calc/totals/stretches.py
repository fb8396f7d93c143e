"""A gas day cut where its constants or signals change, and the records of each stretch."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from meterfix.calc.correct import EraRecords
from meterfix.calc.totals.carried import Carried, carried_to, without_excluded
from meterfix.frames import FLAGS, SIGNAL_ROLES, Era, Instants, Integers, MeterDay, Series

FLAG_BIT: dict[str, int] = {name: 1 << n for n, (name, _) in enumerate(FLAGS)}
"""Bit of each flag in a record's mask, in the order of `frames.FLAGS`."""

Parts = tuple[tuple[int, int, Series], ...]


@dataclass(frozen=True, slots=True)
class DisputedUses:
    """Which records use which disputed readings; row by row, records ascending."""

    record: Integers
    """Index of the record in its stretch, later in the batch."""
    role: Integers
    """Index in `frames.SIGNAL_ROLES`."""
    part: Integers
    """Which of the day's signals in that role."""
    instant: Instants
    """Of the reading."""


@dataclass(frozen=True, slots=True)
class Stretch:
    """A part of a day in which era and signals stand still; [start, end) in UTC us."""

    start: int
    end: int
    era: Era | None
    """None: the meter is not in service."""
    differential_pressure: Series | None
    """Excluded readings dropped; None where no signal serves."""
    instants: Instants
    """Of the records: those inside and the neighbour on either side."""
    records: EraRecords | None
    """None where there are no records."""
    marks: Integers
    """Bit mask per record of the flags that the readings themselves raise."""
    disputed: DisputedUses | None
    """None where no disputed reading is used."""
    carried: tuple[tuple[str, Series, Carried], ...]
    """By role, differential pressure itself included: a signal and which of its readings the
    records use. Signals without a reading are left out."""


def cleaned(parts: Parts) -> Parts:
    """Return the parts with the readings inside excluded intervals dropped."""
    # one object per signal, so that `serving` knows a signal that serves in two parts
    kept = {id(series): without_excluded(series) for _, _, series in parts}
    return tuple((start, end, kept[id(series)]) for start, end, series in parts)


def serving(parts: Parts, instant: int) -> int:
    """Return the index of the part that serves at the instant, -1 if none does.

    Parts that hold the very same series count as one: the first.
    """
    for start, end, series in parts:
        if start <= instant < end:
            return next(n for n, part in enumerate(parts) if part[2] is series)
    return -1


def _disputed_uses(
    uses: list[tuple[int, int, Series, Carried]],
) -> DisputedUses | None:
    """Return every use of a disputed reading, in order of its record."""
    columns: list[tuple[Integers, Integers, Integers, Integers]] = []
    for role, part, series, carried in uses:
        for used in (carried.first, carried.second):
            at = np.flatnonzero((used >= 0) & series.disputed[used])
            columns.append(
                (at, np.full(len(at), role), np.full(len(at), part), series.instants[used[at]])
            )
    record, roles, parts, instants = (
        np.concatenate([column[n] for column in columns]).astype(np.int64) for n in range(4)
    )
    if len(record) == 0:
        return None
    order = np.argsort(record, kind="stable")
    return DisputedUses(record[order], roles[order], parts[order], instants[order])


def _marks(era: Era, dp: Series, first: int, last: int, carried: list[Carried | None]) -> Integers:
    """Return the carried-value and mean-of-dp flags of the records [first, last)."""
    marks = np.zeros(last - first, dtype=np.int64)
    if dp.mean_values and not era.differential_pressure_rooted:
        marks |= FLAG_BIT["mean_of_differential_pressure"]
    for signal in carried:
        if signal is not None:
            moved = (signal.first >= 0) & ~signal.exact
            marks[moved] |= FLAG_BIT["carried_value"]
    return marks


def _stretch(day: MeterDay, start: int, end: int, signals: dict[str, Parts]) -> Stretch:
    """Return the stretch [start, end), inside which nothing changes, with its records."""
    era = next((era for era in day.eras if era.start <= start < era.end), None)
    chosen = {role: serving(parts, start) for role, parts in signals.items()}
    series = {
        role: signals[role][number][2] if number >= 0 else None for role, number in chosen.items()
    }
    dp = series["differential_pressure"]
    nothing = np.zeros(0, dtype=np.int64)
    if era is None or dp is None or len(dp.instants) == 0:
        return Stretch(start, end, era, dp, nothing, None, nothing, None, ())
    # the last reading at or before the start, and the first at or after the end
    first = max(int(np.searchsorted(dp.instants, start, side="right")) - 1, 0)
    last = min(int(np.searchsorted(dp.instants, end, side="left")) + 1, len(dp.instants))
    instants = dp.instants[first:last]
    pressure = carried_to(instants, series["static_pressure"])
    temperature = carried_to(instants, series["temperature"])
    barometer = None
    if era.atmospheric_pressure is None:
        barometer = carried_to(instants, series["barometer"])
    records = EraRecords(
        era=era,
        differential_pressure=dp.values[first:last],
        static_pressure=pressure.values,
        temperature=temperature.values,
        barometric_pressure=None if barometer is None else barometer.values,
    )
    marks = _marks(era, dp, first, last, [pressure, temperature])
    own = np.arange(first, last, dtype=np.int64)
    itself = Carried(
        records.differential_pressure,
        own,
        own,
        np.ones(len(own), dtype=np.bool_),
        np.zeros(len(own)),
    )
    sources = [("differential_pressure", dp, itself)]
    uses = [(0, chosen["differential_pressure"], dp, itself)]
    for role, signal in (
        ("static_pressure", pressure),
        ("temperature", temperature),
        ("barometer", barometer),
    ):
        readings = series[role]
        if readings is None or signal is None or len(readings.instants) == 0:
            continue
        sources.append((role, readings, signal))
        if role in SIGNAL_ROLES:
            uses.append((SIGNAL_ROLES.index(role), chosen[role], readings, signal))
    for _, readings, signal in sources:
        for name, marked in (
            ("disputed_reading", readings.disputed),
            ("implausible_value", readings.implausible),
            ("doubtful_quality", readings.doubtful),
        ):
            if marked is not None and marked.any():
                hit = (signal.first >= 0) & (marked[signal.first] | marked[signal.second])
                marks[hit] |= FLAG_BIT[name]
    disputed = [use for use in uses if use[2].disputed.any()]
    return Stretch(
        start,
        end,
        era,
        dp,
        instants,
        records,
        marks,
        _disputed_uses(disputed) if disputed else None,
        tuple(sources),
    )


def stretches(day: MeterDay, signals: dict[str, Parts]) -> list[Stretch]:
    """Return the stretches of a meter-day in order of time; together they cover it exactly.

    Parameters
    ----------
    day : MeterDay
    signals : dict
        The day's parts per role (`frames.SIGNAL_ROLES` and 'barometer'), cleaned.
    """
    edges = {day.start, day.end}
    for era in day.eras:
        edges |= {era.start, era.end}
    for parts in signals.values():
        for start, end, _ in parts:
            edges |= {start, end}
    inside = sorted(edge for edge in edges if day.start <= edge <= day.end)
    return [_stretch(day, start, end, signals) for start, end in pairwise(inside)]
