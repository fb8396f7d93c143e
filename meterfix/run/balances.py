"""Stored rows of balances: per envelope, quantity and gas day, and their months."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date
from typing import Any

from meterfix.calc.balance.envelopes import (
    DayBalance,
    Verdict,
    day_balance,
    why_no_uncertainty,
)
from meterfix.calc.balance.months import DayFigures, MonthBalance, month_balance
from meterfix.calc.uncertainty import Doubt, add_up, hourly_standard_uncertainty
from meterfix.frames import SENSITIVE, Floats, HourlyRecord
from meterfix.model.calendar import SECOND, GasDayCalendar
from meterfix.model.site import Envelope
from meterfix.run.figures import BASIS, Row, doubt_from, doubt_text, terms_of
from meterfix.run.settle import Settled, Settling
from meterfix.run.signals import SiteIndex
from meterfix.store.values import encode_array

Key = tuple[str, str, str, str]
"""Kind, envelope, quantity, gas day (a month's first)."""

BASE_TERMS = ("base_pressure_Pa", "base_temperature_K")
ENERGY_TERMS = ("calorific_value_kind", "combustion_reference_temperature_K")
ALL_TERMS = (*BASE_TERMS, *ENERGY_TERMS)
TERMS = {"base_volume": BASE_TERMS, "energy": ENERGY_TERMS}
"""The columns that a balance of this quantity needs to have a meaning; the others are empty."""


@dataclass
class Balances:
    """Balances of the days that a pass changes or closes, and of their months."""

    settling: Settling
    out: Settled
    standing: dict[Key, tuple[Row, int]] = field(default_factory=dict)
    """Rows as they stand with their revision, 0 while open; those of this pass included."""

    def settle(self, *, everything: bool) -> None:
        """Add the rows of all balances that change in this pass.

        Parameters
        ----------
        everything : look at every gas day that has figures, because envelopes or tolerances may
            have changed with the site file.
        """
        envelopes = {envelope.name: envelope for envelope in self.settling.index.site.envelopes}
        book = self.settling.book
        changed = self.out.changed_days
        if everything:
            changed = changed | book.known_keys()
        wanted = {
            (envelope.name, day)
            for envelope in envelopes.values()
            for meter, day in changed
            if meter in meters_of(envelope)
        }
        open_rows = self.settling.ledger.rows("open_balance")
        due = [row for row in open_rows if self.settling.closes(row["period_end_us"])]
        wanted |= {
            (row["envelope"], date.fromisoformat(row["gas_day"]))
            for row in due
            if row["kind"] == "gas_day" and row["envelope"] in envelopes
        }
        calendar = self.settling.index.site.calendar
        months = {(name, calendar.month_of(day)) for name, day in wanted} | {
            (row["envelope"], date.fromisoformat(row["gas_day"]))
            for row in due
            if row["kind"] == "month" and row["envelope"] in envelopes
        }
        if not wanted and not months:
            return
        days = sorted({day for _, day in wanted})
        book.load(days)
        book.load_records(days)
        self._load(open_rows, {day for _, month in months for day in calendar.month_days(month)})
        for name, day in sorted(wanted):
            for row in self._day(envelopes[name], day):
                self._store(row)
        for name, month in sorted(months):
            for quantity in envelopes[name].quantities:
                whole = self._month(name, quantity, month)
                if whole is not None:
                    self._store(whole)

    def _load(self, open_rows: Sequence[Row], days: set[date]) -> None:
        self.standing.update({_key(row): (row, 0) for row in open_rows})
        for row in self.settling.ledger.latest(
            "balance_revision",
            group=("envelope", "kind", "period_start_us", "quantity"),
            number="revision",
            where={"gas_day": sorted(day.isoformat() for day in days)},
        ):
            self.standing[_key(row)] = (row, row["revision"])

    def _day(self, envelope: Envelope, day: date) -> list[Row]:
        book = self.settling.book
        meters = meters_of(envelope)
        stored = {meter: book.days.get((meter, day)) for meter in meters}
        links = [[meter, None if one is None else one.revision] for meter, one in stored.items()]
        rows = day_rows(
            self.settling.index,
            envelope,
            day,
            {meter: book.record(meter, day) for meter in meters},
            {m: None if one is None else one.row["uncertainty"] for m, one in stored.items()},
        )
        return [{**row, "links": json.dumps(links)} for row in rows]

    def _month(self, name: str, quantity: str, month: date) -> Row | None:
        calendar = self.settling.index.site.calendar
        days = [
            self.standing[key]
            for day in calendar.month_days(month)
            if (key := ("gas_day", name, quantity, day.isoformat())) in self.standing
        ]
        if not days:
            return None
        links = [[row["gas_day"], revision] for row, revision in days]
        return {
            **month_row(calendar, name, quantity, month, [row for row, _ in days]),
            "links": json.dumps(links),
        }

    def _store(self, row: Row) -> None:
        """Store a balance as open, first closed or revised, if it says something new."""
        before, revision = self.standing.get(_key(row), (None, 0))
        if before is not None and revision and same_balance(before, row):
            return
        stamped = {
            **row,
            **{k: v for k, v in self.settling.versions.items() if k != "as_of_delivery"},
        }
        if not revision and not self.settling.closes(row["period_end_us"]):
            if before is None or not same_balance(before, row) or before["links"] != row["links"]:
                self.out.put("open_balance", stamped)
            self.standing[_key(row)] = (row, 0)
            return
        settling = self.settling
        self.out.add(
            "balance_revision",
            {
                **stamped,
                "basis": BASIS,
                "revision": revision + 1,
                "revision_reason": settling.revision_reason if revision else settling.close_reason,
            },
        )
        if not revision:
            names = ("envelope", "kind", "period_start_us", "quantity")
            self.out.drop("open_balance", {name: row[name] for name in names})
        self.standing[_key(row)] = (row, revision + 1)


def meters_of(envelope: Envelope) -> tuple[str, ...]:
    """Return the envelope's meters, in the order in, out, vented."""
    return (*envelope.inflow, *envelope.outflow, *envelope.vented)


def envelope_doubt(envelope: Envelope, stored: Mapping[str, str | None]) -> Doubt | None:
    """Return what is not known of an envelope's imbalance; None where a meter's is not stored.

    What meters of both sides share cancels as far as it can.
    """
    parts: list[tuple[float, Doubt]] = []
    for sign, meter in signed_meters(envelope):
        doubt = doubt_from(stored[meter])
        if doubt is None:
            return None
        parts.append((sign, doubt))
    return add_up(parts)


def hourly_uncertainty(
    index: SiteIndex, envelope: Envelope, records: Mapping[str, HourlyRecord | None]
) -> Floats | None:
    """Return the standard uncertainty of each hour's imbalance, (hours, len(SENSITIVE)).

    None where a meter has no record, or one without sensitivities.
    """
    signed: list[tuple[float, HourlyRecord]] = []
    for sign, meter in signed_meters(envelope):
        record = records[meter]
        if record is None or record.sensitivities is None:
            return None
        signed.append((sign, record))
    if not signed:
        return None
    parameters = {parameter for _, record in signed for parameter in record.parameters}
    return hourly_standard_uncertainty(signed, index.sources_of(parameters))


def signed_meters(envelope: Envelope) -> list[tuple[float, str]]:
    """Return the envelope's meters with the sign that they have in the imbalance."""
    return [
        *((1.0, meter) for meter in envelope.inflow),
        *((-1.0, meter) for meter in (*envelope.outflow, *envelope.vented)),
    ]


def day_rows(
    index: SiteIndex,
    envelope: Envelope,
    day: date,
    records: Mapping[str, HourlyRecord | None],
    uncertainties: Mapping[str, str | None],
    quantities: Sequence[str] | None = None,
) -> list[Row]:
    """Return an envelope's balances of a gas day as rows, without their status and links.

    Parameters
    ----------
    index, envelope, day : what is balanced.
    records : the hours of every meter; None where there are none.
    uncertainties : what is not known of every meter's day as it is stored; None likewise.
    quantities : those wanted; None: all of the envelope's.
    """
    tolerance = envelope.tolerance.in_force(index.site.calendar.start(day))
    doubt = envelope_doubt(envelope, uncertainties)
    hourly = hourly_uncertainty(index, envelope, records)
    return [
        _day_row(
            index,
            day_balance(
                envelope,
                quantity,
                records,
                tolerance,
                None if doubt is None else doubt.expanded_uncertainty(quantity),
                None if hourly is None else hourly[:, SENSITIVE.index(quantity)],
                () if doubt is None else doubt.unstated(quantity),
            ),
            day,
            doubt,
        )
        for quantity in (envelope.quantities if quantities is None else quantities)
    ]


def _day_row(index: SiteIndex, balance: DayBalance, day: date, doubt: Doubt | None) -> Row:
    calendar = index.site.calendar
    start = calendar.start(day)
    stands_at = terms_of(index, start)
    needed = TERMS.get(balance.quantity, ())
    more = {
        "input": balance.reason,
        "hours": balance.hourly_verdict.reason,
        "uncertainty": _unstated(doubt, balance.quantity),
        "input_by_hour": list(balance.hourly_reasons) if any(balance.hourly_reasons) else [],
    }
    return {
        "envelope": balance.envelope,
        "kind": "gas_day",
        "period_start_us": start,
        "period_end_us": calendar.end(day),
        "gas_day": day.isoformat(),
        "quantity": balance.quantity,
        **{name: stands_at[name] if name in needed else None for name in ALL_TERMS},
        "storage_change": balance.storage_change,
        "measured_fraction": balance.measured_fraction,
        "hourly": encode_array(balance.hourly),
        "uncertainty": None if balance.imbalance is None else doubt_text(doubt),
        **_figures(balance, more),
    }


def month_row(
    calendar: GasDayCalendar,
    envelope: str,
    quantity: str,
    month: date,
    days: Sequence[Mapping[str, Any]],
) -> Row:
    """Return an envelope's balance of a month as a row, from its gas days' rows."""
    month_days = calendar.month_days(month)
    start, end = calendar.start(month_days[0]), calendar.end(month_days[-1])
    doubts = [doubt_from(row["uncertainty"]) for row in days if row["imbalance"] is not None]
    known = [(1.0, doubt) for doubt in doubts if doubt is not None]
    doubt = add_up(known) if known and len(known) == len(doubts) else None
    balance = month_balance(
        [
            DayFigures(
                gas_day=row["gas_day"],
                duration=(row["period_end_us"] - row["period_start_us"]) / SECOND,
                inflow=row["inflow"],
                outflow=row["outflow"],
                vented=row["vented"],
                imbalance=row["imbalance"],
                tolerance=row["tolerance"],
                base=_base(row),
            )
            for row in days
        ],
        [day.isoformat() for day in month_days],
        (end - start) / SECOND,
        None if doubt is None else doubt.expanded_uncertainty(quantity),
        () if doubt is None else doubt.unstated(quantity),
    )
    more = {"input": balance.reason, "uncertainty": _unstated(doubt, quantity)}
    return {
        "envelope": envelope,
        "kind": "month",
        "period_start_us": start,
        "period_end_us": end,
        "gas_day": month.isoformat(),
        "quantity": quantity,
        **_common(days, BASE_TERMS),
        **_common(days, ENERGY_TERMS),
        "storage_change": None,
        "measured_fraction": balance.measured_fraction,
        "hourly": None,
        "uncertainty": doubt_text(doubt),
        **_figures(balance, more),
    }


def same_balance(one: Mapping[str, Any], other: Mapping[str, Any]) -> bool:
    """Return whether two balance rows say the same, bit for bit; links may differ."""
    return all(one[name] == other[name] for name in other if name != "links")


def _figures(balance: DayBalance | MonthBalance, more: Mapping[str, Any]) -> Row:
    reasons = {
        "significant": balance.significant.reason,
        "beyond_tolerance": balance.beyond_tolerance.reason,
        "storage_change": balance.storage_reason,
        **more,
    }
    return {
        "inflow": balance.inflow,
        "outflow": balance.outflow,
        "vented": balance.vented,
        "imbalance": balance.imbalance,
        "expanded_uncertainty": balance.expanded_uncertainty,
        "tolerance": balance.tolerance,
        "beyond_tolerance": _answer(balance.beyond_tolerance),
        "significant": _answer(balance.significant),
        "reason": json.dumps({k: v for k, v in reasons.items() if v}, sort_keys=True),
    }


def _unstated(doubt: Doubt | None, quantity: str) -> str:
    """Return why there is no uncertainty although something is known of it; '' if there is one."""
    names = () if doubt is None else doubt.unstated(quantity)
    return why_no_uncertainty(names) if names else ""


def _base(row: Mapping[str, Any]) -> tuple[float, float] | None:
    pressure, temperature = row["base_pressure_Pa"], row["base_temperature_K"]
    return None if pressure is None else (pressure, temperature)


def _common(rows: Sequence[Mapping[str, Any]], names: Sequence[str]) -> Row:
    """Return what all the rows hold under the names; nothing known if they differ."""
    found = {tuple(row[name] for name in names) for row in rows}
    values = found.pop() if len(found) == 1 else (None,) * len(names)
    return dict(zip(names, values, strict=True))


def _answer(verdict: Verdict) -> str:
    return verdict.answer.value


def _key(row: Mapping[str, Any]) -> Key:
    return (row["kind"], row["envelope"], row["quantity"], row["gas_day"])
