"""The careful path: a log file line by line."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from meterfix.frames import ParsedFile, Problem
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
from meterfix.intake.logs.rows import (
    IGNORED_TAG,
    UNKNOWN_TAG,
    Row,
    Rules,
    not_a_row,
    read_row,
    rules_of,
    value_arrays,
)
from meterfix.intake.logs.text import (
    LINE_LIMIT,
    Malformed,
    Refusal,
    has_overlong_line,
    is_blank,
    kept,
    split_cells,
    split_lines,
    to_utf8,
)
from meterfix.model.source import Layout, Stamp


def parse_careful(
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
    """Return what a log file's bytes hold, read line by line; parameters as for `parse`."""
    text = to_utf8(content, layout.encoding)
    if isinstance(text, Refusal):
        return _rejected(text.reason)
    if has_overlong_line(text):
        return _rejected(f"a line is longer than {LINE_LIMIT} bytes")
    heading: Heading | None = None
    if header is not None:
        resolved = resolve(header, layout)
        if isinstance(resolved, Unfit):
            return _rejected(
                f"the header of the file's beginning no longer fits: {resolved.reason}"
            )
        heading = resolved
    lines, complete = split_lines(text)
    reading = _Reading(rules_of(layout), heading)
    last = len(lines) - 1
    for number, line in enumerate(lines):
        unfinished = number == last and not complete and layout.final_line_end_required
        refused = reading.take(line, first_line + number, unfinished=unfinished)
        if refused:
            return _rejected(refused)
    rows, file = reading.finished(len(lines))
    file.arrival, file.later_hour, file.last_local = arrival, later_hour, last_local
    if header is None:
        file.warning = _warning(len(lines), reading)
    return finish(rows, [file], layout, stamp=stamp, interval=interval)[0]


@dataclass
class _Reading:
    """A file while its lines are read."""

    rules: Rules
    heading: Heading | None
    columns: set[int] = field(default_factory=set)
    unknown: list[str] = field(default_factory=list)
    walls: list[int] = field(default_factory=list)
    readable: list[bool] = field(default_factory=list)
    lines: list[int] = field(default_factory=list)
    declared: list[int] = field(default_factory=list)
    texts: list[str] = field(default_factory=list)
    values: list[list[float]] = field(default_factory=list)
    tags: list[int] = field(default_factory=list)
    doubtful: list[bool] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)
    unknown_tags: dict[str, tuple[int, int]] = field(default_factory=dict)
    skipped: int = 0
    ignored: int = 0
    """Those of the skipped lines that hold an ignored tag."""
    malformed: int = 0

    def __post_init__(self) -> None:
        self.values = [[] for _ in range(value_arrays(self.rules.layout))]
        if self.heading is not None:
            self.columns.update(index for _, index in self.heading.columns)

    def take(  # noqa: PLR0911 - one return per kind of line
        self, line: bytes, number: int, *, unfinished: bool
    ) -> str:
        """Read one line; return why the whole file must be refused, '' if it need not."""
        layout = self.rules.layout
        if is_blank(line, layout.delimiter):
            self.skipped += 1
            return ""
        if unfinished:
            if self.heading is None:
                return "the header line has no line end; the file is not complete"
            self._malformed(number, "the last line has no line end; it may be cut off", line)
            return ""
        cells = split_cells(line, layout.delimiter)
        if isinstance(cells, Malformed):
            if self.heading is None:
                return f"the header in line {number} cannot be read: {cells.reason}"
            self._malformed(number, cells.reason, line)
            return ""
        if self.heading is None:
            return self._begin(cells, number)
        row = read_row(cells, number, self.heading, self.rules)
        if not_a_row(row) and resembles_header(cells, layout):
            return self._begin(cells, number)
        if isinstance(row, Malformed):
            self._malformed(number, row.reason, line)
            return ""
        self._keep(row, number, self.heading)
        return ""

    def _keep(self, row: Row, number: int, heading: Heading) -> None:
        """Keep a row, or count it where its tag says that it is not for reading."""
        if row.tag == IGNORED_TAG:
            self.skipped += 1
            self.ignored += 1
            return
        if row.tag == UNKNOWN_TAG:
            first, count = self.unknown_tags.get(row.tag_name, (number, 0))
            self.unknown_tags[row.tag_name] = (first, count + 1)
            return
        self.walls.append(row.wall or 0)
        self.readable.append(row.wall is not None)
        self.lines.append(number)
        self.declared.append(len(heading.columns))
        self.texts.append(row.time_text)
        self.tags.append(row.tag)
        self.doubtful.append(row.doubtful)
        for values in self.values:
            values.append(math.nan)
        for (_, index), value in zip(heading.columns, row.values, strict=True):
            self.values[index][-1] = value
        self.problems.extend(row.problems)

    def _begin(self, cells: Sequence[str], number: int) -> str:
        """Take a line for a header; return why the file must be refused, '' if it need not."""
        names = header_names(cells)
        self.skipped += 1
        if self.heading is not None and names == self.heading.names:
            return ""
        resolved = resolve(names, self.rules.layout)
        if isinstance(resolved, Unfit):
            return f"header in line {number}: {resolved.reason}"
        self.heading = resolved
        self.columns.update(index for _, index in resolved.columns)
        for name in resolved.unknown:
            if name not in self.unknown:
                self.unknown.append(name)
                self.problems.append(unknown_column(name, number))
        return ""

    def _malformed(self, number: int, reason: str, line: bytes) -> None:
        self.malformed += 1
        self.problems.append(Problem(number, "", reason, kept(line)))

    def finished(self, lines_read: int) -> tuple[Rows, FileRows]:
        """Return the rows read and the file that they came from."""
        rows = Rows(
            walls=np.array(self.walls, dtype=np.int64),
            readable=np.array(self.readable, dtype=np.bool_),
            lines=np.array(self.lines, dtype=np.int64),
            declared=np.array(self.declared, dtype=np.int64),
            values=tuple(np.array(values, dtype=np.float64) for values in self.values),
            tags=np.array(self.tags, dtype=np.int64),
            doubtful=np.array(self.doubtful, dtype=np.bool_),
            time_text=self.texts.__getitem__,
        )
        file = FileRows(
            start=0,
            stop=len(self.walls),
            arrival=0,
            header=() if self.heading is None else self.heading.names,
            columns=tuple(sorted(self.columns)),
            lines_read=lines_read,
            lines_skipped=self.skipped,
            lines_malformed=self.malformed,
            problems=self.problems,
            unknown_tags=self.unknown_tags,
        )
        return rows, file


def _warning(lines_read: int, reading: _Reading) -> str:
    """Return what is odd about a file that was read, '' if nothing."""
    if reading.heading is None:
        return "the file is empty" if not lines_read else "the file holds blank lines only"
    any_rows = bool(reading.lines or reading.malformed or reading.unknown_tags or reading.ignored)
    return header_warning(reading.unknown, any_rows=any_rows)


def _rejected(reason: str) -> ParsedFile:
    return ParsedFile(
        rejected=reason,
        warning="",
        header=(),
        lines_read=0,
        lines_skipped=0,
        lines_set_aside=0,
        cells_set_aside=0,
        cells=(),
        problems=(),
    )
