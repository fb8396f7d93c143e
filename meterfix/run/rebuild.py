"""Segments of readings made again from the raw bytes that they came from."""

from __future__ import annotations

from dataclasses import replace

from meterfix.errors import LedgerError
from meterfix.intake.site import site_from_text
from meterfix.run.gather import arrived_from, parse_arrived
from meterfix.run.judge import Judged, readings_digest, readings_of
from meterfix.run.opening import OpenSite
from meterfix.run.rejudge import read_raw, state_before
from meterfix.run.signals import SiteIndex
from meterfix.store.ledger import Ledger


def missing_segments(ledger: Ledger) -> list[int]:
    """Return the passes whose segment of readings is gone from the archive."""
    present = {path.name for path in ledger.archive.readings_folder.iterdir()}
    return [
        row["pass_sequence"]
        for row in ledger.rows("reading_segment", order=("pass_sequence",))
        if row["file"] not in present
    ]


def rebuild_segment(opened: OpenSite, pass_sequence: int) -> None:
    """Make the readings of a pass again, as its fates read the raw bytes, and store them anew.

    Parameters
    ----------
    opened : the site and its ledger, whose writer's lock is held.
    pass_sequence : whose readings are missing or damaged.

    Raises
    ------
    LedgerError
        If the raw bytes are damaged too, or no longer give the readings that their fates state.
    """
    ledger = opened.ledger
    fates = ledger.rows(
        "fate",
        where={"pass_sequence": pass_sequence},
        order=("delivery_sequence", "judgement"),
    )
    if not fates:
        raise LedgerError(f"pass {pass_sequence} has a segment of readings, but judged no file")
    # every fate of a pass was judged under the one site file that the pass used
    digest = fates[0]["site_digest"]
    text = ledger.rows("site_version", where={"digest": digest})[0]["text"]
    site = SiteIndex(site_from_text(text, str(opened.path)))
    deliveries = {
        row["sequence"]: row
        for row in ledger.rows(
            "delivery", where={"sequence": [fate["delivery_sequence"] for fate in fates]}
        )
    }
    files = []
    for fate in fates:
        delivery = deliveries[fate["delivery_sequence"]]
        quarantined = fate["reason"] if fate["verdict"] == "quarantined" else ""
        raw = read_raw(ledger, delivery["raw_sha256"])
        before = state_before(ledger, delivery)
        files.append(arrived_from(delivery, raw, before, quarantined=quarantined))
    parsed = parse_arrived(files, replace(opened, index=site))
    judged = []
    for fate, file, (result, _) in zip(fates, files, parsed, strict=True):
        found = readings_digest(result)
        if found != fate["readings_digest"]:
            raise LedgerError(
                f"{file.source}: {file.name}: its raw bytes now give readings with digest {found}; "
                f"pass {pass_sequence} found {fate['readings_digest']}"
            )
        judged.append(
            Judged(
                fate["delivery_sequence"],
                fate["judgement"],
                file.source,
                file.binding,
                result,
                file.quarantined,
            )
        )
    readings = readings_of(judged, site)
    ledger.replace_readings(pass_sequence, sorted(readings), readings)
