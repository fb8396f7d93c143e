"""Lines of one or many files read as columns, the doubtful ones line by line."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as pv

from meterfix.frames import Floats, Instants, Integers, Problem, Truths
from meterfix.intake.logs.fixed_time import fixed_times
from meterfix.intake.logs.grammar import number_pattern
from meterfix.intake.logs.heading import Heading, header_names, resembles_header
from meterfix.intake.logs.readings import Rows
from meterfix.intake.logs.rows import (
    Row,
    Rules,
    not_a_row,
    read_number,
    read_row,
    value_arrays,
)
from meterfix.intake.logs.tags import Tagged
from meterfix.intake.logs.text import Malformed, is_blank, kept, split_cells

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


class Joined:
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
        self.tagged: Tagged | None = None
        """Of a tag log: each row's tag and quality."""
        self.left_out: dict[int, tuple[dict[str, tuple[int, int]], int]] = {}
        """Of a tag log: each file's unknown tags, and how many of its lines have ignored ones."""
        self._doubtful: Truths = self.readable
        self._ends: Instants | None = None

    def read(self) -> bool:
        """Read every column; return whether the lines are what was counted."""
        table = self._split()
        if table.num_rows != len(self.numbers):
            return False
        doubtful = np.zeros(table.num_rows, dtype=np.bool_)
        columns = self.rules.layout.columns
        self.values = [
            np.full(table.num_rows, math.nan) for _ in range(value_arrays(self.rules.layout))
        ]
        scales: float | Floats
        offsets: float | Floats
        if self.heading.tag >= 0:
            self.tagged = Tagged.of(table, self.heading, self.rules)
        pattern = rf"\A{number_pattern(self.rules.layout.decimal_mark)}\z"
        # Cells of the same value as a bad-value text are left to the careful reading.
        bad = [
            read_number(text, self.rules)
            for text in self.rules.bad
            if self.rules.number.fullmatch(text)
        ]
        for position, index in self.heading.columns:
            scales, offsets = columns[index].scale, columns[index].offset
            if self.tagged is not None:
                scales, offsets = self.tagged.to_si(columns)
            numbers, accepted = read_numbers(
                table.column(f"c{position}"), pattern, self.rules.layout.decimal_mark
            )
            for value in bad:
                accepted &= numbers != value
            with np.errstate(over="ignore", invalid="ignore"):
                values = numbers * scales + offsets
            accepted &= np.isfinite(values)
            if self.tagged is not None:
                accepted = self.tagged.settled(accepted)
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
        wanted.update(n for n in (self.heading.tag, self.heading.quality) if n >= 0)
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
            self._put(row, found)
        if self.tagged is not None:
            files, lines = self._places(first_line)
            self.left_out = self.tagged.leave_out(keep, files, lines)
        if not keep.all():
            self._leave(keep)
        return True

    def _put(self, row: int, found: Row) -> None:
        """Put what the careful reading found in a row in the place of what stands there."""
        self.readable[row] = found.wall is not None
        self.walls[row] = found.wall or 0
        for (_, index), value in zip(self.heading.columns, found.values, strict=True):
            self.values[index][row] = value
        if self.tagged is not None:
            self.tagged.tags[row], self.tagged.doubtful[row] = found.tag, found.doubtful

    def _leave(self, keep: Truths) -> None:
        """Leave these rows and take the others out."""
        ends = np.cumsum(self.counts)
        kept_before = np.concatenate(([0], np.cumsum(keep)))
        self.counts = np.diff(kept_before[np.concatenate(([0], ends))]).tolist()
        self.numbers = self.numbers[keep]
        self.walls, self.readable = self.walls[keep], self.readable[keep]
        self.values = [values[keep] for values in self.values]
        if self.tagged is not None:
            self.tagged = self.tagged.kept(keep)

    def _places(self, first_line: int) -> tuple[Integers, Integers]:
        """Return each row's file and its line there."""
        files = np.searchsorted(self.starts, self.numbers, side="right") - 1
        return files, self.numbers - self.starts[files] + (first_line + int(self.own_header))

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
        _, lines = self._places(first_line)
        count = len(self.numbers)

        def time_text(row: int) -> str:
            _, cells = self._line(int(self.numbers[row]))
            return " ".join(cells[position] for position in self.heading.times)

        return Rows(
            walls=self.walls,
            readable=self.readable,
            lines=lines,
            declared=np.full(count, len(self.heading.columns), dtype=np.int64),
            values=tuple(self.values),
            tags=np.zeros(count, dtype=np.int64) if self.tagged is None else self.tagged.tags,
            doubtful=np.zeros(count, dtype=np.bool_)
            if self.tagged is None
            else self.tagged.doubtful,
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
