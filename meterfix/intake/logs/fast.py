"""The fast path: whole columns at once, for files whose lines are all of one build.

It declines (returns None) what it cannot split exactly as the careful path does. Lines that
are well split but hold anything doubtful are read by the careful path's own functions.
"""

from __future__ import annotations

from collections.abc import Sequence

import pyarrow as pa

from meterfix.frames import ParsedFile
from meterfix.intake.logs.heading import (
    Unfit,
    header_names,
    header_warning,
    resolve,
    unknown_column,
)
from meterfix.intake.logs.joined import Joined, Prepared
from meterfix.intake.logs.readings import FileRows, finish
from meterfix.intake.logs.rows import rules_of
from meterfix.intake.logs.text import (
    Malformed,
    Refusal,
    has_overlong_line,
    split_cells,
    to_utf8,
)
from meterfix.model.source import Layout, Stamp


def prepare(  # noqa: PLR0911 - one return per condition
    content: bytes, layout: Layout, header: tuple[str, ...] | None = None
) -> Prepared | None:
    """Return the file made ready for the fast path, or None if its conditions do not hold.

    They are: a fitting header in the first line (or given), at least one line after it, every
    line ended (all by LF or all by CRLF), no quote, no NUL, no overlong line, valid text. That
    all lines have the same number of cells (no blank one among them) shows when they are split.
    """
    text = to_utf8(content, layout.encoding)
    if isinstance(text, Refusal) or not text.endswith(b"\n") or b'"' in text or b"\0" in text:
        return None
    if len(layout.delimiter) != 1 or not layout.delimiter.isascii():
        return None
    returns = text.count(b"\r")
    if returns and not returns == text.count(b"\r\n") == text.count(b"\n"):
        return None
    if has_overlong_line(text):
        return None
    if not text.isascii():
        try:
            text.decode()
        except UnicodeDecodeError:
            return None
    split = 0
    if header is None:
        split = text.index(b"\n") + 1
        cells = split_cells(text[:split].rstrip(b"\r\n"), layout.delimiter)
        if isinstance(cells, Malformed):
            return None
        header = header_names(cells)
    heading = resolve(header, layout)
    body = text[split:]
    if isinstance(heading, Unfit) or not body:
        return None
    width = body[: body.index(b"\n")].count(layout.delimiter.encode()) + 1
    if width < len(heading.names):
        return None
    return Prepared(text[:split], heading, body, width, body.count(b"\n"))


def parse_fast(
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
) -> ParsedFile | None:
    """Return what a log file's bytes hold, or None if the fast path declines them.

    Parameters as for `both_paths.parse`.
    """
    prepared = prepare(content, layout, header)
    if prepared is None:
        return None
    results = parse_batch(
        [prepared],
        layout,
        stamp=stamp,
        interval=interval,
        arrivals=[arrival],
        first_line=first_line,
        later_hour=later_hour,
        last_local=last_local,
    )
    return None if results is None else results[0]


def parse_batch(
    batch: Sequence[Prepared],
    layout: Layout,
    *,
    stamp: Stamp,
    interval: int | None,
    arrivals: Sequence[int],
    first_line: int = 1,
    later_hour: bool = False,
    last_local: int | None = None,
) -> list[ParsedFile] | None:
    """Return what files with identical headers and widths hold, read as one; None: declined.

    Parameters
    ----------
    batch : sequence of Prepared
        The files.
    arrivals : sequence of int
        When each arrived [UTC us].
    layout, stamp, interval, first_line, later_hour, last_local
        As for `both_paths.parse`.
    """
    rules = rules_of(layout)
    joined = Joined(batch, rules)
    try:
        read = joined.read()
    except pa.ArrowInvalid:
        return None  # a line with another number of cells
    if not read or not joined.mend(first_line):
        return None
    files: list[FileRows] = []
    heading = batch[0].heading
    start = 0
    for number, (prepared, arrival) in enumerate(zip(batch, arrivals, strict=True)):
        own_header = 1 if prepared.header_bytes else 0
        problems = [unknown_column(name, first_line) for name in heading.unknown if own_header]
        stop = start + joined.counts[number]
        malformed = joined.malformed.get(number, 0)
        unknown, ignored = joined.left_out.get(number, ({}, 0))
        any_rows = stop > start or malformed > 0 or bool(unknown) or ignored > 0
        warning = header_warning(heading.unknown, any_rows=any_rows)
        files.append(
            FileRows(
                start=start,
                stop=stop,
                arrival=arrival,
                header=heading.names,
                columns=tuple(sorted(index for _, index in heading.columns)),
                lines_read=own_header + prepared.count,
                lines_skipped=own_header + ignored + joined.skipped.get(number, 0),
                lines_malformed=malformed,
                warning=warning if own_header else "",
                problems=problems + joined.problems.get(number, []),
                unknown_tags=unknown,
                later_hour=later_hour,
                last_local=last_local,
            )
        )
        start = stop
    return finish(joined.rows(first_line), files, layout, stamp=stamp, interval=interval)
