"""What does not repeat: the variance of an hour's total from its readings and their spacing.

*Readings.* Each reading errs on its own, with its signal's stated repeatability or, where none
is stated, with half the hour's mean squared successive difference. Not all readings then count
as independent: from the lag-1 correlation r of the successive differences, -1/2 for independent
ones, follows the correlation c = 1 + 2 r of successive errors (of a first-order process), and the
variance of a sum grows by (1 + c)/(1 - c), the number of readings over its effective number. A
reading's effect on a total is its share of all records that it reaches, added up with sign
before it is squared, so that a pressure carried to sixty records counts once.

*Attribution.* The variance of the whole stretch is shared out over its hours in proportion to
what each hour takes from each reading: hours add up to the day exactly. A reading between two
hours is in both.

*Between readings* the rate is not known. If it wanders, its integral over an interval strays
from that of the straight line with a variance of interval^2 x increment^2 / 12 (a Brownian
bridge), and by interval^2 x increment^2 / 3 where the first value is held. The part of the
increments that the readings' own noise explains is taken off first, over the hour as a whole: a
limit at 0 increment by increment would take noise for wandering. A cell that is the mean over
its interval strays by nothing.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import segment_sum
from meterfix.calc.totals.pieces import Weights
from meterfix.calc.totals.stretches import Stretch
from meterfix.frames import Floats, Instants, Integers, Series
from meterfix.model.calendar import HOUR, SECOND

_LARGEST_CORRELATION = 0.8
"""Of successive readings' errors; beyond it, it is the process that moves, which integration
follows."""
_BRIDGE = 1.0 / 12.0
_HELD = 1.0 / 3.0


@dataclass(frozen=True, slots=True)
class Noise:
    """Variances of one reading of a series, (readings,) arrays, or one for all."""

    variance: Floats | float
    inflation: float
    """By how much the variance of a sum grows because successive errors are alike."""
    as_logged: bool
    """Estimated from the readings as logged, roots included; else in Pa or K."""


def estimated_noise(series: Sequence[Series], day_starts: Sequence[int]) -> list[Noise]:
    """Return the noise of series whose repeatability is not stated.

    Parameters
    ----------
    series : sequence of Series
        Readings in strict order of time.
    day_starts : sequence of int
        By series: UTC us from which hours count.

    Returns
    -------
    list of Noise
        A reading's variance is that of its hour, or the whole series's where its hour has no
        two readings; 0 where no hour has: what such readings change by counts as wandering.
    """
    if not series:
        return []
    hours: list[Integers] = []
    offset = 0
    for one, day_start in zip(series, day_starts, strict=True):
        if len(one.instants) == 0:
            hours.append(np.array([offset], dtype=np.int64))
            continue
        first, last = (int(one.instants[n] - day_start) // HOUR for n in (0, -1))
        edges = day_start + HOUR * np.arange(first, last + 2)
        hours.append(np.searchsorted(one.instants, edges) + offset)
        offset += len(one.instants)
    lengths = np.array([len(one.instants) for one in series])
    values = np.concatenate([one.values for one in series])
    step = values[1:] - values[:-1]
    starts = np.concatenate([at[:-1] for at in hours])
    tails = np.concatenate([at[1:] for at in hours])
    # pair n is readings n and n + 1; it belongs to an hour that holds both
    ends = np.maximum(tails - 1, starts)
    sums, pairs = segment_sum(step * step, starts, ends), ends - starts
    edge = np.concatenate([[0], np.cumsum([len(at) - 1 for at in hours])]).astype(np.int64)
    all_sums = segment_sum(sums, edge[:-1], edge[1:])
    running = np.concatenate([[0], np.cumsum(pairs)])
    all_pairs = running[edge[1:]] - running[edge[:-1]]
    mean = all_sums / np.maximum(all_pairs, 1)
    of_hour = np.where(pairs > 0, sums / np.maximum(pairs, 1), np.repeat(mean, np.diff(edge)))
    variance = np.repeat(0.5 * of_hour, tails - starts)
    inflation = _inflation(step, lengths, mean)
    where = np.concatenate([[0], np.cumsum(lengths)]).tolist()
    return [
        Noise(variance[low:high], grown, as_logged=True)
        for low, high, grown in zip(where[:-1], where[1:], inflation.tolist(), strict=True)
    ]


def _inflation(step: Floats, lengths: Integers, mean_square: Floats) -> Floats:
    """Return n over the effective number of readings of each series, (series,) array.

    Errors of a first-order process with correlation c have successive differences with a lag-1
    correlation of -(1 - c)/2; n is to the effective number as (1 + c) to (1 - c).
    """
    ends = np.cumsum(lengths)
    starts = np.minimum(ends - lengths, len(step) - 1 if len(step) else 0)
    products = np.maximum(lengths - 2, 0)
    lagged = segment_sum(step[1:] * step[:-1], starts, starts + products)
    known = (products > 0) & (mean_square > 0.0)
    ratio = np.where(
        known, lagged / np.maximum(products, 1) / np.where(known, mean_square, 1.0), -0.5
    )
    correlation = np.minimum(np.maximum(1.0 + 2.0 * ratio, 0.0), _LARGEST_CORRELATION)
    grown: Floats = (1.0 + correlation) / (1.0 - correlation)
    return grown


class NoiseBook:
    """The noise of every signal of a batch, stated or estimated.

    Parameters
    ----------
    repeatability : mapping
        By name of the signal: one standard deviation of a reading [Pa or K].
    used : sequence of (signal, Series, day start)
        What is to be looked up.
    """

    def __init__(
        self, repeatability: Mapping[str, float], used: Sequence[tuple[str, Series, int]]
    ) -> None:
        self._stated = {
            signal: Noise(size * size, 1.0, as_logged=False)
            for signal, size in repeatability.items()
        }
        others = {
            (id(series), day_start): series
            for signal, series, day_start in used
            if signal not in repeatability
        }
        noises = estimated_noise(list(others.values()), [day_start for _, day_start in others])
        self._estimated = dict(zip(others, noises, strict=True))

    def noise(self, signal: str, series: Series, day_start: int) -> Noise:
        """Return the noise of a signal's series."""
        return self._stated.get(signal) or self._estimated[id(series), day_start]


@dataclass(frozen=True, slots=True)
class ReadingEffects:
    """One stretch's derivatives of the mass rate by its readings, (records,) arrays [kg/s]."""

    differential_pressure: Floats
    """Per Pa."""
    differential_pressure_as_logged: Floats
    """Per unit of the logged value: Pa, or the root."""
    static_pressure: Floats
    """Per Pa."""
    barometer: Floats
    """Per Pa; 0 where the static pressure is absolute."""
    temperature: Floats
    """Per K."""


def reading_variances(
    stretch: Stretch,
    effects: ReadingEffects,
    weight: Floats,
    noises: Mapping[str, Noise],
) -> tuple[Floats, Floats]:
    """Return what the variances of a stretch's cells are integrals and differences of.

    Parameters
    ----------
    stretch : Stretch
    effects : ReadingEffects
    weight : (records,) array
        Of each record in the whole stretch [s].
    noises : mapping
        The noise of each signal, by role.

    Returns
    -------
    shared : (records,) array
        Integrated over a cell as a rate is: the variance of the cell's mass [kg2/s].
    own : (records,) array
        Variance of the record's rate from readings at its own instant [(kg/s)^2].
    """
    shared, own = np.zeros(len(weight)), np.zeros(len(weight))
    for role, _, carried in stretch.carried:
        noise = noises[role]
        logged = role == "differential_pressure" and noise.as_logged
        by = getattr(effects, "differential_pressure_as_logged" if logged else role)
        if carried.exact.all():
            variance = by * by * _of(noise.variance, carried.first)
            own += variance
            shared += variance * weight * noise.inflation
            continue
        used = carried.first >= 0
        first, second = np.maximum(carried.first, 0), np.maximum(carried.second, 0)
        effect = np.where(used, weight * by, 0.0)
        to_second = effect * carried.share
        count = int(second.max(initial=0)) + 1
        # a bin holds one reading's records in order of time, whatever else is in the batch
        of_reading = np.bincount(first, weights=effect - to_second, minlength=count)
        of_reading += np.bincount(second, weights=to_second, minlength=count)
        # a later reading is the earlier one's second; both take their part of the variance
        by_first = of_reading[first] * _of(noise.variance, first) * (1.0 - carried.share)
        by_second = of_reading[second] * _of(noise.variance, second) * carried.share
        shared += np.where(used, by, 0.0) * (by_first + by_second) * noise.inflation
        at_instant = by * by * _of(noise.variance, first)
        own += np.where(carried.exact, at_instant, 0.0)
    return shared, own


def _of(variance: Floats | float, which: Integers) -> Floats | float:
    return variance if isinstance(variance, float) else variance[which]


def wandering_variances(
    parts: list[Stretch],
    offsets: Integers,
    weights: Weights,
    mass_flow: Floats,
    instants: Instants,
    own: Floats,
) -> Floats:
    """Return per measured piece the variance of its mass from what happens between readings.

    Parameters
    ----------
    parts : list of Stretch
        All stretches of the batch.
    offsets : (stretches + 1,) array
        Each stretch's records.
    weights : Weights
        Of the measured pieces.
    mass_flow, own : (records,) arrays
        [kg/s], 0 where not known; variance of the rate from the readings' noise [(kg/s)^2].
    instants : (records,) array
        [UTC us]

    Returns
    -------
    (pieces,) array
        [kg2]; negative where noise alone would make the rate change more than it does. A
        cell's sum of them counts as far as it is positive.
    """
    factor = np.zeros(len(parts))
    longest = np.zeros(len(parts), dtype=np.int64)
    for n, part in enumerate(parts):
        if part.differential_pressure is None:
            continue
        carry = part.differential_pressure.carry
        if carry.interval is not None:
            factor[n] = 0.0 if part.differential_pressure.mean_values else _HELD
            longest[n] = carry.interval
        else:
            factor[n] = _BRIDGE if carry.linear else _HELD
            longest[n] = carry.maximum_gap
    lengths = np.diff(offsets)
    last = offsets[1:][lengths > 0] - 1
    interval = np.zeros(len(instants), dtype=np.int64)
    interval[:-1] = instants[1:] - instants[:-1]
    interval[last] = 0  # no stretch's record is followed by another's
    interval[interval > np.repeat(longest, lengths)] = 0
    beyond_noise = np.zeros(len(instants))
    step = mass_flow[1:] - mass_flow[:-1]
    beyond_noise[:-1] = step * step - own[1:] - own[:-1]
    of_record = beyond_noise * (interval / SECOND) * np.repeat(factor, lengths)
    found: Floats = of_record[weights.first] * weights.seconds
    return found
