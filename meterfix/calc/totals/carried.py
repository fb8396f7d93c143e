"""How a signal's readings reach the instants of another one."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from meterfix.frames import Floats, Instants, Integers, Series, Truths


@dataclass(frozen=True, slots=True)
class Carried:
    """A signal's values at given instants, and the readings that they come from."""

    values: Floats
    """NaN where the signal's rule gives none."""
    first: Integers
    """Index of the reading used, or of the earlier of two; -1 where there is none."""
    second: Integers
    """Index of the later of two interpolated readings; else as `first`."""
    exact: Truths
    """The reading stands at the very instant."""
    share: Floats
    """Of the later of two interpolated readings in the value; 0 where one reading serves."""


def without_excluded(series: Series) -> Series:
    """Return the series without the readings inside its excluded intervals [start, end)."""
    kept = np.ones(len(series.instants), dtype=np.bool_)
    for excluded in series.excluded:
        low, high = np.searchsorted(series.instants, (excluded.start, excluded.end))
        kept[low:high] = False
    if kept.all():
        return series
    return replace(
        series,
        instants=series.instants[kept],
        values=series.values[kept],
        disputed=series.disputed[kept],
        implausible=series.implausible[kept],
        doubtful=None if series.doubtful is None else series.doubtful[kept],
    )


def carried_to(instants: Instants, series: Series | None) -> Carried:
    """Return a signal's values at the instants, by the signal's own rule.

    Parameters
    ----------
    instants : (n,) array
        UTC microseconds, ascending.
    series : Series or None
        Readings in strict order of time, excluded ones already dropped; None: no signal serves.

    Returns
    -------
    Carried
        (n,) arrays.
    """
    count = len(instants)
    if series is None or len(series.instants) == 0:
        none = np.full(count, -1, dtype=np.int64)
        return Carried(
            np.full(count, np.nan), none, none, np.zeros(count, dtype=np.bool_), np.zeros(count)
        )
    carry = series.carry
    found = np.searchsorted(series.instants, instants, side="right") - 1
    earlier = np.maximum(found, 0)
    age = instants - series.instants[earlier]
    present = found >= 0
    exact = present & (age == 0)
    values = series.values[earlier]
    later = earlier
    share = np.zeros(count)
    if carry.interval is not None:
        used = present & (age < carry.interval)
    elif carry.linear:
        following = np.minimum(earlier + 1, len(series.instants) - 1)
        distance = series.instants[following] - series.instants[earlier]
        between = present & ~exact & (following > earlier) & (distance <= carry.maximum_gap)
        used = exact | between
        later = np.where(between, following, earlier)
        weight = age / np.maximum(distance, 1)
        line = values + (series.values[later] - values) * weight
        values = np.where(between, line, values)
        share = np.where(between, weight, 0.0)
    else:
        used = present & (age <= carry.maximum_age)
    return Carried(
        values=np.where(used, values, np.nan),
        first=np.where(used, earlier, -1),
        second=np.where(used, later, -1),
        exact=exact,
        share=share,
    )
