"""The alerts that the ledger itself raises: disputed hours, quarantined files, a clock behind."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date
from typing import Any

from meterfix.frames import HOURLY_INDEX, HourlyRecord
from meterfix.model.calendar import HOUR
from meterfix.model.wording import counted, utc_text
from meterfix.run.figures import Row
from meterfix.store.ledger import Ledger

DISPUTED = "disputed hour"
QUARANTINED = "quarantined file"
CLOCK_BEHIND = "clock behind"


CONFLICTS_TOLD = 5
"""Conflicting readings that the evidence of a disputed hour describes; it counts the others."""

HOW_TO_SETTLE = (
    "to settle it, deliver the file that is wrong again under its own name, with the right values "
    "(a later delivery of a name wins over its earlier one), or give the sources different "
    "precedence in the site file"
)


@dataclass(frozen=True)
class News:
    """An alert that a pass opened or closed."""

    state: str
    """'opened' or 'closed'."""
    kind: str
    subject: str
    since: int
    """UTC us."""
    message: str


@dataclass
class AlertBook:
    """Alerts as they stand, and the events that a pass adds."""

    ledger: Ledger
    currency: str
    alerts: list[Row] = field(default_factory=list)
    events: list[Row] = field(default_factory=list)
    news: list[News] = field(default_factory=list)
    """What of it a user wants to be told at once."""

    def __post_init__(self) -> None:
        """Read the last event of every alert."""
        self._known = {row["id"] for row in self.ledger.rows("alert", columns=("id",))}
        self._last: dict[str, Row] = {
            row["alert_id"]: row
            for row in self.ledger.latest("alert_event", group=("alert_id",), number="number")
        }

    def raise_(
        self,
        kind: str,
        subject: str,
        since: int,
        *,
        severity: str,
        message: str,
        evidence: Mapping[str, Any],
        until: int | None = None,
    ) -> None:
        """Open an alert, or update it if its evidence changed."""
        identity = alert_id(kind, subject, since)
        shown = json.dumps(evidence, sort_keys=True)
        last = self._last.get(identity)
        if last is not None and last["state"] != "closed" and last["evidence"] == shown:
            return
        if identity not in self._known:
            self._known.add(identity)
            self.alerts.append(
                {"id": identity, "kind": kind, "subject": subject, "since_us": since}
            )
        state = "opened" if last is None else "updated"
        if last is None or last["state"] == "closed":
            self.news.append(News("opened", kind, subject, since, message))
        self._event(identity, state, severity, message, shown, until)

    def close(self, kind: str, subject: str, since: int, *, until: int, message: str) -> None:
        """Close an alert if it is open."""
        identity = alert_id(kind, subject, since)
        last = self._last.get(identity)
        if last is not None and last["state"] != "closed":
            self.news.append(News("closed", kind, subject, since, message))
            self._event(identity, "closed", last["severity"], message, last["evidence"], until)

    def open_ones(self, kind: str) -> list[Row]:
        """Return the open alerts of a kind."""
        return [
            row
            for row in self.ledger.rows("alert", where={"kind": kind})
            if row["id"] in self._last and self._last[row["id"]]["state"] != "closed"
        ]

    def _event(
        self,
        identity: str,
        state: str,
        severity: str,
        message: str,
        evidence: str,
        until: int | None,
    ) -> None:
        last = self._last.get(identity)
        row: Row = {
            "alert_id": identity,
            "number": 1 if last is None else last["number"] + 1,
            "state": state,
            "until_us": until,
            "severity": severity,
            "message": message,
            "evidence": evidence,
            "effect_base_volume_m3_per_day": None,
            "effect_energy_J_per_day": None,
            "effect_money_per_day": None,
            "currency": self.currency,
            "input_digest": hashlib.sha256(evidence.encode()).hexdigest(),
        }
        self._last[identity] = row
        self.events.append(row)


def alert_id(kind: str, subject: str, since: int) -> str:
    """Return the id of an alert: the same episode has the same id however it was found."""
    return hashlib.sha256(f"{kind}\x1f{subject}\x1f{since}".encode()).hexdigest()[:16]


def disputed_hours(
    book: AlertBook,
    record: HourlyRecord,
    gas_day: date,
    conflicts: Callable[[], tuple[int, list[dict[str, Any]]]],
) -> None:
    """Open, update or close the alert of a meter's disputed hours in one gas day.

    Parameters
    ----------
    conflicts : returns how many readings are disputed and the first of them; asked if any is.
    """
    counts = record.statistics[:, HOURLY_INDEX["disputed_readings"]]
    hours = [n for n, count in enumerate(counts.tolist()) if count > 0]
    if not hours:
        book.close(
            DISPUTED,
            record.meter,
            record.start,
            until=record.start,
            message="no reading of this gas day is disputed any more",
        )
        return
    starts = [utc_text(record.start + n * HOUR) for n in hours]
    readings = int(sum(counts[n] for n in hours))
    number, first = conflicts()
    book.raise_(
        DISPUTED,
        record.meter,
        record.start,
        severity="warning",
        message=(
            f"{record.meter}, gas day {gas_day.isoformat()}: "
            f"{counted(readings, 'reading')} in {counted(len(hours), 'hour')} delivered with "
            f"different values, of which the lowest stands; {HOW_TO_SETTLE}"
        ),
        evidence={
            "hours": starts,
            "readings": readings,
            "conflicts": number,
            "first_conflicts": first,
        },
    )


def quarantined(book: AlertBook, files: Sequence[Mapping[str, Any]], now: int) -> None:
    """Open an alert for every file that is quarantined in this pass."""
    for file in files:
        book.raise_(
            QUARANTINED,
            f"{file['source']}: {file['name']}",
            now,
            severity="error",
            message=f"{file['name']} of source {file['source']}: {file['reason']}",
            evidence={"sha256": file["raw_sha256"], "delivery": file["delivery"]},
        )


def clock(book: AlertBook, now: int, last_now: int) -> None:
    """Open an alert while the clock is behind the last pass; close it when it is not."""
    if now < last_now:
        book.raise_(
            CLOCK_BEHIND,
            "clock",
            last_now,
            severity="error",
            message=(
                f"the clock says {utc_text(now)}, but the last pass ran at "
                f"{utc_text(last_now)}; nothing closes until it catches up"
            ),
            evidence={"last_pass": utc_text(last_now)},
        )
        return
    for row in book.open_ones(CLOCK_BEHIND):
        book.close(
            CLOCK_BEHIND,
            "clock",
            row["since_us"],
            until=now,
            message="the clock has caught up with the last pass",
        )
