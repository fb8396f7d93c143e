"""Stored files that the site file now reads otherwise, and must be judged again."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from meterfix.errors import SiteFileError
from meterfix.intake.site import site_from_text
from meterfix.model.site import Site
from meterfix.run.gather import SLICE_BYTES, Arrived, arrived_from
from meterfix.run.opening import OpenSite
from meterfix.store.ledger import Ledger


@dataclass(frozen=True)
class Again:
    """A stored delivery and the number of the judgement that it is due."""

    file: Arrived
    sequence: int
    judgement: int


def to_judge_again(opened: OpenSite) -> tuple[list[Again], bool]:
    """Return stored deliveries that the site file now reads otherwise, a bounded amount.

    Beside it: whether more are left for another pass.
    """
    ledger, index = opened.ledger, opened.index
    versions = ledger.rows("site_version")
    if all(row["digest"] == index.site.digest for row in versions):
        return [], False
    ways = {row["digest"]: _ways_of_text(row["text"], str(opened.path)) for row in versions}
    now = ways_of_reading(index.site)
    latest = {
        row["delivery_sequence"]: row
        for row in ledger.latest("fate", group=("delivery_sequence",), number="judgement")
        if row["verdict"] != "quarantined"
    }
    found: list[Again] = []
    size = 0
    for delivery in ledger.rows("delivery", order=("sequence",)):
        fate = latest.get(delivery["sequence"])
        source = delivery["source"]
        if fate is None or source not in now:
            continue
        if ways[fate["site_digest"]].get(source) == now[source]:
            continue
        if size >= SLICE_BYTES:
            return found, True
        raw = read_raw(ledger, delivery["raw_sha256"])
        size += len(raw)
        file = arrived_from(delivery, raw, state_before(ledger, delivery))
        found.append(Again(file, delivery["sequence"], fate["judgement"] + 1))
    return found, False


def ways_of_reading(site: Site) -> dict[str, str]:
    """Return, per source, a digest of all that decides what its files' bytes mean."""
    ways = {}
    for source in site.sources:
        signals = [
            (signal.name, signal.origins)
            for signal in site.signals
            if any(origin.source == source.name for origin in signal.origins)
        ]
        text = repr((source.layout, source.stamp, source.interval, source.delivery, signals))
        ways[source.name] = hashlib.sha256(text.encode()).hexdigest()
    return ways


def state_before(ledger: Ledger, delivery: Mapping[str, Any]) -> dict[str, Any]:
    """Return the reader's state at the beginning of a stored tail; {} for other deliveries."""
    if delivery["kind"] != "tail":
        return {}
    before = ledger.rows("delivery", where={"sequence": delivery["replaces"]})[0]
    state: dict[str, Any] = json.loads(before["carried"])
    return state


def read_raw(ledger: Ledger, sha256: str) -> bytes:
    """Return raw bytes from the archive, checked against their hash."""
    return ledger.archive.read_raw(ledger.rows("raw_location", where={"sha256": sha256})[0])


def _ways_of_text(text: str, path: str) -> dict[str, str]:
    """Return a stored site version's ways of reading; none if this version cannot read it."""
    try:
        return ways_of_reading(site_from_text(text, path))
    except SiteFileError:
        # a stricter reader than the one that took the file in: judge everything again
        return {}
