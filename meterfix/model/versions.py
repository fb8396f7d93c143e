"""Effective-dated values: what was in force, and when it changed."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Generic, TypeVar

Value_co = TypeVar("Value_co", covariant=True)
Plain = TypeVar("Plain")


@dataclass(frozen=True, slots=True)
class Version(Generic[Value_co]):
    """A value in force from an instant on, until the next version's instant."""

    since: int | None
    """UTC microseconds since 1970; None: from the beginning. Only the first may be None."""
    value: Value_co


@dataclass(frozen=True, slots=True)
class Versions(Generic[Value_co]):
    """Versions of one value in order of time; before the first one nothing is in force."""

    entries: tuple[Version[Value_co], ...]

    def in_force(self, instant: int) -> Value_co | None:
        """Return the value in force at the instant [UTC us], or None before the first."""
        found: Value_co | None = None
        for entry in self.entries:
            if entry.since is None or entry.since <= instant:
                found = entry.value
        return found

    def changes(self, start: int, end: int) -> tuple[int, ...]:
        """Return the instants strictly between start and end at which the value changes."""
        return tuple(e.since for e in self.entries if e.since is not None and start < e.since < end)


def always(value: Plain) -> Versions[Plain]:
    """Return a value in force from the beginning."""
    return Versions((Version(None, value),))


def change_instants(histories: Iterable[Versions[object]], start: int, end: int) -> tuple[int, ...]:
    """Return the sorted, distinct instants strictly inside (start, end) at which any changes."""
    return tuple(sorted({t for history in histories for t in history.changes(start, end)}))
