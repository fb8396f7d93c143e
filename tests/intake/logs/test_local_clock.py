"""Local times to instants, against the standard library's zones; repeated hours in file order."""

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np
import pytest

from meterfix.intake.logs.zone import to_instants
from meterfix.model.calendar import from_microseconds, to_microseconds

ZONES = [
    "Europe/Berlin",
    "America/St_Johns",
    "America/Chicago",
    "Australia/Lord_Howe",
    "Asia/Kathmandu",
    "Africa/Casablanca",
    "Pacific/Apia",
    "Pacific/Auckland",
    "Asia/Tokyo",
    "Etc/GMT+12",
]


def as_wall(instant: int, zone: ZoneInfo) -> tuple[int, int]:
    """Return the local clock as if it showed UTC, and the fold, by the standard library."""
    local = from_microseconds(instant).astimezone(zone)
    return to_microseconds(local.replace(tzinfo=UTC)), local.fold


@pytest.mark.parametrize("name", ZONES)
def test_every_instant_is_found_from_its_local_time(name):
    """Each quarter of an hour of 2010 to 2026 comes back from what the zone's clock showed.

    Where the clock showed that time twice, the earlier of both is given and the later one is
    the stated time after it.
    """
    zone = ZoneInfo(name)
    start = to_microseconds(datetime(2010, 1, 1, tzinfo=UTC))
    step = 15 * 60 * 1_000_000
    instants = np.arange(start, start + 17 * 365 * 86_400_000_000, 7 * step, dtype=np.int64)
    near: list[int] = []
    offset = None
    for instant in instants.tolist():
        now = from_microseconds(instant).astimezone(zone).utcoffset()
        if offset is not None and now != offset:
            near.extend(range(instant - 30 * step, instant + 30 * step, step // 3))
        offset = now
    asked = np.array([*instants.tolist(), *near], dtype=np.int64)
    shown = [as_wall(instant, zone) for instant in asked.tolist()]
    walls = np.array([wall for wall, _ in shown], dtype=np.int64)
    later = np.array([fold == 1 for _, fold in shown])
    placed = to_instants(walls, name)
    assert not placed.skipped.any()
    assert (placed.window[later] >= 0).all()
    assert (placed.instants + np.where(later, placed.later, 0) == asked).all()
    # Both instants of a repeated local time were among those asked for only if it is one.
    single = placed.window < 0
    assert (placed.later[single] == 0).all()


@pytest.mark.parametrize("name", ZONES)
def test_local_times_that_do_not_exist(name):
    """A local time is called skipped exactly if the standard library does not give it back."""
    zone = ZoneInfo(name)
    first = datetime(2024, 1, 1)  # noqa: DTZ001 - a local time, its zone comes later
    walls = [first + timedelta(minutes=30 * n) for n in range(2 * 17_520)]
    numbers = np.array([to_microseconds(w.replace(tzinfo=UTC)) for w in walls], dtype=np.int64)
    placed = to_instants(numbers, name)
    expected = [
        w.replace(tzinfo=zone).astimezone(UTC).astimezone(zone).replace(tzinfo=None) != w
        for w in walls
    ]
    assert placed.skipped.tolist() == expected
    repeated = [
        w.replace(tzinfo=zone, fold=0).utcoffset() > w.replace(tzinfo=zone, fold=1).utcoffset()
        for w in walls
    ]
    assert (placed.window >= 0).tolist() == repeated


def test_a_day_that_a_zone_left_out():
    """Apia had no 30 December 2011 (IANA time zone database): all of it is skipped."""
    walls = np.array(
        [
            to_microseconds(datetime(2011, 12, 29, 23, 59, 59, tzinfo=UTC)),
            to_microseconds(datetime(2011, 12, 30, tzinfo=UTC)),
            to_microseconds(datetime(2011, 12, 30, 23, 59, 59, tzinfo=UTC)),
            to_microseconds(datetime(2011, 12, 31, tzinfo=UTC)),
        ],
        dtype=np.int64,
    )
    placed = to_instants(walls, "Pacific/Apia")
    assert placed.skipped.tolist() == [False, True, True, False]
    assert placed.instants[3] - placed.instants[0] == 1_000_000
