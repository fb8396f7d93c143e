"""One pass: a function of the ledger's state and `now`, committed in one transaction."""

from __future__ import annotations

import json
import uuid
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date
from functools import partial
from typing import Any

from meterfix.calc.gas.properties import GasLibrary
from meterfix.frames import CALCULATION_VERSION, HourlyRecord
from meterfix.run import alerts, clock
from meterfix.run.absent import absence_warning
from meterfix.run.attempts import Attempts
from meterfix.run.balances import Balances
from meterfix.run.book import Book
from meterfix.run.compute import Key, Report, compute
from meterfix.run.conflicts import conflict_rows, disputes
from meterfix.run.figures import Row, version_columns
from meterfix.run.gather import (
    Arrived,
    Known,
    Slice,
    parse_arrived,
    take_slice,
)
from meterfix.run.judge import Judged, Verdicts, judge
from meterfix.run.opening import OpenSite
from meterfix.run.outcome import (
    Outcome,
    fact_text,
    held_text,
    quarantined,
    rejected_text,
    waiting_text,
)
from meterfix.run.periods import filled, in_service, touched
from meterfix.run.pool import Pool, ranks_as_of
from meterfix.run.rejudge import Again, to_judge_again
from meterfix.run.settle import Settled, Settling
from meterfix.store.fingerprint import fingerprint
from meterfix.store.ledger import Ledger, PassRecord

ACTOR = "meterfix"


@dataclass
class PassWork:
    """A pass under way."""

    opened: OpenSite
    now: int
    started: int
    gases: GasLibrary
    report: Report | None = None
    known: Known = field(init=False)
    attempts: Attempts | None = field(default=None, init=False)
    """None until the pass knows its files."""
    facts: tuple[str, ...] = field(default=(), init=False)
    """What start-up found and this pass has chained."""
    storing: bool = False
    """The files have been read and their figures computed; what fails now is not theirs."""

    def run(self) -> Outcome:
        """Do the pass under the writer's lock, and commit what it changes."""
        ledger = self.opened.ledger
        facts = ledger.recover()
        if facts:
            self._commit_facts(facts)
            self.facts = tuple(fact_text(fact) for fact in facts)
        self.known = Known.of(ledger)
        passes = ledger.rows("pass", order=("sequence",), columns=("now_us", "note"))
        last_now = max((row["now_us"] for row in passes), default=0)
        arrival = self.now
        taken = take_slice(self.opened, self.known, arrival)
        attempts = self.attempts = Attempts(self.opened, self.known)
        taken = attempts.try_suspects(taken, self.now, rehearse)
        again, more_again = to_judge_again(self.opened)
        attempts.begin(taken.arrived)
        more = taken.more or more_again
        site_changed = self._last_site(passes) != self.opened.site.digest
        behind = self.now < last_now
        rows, verdicts, pool, ranked = self._take_in(taken, again)
        book = Book(ledger)
        wanted, forced = self._dirty(verdicts, book, site_changed=site_changed)
        settled = self._figures(
            wanted,
            forced,
            pool,
            book,
            may_close=not more and not behind,
            waiting=taken.waiting,
            site_changed=site_changed,
            last_delivery=ranked,
        )
        alert_book = alerts.AlertBook(ledger, self.opened.site.contract.currency)
        for meter, day in sorted(settled.changed_days):
            record = book.record(meter, day)
            if record is not None:
                alerts.disputed_hours(
                    alert_book, record, day, partial(self._disputes, record, pool, rows["delivery"])
                )
        alerts.quarantined(alert_book, quarantined(taken.arrived, rows), self.now)
        alerts.clock(alert_book, self.now, last_now)
        for table, added in settled.rows.items():
            rows.setdefault(table, []).extend(added)
        rows["alert"] = alert_book.alerts
        rows["alert_event"] = alert_book.events
        self.storing = True
        return self._commit(rows, settled, taken, verdicts, alert_book.news, more=more)

    def _disputes(
        self, record: HourlyRecord, pool: Pool, fresh: Sequence[Row]
    ) -> tuple[int, list[dict[str, Any]]]:
        """Return the disputed readings of a meter-day: inside it, else those that reach into it."""
        index, ledger = self.opened.index, self.opened.ledger
        meter = index.meters[record.meter]
        names = {
            row["sequence"]: f"{row['source']}: {row['name']}"
            for row in (*ledger.rows("delivery", columns=("sequence", "source", "name")), *fresh)
        }
        first, last = record.start, index.site.calendar.end(record.gas_day)
        found: tuple[int, list[dict[str, Any]]] = (0, [])
        for reach in (0, index.reach(meter)):
            window = (first - reach, last + reach)
            signals = index.signals_of(meter)
            found = disputes(pool, signals, window, names, alerts.CONFLICTS_TOLD)
            if found[0]:
                break
        return found

    # --- taking files in ---------------------------------------------------------------------

    def _take_in(
        self, taken: Slice, again: Sequence[Again]
    ) -> tuple[dict[str, list[Row]], Verdicts, Pool, int]:
        """Parse and judge the slice and what is judged again; return rows, verdicts, readings."""
        ledger, index = self.opened.ledger, self.opened.index
        last = max((row["sequence"] for row in self.known.latest.values()), default=0)
        if self.report is not None:
            self.report("reading files", 0, len(taken.arrived))
        files = [*taken.arrived, *(one.file for one in again)]
        parsed = parse_arrived(files, self.opened)
        judged: list[Judged] = []
        deliveries: list[Row] = []
        places: dict[tuple[str, str, str], int] = {}
        arrived: dict[int, tuple[Arrived, int]] = {}
        for number, (file, (result, after)) in enumerate(zip(files, parsed, strict=True)):
            if number < len(taken.arrived):
                last += 1
                sequence, judgement = last, 1
                name = (file.source, file.binding, file.name)
                replaces = places.get(name, file.replaces)
                places[name] = sequence
                arrived[sequence] = (file, replaces)
                deliveries.append(_delivery_row(file, sequence, replaces, after))
            else:
                one = again[number - len(taken.arrived)]
                sequence, judgement = one.sequence, one.judgement
            judged.append(
                Judged(sequence, judgement, file.source, file.binding, result, file.quarantined)
            )
        old_again = {one.sequence for one in again}
        before = Pool(ledger, ranks_as_of(ledger, index, without=old_again))
        verdicts = judge(judged, index, before, self.opened.site.digest)
        for fate, file_read in zip(verdicts.fates, judged, strict=True):
            if file_read.sequence in arrived:
                absent = absence_warning(self.opened, file_read.sequence, file_read.parsed, arrived)
                fate["warning"] = "; ".join(text for text in (fate["warning"], absent) if text)
        fresh = [
            *((row, 1) for row in deliveries),
            *((_known_delivery(ledger, one.sequence), one.judgement) for one in again),
        ]
        pool = Pool(ledger, ranks_as_of(ledger, index, fresh=fresh), pending=verdicts.readings)
        rows: dict[str, list[Row]] = {
            "delivery": deliveries,
            "fate": verdicts.fates,
            "set_aside": verdicts.set_aside,
            "conflict": conflict_rows(ledger, pool, verdicts.contested),
        }
        known_raw = (
            {row["sha256"] for row in ledger.rows("raw_object", columns=("sha256",))}
            if deliveries
            else set()
        )
        raw_rows: dict[str, Row] = {}
        for file in taken.arrived:
            if file.raw_sha256 not in known_raw:
                raw_rows[file.raw_sha256] = {"sha256": file.raw_sha256, "length": len(file.raw)}
        rows["raw_object"] = list(raw_rows.values())
        return rows, verdicts, pool, last

    @property
    def may_be_a_files_fault(self) -> bool:
        """Whether what fails now can be the fault of a file in hand."""
        attempts = self.attempts
        return (
            attempts is not None
            and attempts.in_hand
            and not attempts.blameless
            and not self.storing
        )

    def forgive(self) -> None:
        """Take the marks back off the files of a pass that failed for no fault of theirs."""
        if self.attempts is not None:
            self.attempts.forgive()

    def rehearse(self, file: Arrived) -> None:
        """Do all of a pass for one file alone, but commit nothing."""
        self.known = Known.of(self.opened.ledger)
        _, verdicts, pool, ranked = self._take_in(Slice([file]), ())
        book = Book(self.opened.ledger)
        wanted, forced = self._dirty(verdicts, book, site_changed=False)
        self._figures(
            wanted,
            forced,
            pool,
            book,
            may_close=False,
            waiting=(),
            site_changed=False,
            last_delivery=ranked,
        )

    # --- figures -----------------------------------------------------------------------------

    def _dirty(
        self, verdicts: Verdicts, book: Book, *, site_changed: bool
    ) -> tuple[set[Key], set[Key]]:
        """Return the meter-days to compute, and those to compute even with the same inputs."""
        index, ledger = self.opened.index, self.opened.ledger
        reached, with_readings = touched(index, verdicts.readings)
        existing = book.known_keys()
        meters = set(index.meters)
        days = filled({day for _, day in existing} | with_readings)
        wanted = {key for key in reached if key[1] in days}
        wanted |= {(meter, day) for meter in meters for day in days} - existing
        if site_changed:
            wanted |= existing
        forced = {
            (row["meter"], date.fromisoformat(row["gas_day"]))
            for row in ledger.rows("open_total", where={"kind": "gas_day"})
            if (row["calculation_version"], row["fingerprint"])
            != (CALCULATION_VERSION, fingerprint())
        }
        wanted = {
            (meter, day)
            for meter, day in wanted | forced
            if meter in meters and in_service(index, meter, day)
        }
        return wanted, forced

    def _figures(
        self,
        wanted: set[Key],
        forced: set[Key],
        pool: Pool,
        book: Book,
        *,
        may_close: bool,
        waiting: Sequence[Row],
        site_changed: bool,
        last_delivery: int,
    ) -> Settled:
        index, ledger = self.opened.index, self.opened.ledger
        book.load(day for _, day in wanted)
        known = {
            key: standing.row["input_digest"]
            for key, standing in book.days.items()
            if key not in forced
        }
        computed = compute(index, pool, wanted, known, self.gases, self.report)
        held = held_text(waiting)
        settling = Settling(
            index=index,
            ledger=ledger,
            book=book,
            versions=version_columns(
                index, ledger.head().sequence + 1, last_delivery, fingerprint()
            ),
            now=self.now,
            may_close=may_close,
            close_reason=f"the deadline has passed{held}",
            revision_reason="the site file changed" if site_changed else "later readings",
        )
        settled = settling.settle(computed)
        Balances(settling, settled).settle(everything=site_changed)
        return settled

    # --- committing --------------------------------------------------------------------------

    def _commit(
        self,
        rows: dict[str, list[Row]],
        settled: Settled,
        taken: Slice,
        verdicts: Verdicts,
        news: Sequence[alerts.News],
        *,
        more: bool,
    ) -> Outcome:
        ledger, site = self.opened.ledger, self.opened.site
        if not ledger.rows("site_version", where={"digest": site.digest}, columns=("digest",)):
            rows["site_version"] = [{"digest": site.digest, "text": site.text}]
        waiting = [{**row, "seen_us": self.now} for row in taken.waiting]
        self._replace_waiting(waiting)
        changes = any(rows.values()) or settled.replace or settled.remove
        if not changes:
            ledger.write_outside(
                replace={
                    "seen": taken.seen,
                    "heartbeat": [heartbeat(self.now, "")],
                }
            )
            return Outcome(0, more, waiting=waiting_text(taken))
        sequence = ledger.head().sequence + 1
        fresh_raw = {row["sha256"] for row in rows["raw_object"]}
        locations = ledger.archive.write_pack(
            [
                file.entry(row["sequence"], with_bytes=file.raw_sha256 in fresh_raw)
                for file, row in zip(taken.arrived, rows["delivery"], strict=True)
            ]
        )
        replace = {**settled.replace, "raw_location": locations, "seen": taken.seen}
        replace.update(self._store_readings(sequence, verdicts))
        replace["heartbeat"] = [heartbeat(self.now, "")]
        remove = dict(settled.remove)
        remove["attempt"] = [
            {"source": f.source, "binding": f.binding, "name": f.name} for f in taken.arrived
        ]
        again = len(rows["fate"]) - len(taken.arrived)
        pass_id = str(uuid.uuid4())
        rows["pass"] = [
            {
                "sequence": sequence,
                "id": pass_id,
                "kind": "pass",
                "now_us": self.now,
                "started_us": self.started,
                "finished_us": clock.now(),
                "files": len(taken.arrived),
                "readings": verdicts.fresh,
                "days": len(settled.changed_days),
                "note": json.dumps({"site": site.digest, "judged_again": again}),
            }
        ]
        ledger.commit(
            PassRecord(
                pass_id=pass_id,
                kind="pass",
                expected_head=ledger.head(),
                actor=ACTOR,
                clock=self.now,
                note={},
                rows={table: added for table, added in rows.items() if added},
                replace={table: added for table, added in replace.items() if added},
                remove={table: keys for table, keys in remove.items() if keys},
            )
        )
        return Outcome(
            sequence,
            more,
            files=len(taken.arrived),
            readings=verdicts.fresh,
            judged_again=again,
            days=len(settled.changed_days),
            rejected=rejected_text(taken.arrived, rows["fate"]),
            waiting=waiting_text(taken),
            alerts=tuple(news),
        )

    def _store_readings(self, sequence: int, verdicts: Verdicts) -> dict[str, list[Row]]:
        if not verdicts.readings:
            return {}
        signals = sorted(verdicts.readings)
        file, digest, spans = self.opened.ledger.archive.write_readings(signals, verdicts.readings)
        return {
            "reading_segment": [{"pass_sequence": sequence, "file": file, "digest": digest}],
            "reading_span": [{**span, "pass_sequence": sequence} for span in spans],
        }

    def _replace_waiting(self, waiting: Sequence[Row]) -> None:
        """Store which files wait now, if that is not what is stored."""
        ledger = self.opened.ledger
        before = {_waiting_key(row): row["reason"] for row in ledger.rows("waiting")}
        after = {_waiting_key(row): row["reason"] for row in waiting}
        if before == after:
            return
        gone = [
            dict(zip(("source", "binding", "name"), key, strict=True))
            for key in before
            if key not in after
        ]
        ledger.write_outside(replace={"waiting": list(waiting)}, remove={"waiting": gone})

    def _commit_facts(self, facts: Sequence[Mapping[str, Any]]) -> None:
        """Chain what start-up found: an open intent resolved, an older database restored."""
        ledger = self.opened.ledger
        restored = any("restored" in str(fact.get("fact")) for fact in facts)
        kind = "restore" if restored else "resolution"
        head = ledger.head()
        pass_id = str(uuid.uuid4())
        note = {"facts": list(facts), "site": self.opened.site.digest}
        ledger.commit(
            PassRecord(
                pass_id=pass_id,
                kind=kind,
                expected_head=head,
                actor=ACTOR,
                clock=self.now,
                note={"facts": list(facts)},
                rows={
                    "pass": [
                        {
                            "sequence": head.sequence + 1,
                            "id": pass_id,
                            "kind": kind,
                            "now_us": self.now,
                            "started_us": self.started,
                            "finished_us": clock.now(),
                            "files": 0,
                            "readings": 0,
                            "days": 0,
                            "note": json.dumps(note),
                        }
                    ]
                },
                replace={},
                remove={},
            )
        )

    @staticmethod
    def _last_site(passes: Sequence[Row]) -> str:
        """Return the digest of the site file that the last pass used; '' before the first."""
        for row in reversed(passes):
            digest = json.loads(row["note"]).get("site")
            if digest:
                return str(digest)
        return ""


def rehearse(opened: OpenSite, file: Arrived, now: int, gases: GasLibrary) -> None:
    """Do all of a pass for one file alone, but commit nothing; for `trial.faults`."""
    PassWork(opened, now, now, gases).rehearse(file)


def heartbeat(now: int, error: str) -> Row:
    """Return the heartbeat's row."""
    return {"id": 1, "last_us": now, "last_error": error}


def _known_delivery(ledger: Ledger, sequence: int) -> Row:
    return ledger.rows("delivery", where={"sequence": sequence})[0]


def _delivery_row(file: Arrived, sequence: int, replaces: int, after: Mapping[str, Any]) -> Row:
    return {
        "sequence": sequence,
        "source": file.source,
        "binding": file.binding,
        "name": file.name,
        "version": file.version,
        "raw_sha256": file.raw_sha256,
        "kind": file.kind,
        "byte_offset": file.byte_offset,
        "line_offset": file.line_offset,
        "prefix_sha256": file.prefix_sha256,
        "file_sha256": file.file_sha256,
        "file_length": file.file_length,
        "carried": json.dumps(after),
        "arrival_us": file.arrival,
        "modified_us": file.modified,
        "replaces": replaces,
    }


def _waiting_key(row: Mapping[str, Any]) -> tuple[str, str, str]:
    return (row["source"], row["binding"], row["name"])
