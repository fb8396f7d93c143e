"""Counts and instants as every message writes them."""

from __future__ import annotations

from meterfix.model.calendar import from_microseconds


def counted(number: int, one: str, several: str = "") -> str:
    """Return a count with its noun: '1 gas', '2 gases'; `several` is `one` + 's' unless given."""
    return f"{number} {one if number == 1 else several or one + 's'}"


def utc_text(instant: int) -> str:
    """Return an instant [UTC us] as ISO 8601 text that ends in Z, without a fraction of zero."""
    return from_microseconds(instant).isoformat().replace("+00:00", "Z")
