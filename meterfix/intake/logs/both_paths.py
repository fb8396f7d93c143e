"""Log files read by the fast path where its strict conditions hold, else by the careful one.

Both paths give equal cells, fates and line numbers, in either layout.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from meterfix.frames import ParsedFile
from meterfix.intake.logs.careful import parse_careful
from meterfix.intake.logs.fast import parse_batch, parse_fast, prepare
from meterfix.intake.logs.joined import Prepared
from meterfix.model.source import Layout, Stamp

FAST_FROM = 4096
"""A smaller file is read line by line: setting up the fast path would cost more."""
BATCH_BYTES = 32 * 1024 * 1024
"""Small files are joined up to about this size."""


def parse(
    content: bytes,
    layout: Layout,
    *,
    stamp: Stamp,
    interval: int | None,
    arrival: int,
    header: tuple[str, ...] | None = None,
    first_line: int = 1,
    later_hour: bool = False,
    last_local: int | None = None,
) -> ParsedFile:
    """Return what a log file's bytes hold, by the fast path where it can.

    Parameters
    ----------
    content : bytes
        The file, decompressed; or the tail of an appended one.
    layout : Layout
        As declared for its source.
    stamp, interval : Stamp, int or None
        What a row's time is; the length of its interval [us].
    arrival : int
        When the file arrived [UTC us]; times more than 5 minutes later are set aside.
    header : tuple of str, optional
        For a tail: the header in force before it (`ParsedFile.header`); it then holds none.
    first_line : int
        Number of the content's first line in its file.
    later_hour, last_local : bool, int or None
        For a tail: `end_instant_is_later` and `end_local` of what came before it.

    Raises
    ------
    ValueError
        If the layout cannot be used at all (its time format or encoding).
    """
    if len(content) >= FAST_FROM:
        quick = parse_fast(
            content,
            layout,
            stamp=stamp,
            interval=interval,
            arrival=arrival,
            header=header,
            first_line=first_line,
            later_hour=later_hour,
            last_local=last_local,
        )
        if quick is not None:
            return quick
    return parse_careful(
        content,
        layout,
        stamp=stamp,
        interval=interval,
        arrival=arrival,
        header=header,
        first_line=first_line,
        later_hour=later_hour,
        last_local=last_local,
    )


def parse_many(
    contents: Sequence[bytes],
    layout: Layout,
    *,
    stamp: Stamp,
    interval: int | None,
    arrivals: Sequence[int],
) -> list[ParsedFile]:
    """Return what each of many whole files holds; the same as `parse` of each.

    Files with identical header bytes that fulfil the fast path's conditions are read as one.

    Parameters
    ----------
    contents : sequence of bytes
        The files, decompressed.
    arrivals : sequence of int
        When each arrived [UTC us].
    layout, stamp, interval
        As for `parse`.
    """
    found: dict[int, ParsedFile] = {}
    for numbers, batch in _batches(contents, layout):
        results = parse_batch(
            batch, layout, stamp=stamp, interval=interval, arrivals=[arrivals[n] for n in numbers]
        )
        if results is not None:
            found.update(zip(numbers, results, strict=True))
    for number, (content, arrival) in enumerate(zip(contents, arrivals, strict=True)):
        if number not in found:
            found[number] = parse(content, layout, stamp=stamp, interval=interval, arrival=arrival)
    return [found[number] for number in range(len(contents))]


def _batches(
    contents: Sequence[bytes], layout: Layout
) -> Iterator[tuple[list[int], list[Prepared]]]:
    """Yield files that may be read as one, with their numbers, a bounded amount at a time."""
    groups: dict[tuple[bytes, int], tuple[list[int], list[Prepared], int]] = {}
    for number, content in enumerate(contents):
        prepared = prepare(content, layout)
        if prepared is None:
            continue
        key = (prepared.header_bytes, prepared.width)
        numbers, batch, size = groups.setdefault(key, ([], [], 0))
        numbers.append(number)
        batch.append(prepared)
        groups[key] = (numbers, batch, size + len(prepared.body))
        if groups[key][2] >= BATCH_BYTES:
            yield numbers, batch
            del groups[key]
    for numbers, batch, _ in groups.values():
        yield numbers, batch
