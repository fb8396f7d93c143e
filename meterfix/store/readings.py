"""Readings as stored: one derived file per pass, sorted by signal and instant.

    meterfix readings 1 LF | length of the index, 8 bytes little-endian | index | rows

The index is JSON: signal, first and last instant, first row, number of rows. A row is instant
(int64), value (float64), delivery (int64), judgement (int64), marks (uint8: 1 if implausible, plus
2 if of doubtful quality), little-endian and without gaps, so that the file's bytes are the
canonical typed values and its hash is their digest. Readings never leave a file; a file can be
made again from the raw bytes.
"""

from __future__ import annotations

import json
import struct
from bisect import bisect_left, bisect_right
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from meterfix.errors import LedgerError
from meterfix.frames import Floats, Instants, Integers, Truths
from meterfix.store.values import canonical_json

_MAGIC = b"meterfix readings 1\n"
_IMPLAUSIBLE, _DOUBTFUL = 1, 2
_ROW = np.dtype(
    [
        ("instant", "<i8"),
        ("value", "<f8"),
        ("delivery", "<i8"),
        ("judgement", "<i8"),
        ("marks", "u1"),
    ]
)


class DamagedReadings(LedgerError):  # noqa: N818 - a state of a file that the caller repairs
    """A segment of readings is missing or damaged; it can be made again from the raw bytes."""

    def __init__(self, file: str, pass_sequence: int, why: str) -> None:
        self.file = file
        self.pass_sequence = pass_sequence
        super().__init__(f"readings of pass {pass_sequence} in {file}: {why}")


@dataclass(frozen=True, slots=True)
class RawReadings:
    """Stored readings of one signal, all judgements, in no particular order."""

    instants: Instants
    values: Floats
    implausible: Truths
    delivery: Integers
    """Sequence number of the delivery that brought the reading."""
    judgement: Integers
    """Number of the judgement of that delivery."""
    doubtful: Truths


def no_readings() -> RawReadings:
    """Return an empty set of readings."""
    return _raw(np.empty(0, dtype=_ROW))


def joined(parts: Iterable[RawReadings]) -> RawReadings:
    """Return the readings of several segments together."""
    found = list(parts)
    if not found:
        return no_readings()
    return RawReadings(
        np.concatenate([part.instants for part in found]),
        np.concatenate([part.values for part in found]),
        np.concatenate([part.implausible for part in found]),
        np.concatenate([part.delivery for part in found]),
        np.concatenate([part.judgement for part in found]),
        np.concatenate([part.doubtful for part in found]),
    )


def encode_segment(columns: Mapping[str, RawReadings]) -> tuple[bytes, list[dict[str, Any]]]:
    """Return a segment's bytes and its spans, one per signal that has readings.

    Raises
    ------
    ValueError
        If a value is not finite, or a signal's columns differ in length.
    """
    spans: list[dict[str, Any]] = []
    blocks: list[bytes] = []
    start = 0
    for signal in sorted(columns):
        rows = _rows(signal, columns[signal])
        if len(rows) == 0:
            continue
        spans.append(
            {
                "signal": signal,
                "first_us": int(rows["instant"][0]),
                "last_us": int(rows["instant"][-1]),
                "start": start,
                "count": len(rows),
            }
        )
        blocks.append(rows.tobytes())
        start += len(rows)
    index = canonical_json(spans).encode()
    return _MAGIC + struct.pack("<Q", len(index)) + index + b"".join(blocks), spans


def _rows(signal: str, readings: RawReadings) -> NDArray[np.void]:
    count = len(readings.instants)
    columns = {
        "instant": readings.instants,
        "value": readings.values,
        "delivery": readings.delivery,
        "judgement": readings.judgement,
        "marks": readings.implausible * _IMPLAUSIBLE + readings.doubtful * _DOUBTFUL,
    }
    rows = np.empty(count, dtype=_ROW)
    for name, column in columns.items():
        if np.shape(column) != (count,):
            raise ValueError(f"signal {signal}: {name} has another length than the instants")
        rows[name] = column
    rows["value"] += 0.0
    if not np.isfinite(rows["value"]).all():
        raise ValueError(f"signal {signal}: a reading is not finite")
    if (np.diff(rows["instant"]) > 0).all():
        return rows
    # every column takes part, so that one set of readings has one order
    order = np.lexsort(
        [rows["marks"], rows["value"], rows["judgement"], rows["delivery"], rows["instant"]]
    )
    sorted_rows: NDArray[np.void] = rows[order]
    return sorted_rows


def _open_index(file: BinaryIO) -> tuple[list[dict[str, Any]], int]:
    file.seek(0)
    fixed = len(_MAGIC) + 8
    start = file.read(fixed)
    if len(start) != fixed or not start.startswith(_MAGIC):
        raise OSError("not a segment of this version")
    length = struct.unpack("<Q", start[-8:])[0]
    spans: list[dict[str, Any]] = json.loads(file.read(length))
    return spans, fixed + length


def segment_spans(file: BinaryIO) -> list[dict[str, Any]]:
    """Return the spans that a segment's index states."""
    return _open_index(file)[0]


def decode_segment(
    file: BinaryIO, signals: Iterable[str], start: int, end: int
) -> dict[str, RawReadings]:
    """Return the readings of the signals with start <= instant <= end [UTC us]."""
    spans, rows_at = _open_index(file)
    wanted = set(signals)
    found: dict[str, RawReadings] = {}
    for span in spans:
        if span["signal"] not in wanted or span["last_us"] < start or span["first_us"] > end:
            continue
        at = rows_at + span["start"] * _ROW.itemsize
        rows = np.memmap(file, dtype=_ROW, mode="r", offset=at, shape=(span["count"],))
        instants = rows["instant"]
        # bisected where it lies: a day out of a year's segment reads that day only
        first = bisect_left(instants, start)
        last = bisect_right(instants, end)
        found[span["signal"]] = _raw(rows[first:last])
    return found


def _raw(rows: NDArray[np.void]) -> RawReadings:
    """Return the rows' columns as arrays of their own."""
    return RawReadings(
        np.array(rows["instant"], dtype=np.int64),
        np.array(rows["value"], dtype=np.float64),
        np.array(rows["marks"] & _IMPLAUSIBLE).astype(np.bool_),
        np.array(rows["delivery"], dtype=np.int64),
        np.array(rows["judgement"], dtype=np.int64),
        np.array(rows["marks"] & _DOUBTFUL).astype(np.bool_),
    )
