"""What a new version of a file no longer holds: its readings are kept, and that is said."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from meterfix.frames import Instants, ParsedFile
from meterfix.model.wording import counted
from meterfix.run.gather import Arrived, arrived_from, parse_arrived
from meterfix.run.opening import OpenSite
from meterfix.run.rejudge import read_raw, state_before

Fresh = Mapping[int, tuple[Arrived, int]]
"""Deliveries of the pass under way, each with the delivery that it replaces (0 for none)."""


def absence_warning(opened: OpenSite, sequence: int, parsed: ParsedFile, fresh: Fresh) -> str:
    """Return a sentence about readings that a new version of a file no longer holds; '' if none.

    Parameters
    ----------
    opened : the site and its ledger.
    sequence : delivery number of the new version, one of `fresh`.
    parsed : what the new version holds.
    fresh : the deliveries of this pass.
    """
    file, replaces = fresh[sequence]
    if not replaces or file.kind == "tail" or file.quarantined or parsed.rejected:
        return ""
    count = _absent(opened, parsed, replaces, fresh)
    if count == 0:
        return ""
    return f"absent from this version, and kept: {counted(count, 'reading')} of the one before"


def _absent(opened: OpenSite, parsed: ParsedFile, replaces: int, fresh: Fresh) -> int:
    """Return how many readings of the version before have no cell in the new one."""
    before = parse_arrived(_chain(opened, replaces, fresh), opened)
    old = _instants([result for result, _ in before])
    new = _instants([parsed])
    nothing = np.zeros(0, dtype=np.int64)
    return sum(
        len(np.setdiff1d(instants, new.get(column, nothing))) for column, instants in old.items()
    )


def _chain(opened: OpenSite, sequence: int, fresh: Fresh) -> list[Arrived]:
    """Return a whole file, or the pieces in which it grew, the first piece first."""
    ledger = opened.ledger
    pieces: list[Arrived] = []
    while sequence:
        if sequence in fresh:
            piece, sequence = fresh[sequence]
        else:
            row = ledger.rows("delivery", where={"sequence": sequence})[0]
            fate = ledger.rows("fate", where={"delivery_sequence": sequence, "judgement": 1})[0]
            # bytes that brought a pass down are not read again, for this either
            quarantined = fate["reason"] if fate["verdict"] == "quarantined" else ""
            raw = read_raw(ledger, row["raw_sha256"])
            piece = arrived_from(row, raw, state_before(ledger, row), quarantined=quarantined)
            sequence = row["replaces"]
        pieces.append(piece)
        if piece.kind != "tail":
            break
    return pieces[::-1]


def _instants(files: list[ParsedFile]) -> dict[str, Instants]:
    found: dict[str, Instants] = {}
    for parsed in files:
        for cells in parsed.cells:
            earlier = found.get(cells.column, np.zeros(0, dtype=np.int64))
            found[cells.column] = np.union1d(earlier, cells.instants)
    return found
