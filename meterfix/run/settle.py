"""From computed figures to rows: open, provisional, revised; days, months and balances."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from datetime import date
from typing import Any

from meterfix.run.book import Book, Standing
from meterfix.run.compute import Computed, Key
from meterfix.run.figures import (
    BASIS,
    Row,
    day_row,
    hourly_from,
    hourly_row,
    month_row,
    same_figures,
    same_hours,
)
from meterfix.run.periods import past_deadline
from meterfix.run.signals import SiteIndex
from meterfix.store.ledger import Ledger


@dataclass
class Settled:
    """The rows that a pass adds, replaces and removes."""

    rows: dict[str, list[Row]] = field(default_factory=dict)
    replace: dict[str, list[Row]] = field(default_factory=dict)
    remove: dict[str, list[Row]] = field(default_factory=dict)
    changed_days: set[Key] = field(default_factory=set)

    def add(self, table: str, row: Row) -> None:
        """Add a row of record."""
        self.rows.setdefault(table, []).append(row)

    def put(self, table: str, row: Row) -> None:
        """Replace a row outside the chain."""
        self.replace.setdefault(table, []).append(row)

    def drop(self, table: str, key: Row) -> None:
        """Remove a row outside the chain."""
        self.remove.setdefault(table, []).append(key)


@dataclass(frozen=True)
class Settling:
    """What decides how figures are stored."""

    index: SiteIndex
    ledger: Ledger
    book: Book
    versions: Row
    """`figures.version_columns` of this pass."""
    now: int
    may_close: bool
    close_reason: str
    revision_reason: str

    def closes(self, period_end: int) -> bool:
        """Return whether an open period that ends then closes in this pass."""
        return self.may_close and past_deadline(self.index, period_end, self.now)

    def settle(self, computed: Mapping[Key, Computed]) -> Settled:
        """Return the rows of all figures that change in this pass."""
        out = Settled()
        self._days(computed, out)
        self._months(out)
        return out

    def _days(self, computed: Mapping[Key, Computed], out: Settled) -> None:
        for (meter, gas_day), result in sorted(computed.items()):
            row = day_row(self.index, meter, gas_day, result.total, result.doubt, result.digest)
            before = self.book.days.get((meter, gas_day))
            hours = hourly_row(result.record, result.standard_uncertainty)
            if before is not None and before.revision:
                old = self.book.record(meter, gas_day)
                if old is not None and same_hours(old, hours) and same_figures(before.row, row):
                    continue
            number = self._store_total(row, before.revision if before else 0, out)
            hours_key = {"meter": meter, "gas_day": gas_day.isoformat()}
            if number:
                out.add("hourly_record", {**hours, "revision": number})
                out.drop("open_hourly", hours_key)
            else:
                out.put("open_hourly", hours)
            self.book.days[meter, gas_day] = Standing(row, number, result.record)
            out.changed_days.add((meter, gas_day))
        # days that nothing changed and whose deadline has passed
        for row in self.ledger.rows("open_total", where={"kind": "gas_day"}):
            key = (row["meter"], date.fromisoformat(row["gas_day"]))
            if key in out.changed_days or not self.closes(row["period_end_us"]):
                continue
            self.book.load([key[1]])
            hours_key = {"meter": key[0], "gas_day": row["gas_day"]}
            stored = self.ledger.rows("open_hourly", where=hours_key)[0]
            del stored["pass_sequence"]
            self._store_total(_plain(row), 0, out)
            out.add("hourly_record", {**stored, "revision": 1})
            out.drop("open_hourly", hours_key)
            self.book.days[key] = Standing(row, 1, hourly_from(stored))
            out.changed_days.add(key)

    def _store_total(self, row: Row, revision: int, out: Settled) -> int:
        """Store a day or month as open, first closed or revised; return its revision, 0 if open."""
        key = {name: row[name] for name in ("meter", "kind", "period_start_us")}
        if not revision and not self.closes(row["period_end_us"]):
            out.put("open_total", {**row, **self.versions})
            return 0
        reason = self.revision_reason if revision else self.close_reason
        out.add(
            "total_revision",
            {**row, **self.versions, "basis": BASIS, "revision": revision + 1, "reason": reason},
        )
        if not revision:
            out.drop("open_total", key)
            out.add(
                "period_event",
                {
                    "subject": f"meter {row['meter']}",
                    "kind": row["kind"],
                    "period_start_us": row["period_start_us"],
                    "number": 1,
                    "stage": "provisional",
                    "reason": self.close_reason,
                },
            )
        return revision + 1

    def _months(self, out: Settled) -> None:
        calendar = self.index.site.calendar
        wanted = {(meter, calendar.month_of(day)) for meter, day in out.changed_days}
        stored_open = self.ledger.rows("open_total", where={"kind": "month"})
        wanted |= {
            (row["meter"], date.fromisoformat(row["gas_day"]))
            for row in stored_open
            if self.closes(row["period_end_us"])
        }
        if not wanted:
            return
        self.book.load({day for _, month in wanted for day in calendar.month_days(month)})
        standing: dict[tuple[str, str], tuple[Row, int]] = {
            (row["meter"], row["gas_day"]): (row, 0) for row in stored_open
        }
        for row in self.ledger.latest(
            "total_revision",
            group=("meter", "kind", "period_start_us"),
            number="revision",
            where={"kind": "month", "gas_day": sorted({m.isoformat() for _, m in wanted})},
        ):
            standing[row["meter"], row["gas_day"]] = (row, row["revision"])
        for meter, month in sorted(wanted):
            days = [
                self.book.days[meter, day].row
                for day in calendar.month_days(month)
                if (meter, day) in self.book.days
            ]
            if not days:
                continue
            row = month_row(self.index, meter, month, days)
            before, revision = standing.get((meter, month.isoformat()), (None, 0))
            if before is not None and revision and same_figures(before, row):
                continue
            self._store_total(row, revision, out)


def _plain(row: Mapping[str, Any]) -> Row:
    """Return an open row without the columns that say by what it was computed."""
    versions = {
        "as_of_delivery",
        "as_of_pass",
        "site_digest",
        "calculation_version",
        "fingerprint",
        "pass_sequence",
    }
    return {k: v for k, v in row.items() if k not in versions}


def keys_of(index: SiteIndex, days: Iterable[date]) -> set[Key]:
    """Return every meter of the site on every one of the gas days."""
    return {(meter.name, day) for meter in index.site.meters for day in days}
