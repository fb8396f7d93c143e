"""From computed figures to rows: open, provisional, revised; days, months and balances."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from datetime import date
from typing import Any

from meterfix.calc.balance.envelopes import DayBalance, day_balance
from meterfix.model.site import Envelope
from meterfix.run.book import Book, Standing
from meterfix.run.compute import Computed, Key
from meterfix.run.figures import (
    BASIS,
    Row,
    day_row,
    hourly_row,
    month_row,
    same_figures,
)
from meterfix.run.periods import past_deadline
from meterfix.run.signals import SiteIndex
from meterfix.store.ledger import Ledger
from meterfix.store.values import encode_array


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
        self._balances(out)
        return out

    def _days(self, computed: Mapping[Key, Computed], out: Settled) -> None:
        for (meter, gas_day), result in sorted(computed.items()):
            row = day_row(self.index, meter, gas_day, result.total, result.digest)
            before = self.book.days.get((meter, gas_day))
            hours = hourly_row(result.record)
            if before is not None and before.revision:
                old = self.book.record(meter, gas_day)
                same_hours = old is not None and encode_array(old.statistics) == hours["statistics"]
                if same_hours and same_figures(before.row, row):
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
            record = self.book.record(*key)
            if record is None:
                message = f"{key[0]}, gas day {key[1]}: the open day has no hours"
                raise LookupError(message)
            self._store_total(_plain(row), 0, out)
            out.add("hourly_record", {**hourly_row(record), "revision": 1})
            out.drop("open_hourly", {"meter": key[0], "gas_day": row["gas_day"]})
            self.book.days[key] = Standing(row, 1, record)
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

    def _balances(self, out: Settled) -> None:
        envelopes = self.index.site.envelopes
        wanted: set[tuple[str, date]] = {
            (envelope.name, day)
            for envelope in envelopes
            for meter, day in out.changed_days
            if meter in {*envelope.inflow, *envelope.outflow, *envelope.vented}
        }
        open_rows = self.ledger.rows("open_balance")
        wanted |= {
            (row["envelope"], date.fromisoformat(row["gas_day"]))
            for row in open_rows
            if self.closes(row["period_end_us"])
        }
        if not wanted:
            return
        days = sorted({day for _, day in wanted})
        self.book.load(days)
        self.book.load_records(days)
        standing: dict[tuple[str, str, str], tuple[Row, int]] = {
            _balance_key(row): (row, 0) for row in open_rows
        }
        for row in self.ledger.latest(
            "balance_revision",
            group=("envelope", "kind", "period_start_us", "quantity"),
            number="revision",
            where={"gas_day": [day.isoformat() for day in days]},
        ):
            standing[_balance_key(row)] = (row, row["revision"])
        by_name = {envelope.name: envelope for envelope in envelopes}
        for name, day in sorted(wanted):
            if name not in by_name:
                continue
            for quantity in by_name[name].quantities:
                row = self._balance_row(by_name[name], quantity, day)
                before, revision = standing.get((name, day.isoformat(), quantity), (None, 0))
                if before is not None and revision and same_balance(before, row):
                    continue
                self._store_balance(row, revision, out)

    def _balance_row(self, envelope: Envelope, quantity: str, day: date) -> Row:
        meters = (*envelope.inflow, *envelope.outflow, *envelope.vented)
        start = self.index.site.calendar.start(day)
        balance = day_balance(
            envelope,
            quantity,
            {meter: self.book.record(meter, day) for meter in meters},
            envelope.tolerance.in_force(start),
        )
        links = [
            [meter, standing.revision if (standing := self.book.days.get((meter, day))) else None]
            for meter in meters
        ]
        return {
            **balance_row(balance, start, self.index.site.calendar.end(day), day),
            "links": json.dumps(links),
        }

    def _store_balance(self, row: Row, revision: int, out: Settled) -> None:
        key = {name: row[name] for name in ("envelope", "kind", "period_start_us", "quantity")}
        if not revision and not self.closes(row["period_end_us"]):
            out.put("open_balance", {**row, **_without_delivery(self.versions)})
            return
        out.add(
            "balance_revision",
            {
                **row,
                **_without_delivery(self.versions),
                "basis": BASIS,
                "revision": revision + 1,
                "revision_reason": self.revision_reason if revision else self.close_reason,
            },
        )
        if not revision:
            out.drop("open_balance", key)


def balance_row(balance: DayBalance, start: int, end: int, day: date) -> Row:
    """Return an envelope's balance of a gas day as a row, without its status and links."""
    reasons = {
        "input": balance.reason,
        "significant": balance.significant.reason,
        "beyond_tolerance": balance.beyond_tolerance.reason,
        "storage_change": balance.storage_reason,
        "hours": balance.hourly_verdict.reason,
        "input_by_hour": list(balance.hourly_reasons) if any(balance.hourly_reasons) else [],
    }
    return {
        "envelope": balance.envelope,
        "kind": "gas_day",
        "period_start_us": start,
        "period_end_us": end,
        "gas_day": day.isoformat(),
        "quantity": balance.quantity,
        "inflow": balance.inflow,
        "outflow": balance.outflow,
        "vented": balance.vented,
        "storage_change": balance.storage_change,
        "imbalance": balance.imbalance,
        "tolerance": balance.tolerance,
        "beyond_tolerance": balance.beyond_tolerance.answer.value,
        "significant": balance.significant.answer.value,
        "measured_fraction": balance.measured_fraction,
        "reason": json.dumps({k: v for k, v in reasons.items() if v}, sort_keys=True),
        "hourly": encode_array(balance.hourly),
    }


def same_balance(one: Mapping[str, Any], other: Mapping[str, Any]) -> bool:
    """Return whether two balance rows say the same, bit for bit."""
    ignored = {"links"}
    names = [name for name in other if name not in ignored]
    return all(one[name] == other[name] for name in names)


def _balance_key(row: Mapping[str, Any]) -> tuple[str, str, str]:
    return (row["envelope"], row["gas_day"], row["quantity"])


def _without_delivery(versions: Row) -> Row:
    return {k: v for k, v in versions.items() if k != "as_of_delivery"}


def _plain(row: Mapping[str, Any]) -> Row:
    """Return an open row without the columns that say by what it was computed."""
    versions = {
        "as_of_delivery",
        "as_of_pass",
        "site_digest",
        "calculation_version",
        "fingerprint",
    }
    return {k: v for k, v in row.items() if k not in versions}


def keys_of(index: SiteIndex, days: Iterable[date]) -> set[Key]:
    """Return every meter of the site on every one of the gas days."""
    return {(meter.name, day) for meter in index.site.meters for day in days}
