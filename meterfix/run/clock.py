"""The one reader of the clock."""

from __future__ import annotations

from datetime import UTC, datetime

from meterfix.model.calendar import to_microseconds


def now() -> int:
    """Return the present instant [UTC us]."""
    return to_microseconds(datetime.now(tz=UTC))  # noqa: TID251 - the one place
