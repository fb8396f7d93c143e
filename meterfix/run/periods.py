"""Which gas days a change reaches, which days a meter has, and when periods close."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from datetime import date, timedelta
from itertools import pairwise

import numpy as np

from meterfix.frames import Instants
from meterfix.model.calendar import HOUR, GasDayCalendar
from meterfix.run.signals import SiteIndex
from meterfix.store.readings import RawReadings

MeterDayKey = tuple[str, date]
BLOCK = 6 * HOUR
"""Readings are looked at in blocks of this length to see which gas days they touch."""


def touched(
    index: SiteIndex, fresh: Mapping[str, RawReadings]
) -> tuple[set[MeterDayKey], set[date]]:
    """Return the meter-days whose figures new readings can change, and the days they lie in.

    A reading reaches its own gas day and, through the rule between instants, the days within
    the meter's reach. A lone reading at a gas day's very start opens no day: nothing can be
    measured between it and itself.
    """
    calendar = index.site.calendar
    days_of_block: dict[tuple[int, int], tuple[date, ...]] = {}
    reached: set[MeterDayKey] = set()
    opened: set[date] = set()
    for signal, readings in fresh.items():
        if len(readings.instants) == 0:
            continue
        opened |= _days_with(
            calendar, readings.instants, stands_alone=index.signals[signal].interval is None
        )
        blocks = np.unique(readings.instants // BLOCK).tolist()
        for meter in index.meters_of.get(signal, ()):
            reach = index.reach(index.meters[meter])
            for block in blocks:
                key = (block, reach)
                if key not in days_of_block:
                    days_of_block[key] = calendar.days(
                        block * BLOCK - reach, (block + 1) * BLOCK + reach
                    )
                reached.update((meter, day) for day in days_of_block[key])
    return reached, opened


def _days_with(calendar: GasDayCalendar, instants: Instants, *, stands_alone: bool) -> set[date]:
    """Return the gas days that hold a reading, by the rule for a reading at a day's start."""
    days: set[date] = set()
    first, last = int(instants.min()), int(instants.max())
    for block in np.unique(instants // BLOCK).tolist():
        low, high = max(first, block * BLOCK), min(last, (block + 1) * BLOCK - 1)
        for day in calendar.days(low, high):
            start, end = calendar.start(day), calendar.end(day)
            after_start = instants > start if stands_alone else instants >= start
            if day not in days and bool((after_start & (instants < end)).any()):
                days.add(day)
    return days


def filled(days: Iterable[date]) -> set[date]:
    """Return the gas days for which figures exist: those with readings, and gaps between them.

    A silent stretch inside a month, or across the edge of two neighbouring months that both have
    readings, is shown as days without measurement; a stray reading years away opens only its
    own month.
    """
    present = sorted(set(days))
    result: set[date] = set(present)
    for earlier, later in pairwise(present):
        months = (later.year - earlier.year) * 12 + later.month - earlier.month
        if months <= 1:
            result.update(earlier + timedelta(days=n) for n in range(1, (later - earlier).days))
    return result


def in_service(index: SiteIndex, meter: str, gas_day: date) -> bool:
    """Return whether the meter exists at any time of the gas day."""
    first = index.meters[meter].terms.entries[0].since
    return first is None or first < index.site.calendar.end(gas_day)


def past_deadline(index: SiteIndex, period_end: int, now: int) -> bool:
    """Return whether a period that ends then is closed provisionally by now."""
    return period_end + index.site.contract.provisional_after <= now
