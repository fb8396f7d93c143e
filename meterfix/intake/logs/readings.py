"""From rows to good cells: instants, bounds of time, plausibility, and the counts of a file."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from meterfix.frames import Cells, Floats, Instants, Integers, ParsedFile, Problem, Truths
from meterfix.intake.logs.grammar import MINUTE
from meterfix.intake.logs.rows import rules_of
from meterfix.intake.logs.text import kept, shown
from meterfix.intake.logs.zone import ALWAYS_UTC, to_instants
from meterfix.model.calendar import DAY
from meterfix.model.source import Layout, LayoutKind, RepeatedHour, Stamp
from meterfix.model.wording import counted, utc_text

FUTURE_ALLOWANCE = 5 * MINUTE
"""How far a time may lie after the file's arrival: clocks differ a little."""
FORMULA_MARKS = frozenset("=+-@")
"""What a spreadsheet takes for the beginning of a formula."""
_FIRST_WALL = -70 * 366 * DAY
"""No zone's clock is looked up before about 1900."""

_GOOD, _SKIPPED, _REPEATED, _EARLY, _FUTURE = range(5)


@dataclass(frozen=True, slots=True)
class Rows:
    """The well-formed lines of one or many files, file after file, in file order."""

    walls: Instants
    """Times as written (see TimeGrammar.read); anything where not readable."""
    readable: Truths
    lines: Integers
    declared: Integers
    """How many declared columns the row's header has."""
    values: tuple[Floats, ...]
    """One array per column of the layout, in a tag log one in all; NaN where a cell cannot be
    used."""
    tags: Integers
    """Index of each row's tag in the layout's columns; 0 in a wide log."""
    doubtful: Truths
    """By the row's quality code."""
    time_text: Callable[[int], str]
    """A row's time as written, by its index."""


@dataclass(slots=True)
class FileRows:
    """One file's part of the rows, and what its other lines held."""

    start: int
    stop: int
    arrival: int
    header: tuple[str, ...]
    columns: tuple[int, ...]
    """Indices of the declared columns that its headers have."""
    lines_read: int
    lines_skipped: int = 0
    lines_malformed: int = 0
    warning: str = ""
    problems: list[Problem] = field(default_factory=list)
    """In the order of lines; within a line in the order of cells."""
    unknown_tags: dict[str, tuple[int, int]] = field(default_factory=dict)
    """Tags that the layout does not declare: their first line, and how many they have."""
    later_hour: bool = False
    last_local: int | None = None


def finish(
    rows: Rows, files: Sequence[FileRows], layout: Layout, *, stamp: Stamp, interval: int | None
) -> list[ParsedFile]:
    """Return what each file holds, its rows placed in time.

    Parameters
    ----------
    rows : Rows
        Of all files.
    files : sequence of FileRows
        Their parts of the rows, without gaps.
    layout : Layout
        Of their source.
    stamp, interval : Stamp, int or None
        Of their source; an interval's end is turned into its start [us].

    Raises
    ------
    ValueError
        If stamps are interval ends and the interval's length is not given.
    """
    if stamp is Stamp.INTERVAL_END and interval is None:
        message = "stamps at the end of an interval need the interval's length"
        raise ValueError(message)
    arrivals = np.repeat(
        np.array([file.arrival for file in files], dtype=np.int64),
        [file.stop - file.start for file in files],
    )
    instants, codes = _place(rows, files, arrivals, layout)
    timed = rows.readable & (codes == _GOOD)
    all_timed = bool(timed.all())
    if not all_timed:
        _report_times(rows, files, codes, layout)
    if stamp is Stamp.INTERVAL_END and interval is not None:
        instants = instants - interval
    usable = [~np.isnan(values) & timed for values in rows.values]
    implausible = _implausible(rows, layout)
    count = np.zeros(len(rows.walls), dtype=np.int64)
    for good in usable:
        count += good
    full = [bool(good.all()) for good in usable]
    finished: list[ParsedFile] = []
    for file in files:
        part = slice(file.start, file.stop)
        chosen: list[tuple[int, int, slice | Integers]] = []
        if layout.kind is LayoutKind.TAGS:
            tagged = file.start + np.flatnonzero(usable[0][part])
            chosen.extend((tag, 0, at) for tag, at in _by_tag(rows.tags, tagged))
        else:
            for index in file.columns:
                at = part if full[index] else file.start + np.flatnonzero(usable[index][part])
                chosen.append((index, index, at))
        cells = [
            Cells(
                column=layout.columns[column].header,
                instants=instants[at],
                values=rows.values[index][at],
                lines=rows.lines[at],
                implausible=implausible[index][at],
                doubtful=rows.doubtful[at],
            )
            for column, index, at in chosen
        ]
        unknown = _tell_unknown(file)
        used = count[part]
        finished.append(
            ParsedFile(
                rejected="",
                warning=file.warning,
                header=file.header,
                lines_read=file.lines_read,
                lines_skipped=file.lines_skipped,
                lines_set_aside=file.lines_malformed + unknown + int(np.count_nonzero(used == 0)),
                cells_set_aside=unknown + int(rows.declared[part].sum() - used.sum()),
                cells=tuple(cells),
                problems=tuple(file.problems),
                end_instant_is_later=file.later_hour,
                end_local=file.last_local,
            )
        )
    return finished


def _implausible(rows: Rows, layout: Layout) -> list[Truths]:
    """Return, per array of values, which lie outside their column's plausible range."""
    lows = np.array([column.plausible_minimum for column in layout.columns])
    highs = np.array([column.plausible_maximum for column in layout.columns])
    if layout.kind is LayoutKind.TAGS:
        values = rows.values[0]
        return [(values < lows[rows.tags]) | (values > highs[rows.tags])]
    return [
        (values < low) | (values > high)
        for values, low, high in zip(rows.values, lows, highs, strict=True)
    ]


def _by_tag(tags: Integers, at: Integers) -> list[tuple[int, Integers]]:
    """Return each tag among the rows, in the layout's order, with its rows in file order."""
    if len(at) == 0:
        return []
    at = at[np.argsort(tags[at], kind="stable")]
    edges = np.flatnonzero(np.diff(tags[at])) + 1
    return [(int(tags[part[0]]), part) for part in np.split(at, edges)]


def _tell_unknown(file: FileRows) -> int:
    """Add a problem for each unknown tag, and a warning; return how many lines they have."""
    if not file.unknown_tags:
        return 0
    told = list(file.problems)
    for name, (line, count) in file.unknown_tags.items():
        formula = "; it begins like a formula" if name[:1] in FORMULA_MARKS and name else ""
        told.append(
            Problem(
                line,
                name,
                f"tag {shown(name)} is not declared for this source{formula}; "
                f"{counted(count, 'line from this one on is', 'lines from this one on are')} kept "
                "and judged again once it is",
                kept(name),
            )
        )
    file.problems = sorted(told, key=lambda problem: problem.line)
    names = list(file.unknown_tags)
    listed = ", ".join(shown(name) for name in names[:10])
    more = f" and {len(names) - 10} more" if len(names) > 10 else ""
    told_names = f"unknown tags not read: {listed}{more}"
    file.warning = f"{file.warning}; {told_names}" if file.warning else told_names
    return sum(count for _, count in file.unknown_tags.values())


def _place(
    rows: Rows, files: Sequence[FileRows], arrivals: Integers, layout: Layout
) -> tuple[Instants, Integers]:
    """Return each row's instant and whether it may be used; settles repeated hours."""
    codes = np.zeros(len(rows.walls), dtype=np.int64)
    latest = arrivals + FUTURE_ALLOWANCE
    # No zone is further than 14 h from UTC: what is a day out of bounds on the local clock is
    # out of bounds on any, and the zone's clock need not be known that far away.
    codes[rows.walls < max(layout.earliest - DAY, _FIRST_WALL)] = _EARLY
    codes[rows.walls > latest + DAY] = _FUTURE
    instants = rows.walls
    if not rules_of(layout).time.has_offset and layout.time_zone not in ALWAYS_UTC:
        asked = np.flatnonzero(rows.readable & (codes == _GOOD))
        placed = to_instants(rows.walls[asked], layout.time_zone)
        instants = np.zeros(len(rows.walls), dtype=np.int64)
        instants[asked] = placed.instants
        codes[asked[placed.skipped]] = _SKIPPED
        repeated = np.flatnonzero(placed.window >= 0)
        if layout.repeated_hour is RepeatedHour.SET_ASIDE:
            codes[asked[repeated]] = _REPEATED
        else:
            windows = placed.window[repeated]
            later = _settle(rows.walls, asked[repeated], windows, files, layout.time_zone)
            instants[asked[repeated[later]]] += placed.later[repeated[later]]
    good = codes == _GOOD
    codes[good & (instants < layout.earliest)] = _EARLY
    codes[good & (instants > latest)] = _FUTURE
    return instants, codes


def _settle(
    walls: Instants,
    repeated: Integers,
    windows: Integers,
    files: Sequence[FileRows],
    zone: str,
) -> Truths:
    """Return which repeated local times are the later of their two instants, by file order.

    In each clock change the first run of such times is the earlier hour; a step back begins
    the later one. The state at each file's end is left in the file.
    """
    later = np.zeros(len(repeated), dtype=np.bool_)
    for file in files:
        low, high = np.searchsorted(repeated, (file.start, file.stop)).tolist()
        if low == high:
            continue
        edges = low + 1 + np.flatnonzero(np.diff(windows[low:high]))
        for first, last in pairwise([low, *edges.tolist(), high]):
            local = walls[repeated[first:last]]
            before, begun = int(local[0]), False
            if file.last_local is None:
                begun = file.later_hour
            elif _window(file.last_local, zone) == int(windows[first]):
                before, begun = file.last_local, file.later_hour
            back = np.diff(local, prepend=before) < 0
            back[0] |= begun
            later[first:last] = np.logical_or.accumulate(back)
            file.last_local, file.later_hour = int(local[-1]), bool(later[last - 1])
    return later


def _window(local: int, zone: str) -> int:
    """Return which clock change repeats a local time, -1 if none."""
    return int(to_instants(np.array([local], dtype=np.int64), zone).window[0])


def _report_times(rows: Rows, files: Sequence[FileRows], codes: Integers, layout: Layout) -> None:
    """Add the problems of rows whose time is readable and cannot be used.

    They replace those of the rows' cells: none of them counts.
    """
    name = rules_of(layout).time_name
    wrong = np.flatnonzero(rows.readable & (codes != _GOOD))
    starts = np.array([file.start for file in files], dtype=np.int64)
    by_file: dict[int, list[int]] = {}
    for row in wrong.tolist():
        number = int(np.searchsorted(starts, row, side="right")) - 1
        by_file.setdefault(number, []).append(row)
    for number, found in by_file.items():
        file = files[number]
        told: list[Problem] = []
        for row in found:
            text = rows.time_text(row)
            reason = _why(int(codes[row]), text, layout, file.arrival)
            told.append(Problem(int(rows.lines[row]), name, reason, kept(text)))
        lines = {problem.line for problem in told}
        others = [problem for problem in file.problems if problem.line not in lines]
        file.problems = sorted([*others, *told], key=lambda problem: problem.line)


def _why(code: int, text: str, layout: Layout, arrival: int) -> str:
    given = f"time {text[:60]!r}"
    if code == _SKIPPED:
        return f"{given} does not exist in {layout.time_zone}: the clock went forward over it"
    if code == _REPEATED:
        return (
            f"{given} exists twice in {layout.time_zone}: the clock went back; neither an offset "
            "nor a declared order settles which is meant"
        )
    if code == _EARLY:
        bound = utc_text(layout.earliest)
        return f"{given} lies before {bound}, the earliest that this source may hold"
    bound = utc_text(arrival)
    return f"{given} lies more than 5 minutes after the file's arrival at {bound}"
