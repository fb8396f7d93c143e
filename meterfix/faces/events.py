"""Rows of `show alerts`, `show files` and `show passes`, read from the ledger."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

from meterfix.faces.asked import Asked, Row, time_text
from meterfix.run.opening import OpenSite
from meterfix.run.outcome import fact_text, judged_again_text

COUNTS = ("read", "used", "set_aside", "duplicate", "skipped")


def alerts(opened: OpenSite, asked: Asked) -> list[Row]:
    """Return alerts, each as its last event left it; open ones first."""
    last = {
        row["alert_id"]: row
        for row in opened.ledger.latest("alert_event", group=("alert_id",), number="number")
    }
    rows = []
    for alert in opened.ledger.rows("alert", order=("since_us", "id")):
        event = last[alert["id"]]
        closed = event["state"] == "closed"
        if asked.end is not None and alert["since_us"] >= asked.end:
            continue
        if asked.start is not None and closed and event["until_us"] <= asked.start:
            continue
        if asked.meter is not None and alert["subject"] != asked.meter:
            continue
        energy = event["effect_energy_J_per_day"]
        rows.append(
            {
                "kind": alert["kind"],
                "subject": alert["subject"],
                "since": time_text(alert["since_us"]),
                "until": time_text(event["until_us"]) if closed else None,
                "severity": event["severity"],
                "message": event["message"],
                "evidence": json.loads(event["evidence"]),
                "effect_base_volume_m3_per_day": event["effect_base_volume_m3_per_day"],
                "effect_energy_MJ_per_day": None if energy is None else energy / 1e6,
                "effect_money_per_day": event["effect_money_per_day"],
                "currency": event["currency"],
            }
        )
    return sorted(rows, key=lambda row: row["until"] is not None)


def files(opened: OpenSite, asked: Asked) -> list[Row]:
    """Return every delivery with its latest fate, then the files that wait."""
    feeding = None if asked.meter is None else _feeding(opened, asked.meter)
    fates = {
        row["delivery_sequence"]: row
        for row in opened.ledger.latest("fate", group=("delivery_sequence",), number="judgement")
    }
    problems = _problems(opened, fates)
    rows = []
    for delivery in opened.ledger.rows("delivery", order=("sequence",)):
        if not asked.holds(delivery["arrival_us"]) or not _feeds(delivery, feeding):
            continue
        fate = fates[delivery["sequence"]]
        rows.append(
            {
                "source": delivery["source"],
                "binding": delivery["binding"],
                "name": delivery["name"],
                "version": delivery["version"],
                "verdict": fate["verdict"],
                "reason": fate["reason"] or fate["warning"],
                "arrived": time_text(delivery["arrival_us"]),
                **{
                    f"{what}_{count}": fate[f"{what}_{count}"]
                    for what in ("lines", "cells")
                    for count in COUNTS
                    if (what, count) != ("cells", "skipped")
                },
                "set_aside": problems.get(delivery["sequence"], []),
                "sha256": delivery["raw_sha256"],
            }
        )
    rows.extend(
        {
            "source": row["source"],
            "binding": row["binding"],
            "name": row["name"],
            "verdict": "waiting",
            "reason": row["reason"],
            "set_aside": [],
        }
        for row in opened.ledger.rows("waiting", order=("source", "name"))
        if _feeds(row, feeding)
    )
    return rows


def by_source(rows: list[Row]) -> list[Row]:
    """Return the counts of lines of each source: the sums over its files."""
    sums: dict[str, Row] = {}
    for row in rows:
        if row["verdict"] == "waiting":
            continue
        one = sums.setdefault(
            row["source"],
            {"source": row["source"], "files": 0, **{f"lines_{count}": 0 for count in COUNTS}},
        )
        one["files"] += 1
        for count in COUNTS:
            one[f"lines_{count}"] += row[f"lines_{count}"]
    return [sums[name] for name in sorted(sums)]


def _feeding(opened: OpenSite, meter: str) -> set[tuple[str, str]]:
    """Return source and binding of what a meter's signals are read from."""
    index = opened.index
    if meter not in index.meters:
        return set()  # the site file in force no longer says what feeds it
    return {
        (origin.source, origin.binding)
        for name in index.signals_of(index.meters[meter])
        for origin in index.signals[name].origins
    }


def _feeds(row: Mapping[str, Any], feeding: set[tuple[str, str]] | None) -> bool:
    return feeding is None or (row["source"], row["binding"]) in feeding


def _problems(opened: OpenSite, fates: Mapping[int, Row]) -> dict[int, list[Row]]:
    """Return what was set aside by each delivery's judgement that counts, in order of line."""
    found: dict[int, list[Row]] = {}
    order = ("delivery_sequence", "line", "cell", "number")
    for row in opened.ledger.rows("set_aside", order=order):
        sequence = row["delivery_sequence"]
        if fates[sequence]["judgement"] == row["judgement"]:
            found.setdefault(sequence, []).append(
                {
                    "line": row["line"],
                    "column": row["cell"] or None,
                    "text": bytes(row["text"]).decode("utf-8", "backslashreplace"),
                    "reason": row["reason"],
                }
            )
    return found


def passes(opened: OpenSite, asked: Asked) -> list[Row]:
    """Return every pass that changed something, and the heartbeat last."""
    hashes = {
        row["sequence"]: row["row_hash"]
        for row in opened.ledger.rows("audit", columns=("sequence", "row_hash"))
    }
    rows = [
        {
            "sequence": row["sequence"],
            "kind": row["kind"],
            "started": time_text(row["started_us"]),
            "finished": time_text(row["finished_us"]),
            "now": time_text(row["now_us"]),
            "files": row["files"],
            "readings": row["readings"],
            "days": row["days"],
            "note": _facts(row["note"]),
            "row_hash": hashes.get(row["sequence"]),
        }
        for row in opened.ledger.rows("pass", order=("sequence",))
        if asked.holds(row["now_us"])
    ]
    rows.extend(
        {
            "kind": "heartbeat",
            "now": time_text(row["last_us"]),
            "note": row["last_error"] or "nothing new",
        }
        for row in opened.ledger.rows("heartbeat")
        if asked.holds(row["last_us"])
    )
    return rows


def _facts(note: str) -> str:
    told = json.loads(note)
    parts = [fact_text(fact) for fact in told.get("facts", [])]
    parts.append(judged_again_text(told.get("judged_again", 0)))
    return "; ".join(part for part in parts if part)
