"""The errors that meterfix raises: few kinds, each naming what, where, value and limit."""

from __future__ import annotations

from dataclasses import dataclass


class MeterfixError(Exception):
    """Any error that meterfix raises on purpose."""


@dataclass(frozen=True, slots=True)
class Mistake:
    """One mistake in a site file: where it is, what was given, what is allowed."""

    where: str
    given: str
    allowed: str

    def __str__(self) -> str:
        return f"{self.where}: {self.given}; {self.allowed}"


class SiteFileError(MeterfixError):
    """The site file cannot be used; carries every mistake found in it, not only the first."""

    def __init__(self, path: str, mistakes: tuple[Mistake, ...]) -> None:
        self.path = path
        self.mistakes = mistakes
        listed = "\n".join(f"  {mistake}" for mistake in mistakes)
        plural = "" if len(mistakes) == 1 else "s"
        super().__init__(f"{path}: {len(mistakes)} mistake{plural}\n{listed}")


class UnitError(MeterfixError):
    """A quantity or unit that cannot be read, or is of another dimension than is wanted."""


class GasError(MeterfixError):
    """A gas that cannot be computed at all: unknown component, impossible composition."""


class LedgerError(MeterfixError):
    """The database, archive and anchor do not belong together, or cannot be opened."""


class LedgerBusyError(LedgerError):
    """Another process holds the writer's lock of this ledger."""


class HeadMovedError(LedgerError):
    """Somebody else committed between reading the head and writing the next pass."""
