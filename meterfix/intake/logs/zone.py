"""Local times to instants, exactly, a whole file at once; clock changes included."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from functools import lru_cache
from zoneinfo import ZoneInfo

import numpy as np

from meterfix.frames import Instants, Integers, Truths
from meterfix.model.calendar import HOUR, SECOND, from_microseconds, to_microseconds

_STEP = 6 * HOUR
"""Offsets are looked up this often to find changes: no zone changed twice within it."""
ALWAYS_UTC = frozenset({"UTC", "Etc/UTC"})
"""Zones whose clock shows UTC."""


@dataclass(frozen=True, slots=True)
class Placed:
    """Local times on the line of instants.

    `instants` holds, for a repeated local time, the earlier of its two instants; the later one
    is `later` after it. `window` numbers the clock change that repeats it (its index among the
    zone's changes), -1 for others. `skipped` local times have no instant.
    """

    instants: Instants
    skipped: Truths
    window: Integers
    later: Integers


@lru_cache(maxsize=4096)
def _changes_of_year(zone: str, year: int) -> tuple[tuple[int, int, int], ...]:
    """Return (instant, offset before, offset after) of every clock change in a UTC year [us]."""
    clock = ZoneInfo(zone)

    def offset(instant: int) -> int:
        delta = from_microseconds(instant).astimezone(clock).utcoffset()
        assert delta is not None
        return (delta.days * 86_400 + delta.seconds) * SECOND + delta.microseconds

    start = to_microseconds(datetime(year, 1, 1, tzinfo=UTC))
    end = to_microseconds(datetime(year + 1, 1, 1, tzinfo=UTC))
    changes: list[tuple[int, int, int]] = []
    low, before = start - SECOND, offset(start - SECOND)
    while low < end - SECOND:
        high = min(low + _STEP, end - SECOND)
        after = offset(high)
        if after != before:
            earlier, later = low, high
            while later - earlier > SECOND:
                middle = earlier + (later - earlier) // SECOND // 2 * SECOND
                if offset(middle) == before:
                    earlier = middle
                else:
                    later = middle
            changes.append((later, before, offset(later)))
        low, before = high, after
    return tuple(changes)


@lru_cache(maxsize=256)
def _changes(zone: str, first: int, last: int) -> tuple[int, Instants, Integers, Integers]:
    """Return the first offset and the changes of the years [first, last] as arrays [us]."""
    found = [change for year in range(first, last + 1) for change in _changes_of_year(zone, year)]
    start = datetime(first, 1, 1, tzinfo=UTC).astimezone(ZoneInfo(zone)).utcoffset()
    assert start is not None
    offset = found[0][1] if found else (start.days * 86_400 + start.seconds) * SECOND
    columns = np.array(found, dtype=np.int64).reshape(len(found), 3)
    return offset, columns[:, 0].copy(), columns[:, 1].copy(), columns[:, 2].copy()


def to_instants(walls: Instants, zone: str) -> Placed:
    """Return the instants of local clock times.

    Parameters
    ----------
    walls : (n,) int64 array
        Local clock times as microseconds since 1970 as if the clock showed UTC. Years 2 to 9998.
    zone : str
        IANA name of the zone.
    """
    count = len(walls)
    none = np.zeros(count, dtype=np.int64)
    if not count or zone in ALWAYS_UTC:
        return Placed(walls, np.zeros(count, dtype=np.bool_), none - 1, none)
    # A day to either side, so that a change near New Year is among those looked at.
    first = from_microseconds(int(walls.min()) - 24 * HOUR).year
    last = from_microseconds(int(walls.max()) + 24 * HOUR).year
    start, at, before, after = _changes(zone, first, last)
    if not len(at):
        return Placed(walls - start, np.zeros(count, dtype=np.bool_), none - 1, none)
    # Local times in [at + smaller offset, at + larger offset) do not exist where the clock goes
    # forward and exist twice where it goes back.
    window_start = at + np.minimum(before, after)
    window_end = at + np.maximum(before, after)
    nearest = np.searchsorted(window_end, walls, side="right")
    bounded = np.minimum(nearest, len(at) - 1)
    inside = (nearest < len(at)) & (walls >= window_start[bounded])
    offsets = np.concatenate(([start], after))[nearest]
    backward = after[bounded] < before[bounded]
    repeated = inside & backward
    return Placed(
        instants=walls - offsets,
        skipped=inside & ~backward,
        window=np.where(repeated, at[bounded], -1),
        later=np.where(repeated, before[bounded] - after[bounded], 0),
    )
