"""Intervals between records cut into pieces, and what each piece contributes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.totals.stretches import Stretch
from meterfix.frames import MISSING, Floats, Instants, Integers, Truths
from meterfix.model.calendar import HOUR, SECOND

REASON: dict[str, int] = {name: n for n, (name, _) in enumerate(MISSING)}
"""Index of each reason in `frames.MISSING`."""
MEASURED = -1


@dataclass(frozen=True, slots=True)
class Pieces:
    """Pieces of time in order; together they cover the days of a batch exactly."""

    start: Instants
    end: Instants
    row: Integers
    """Hour that holds the piece, counted over the batch."""
    first: Integers
    """Record at or before the piece, counted over the batch; 0 where a reason is given."""
    second: Integers
    """The next record where rates run linearly; else as `first`."""
    reason: Integers
    """Index in `frames.MISSING`, or -1: the records decide."""


def cut(stretch: Stretch, day_start: int, row_offset: int, record_offset: int) -> Pieces:
    """Return the pieces of one stretch.

    Parameters
    ----------
    stretch : Stretch
    day_start : int
        Start of the gas day [UTC us], from which hours count.
    row_offset, record_offset : int
        Index of the day's first hour, and of the stretch's first record, in the batch.
    """
    start, end = stretch.start, stretch.end
    first_hour = (start - day_start) // HOUR + 1
    hours = np.arange(day_start + first_hour * HOUR, end, HOUR, dtype=np.int64)
    instants, series = stretch.instants, stretch.differential_pressure
    marks = [np.array([start, end], dtype=np.int64), hours, instants]
    if stretch.era is not None and series is not None:
        marks += [np.array([gone.start, gone.end], dtype=np.int64) for gone in series.excluded]
        if series.carry.interval is not None and len(instants):
            closed = instants + series.carry.interval
            early = np.append(closed[:-1] < instants[1:], True)
            marks.append(closed[early])
    edges = np.concatenate(marks)
    edges = np.sort(edges[(edges >= start) & (edges <= end)], kind="stable")
    edges = edges[np.append(True, edges[1:] > edges[:-1])]
    low, high = edges[:-1], edges[1:]
    reason = np.full(len(low), MEASURED, dtype=np.int64)
    first = np.zeros(len(low), dtype=np.int64)
    second = first
    if stretch.era is None:
        reason[:] = REASON["meter_not_in_service"]
    elif series is None or len(instants) == 0:
        reason[:] = REASON["missing_differential_pressure"]
    else:
        found = np.searchsorted(instants, low, side="right") - 1
        first = np.maximum(found, 0)
        if series.carry.interval is not None:
            known = (found >= 0) & (low - instants[first] < series.carry.interval)
            second = first
        else:
            following = np.minimum(first + 1, len(instants) - 1)
            distance = instants[following] - instants[first]
            known = (found >= 0) & (following > first) & (distance <= series.carry.maximum_gap)
            second = following if series.carry.linear else first
        reason[~known] = REASON["missing_differential_pressure"]
    if stretch.era is not None and series is not None:
        for excluded in series.excluded:
            reason[(low >= excluded.start) & (low < excluded.end)] = REASON["excluded"]
    return Pieces(
        start=low,
        end=high,
        row=(low - day_start) // HOUR + row_offset,
        first=np.where(reason == MEASURED, first + record_offset, 0),
        second=np.where(reason == MEASURED, second + record_offset, 0),
        reason=reason,
    )


def joined(parts: list[Pieces]) -> Pieces:
    """Return the pieces one after the other."""
    return Pieces(
        start=np.concatenate([part.start for part in parts]),
        end=np.concatenate([part.end for part in parts]),
        row=np.concatenate([part.row for part in parts]),
        first=np.concatenate([part.first for part in parts]),
        second=np.concatenate([part.second for part in parts]),
        reason=np.concatenate([part.reason for part in parts]),
    )


def settled(pieces: Pieces, missing: Integers) -> Integers:
    """Return the reason of every piece once the records are known; -1 where it is measured.

    Parameters
    ----------
    pieces : Pieces
    missing : (records,) array
        Index in `frames.MISSING`, -1 where the record has a rate.
    """
    if len(missing) == 0:
        return pieces.reason
    first, second = missing[pieces.first], missing[pieces.second]
    records = np.where(first >= 0, first, second)
    return np.where(pieces.reason >= 0, pieces.reason, records)


@dataclass(frozen=True, slots=True)
class Weights:
    """Where the ends of measured pieces lie between their records: 0 at the first, 1 at the next.

    Where a rate holds, both records are the same one and the weights multiply zero.
    """

    first: Integers
    second: Integers
    start: Floats
    end: Floats
    end_is_second: Truths
    seconds: Floats
    """Length of the piece [s]."""


def weights(pieces: Pieces, measured: Integers, instants: Instants) -> Weights:
    """Return the weights of the measured pieces (given by index)."""
    first, second = pieces.first[measured], pieces.second[measured]
    start, end = pieces.start[measured], pieces.end[measured]
    origin = instants[first]
    distance = np.maximum(instants[second] - origin, 1)
    return Weights(
        first=first,
        second=second,
        start=(start - origin) / distance,
        end=(end - origin) / distance,
        end_is_second=end == instants[second],
        seconds=(end - start) / SECOND,
    )


def end_rates(weights: Weights, rates: Floats) -> tuple[Floats, Floats]:
    """Return the rates at the start and at the end of each measured piece.

    A rate at a record's own instant is the record's, bit for bit: the weight 0 changes nothing,
    and the end that meets the second record takes its rate.
    """
    first = rates[weights.first]
    second = rates[weights.second]
    slope = second - first
    at_end = np.where(weights.end_is_second, second, first + slope * weights.end)
    return first + slope * weights.start, at_end


def contributions(weights: Weights, at_start: Floats, at_end: Floats) -> Floats:
    """Return what each measured piece adds to a total: (v - u) (r(u) + r(v)) / 2."""
    result: Floats = weights.seconds * (at_start + at_end) / 2.0
    return result
