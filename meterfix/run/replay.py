"""The proof: everything stored is computed again from the archive, and compared to the bit."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date
from typing import Any

import numpy as np

from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.totals import day_total
from meterfix.frames import CALCULATION_VERSION, HOURLY_COLUMNS, HourlyRecord, ParsedFile
from meterfix.intake.site import site_from_text
from meterfix.run.balances import day_rows as balance_day_rows
from meterfix.run.balances import month_row as balance_month_row
from meterfix.run.balances import same_balance
from meterfix.run.compute import Computed, computed, hours_of
from meterfix.run.days import input_digest, meter_day
from meterfix.run.figures import (
    FIGURES,
    Row,
    day_row,
    doubt_text,
    hourly_from,
    hourly_row,
    month_row,
)
from meterfix.run.gather import Arrived, arrived_from, parse_arrived, rejected
from meterfix.run.judge import Judged, problems_of, readings_digest, readings_of, set_aside_rows
from meterfix.run.opening import OpenSite
from meterfix.run.pool import Pool, ranks_as_of
from meterfix.run.rejudge import read_raw, state_before
from meterfix.run.signals import SiteIndex
from meterfix.store.fingerprint import fingerprint
from meterfix.store.proof import Finding, check_store
from meterfix.store.readings import DamagedReadings, encode_segment

Report = Callable[[str, int, int], None]
TOLERANCE = 1e-12
"""Of the sum of absolute terms, for figures computed on another machine."""
TOLERANCE_OF_SLOPES = 1e-9
"""Likewise of sensitivities and variances: slopes of polynomials and differences lose digits."""
UNREADABLE = (KeyError, TypeError, ValueError)
"""What reading a tampered row can raise."""
FILES_AT_ONCE = 500


@dataclass
class Proof:
    """What `verify` found."""

    findings: list[Finding] = field(default_factory=list)
    files: int = 0
    figures: int = 0
    balances: int = 0
    passes: int = 0
    elsewhere: int = 0
    """Figures computed under another fingerprint, compared within the tolerance."""
    not_replayable: int = 0
    """Figures of another calculation version: proved by digest, not computed again."""
    flipped: list[str] = field(default_factory=list)
    """Flags that differ on this machine within the tolerance; listed, not failed."""


def verify(opened: OpenSite, report: Report | None = None) -> Proof:
    """Re-hash the archive, replay it, and compare every stored figure; check the audit chain.

    Nothing is written. The first difference found stands first.
    """
    proof = Proof()
    tell = report or _silent
    tell("checking archive and audit chain", 0, 1)
    proof.findings.extend(check_store(opened.ledger))
    proof.passes = opened.ledger.head().sequence
    if any(finding.check == "archive" for finding in proof.findings):
        # bytes that are not what they were cannot be replayed; their finding stands
        return proof
    sites = _sites(opened)
    _replay_files(opened, sites, proof, tell)
    try:
        _Figures(opened, sites, proof, tell).replay()
    except DamagedReadings as damaged:
        # found by the check of the store already, unless it happened since
        if not any(finding.check == "readings" for finding in proof.findings):
            where = f"readings of pass {damaged.pass_sequence}"
            proof.findings.append(Finding("readings", where, str(damaged)))
    return proof


def _sites(opened: OpenSite) -> dict[str, SiteIndex]:
    return {
        row["digest"]: SiteIndex(site_from_text(row["text"], str(opened.path)))
        for row in opened.ledger.rows("site_version")
    }


# --- files -------------------------------------------------------------------------------------


def _replay_files(
    opened: OpenSite, sites: Mapping[str, SiteIndex], proof: Proof, tell: Report
) -> None:
    """Parse every stored file again as each of its judgements read it."""
    ledger = opened.ledger
    deliveries = {row["sequence"]: row for row in ledger.rows("delivery")}
    fates = ledger.rows("fate", order=("pass_sequence", "delivery_sequence", "judgement"))
    by_pass: dict[int, list[Row]] = {}
    for fate in fates:
        by_pass.setdefault(fate["pass_sequence"], []).append(fate)
    segments = {row["pass_sequence"]: row for row in ledger.rows("reading_segment")}
    done = 0
    for sequence, some in by_pass.items():
        judged: list[Judged] = []
        site = sites[some[0]["site_digest"]]
        for start in range(0, len(some), FILES_AT_ONCE):
            part = some[start : start + FILES_AT_ONCE]
            files = [_as_arrived(opened, deliveries[f["delivery_sequence"]], f) for f in part]
            parsed = parse_arrived(files, OpenSite(opened.path, site, ledger))
            for fate, file, (result, _) in zip(part, files, parsed, strict=True):
                one = Judged(
                    fate["delivery_sequence"],
                    fate["judgement"],
                    file.source,
                    file.binding,
                    result,
                    file.quarantined,
                )
                judged.append(one)
                _compare_file(opened, site, fate, file, one, proof)
            done += len(part)
            proof.files += len(part)
            tell("replaying files", done, len(fates))
        readings = readings_of(judged, site)
        if not readings and sequence not in segments:
            continue
        digest = hashlib.sha256(encode_segment(readings)[0]).hexdigest()
        stored = segments.get(sequence, {}).get("digest", "none")
        if digest != stored:
            proof.findings.append(
                Finding(
                    "readings",
                    f"pass {sequence}",
                    f"the stored readings have digest {stored}; replayed: {digest}",
                )
            )


def _as_arrived(opened: OpenSite, delivery: Row, fate: Row) -> Arrived:
    raw = read_raw(opened.ledger, delivery["raw_sha256"])
    file = arrived_from(delivery, raw, state_before(opened.ledger, delivery))
    if fate["verdict"] != "quarantined":
        return file
    return arrived_from(
        delivery, raw, state_before(opened.ledger, delivery), quarantined=fate["reason"]
    )


def _compare_file(
    opened: OpenSite, site: SiteIndex, fate: Row, file: Arrived, judged: Judged, proof: Proof
) -> None:
    parsed = rejected("") if file.quarantined else judged.parsed
    where = f"delivery {fate['delivery_sequence']} ({file.source}: {file.name})"
    for name, stored, again in _counts(fate, parsed):
        if stored != again:
            proof.findings.append(
                Finding("files", where, f"{name} is {stored!r}; replayed: {again!r}")
            )
            return
    expected = set_aside_rows(judged, problems_of(judged, site))
    stored_rows = opened.ledger.rows(
        "set_aside",
        where={
            "delivery_sequence": fate["delivery_sequence"],
            "judgement": fate["judgement"],
        },
    )
    if _problem_set(expected) != _problem_set(stored_rows):
        proof.findings.append(
            Finding(
                "files",
                where,
                f"{len(stored_rows)} lines and cells are set aside; replayed: {len(expected)}, "
                "or with other texts or reasons",
            )
        )


def _counts(fate: Row, parsed: ParsedFile) -> Iterator[tuple[str, object, object]]:
    yield "verdict", fate["verdict"] == "rejected", bool(parsed.rejected)
    yield "lines read", fate["lines_read"], parsed.lines_read
    yield "lines skipped", fate["lines_skipped"], parsed.lines_skipped
    usable = sum(len(cells.instants) for cells in parsed.cells)
    yield "cells read", fate["cells_read"], usable + parsed.cells_set_aside
    yield "digest of its readings", fate["readings_digest"], readings_digest(parsed)


def _problem_set(rows: Sequence[Row]) -> set[tuple[Any, ...]]:
    return {
        (row["line"], row["cell"], row["number"], row["reason"], bytes(row["text"])) for row in rows
    }


# --- figures -----------------------------------------------------------------------------------


@dataclass
class _Figures:
    """Every stored total and balance, computed again as of its pass and site file."""

    opened: OpenSite
    sites: Mapping[str, SiteIndex]
    proof: Proof
    tell: Report
    gases: GasLibrary = field(default_factory=GasLibrary)
    _totals: dict[tuple[str, str, int], Row] = field(default_factory=dict)
    """Stored gas days by meter, gas day and revision."""

    def replay(self) -> None:
        ledger = self.opened.ledger
        revisions = ledger.rows("total_revision", where={"kind": "gas_day"})
        open_days = ledger.rows("open_total", where={"kind": "gas_day"})
        self._totals = {
            (row["meter"], row["gas_day"], row.get("revision", 0)): row
            for row in (*revisions, *open_days)
        }
        groups: dict[tuple[int, str, str], list[Row]] = {}
        for row in (*revisions, *open_days):
            if row["calculation_version"] != CALCULATION_VERSION:
                self.proof.not_replayable += 1
                continue
            groups.setdefault((row["as_of_pass"], row["site_digest"], row["gas_day"]), []).append(
                row
            )
        hours: dict[tuple[str, str, int], Row] = {
            (row["meter"], row["gas_day"], row["revision"]): row
            for row in ledger.rows("hourly_record")
        }
        hours.update({(row["meter"], row["gas_day"], 0): row for row in ledger.rows("open_hourly")})
        pools: dict[tuple[int, str], Pool] = {}
        for number, ((as_of, site, gas_day), rows) in enumerate(sorted(groups.items())):
            self.tell("replaying gas days", number, len(groups))
            if (as_of, site) not in pools:
                pools[as_of, site] = Pool(
                    ledger, ranks_as_of(ledger, self.sites[site], as_of), up_to_pass=as_of
                )
            self._day(
                date.fromisoformat(gas_day), rows, hours, self.sites[site], pools[as_of, site]
            )
        self._months(revisions, open_days)
        self._balances(hours)

    def _day(
        self,
        gas_day: date,
        rows: Sequence[Row],
        hours: Mapping[tuple[str, str, int], Row],
        index: SiteIndex,
        pool: Pool,
    ) -> None:
        calendar = index.site.calendar
        meters = {row["meter"] for row in rows}
        reach = max(index.reach(index.meters[meter]) for meter in meters)
        signals = sorted({s for m in meters for s in index.signals_of(index.meters[m])})
        chosen = pool.chosen(
            signals, calendar.start(gas_day) - reach, calendar.end(gas_day) + reach
        )
        days = [meter_day(index, index.meters[row["meter"]], gas_day, chosen) for row in rows]
        records = hours_of(index, days, self.gases)
        for row, day, record in zip(rows, days, records, strict=True):
            revision = row.get("revision", 0)
            where = f"{row['meter']}, gas day {row['gas_day']}, {_named(revision)}"
            digest = input_digest(index, day)
            if row["input_digest"] != digest:
                self._differs("inputs", where, row["input_digest"], digest)
                continue
            result = computed(index, record, digest)
            again = day_row(index, row["meter"], gas_day, result.total, result.doubt, digest)
            stored_hours = hours.get((row["meter"], row["gas_day"], revision))
            if stored_hours is None:
                self._differs("hours", where, "none", "present")
                continue
            self._compare(where, row, again, stored_hours, result)

    def _compare(
        self, where: str, row: Row, again: Row, stored_hours: Row, result: Computed
    ) -> None:
        self.proof.figures += 1
        record = result.record
        fresh = hourly_row(record, result.standard_uncertainty)
        try:
            stored = hourly_from(stored_hours)
        except UNREADABLE as error:
            self._differs("hours", where, "what cannot be read", str(error))
            return
        if row["fingerprint"] == fingerprint():
            for name in again:
                if row[name] != again[name]:
                    self._differs(name, where, row[name], again[name])
                    return
            if bytes(stored_hours["statistics"]) != fresh["statistics"]:
                at = _first_difference(stored.statistics, record.statistics)
                self._differs("hours", where, *at)
                return
            self._uncertainties(where, stored_hours, fresh)
            self._sums(where, row, stored)
            return
        self.proof.elsewhere += 1
        scale = np.nansum(np.abs(record.statistics), axis=0)
        near = np.isclose(
            stored.statistics,
            record.statistics,
            rtol=0.0,
            atol=np.maximum(scale, 1e-300) * TOLERANCE,
            equal_nan=True,
        )
        if not near.all():
            self._differs("hours", where, *_first_difference(stored.statistics, record.statistics))
        if row["flags"] != again["flags"]:
            self.proof.flipped.append(f"{where}: {row['flags']} here {again['flags']}")
        self._sums(where, row, stored)
        self._slopes(where, stored, record)
        # what follows from the stored hours by plain arithmetic is the same on every machine
        index = self.sites[row["site_digest"]]
        own = computed(index, stored, row["input_digest"])
        if row["uncertainty"] != (text := doubt_text(own.doubt)):
            self._differs("uncertainty", where, row["uncertainty"], text)
        self._uncertainties(where, stored_hours, hourly_row(stored, own.standard_uncertainty))

    def _uncertainties(self, where: str, stored: Row, fresh: Row) -> None:
        """Compare what a gas day's hours say of their uncertainty, bit for bit."""
        for name in ("parameters", "sensitivities", "standard_uncertainty"):
            if stored[name] != fresh[name]:
                self._differs(name, where, _shortly(stored[name]), _shortly(fresh[name]))
                return

    def _slopes(self, where: str, stored: HourlyRecord, again: HourlyRecord) -> None:
        """Compare sensitivities and variances of another machine within the tolerance."""
        for name in ("sensitivities", "random_variance"):
            one, other = getattr(stored, name), getattr(again, name)
            if stored.parameters == again.parameters and one is not None and other is not None:
                scale = np.maximum(np.nansum(np.abs(other), axis=0), 1e-300)
                if np.isclose(
                    one, other, rtol=0.0, atol=scale * TOLERANCE_OF_SLOPES, equal_nan=True
                ).all():
                    continue
            self._differs(name, where, "others", "beyond the tolerance of another machine")
            return

    def _sums(self, where: str, row: Row, stored: HourlyRecord) -> None:
        """Check that the stored day is the exactly rounded sum of its stored hours."""
        total = day_total(stored)
        pairs = zip(
            FIGURES, (total.mass, total.line_volume, total.base_volume, total.energy), strict=True
        )
        for name, value in pairs:
            if row[name] != value:
                self._differs(f"sum of hours, {name}", where, row[name], value)
                return

    def _months(self, revisions: Sequence[Row], open_days: Sequence[Row]) -> None:
        ledger = self.opened.ledger
        days: dict[tuple[str, str], list[Row]] = {}
        for row in (*open_days, *revisions):
            days.setdefault((row["meter"], row["gas_day"]), []).append(row)
        stored = [
            *ledger.rows("total_revision", where={"kind": "month"}),
            *ledger.rows("open_total", where={"kind": "month"}),
        ]
        for row in stored:
            if row["calculation_version"] != CALCULATION_VERSION:
                self.proof.not_replayable += 1
                continue
            index = self.sites[row["site_digest"]]
            month = date.fromisoformat(row["gas_day"])
            standing = []
            for day in index.site.calendar.month_days(month):
                known = [
                    r
                    for r in days.get((row["meter"], day.isoformat()), [])
                    if r["as_of_pass"] <= row["as_of_pass"]
                ]
                if known:
                    standing.append(max(known, key=lambda r: r.get("revision", 0)))
            where = f"{row['meter']}, month {row['gas_day'][:7]}, {_named(row.get('revision', 0))}"
            self.proof.figures += 1
            if not standing:
                self._differs("days", where, "present", "none")
                continue
            try:
                again = month_row(index, row["meter"], month, standing)
            except UNREADABLE as error:
                self._differs("days", where, "what cannot be read", str(error))
                continue
            for name in again:
                if row[name] != again[name]:
                    self._differs(name, where, row[name], again[name])
                    break

    def _balances(self, hours: Mapping[tuple[str, str, int], Row]) -> None:
        ledger = self.opened.ledger
        stored = [*ledger.rows("balance_revision"), *ledger.rows("open_balance")]
        days = {
            (row["envelope"], row["quantity"], row["gas_day"], row.get("revision", 0)): row
            for row in stored
            if row["kind"] == "gas_day"
        }
        for row in stored:
            if row["calculation_version"] != CALCULATION_VERSION:
                self.proof.not_replayable += 1
                continue
            self.proof.balances += 1
            where = (
                f"envelope {row['envelope']}, {row['quantity']}, {row['kind'].replace('_', ' ')} "
                f"{row['gas_day']}, {_named(row.get('revision', 0))}"
            )
            try:
                again = (
                    self._day_balance(row, hours)
                    if row["kind"] == "gas_day"
                    else self._month_balance(row, days)
                )
            except UNREADABLE as error:
                self._differs("links", where, "what is not there, or cannot be read", str(error))
                continue
            if not same_balance(row, again):
                name = next(n for n in again if n != "links" and row[n] != again[n])
                self._differs(name, where, row[name], again[name])

    def _day_balance(self, row: Row, hours: Mapping[tuple[str, str, int], Row]) -> Row:
        index = self.sites[row["site_digest"]]
        envelope = next(e for e in index.site.envelopes if e.name == row["envelope"])
        links = [
            (meter, None if revision is None else (meter, row["gas_day"], revision))
            for meter, revision in json.loads(row["links"])
        ]
        (again,) = balance_day_rows(
            index,
            envelope,
            date.fromisoformat(row["gas_day"]),
            {meter: None if key is None else hourly_from(hours[key]) for meter, key in links},
            {meter: None if k is None else self._totals[k]["uncertainty"] for meter, k in links},
            (row["quantity"],),
        )
        return again

    def _month_balance(self, row: Row, days: Mapping[tuple[str, str, str, int], Row]) -> Row:
        return balance_month_row(
            self.sites[row["site_digest"]].site.calendar,
            row["envelope"],
            row["quantity"],
            date.fromisoformat(row["gas_day"]),
            [
                days[row["envelope"], row["quantity"], day, revision]
                for day, revision in json.loads(row["links"])
            ],
        )

    def _differs(self, what: str, where: str, stored: object, again: object) -> None:
        self.proof.findings.append(
            Finding("figures", where, f"{what}: stored {stored!r}; replayed {again!r}")
        )


def _first_difference(one: Any, other: Any) -> tuple[str, str]:
    if one.shape != other.shape:
        return f"{one.shape}", f"{other.shape}"
    differ = np.argwhere(~((one == other) | (np.isnan(one) & np.isnan(other))))
    hour, column = (int(n) for n in differ[0])
    name = HOURLY_COLUMNS[column]
    return (
        f"hour {hour + 1} {name} {one[hour, column]!r}",
        f"hour {hour + 1} {name} {other[hour, column]!r}",
    )


def _shortly(value: object) -> str:
    """Return a text as it is, and bytes by their number and digest."""
    if not isinstance(value, bytes):
        return str(value)
    return f"{len(value)} bytes of digest {hashlib.sha256(value).hexdigest()[:16]}"


def _named(revision: int) -> str:
    return f"revision {revision}" if revision else "open"


def _silent(_what: str, _done: int, _all: int) -> None:
    """Report nothing."""
