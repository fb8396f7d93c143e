"""A small service around a ledger: files arrive, a pass stores them and one total for each."""

from __future__ import annotations

import hashlib
import uuid
from pathlib import Path
from typing import Any

import numpy as np

from meterfix.store.archive import PackEntry
from meterfix.store.ledger import Ledger, PassRecord, RawReadings, encode_array

DAY = 86_400_000_000
SITE = "name = 'test'"
SITE_DIGEST = hashlib.sha256(SITE.encode()).hexdigest()


def open_ledger(folder: Path, *, read_only: bool = False) -> Ledger:
    return Ledger.open(
        f"sqlite:///{folder / 'site.sqlite'}", folder / "archive", read_only=read_only
    )


def log_file(number: int) -> bytes:
    lines = [f"2026-03-{number:02d}T{hour:02d}:00:00Z,{100 + hour + number}" for hour in range(24)]
    return ("time,dp\n" + "\n".join(lines) + "\n").encode()


def arrivals(*numbers: int) -> dict[str, bytes]:
    return {f"day_{number:02d}.csv": log_file(number) for number in numbers}


def readings_of(sequence: int, name: str) -> RawReadings:
    number = int(name[4:6])
    count = 24
    return RawReadings(
        np.arange(count, dtype=np.int64) * 3_600_000_000 + number * DAY,
        np.arange(count) + 100.0 + number,
        np.zeros(count, dtype=np.bool_),
        np.full(count, sequence, dtype=np.int64),
        np.ones(count, dtype=np.int64),
        np.zeros(count, dtype=np.bool_),
    )


def pass_row(clock: int, files: int) -> dict[str, Any]:
    return {"now_us": clock, "started_us": clock, "finished_us": clock, "files": files}


def total_row(name: str, sequence: int) -> dict[str, Any]:
    number = int(name[4:6])
    return {
        "meter": "FT-101",
        "kind": "gas_day",
        "period_start_us": number * DAY,
        "basis": "measured",
        "revision": 1,
        "period_end_us": (number + 1) * DAY,
        "gas_day": f"2026-03-{number:02d}",
        "duration_s": 86400.0,
        "measured_time_s": 86400.0,
        "flow_time_s": 86400.0,
        "mass_kg": 1000.0 + number / 7,
        "line_volume_m3": None,
        "base_volume_m3": 1200.0 + number / 3,
        "energy_J": None,
        "measured_fraction": 1.0,
        "input_digest": "0" * 64,
        "as_of_delivery": sequence,
        "as_of_pass": sequence,
        "site_digest": SITE_DIGEST,
        "calculation_version": "1",
        "fingerprint": "test",
    }


def delivery_rows(
    sequence: int, entry: PackEntry, site_digest: str = SITE_DIGEST
) -> dict[str, list[dict[str, Any]]]:
    meta = entry.meta
    lines = len(entry.content or b"") and (entry.content or b"").count(b"\n")
    return {
        "delivery": [
            {
                "sequence": sequence,
                "source": meta["source"],
                "binding": meta["binding"],
                "name": meta["name"],
                "version": 1,
                "raw_sha256": entry.sha256,
                "kind": "whole",
                "file_sha256": entry.sha256,
                "file_length": len(entry.content or b""),
                "arrival_us": meta["arrival_us"],
                "modified_us": meta["arrival_us"],
            }
        ],
        "fate": [
            {
                "delivery_sequence": sequence,
                "judgement": 1,
                "site_digest": site_digest,
                "verdict": "accepted",
                "lines_read": lines,
                "lines_used": lines - 2,
                "lines_set_aside": 1,
                "lines_duplicate": 0,
                "lines_skipped": 1,
                "cells_read": lines - 1,
                "cells_used": lines - 2,
                "cells_set_aside": 1,
                "cells_duplicate": 0,
            }
        ],
        "set_aside": [
            {
                "delivery_sequence": sequence,
                "judgement": 1,
                "line": 3,
                "cell": "dp",
                "number": 0,
                "reason": "not a number",
                "text": b"\xff\x00bad",
            }
        ],
        "total_revision": [total_row(meta["name"], sequence)],
        "hourly_record": [
            {
                "meter": "FT-101",
                "gas_day": f"2026-03-{meta['name'][4:6]}",
                "revision": 1,
                "period_start_us": 0,
                "hours": 24,
                "columns": 2,
                "statistics": encode_array(np.full((24, 2), sequence + 0.5)),
            }
        ],
    }


def commit_empty(ledger: Ledger, kind: str, clock: int) -> int:
    return ledger.commit(
        PassRecord(
            uuid.uuid4().hex, kind, ledger.head(), "tester", clock, {}, {"pass": [pass_row(0, 0)]}
        )
    )


def build_pass(ledger: Ledger, entries: list[PackEntry], clock: int) -> PassRecord:
    """Store the entries' bytes and readings, and return the record to be committed."""
    locations = ledger.archive.write_pack(entries)
    sequence = max((row["sequence"] for row in ledger.rows("delivery")), default=0)
    rows: dict[str, list[dict[str, Any]]] = {"pass": [pass_row(clock, len(entries))]}
    known = {row["sha256"] for row in ledger.rows("raw_object")}
    rows["raw_object"] = [
        {"sha256": entry.sha256, "length": len(entry.content or b"")}
        for entry in entries
        if entry.sha256 not in known
    ]
    if not ledger.rows("site_version"):
        rows["site_version"] = [{"digest": SITE_DIGEST, "text": SITE}]
    parts = []
    for entry in entries:
        sequence += 1
        parts.append(readings_of(sequence, entry.meta["name"]))
        for name, found in delivery_rows(sequence, entry).items():
            rows.setdefault(name, []).extend(found)
    joined = RawReadings(
        *(
            np.concatenate([getattr(part, column) for part in parts])
            for column in ("instants", "values", "implausible", "delivery", "judgement", "doubtful")
        )
    )
    file, digest, spans = ledger.archive.write_readings(["dp"], {"dp": joined})
    key = {"pass_sequence": ledger.next_sequence()}
    return PassRecord(
        uuid.uuid4().hex,
        "pass",
        ledger.head(),
        "tester",
        clock,
        {"what": "test"},
        rows,
        replace={
            "raw_location": locations,
            "reading_segment": [{**key, "file": file, "digest": digest}],
            "reading_span": [{**key, **span} for span in spans],
        },
    )


def entry_of(name: str, content: bytes, clock: int) -> PackEntry:
    meta = {"source": "logs", "binding": "", "name": name, "arrival_us": clock}
    return PackEntry(hashlib.sha256(content).hexdigest(), content, meta)


def run(ledger: Ledger, files: dict[str, bytes], clock: int) -> list[dict[str, Any]]:
    """Start up and process: chain what was found, adopt, then one pass for what is new."""
    with ledger.writer():
        facts = ledger.recover()
        if facts:
            restored = any(fact["fact"] == "older database restored" for fact in facts)
            commit_empty(ledger, "restore" if restored else "resolution", clock)
        adopted = ledger.unknown_raw()
        names = {row["name"] for row in ledger.rows("delivery")}
        names |= {entry.meta["name"] for entry in adopted}
        new = [entry_of(n, content, clock) for n, content in files.items() if n not in names]
        if adopted or new:
            ledger.commit(build_pass(ledger, [*adopted, *new], clock))
    return facts


def state_of(ledger: Ledger) -> dict[str, Any]:
    """Return what must not depend on where a process was killed."""
    drop = ("pass_sequence", "sequence", "as_of_pass", "as_of_delivery", "delivery_sequence")
    state: dict[str, Any] = {}
    for table in ("raw_object", "total_revision", "set_aside", "fate"):
        rows = [{k: v for k, v in row.items() if k not in drop} for row in ledger.rows(table)]
        state[table] = sorted(rows, key=repr)
    state["names"] = sorted(row["name"] for row in ledger.rows("delivery"))
    loaded = ledger.load_readings(["dp"], 0, 40 * DAY)["dp"]
    order = np.argsort(loaded.instants)
    state["instants"] = loaded.instants[order].tolist()
    state["values"] = loaded.values[order].tolist()
    return state
