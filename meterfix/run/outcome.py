"""What a pass did, and how it is told."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from meterfix.model.wording import counted
from meterfix.run.alerts import News
from meterfix.run.figures import Row
from meterfix.run.gather import Arrived, Slice

NAMED_AT_CLOSE = 3
"""Waiting files that the reason of a close names; of more it gives the number."""


@dataclass(frozen=True)
class Outcome:
    """What a pass did."""

    sequence: int
    """Of the pass; 0 if it changed nothing."""
    more: bool
    """There is work left for another pass."""
    files: int = 0
    readings: int = 0
    """New ones of files that arrived."""
    judged_again: int = 0
    """Stored files that the changed site file reads otherwise."""
    days: int = 0
    rejected: tuple[str, ...] = ()
    """Whole files that could not be used, each with its reason."""
    waiting: tuple[str, ...] = ()
    alerts: tuple[News, ...] = ()
    """Alerts that this pass opened or closed."""


def held_text(waiting: Sequence[Row]) -> str:
    """Return what a close says of files that waited when it was due; '' if none did."""
    if not waiting:
        return ""
    named = [f"{row['source']}: {row['name'] or 'its folder'}" for row in waiting[:NAMED_AT_CLOSE]]
    more = len(waiting) - len(named)
    return f"; without {', '.join(named)}" + (f" and {more} more" if more else "")


def waiting_text(taken: Slice) -> tuple[str, ...]:
    """Return each file that waits with its reason; a folder that cannot be read has no name."""
    return tuple(
        ": ".join(part for part in (row["source"], row["name"], row["reason"]) if part)
        for row in taken.waiting
    )


def rejected_text(arrived: Sequence[Arrived], fates: Sequence[Row]) -> tuple[str, ...]:
    """Return each file that could not be used at all with its reason."""
    return tuple(
        f"{file.source}: {file.name}: {fate['reason']}"
        for file, fate in zip(arrived, fates, strict=False)
        if fate["verdict"] != "accepted"
    )


def judged_again_text(number: int) -> str:
    """Return how many stored files were judged again, '' if none."""
    return f"{counted(number, 'file')} judged again under the changed site file" if number else ""


def fact_text(fact: Mapping[str, Any]) -> str:
    """Return a sentence about something that a start-up found and chained."""
    if fact["fact"] == "older database restored":
        return (
            f"older database restored: it ends with pass {fact['database_head']}, the archive's "
            f"anchor with pass {fact['anchor_head']}; what the archive holds beyond it is taken in "
            "again"
        )
    if fact["fact"] == "intent resolved":
        done = "had been committed" if fact["committed"] else "had not been committed"
        return f"intent resolved: pass {fact['sequence']} was cut short; it {done}"
    return str(fact["fact"])


def quarantined(
    arrived: Sequence[Arrived], rows: Mapping[str, Sequence[Row]]
) -> list[Mapping[str, Any]]:
    """Return the files that this pass quarantines, as `alerts.quarantined` wants them."""
    return [
        {
            "source": file.source,
            "name": file.name,
            "raw_sha256": file.raw_sha256,
            "reason": file.quarantined,
            "delivery": row["sequence"],
        }
        for file, row in zip(arrived, rows["delivery"], strict=True)
        if file.quarantined
    ]
