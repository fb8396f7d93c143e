"""The fast path: whole columns at once, for files whose lines are all of one build.

It declines (returns None) what it cannot split exactly as the careful path does. Lines that
are well split but hold anything doubtful are read by the careful path's own functions.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pv

from meterfix.frames import Floats, Instants, ParsedFile, Problem, Truths
from meterfix.intake.logs.fixed_time import fixed_times
from meterfix.intake.logs.grammar import number_pattern
from meterfix.intake.logs.heading import (
    Heading,
    Unfit,
    header_names,
    header_warning,
    resembles_header,
    resolve,
    unknown_column,
)
from meterfix.intake.logs.readings import FileRows, Rows, finish
from meterfix.intake.logs.rows import Rules, not_a_row, read_number, read_row, rules_of
from meterfix.intake.logs.text import (
    Malformed,
    Refusal,
    has_overlong_line,
    is_blank,
    kept,
    split_cells,
    to_utf8,
)
from meterfix.model.source import Layout, Stamp

_BLOCK = 4 << 20
"""Bytes that are split at once; above the longest line that is read."""
_SAMPLES = 100
"""So many first rows are tried for a time that shows how times are written."""


@dataclass(frozen=True, slots=True)
class Prepared:
    """A file that fulfils the conditions of the fast path."""

    header_bytes: bytes
    heading: Heading
    body: bytes
    """Its lines after the header, each with its end."""
    width: int
    """Cells of its first row."""
    count: int
    """Lines in the body."""


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

    Parameters as for `wide.parse`.
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
        As for `wide.parse`.
    """
    rules = rules_of(layout)
    joined = _Joined(batch, rules)
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
        warning = header_warning(heading.unknown, any_rows=stop > start or malformed > 0)
        files.append(
            FileRows(
                start=start,
                stop=stop,
                arrival=arrival,
                header=heading.names,
                columns=tuple(sorted(index for _, index in heading.columns)),
                lines_read=own_header + prepared.count,
                lines_skipped=own_header + joined.skipped.get(number, 0),
                lines_malformed=malformed,
                warning=warning if own_header else "",
                problems=problems + joined.problems.get(number, []),
                later_hour=later_hour,
                last_local=last_local,
            )
        )
        start = stop
    return finish(joined.rows(first_line), files, layout, stamp=stamp, interval=interval)


class _Joined:
    """The joined bodies of files of one build, and what was read of them."""

    def __init__(self, batch: Sequence[Prepared], rules: Rules) -> None:
        self.rules = rules
        self.heading = batch[0].heading
        self.width = batch[0].width
        self.body = batch[0].body if len(batch) == 1 else b"".join(b.body for b in batch)
        self.own_header = bool(batch[0].header_bytes)
        self.counts = [prepared.count for prepared in batch]
        self.starts = np.concatenate(([0], np.cumsum(self.counts[:-1], dtype=np.int64)))
        self.numbers = np.arange(sum(self.counts), dtype=np.int64)
        """Which line of the joined bodies a row is (0-based); rows may be taken out."""
        self.walls: Instants = np.zeros(0, dtype=np.int64)
        self.readable: Truths = np.zeros(0, dtype=np.bool_)
        self.values: list[Floats] = []
        self.problems: dict[int, list[Problem]] = {}
        self.skipped: dict[int, int] = {}
        self.malformed: dict[int, int] = {}
        self._doubtful: Truths = self.readable
        self._ends: Instants | None = None

    def read(self) -> bool:
        """Read every column; return whether the lines are what was counted."""
        table = self._split()
        if table.num_rows != len(self.numbers):
            return False
        doubtful = np.zeros(table.num_rows, dtype=np.bool_)
        columns = self.rules.layout.columns
        self.values = [np.full(table.num_rows, math.nan) for _ in columns]
        pattern = rf"\A{number_pattern(self.rules.layout.decimal_mark)}\z"
        # Cells of the same value as a bad-value text are left to the careful reading.
        bad = [
            read_number(text, self.rules)
            for text in self.rules.bad
            if self.rules.number.fullmatch(text)
        ]
        for position, index in self.heading.columns:
            column = columns[index]
            numbers, accepted = read_numbers(
                table.column(f"c{position}"), pattern, self.rules.layout.decimal_mark
            )
            for value in bad:
                accepted &= numbers != value
            with np.errstate(over="ignore", invalid="ignore"):
                values = numbers * column.scale + column.offset
            accepted &= np.isfinite(values)
            self.values[index] = values
            doubtful |= ~accepted
        self.walls, self.readable = self._times(table)
        doubtful |= ~self.readable
        for position in range(len(self.heading.names), self.width):
            lengths = pc.binary_length(table.column(f"c{position}")).to_numpy()
            doubtful |= lengths != 0
        self._doubtful = doubtful
        return True

    def _split(self) -> pa.Table:
        """Return the cells that are read, as text."""
        wanted = {*self.heading.times, *(position for position, _ in self.heading.columns)}
        wanted.update(range(len(self.heading.names), self.width))
        include = [f"c{position}" for position in sorted(wanted)]
        return pv.read_csv(
            pa.py_buffer(self.body),
            read_options=pv.ReadOptions(
                column_names=[f"c{n}" for n in range(self.width)], block_size=_BLOCK
            ),
            parse_options=pv.ParseOptions(
                delimiter=self.rules.layout.delimiter,
                quote_char=False,
                double_quote=False,
                escape_char=False,
                newlines_in_values=False,
                ignore_empty_lines=False,
            ),
            convert_options=pv.ConvertOptions(
                column_types=dict.fromkeys(include, pa.string()),
                include_columns=include,
                strings_can_be_null=False,
                quoted_strings_can_be_null=False,
                check_utf8=False,
            ),
        )

    def _times(self, table: pa.Table) -> tuple[Instants, Truths]:
        """Return times as written, and which could be read."""
        none = np.zeros(table.num_rows, dtype=np.int64), np.zeros(table.num_rows, dtype=np.bool_)
        cells = table.column(f"c{self.heading.times[0]}")
        for position in self.heading.times[1:]:
            cells = pc.binary_join_element_wise(cells, table.column(f"c{position}"), " ")
        for sample in cells.slice(0, _SAMPLES).to_pylist():
            grammar = fixed_times(self.rules.time, sample)
            if grammar is not None:
                break
        else:
            return none
        parts = [grammar.read(chunk) for chunk in cells.chunks]
        return np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts])

    def mend(self, first_line: int) -> bool:
        """Read the doubtful lines one by one; return whether the header stays the same."""
        keep = np.ones(len(self.numbers), dtype=np.bool_)
        layout = self.rules.layout
        for row in np.flatnonzero(self._doubtful).tolist():
            line, cells = self._line(row)
            file = int(np.searchsorted(self.starts, row, side="right")) - 1
            number = first_line + row - int(self.starts[file]) + int(self.own_header)
            if is_blank(line, layout.delimiter):
                keep[row] = False
                self.skipped[file] = self.skipped.get(file, 0) + 1
                continue
            found = read_row(cells, number, self.heading, self.rules)
            if not_a_row(found) and resembles_header(cells, layout):
                if header_names(cells) != self.heading.names:
                    return False
                keep[row] = False
                self.skipped[file] = self.skipped.get(file, 0) + 1
                continue
            problems = self.problems.setdefault(file, [])
            if isinstance(found, Malformed):
                keep[row] = False
                self.malformed[file] = self.malformed.get(file, 0) + 1
                problems.append(Problem(number, "", found.reason, kept(line)))
                continue
            problems.extend(found.problems)
            self.readable[row] = found.wall is not None
            self.walls[row] = found.wall or 0
            for (_, index), value in zip(self.heading.columns, found.values, strict=True):
                self.values[index][row] = value
        if not keep.all():
            ends = np.cumsum(self.counts)
            kept_before = np.concatenate(([0], np.cumsum(keep)))
            self.counts = np.diff(kept_before[np.concatenate(([0], ends))]).tolist()
            self.numbers = self.numbers[keep]
            self.walls, self.readable = self.walls[keep], self.readable[keep]
            self.values = [values[keep] for values in self.values]
        return True

    def _line(self, row: int) -> tuple[bytes, list[str]]:
        """Return a line of the joined bodies, by its 0-based number, and its cells."""
        if self._ends is None:
            self._ends = np.flatnonzero(np.frombuffer(self.body, dtype=np.uint8) == ord("\n"))
        start = int(self._ends[row - 1]) + 1 if row else 0
        line = self.body[start : int(self._ends[row])].removesuffix(b"\r")
        cells = split_cells(line, self.rules.layout.delimiter)
        if isinstance(cells, Malformed):
            message = f"a line that the fast path had accepted cannot be split: {cells.reason}"
            raise AssertionError(message)  # noqa: TRY004 - the program is wrong, no type is
        return line, cells

    def rows(self, first_line: int) -> Rows:
        """Return the rows read."""
        files = np.searchsorted(self.starts, self.numbers, side="right") - 1
        lines = self.numbers - self.starts[files] + (first_line + int(self.own_header))

        def time_text(row: int) -> str:
            _, cells = self._line(int(self.numbers[row]))
            return " ".join(cells[position] for position in self.heading.times)

        return Rows(
            walls=self.walls,
            readable=self.readable,
            lines=lines,
            declared=np.full(len(self.numbers), len(self.heading.columns), dtype=np.int64),
            values=tuple(self.values),
            time_text=time_text,
        )


def read_numbers(cells: pa.ChunkedArray, pattern: str, decimal_mark: str) -> tuple[Floats, Truths]:
    """Return the numbers that cells hold, and which match the grammar; others are 0."""
    numbers: list[Floats] = []
    accepted: list[Truths] = []
    for chunk in cells.chunks:
        matches = pc.match_substring_regex(chunk, pattern)
        accepted.append(matches.to_numpy(zero_copy_only=False))
        text = chunk if pc.all(matches).as_py() else pc.if_else(matches, chunk, "0")
        if decimal_mark != ".":
            text = pc.replace_substring(text, decimal_mark, ".")
        numbers.append(pc.cast(text, pa.float64()).to_numpy(zero_copy_only=False))
    return np.concatenate(numbers), np.concatenate(accepted)
