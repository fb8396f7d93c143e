"""What a user asks to see, and how instants are written."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from meterfix.model.wording import utc_text

Row = dict[str, Any]
"""What is shown under the names of `columns.ALL`; tables also use a few names beyond them."""


@dataclass(frozen=True)
class Asked:
    """What the user wants to see."""

    by: str = "gas-day"
    meter: str | None = None
    start: int | None = None
    """Periods that end after this instant [UTC us]; of what has no length: at or after it."""
    end: int | None = None
    """Periods that begin before this instant [UTC us]."""

    def covers(self, row: Mapping[str, Any]) -> bool:
        """Return whether a stored row's period shares time with what is asked."""
        return (self.start is None or row["period_end_us"] > self.start) and (
            self.end is None or row["period_start_us"] < self.end
        )

    def holds(self, instant: int) -> bool:
        """Return whether an instant [UTC us] lies in what is asked."""
        return (self.start is None or instant >= self.start) and (
            self.end is None or instant < self.end
        )


def time_text(instant: int) -> str:
    """Return an instant [UTC us] as ISO 8601 text in UTC."""
    return utc_text(instant)
