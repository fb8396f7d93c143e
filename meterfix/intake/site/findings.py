"""Collecting mistakes: each says where it is, what was given and what is allowed."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Sequence
from datetime import datetime
from difflib import get_close_matches
from typing import TypeVar

from meterfix import units
from meterfix.errors import Mistake, UnitError
from meterfix.model.calendar import SECOND, to_microseconds
from meterfix.model.versions import Version, Versions
from meterfix.model.wording import utc_text

Place = tuple[str | int, ...]
"""Keys and list positions that lead to a value: ("meter", "FT-101", "orifice", "bore")."""

Value = TypeVar("Value")

_SECTIONS = ("source", "signal", "gas", "meter", "envelope", "uncertainty")
_BARE = re.compile(r"[A-Za-z0-9_-]+")


def where(file: str, place: Place) -> str:
    """Return a place in words: 'site.toml, [meter.FT-101.orifice] bore'."""
    if not place:
        return file
    *table, key = place
    if isinstance(key, int) or not table or (len(table) == 1 and table[0] in _SECTIONS):
        table, key = [*table, key], ""
    words = ""
    for step in table:
        if isinstance(step, int):
            words += f" #{step + 1}"
        else:
            words += ("." if words else "") + (step if _BARE.fullmatch(step) else f'"{step}"')
    return f"{file}, [{words}] {key}".rstrip()


def instant_text(instant: int | None) -> str:
    """Return an instant [UTC us] as ISO 8601 text, or 'the beginning'."""
    return "the beginning" if instant is None else utc_text(instant)


class Findings:
    """Every mistake and note found so far in one site file; each mistake is kept once."""

    def __init__(self, file: str) -> None:
        self.file = file
        self.notes: list[str] = []
        self._mistakes: dict[Mistake, None] = {}

    @property
    def mistakes(self) -> tuple[Mistake, ...]:
        """The mistakes in the order in which they were found."""
        return tuple(self._mistakes)

    def add(self, place: Place, given: str, allowed: str) -> None:
        """Record a mistake."""
        self._mistakes[Mistake(where(self.file, place), given, allowed)] = None

    def quantity(
        self,
        place: Place,
        text: str | None,
        dimension: units.Dimension,
        *,
        above: float = -math.inf,
        at_least: float = -math.inf,
        below: float = math.inf,
        limit: str = "",
    ) -> float | None:
        """Return a quantity in SI; None, and a mistake, if it cannot be read or is outside.

        `limit` says in words what the bounds demand.
        """
        if text is None:
            return None
        try:
            value = units.parse(text, dimension)
        except UnitError as error:
            given, _, allowed = str(error).partition("; ")
            self.add(place, given, allowed)
            return None
        if not (value > above and value >= at_least and value < below):
            self.add(place, f"'{text}'", limit)
            return None
        return value

    def duration(self, place: Place, text: str | None, *, positive: bool = True) -> int | None:
        """Return a length of time in microseconds."""
        limit = f"a length of time {'above' if positive else 'of at least'} 0 s is needed"
        seconds = self.quantity(
            place, text, "time", at_least=1e-6 if positive else 0.0, below=4e9, limit=limit
        )
        return None if seconds is None else round(seconds * SECOND)

    def instant(self, place: Place, text: str | None) -> int | None:
        """Return an instant in UTC microseconds; its offset is mandatory."""
        if text is None:
            return None
        example = "2026-10-20T09:30:00+02:00"
        try:
            moment = datetime.fromisoformat(text)
        except ValueError:
            self.add(place, f"'{text}' is no instant", f"write it like {example}")
            return None
        if moment.tzinfo is None:
            self.add(place, f"'{text}' has no offset from UTC", f"write it like {example}")
            return None
        return to_microseconds(moment)

    def reference(
        self, place: Place, name: str | None, kind: str, known: Iterable[str]
    ) -> str | None:
        """Return a name that another table must bear; None, and a mistake, if none does."""
        names = list(known)
        if name is None or name in names:
            return name
        self.add(place, f"'{name}' is no {kind} of this file", suggestion(name, names))
        return None

    def pair(
        self, place: Place, texts: Sequence[str] | None, dimension: units.Dimension
    ) -> tuple[float, float] | None:
        """Return a lower and a higher value in SI."""
        if texts is None:
            return None
        lower = self.quantity(place, texts[0], dimension)
        upper = self.quantity(place, texts[1], dimension)
        if lower is None or upper is None:
            return None
        if lower >= upper:
            self.add(
                place,
                f"from '{texts[0]}' to '{texts[1]}' runs downwards",
                "the first value must be the lower one",
            )
            return None
        return lower, upper

    def versions(
        self,
        place: Place,
        entries: Iterable[tuple[Place, str | None, Value | None]],
        *,
        from_beginning: bool = False,
        what: str = "value",
    ) -> Versions[Value] | None:
        """Return versions in order of time from (place, since, value); None if any is unusable.

        Only the first may lack `since`; with `from_beginning` it must.
        """
        kept: list[Version[Value]] = []
        complete = True
        earlier: int | None = None
        count = 0
        for n, (at, since_text, value) in enumerate(entries):
            count += 1
            since = self.instant((*at, "since"), since_text)
            if n == 0 and from_beginning and since_text is not None:
                self.add(
                    (*at, "since"),
                    f"the first {what} holds only from {since_text} on",
                    "leave out its `since`, so that it holds from the beginning",
                )
                complete = False
            elif n > 0 and since_text is None:
                self.add(at, "`since` is missing", "only the first version may leave it out")
                complete = False
            elif since_text is not None and since is None:
                complete = False
            elif since is not None and earlier is not None and since <= earlier:
                same = since == earlier
                self.add(
                    (*at, "since"),
                    f"{since_text} is {'the same as' if same else 'earlier than'} "
                    "that of the version before",
                    "versions must follow each other in order of time",
                )
                complete = False
            earlier = since if since is not None else earlier
            if value is None:
                complete = False
            else:
                kept.append(Version(since, value))
        if count == 0:
            self.add(place, "an empty list", f"at least one {what} is needed")
            complete = False
        return Versions(tuple(kept)) if complete else None


def suggestion(name: str, names: Sequence[str]) -> str:
    """Return 'did you mean ...?' where a known name is near, or the list of known names."""
    near = get_close_matches(name, names, n=1, cutoff=0.6)
    if near:
        return f"did you mean '{near[0]}'?"
    shown = ", ".join(f"'{known}'" for known in list(names)[:12])
    more = f" and {len(names) - 12} more" if len(names) > 12 else ""
    return f"use one of {shown}{more}" if shown else "there is none"
