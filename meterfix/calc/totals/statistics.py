"""Statistics per hour of signals' readings and of flowing records."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import segment_sum
from meterfix.frames import SIGNAL_STATISTICS, Floats, Instants, Integers
from meterfix.model.calendar import SECOND


@dataclass(frozen=True, slots=True)
class Readings:
    """The readings of one role over a batch, in order of hour and time."""

    row: Integers
    """Hour that holds the reading, counted over the batch; ascending."""
    signal: Integers
    """Changes where the hour's readings pass from one signal to another."""
    instants: Instants
    values: Floats
    limits: Floats
    """Upper range value in the reading's own terms; NaN where none is known."""


def integer_sum(values: Integers, starts: Integers, ends: Integers) -> Integers:
    """Return the exact sum of integers over each half-open segment [start, end)."""
    running = np.concatenate([np.zeros(1, dtype=np.int64), np.cumsum(values, dtype=np.int64)])
    result: Integers = running[ends] - running[starts]
    return result


def segments(rows: Integers, count: int) -> tuple[Integers, Integers]:
    """Return where each of the hours 0 ... count - 1 starts and ends in ascending rows."""
    edges = np.searchsorted(rows, np.arange(count + 1)).astype(np.int64)
    return edges[:-1], edges[1:]


def _quotient(numerator: Floats, denominator: Integers) -> Floats:
    """Return the quotient, NaN where the denominator is not positive."""
    result: Floats = np.where(denominator > 0, numerator / np.maximum(denominator, 1), np.nan)
    return result


def _longest_run(readings: Readings, same: Integers, filled: Integers, count: int) -> Floats:
    """Return per hour the longest time between the first and last of equal readings [s]."""
    longest = np.full(count, np.nan)
    heads = np.flatnonzero(np.append(1, 1 - same))
    tails = np.append(heads[1:], len(readings.row)) - 1
    lengths = readings.instants[tails] - readings.instants[heads]
    starts = np.searchsorted(readings.row[heads], filled)
    longest[filled] = np.maximum.reduceat(lengths, starts) / SECOND
    return longest


def signal_statistics(readings: Readings, count: int) -> Floats:
    """Return the statistics of one role's readings, hour by hour.

    Parameters
    ----------
    readings : Readings
    count : int
        Number of hours in the batch.

    Returns
    -------
    (count, len(SIGNAL_STATISTICS)) array
        SI; times in s. An hour without readings has count 0 and NaN elsewhere. The standard
        deviation is two-pass with n - 1; it and the mean squared successive difference are NaN
        for a single reading.
    """
    starts, ends = segments(readings.row, count)
    number = ends - starts
    table = dict.fromkeys(SIGNAL_STATISTICS, np.full(count, np.nan))
    table["count"] = number.astype(np.float64)
    filled = np.flatnonzero(number > 0)
    if len(filled) > 0:
        values, instants = readings.values, readings.instants
        heads, tails = starts[filled], ends[filled] - 1

        def spread(per_hour: Floats) -> Floats:
            result = np.full(count, np.nan)
            result[filled] = per_hour
            return result

        mean = _quotient(segment_sum(values, starts, ends), number)
        deviation = values - mean[readings.row]
        squares = segment_sum(deviation * deviation, starts, ends)
        # a pair belongs to the hour and the signal of both its readings
        pair = (readings.row[1:] == readings.row[:-1]) & (
            readings.signal[1:] == readings.signal[:-1]
        )
        step = values[1:] - values[:-1]
        pair_starts, pair_ends = segments(readings.row[1:][pair], count)
        differences = segment_sum((step * step)[pair], pair_starts, pair_ends)
        changed = (step != 0.0)[pair].astype(np.int64)
        highest = spread(np.maximum.reduceat(values, heads))
        limit = np.where(np.isnan(readings.limits), highest[readings.row], readings.limits)
        same = (pair & (step == 0.0)).astype(np.int64)
        table |= {
            "time": spread((instants[tails] - instants[heads]) / SECOND),
            "mean": mean,
            "standard_deviation": np.sqrt(_quotient(squares, number - 1)),
            "mean_squared_successive_difference": _quotient(differences, pair_ends - pair_starts),
            "minimum": spread(np.minimum.reduceat(values, heads)),
            "maximum": highest,
            "first": spread(values[heads]),
            "last": spread(values[tails]),
            "changes": spread(
                integer_sum(changed, pair_starts, pair_ends)[filled].astype(np.float64)
            ),
            "longest_unchanged_time": _longest_run(readings, same, filled, count),
            "count_at_maximum": spread(
                integer_sum((values >= limit).astype(np.int64), starts, ends)[filled].astype(
                    np.float64
                )
            ),
        }
    return np.column_stack([table[name] for name in SIGNAL_STATISTICS])


def flowing_statistics(
    rows: Integers, differential_pressure: Floats, static_pressure: Floats, count: int
) -> dict[str, Floats]:
    """Return the statistics of flowing records, hour by hour.

    Parameters
    ----------
    rows : (n,) array
        Hour of each flowing record, ascending.
    differential_pressure, static_pressure : (n,) arrays
        Linear and positive; absolute. [Pa]
    count : int
        Number of hours in the batch.

    Returns
    -------
    dict of (count,) arrays
        By the names of `frames.HOURLY_COLUMNS`; roots in Pa^0.5, the covariance (n - 1) in
        Pa^1.5. NaN where there are too few records.
    """
    starts, ends = segments(rows, count)
    number = ends - starts
    root = np.sqrt(np.ascontiguousarray(differential_pressure))
    mean_root = _quotient(segment_sum(root, starts, ends), number)
    mean_pressure = _quotient(segment_sum(static_pressure, starts, ends), number)
    product = (root - mean_root[rows]) * (static_pressure - mean_pressure[rows])
    return {
        "flowing_records": number.astype(np.float64),
        "mean_root_differential_pressure": mean_root,
        "mean_inverse_root_differential_pressure": _quotient(
            segment_sum(1.0 / root, starts, ends), number
        ),
        "covariance_root_differential_pressure_static_pressure": _quotient(
            segment_sum(product, starts, ends), number - 1
        ),
    }
