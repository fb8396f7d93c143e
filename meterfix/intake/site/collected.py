"""Sources of uncertainty as they are found: one name each, and what nobody stated."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from meterfix.intake.site.findings import Findings, Place
from meterfix.model.uncertainty import Part, UncertaintySource

_SHOWN = 12
"""Signals that the note names; the others are counted."""


class Collected:
    """The sources of a site, in the order in which they were found."""

    def __init__(self, findings: Findings) -> None:
        self._findings = findings
        self._sources: dict[str, UncertaintySource] = {}
        self._unstated: dict[str, None] = {}
        self._signals: list[str] = []

    @property
    def sources(self) -> tuple[UncertaintySource, ...]:
        """Every source that acts on something."""
        return tuple(source for source in self._sources.values() if source.parts)

    @property
    def note(self) -> str | None:
        """What counts as exact because its uncertainty is not stated; None if nothing does."""
        if not self._unstated and not self._signals:
            return None
        shown = self._signals[:_SHOWN]
        more = len(self._signals) - len(shown)
        signals = ", ".join(shown) + (f" and {more} more" if more else "")
        listed = [f"signals {signals}"] if shown else []
        return (
            "counted as exact, for no uncertainty is stated: "
            f"{'; '.join([*listed, *self._unstated])}"
        )

    def add(
        self, place: Place, name: str, kind: str, parts: tuple[Part, ...], *, numbered: bool = False
    ) -> None:
        """Add a source; `numbered`: a name that is taken gets a number, else it is a mistake."""
        if numbered:
            plain, n = name, 1
            while name in self._sources:
                n += 1
                name = f"{plain} ({n})"
        if name in self._sources:
            self._findings.add(
                place,
                f"a source of uncertainty '{name}' beside another one of that name",
                "each has a name of its own",
            )
            return
        self._sources[name] = UncertaintySource(name, kind, parts)

    def unstated_signal(self, name: str) -> None:
        """Record a signal whose uncertainty nobody stated."""
        self._signals.append(name)

    def unstated(self, what: str) -> None:
        """Record something whose uncertainty nobody stated."""
        self._unstated[what] = None


def joined(parts: Sequence[Part]) -> tuple[Part, ...]:
    """Return the parts, with those that follow each other unchanged made one."""
    found: list[Part] = []
    for part in parts:
        for n, earlier in enumerate(found):
            if earlier.end is not None and earlier.end == part.start:
                same = replace(earlier, start=part.start, end=part.end)
                if same == part:
                    found[n] = replace(earlier, end=part.end)
                    break
        else:
            found.append(part)
    return tuple(found)
