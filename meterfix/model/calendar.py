"""Gas days and months: local time at the edge, UTC microseconds inside."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from functools import cached_property
from zoneinfo import ZoneInfo

from meterfix.model.versions import Versions

SECOND = 1_000_000
"""Microseconds in a second."""
HOUR = 3600 * SECOND
"""Microseconds in an hour."""
DAY = 24 * HOUR
"""Microseconds in 24 hours."""

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


def to_microseconds(instant: datetime) -> int:
    """Return an aware datetime as UTC microseconds since 1970, exactly."""
    if instant.tzinfo is None:
        message = f"the instant {instant.isoformat()} has no offset; one is needed"
        raise ValueError(message)
    delta = instant - _EPOCH
    return (delta.days * 86_400 + delta.seconds) * SECOND + delta.microseconds


def from_microseconds(instant: int) -> datetime:
    """Return UTC microseconds since 1970 as an aware datetime in UTC, exactly."""
    return _EPOCH + timedelta(microseconds=instant)


@dataclass(frozen=True)
class GasDayCalendar:
    """Where gas days begin: a local clock time, effective-dated, in one time zone.

    A change of the start takes effect with the first gas day that begins, by the new rule,
    at or after its instant; the day before it has whatever length results.
    """

    time_zone: str
    gas_day_start: Versions[int]
    """Seconds after local midnight."""

    @cached_property
    def _zone(self) -> ZoneInfo:
        return ZoneInfo(self.time_zone)

    def start(self, gas_day: date) -> int:
        """Return the gas day's first instant [UTC us]."""
        chosen: int | None = None
        for version in self.gas_day_start.entries:
            local = datetime.combine(gas_day, time()) + timedelta(seconds=version.value)
            instant = to_microseconds(local.replace(tzinfo=self._zone))
            if version.since is None or version.since <= instant or chosen is None:
                chosen = instant
        if chosen is None:
            message = "a calendar needs at least one gas-day start"
            raise ValueError(message)
        return chosen

    def end(self, gas_day: date) -> int:
        """Return the first instant after the gas day [UTC us]."""
        return self.start(gas_day + timedelta(days=1))

    def day_of(self, instant: int) -> date:
        """Return the gas day that holds the instant [UTC us]."""
        day = from_microseconds(instant).astimezone(self._zone).date()
        while instant < self.start(day):
            day -= timedelta(days=1)
        while instant >= self.end(day):
            day += timedelta(days=1)
        return day

    def days(self, start: int, end: int) -> tuple[date, ...]:
        """Return every gas day that shares time with the closed range [start, end] [UTC us]."""
        first, last = self.day_of(start), self.day_of(end)
        return tuple(first + timedelta(days=n) for n in range((last - first).days + 1))

    def month_of(self, gas_day: date) -> date:
        """Return the first gas day of the gas day's month; months follow the gas day's date."""
        return gas_day.replace(day=1)

    def month_days(self, month: date) -> tuple[date, ...]:
        """Return every gas day of the month."""
        following = (month.replace(day=28) + timedelta(days=4)).replace(day=1)
        return tuple(month + timedelta(days=n) for n in range((following - month).days))
