"""The simulated logs as files: comma-separated text, gzip-compressed, by day.

Four kinds: a file per run and UTC day (gas), one file per UTC day for the gas runs that the
historian sees (a row per tag and time), one file per local day for all air runs (with semicolons,
decimal commas and local time), one file per UTC day for the barometer.
"""

from __future__ import annotations

import gzip
import os
from collections.abc import Iterator
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import TYPE_CHECKING

from meterfix.demo.flaws import DOUBTFUL_CODE, GOOD_CODE
from meterfix.demo.transmitters import BAROMETER_WRITING, texts, writing_of
from meterfix.demo.works import (
    COMPRESSED_AIR,
    DP,
    HISTORIAN,
    PRESSURE,
    STRAY_TAG,
    TEMPERATURE,
    ZONE,
    Run,
)
from meterfix.model.calendar import from_microseconds

if TYPE_CHECKING:
    from meterfix.demo.flaws import Flaws
    from meterfix.demo.simulated import RunLog, Simulated

_COLUMNS = ((DP, "dp"), (PRESSURE, "p"), (TEMPERATURE, "t"))


def files_of(simulated: Simulated) -> Iterator[tuple[str, bytes]]:
    """Yield every log file of a simulated span: its path below the logs' folder, its bytes.

    The bytes depend on nothing but the span: no clock, no file name inside the gzip header.
    """
    air = [log for log in simulated.run_logs.values() if log.run.feed is COMPRESSED_AIR]
    for log in simulated.run_logs.values():
        if log.run.feed not in (COMPRESSED_AIR, HISTORIAN):
            yield from _run_files(log, simulated.digits)
    yield from _historian_files(simulated)
    yield from _air_files(air, simulated.air_file_flaws, simulated.digits)
    yield from _barometer_files(simulated)


def settle(path: Path) -> None:
    """Set a new file's times to shortly after the day in its name, as its logger would have.

    Where the file system's clock stands before that day, to a minute before the file was made:
    a file from the future would wait to be read until its time comes.

    Raises
    ------
    ValueError
        If the file's name does not end in a date.
    """
    written = min(day_after(path.name), path.stat().st_mtime - 60.0)
    os.utime(path, (written, written))


def day_after(name: str) -> float:
    """Return ten minutes after the day that a log file's name ends in, in POSIX seconds."""
    day = datetime.strptime(name.split(".", maxsplit=1)[0][-10:], "%Y-%m-%d").replace(tzinfo=UTC)
    return (day + timedelta(days=1, minutes=10)).timestamp()


def _compressed(lines: list[str]) -> bytes:
    text = "\n".join(lines) + "\n"
    return gzip.compress(text.encode("ascii"), compresslevel=9, mtime=0)


def _by_day(stamps: list[datetime]) -> list[tuple[date, slice]]:
    """Return each day of the stamps, in order, and where its rows are."""
    days = [stamp.date() for stamp in stamps]
    starts = [n for n, day in enumerate(days) if n == 0 or day != days[n - 1]]
    return [
        (days[first], slice(first, last))
        for first, last in zip(starts, [*starts[1:], len(days)], strict=True)
    ]


def _run_files(log: RunLog, digits: int | None) -> Iterator[tuple[str, bytes]]:
    """Yield the files of one gas run."""
    run = log.run
    columns = [_cells(log, kind, digits, ".") for kind, _ in _COLUMNS]
    first = "q" if run.feed.dp_unit == "%" else "dp"
    header = f"time,{first},p,t"
    kept = log.flaws.shown(log.knots)
    stamps = [from_microseconds(instant) for instant in log.instants.tolist()]
    knots = log.knots.tolist()
    for day, rows in _by_day(stamps):
        lines = [
            (
                knots[n],
                ",".join([f"{stamps[n]:%Y-%m-%dT%H:%M:%SZ}", *(column[n] for column in columns)]),
            )
            for n in range(rows.start, rows.stop)
            if kept[n]
        ]
        body = _with_flaws(lines, log.flaws, header, ",")
        yield f"{run.feed.name}/{run.name}_{day}.csv.gz", _compressed([header, *body])


def _cells(log: RunLog, kind: str, digits: int | None, decimal_mark: str) -> list[str]:
    """Return a column's texts, bad cells in their places."""
    writing = writing_of(log.run, kind)
    values = writing.unit_values(log.logged[kind], log.run.dp_range)
    cells = texts(values, writing.decimals, digits, decimal_mark)
    bad = {knot: text for (knot, of), text in log.flaws.bad_cells.items() if of == kind}
    if bad and not log.run.feed.tags:
        cells = [bad.get(knot, cell) for knot, cell in zip(log.knots.tolist(), cells, strict=True)]
    return cells


def _with_flaws(
    rows: list[tuple[int, str]], flaws: Flaws, header: str, delimiter: str
) -> list[str]:
    """Return rows (knot, text) as lines, with what goes wrong in them."""
    for first, last in flaws.doubled:
        block = [row for row in rows if first <= row[0] <= last]
        if block:
            after = rows.index(block[-1]) + 1
            rows = [*rows[:after], *block, *rows[after:]]
    lines: list[str] = []
    late: str | None = None
    for knot, text in rows:
        line = text
        if knot in flaws.garbled:
            line = _garbled(flaws.garbled[knot], text, delimiter)
        if knot in flaws.headers:
            lines.append(header)
        if knot in flaws.swapped:
            late = line
            continue
        lines.append(line)
        if late is not None:
            lines.append(late)
            late = None
    if late is not None:
        lines.append(late)
    return lines


def _garbled(pattern: str, row: str, delimiter: str) -> str:
    """Return what stands where a row should."""
    return pattern.format(
        half=row[: len(row) // 3],
        time=row.split(delimiter, maxsplit=1)[0],
        row=row,
        delimiter=delimiter,
    )


def tag_of(kind: str, run: Run) -> str:
    """Return the tag under which the historian knows a run's signal."""
    return f"{kind}-{run.number}.PV"


def _historian_files(simulated: Simulated) -> Iterator[tuple[str, bytes]]:
    """Yield the historian's exports: rows of all its tags in order of time."""
    rows: list[tuple[int, int, list[str]]] = []
    logs = [log for log in simulated.run_logs.values() if log.run.feed is HISTORIAN]
    for place, log in enumerate(logs):
        for instant, lines in _tag_lines(log, simulated.digits):
            rows.append((instant, place, lines))
    rows += [
        (at, len(logs), [f"{_stamp(at)},{STRAY_TAG},12.0,{GOOD_CODE}"])
        for at in simulated.stray_lines
    ]
    rows.sort(key=lambda row: row[:2])
    for day, some in _by_day([from_microseconds(instant) for instant, _, _ in rows]):
        body = [line for _, _, lines in rows[some] for line in lines]
        yield f"{HISTORIAN.name}/export_{day}.csv.gz", _compressed([_TAG_HEADER, *body])


_TAG_HEADER = "time,tag,value,quality"


def _stamp(instant: int) -> str:
    return f"{from_microseconds(instant):%Y-%m-%dT%H:%M:%SZ}"


def _tag_lines(log: RunLog, digits: int | None) -> list[tuple[int, list[str]]]:
    """Return a run's lines by instant, with what goes wrong in them."""
    flaws = log.flaws
    cells = {kind: _cells(log, kind, digits, ".") for kind, _ in _COLUMNS}
    shown = flaws.shown(log.knots)
    found: list[tuple[int, list[str]]] = []
    again: dict[int, list[str]] = {}
    for n, (knot, instant) in enumerate(
        zip(log.knots.tolist(), log.instants.tolist(), strict=True)
    ):
        if not shown[n]:
            continue
        stamp = _stamp(instant)
        lines = [_TAG_HEADER] if knot in flaws.headers else []
        for kind, _ in _COLUMNS:
            if not log.written[kind][n]:
                continue
            code = DOUBTFUL_CODE if kind == DP and knot in flaws.doubtful else GOOD_CODE
            code = flaws.bad_cells.get((knot, kind), code)
            row = f"{stamp},{tag_of(kind, log.run)},{cells[kind][n]},{code}"
            if kind == DP and knot in flaws.garbled:
                row = _garbled(flaws.garbled[knot], row, ",")
            lines.append(row)
        found.append((instant, lines))
        for first, last in flaws.doubled:
            if first <= knot <= last:
                again.setdefault(last, []).extend(lines)
            if knot == last:
                found.append((instant, again.pop(last)))
    return found


def air_header(kind: str, run_name: str) -> str:
    """Return the header text of an air column."""
    return f"{run_name} {dict(_COLUMNS)[kind]}"


def _air_files(logs: list[RunLog], flaws: Flaws, digits: int | None) -> Iterator[tuple[str, bytes]]:
    """Yield the files that all air runs share: local date and time, one column per signal."""
    columns = [_cells(log, kind, digits, ",") for log in logs for kind, _ in _COLUMNS]
    header = ";".join(
        [
            "date",
            "clock",
            *(air_header(kind, log.run.name) for log in logs for kind, _ in _COLUMNS),
        ]
    )
    knots = logs[0].knots.tolist()
    stamps = [from_microseconds(knot).astimezone(ZONE) for knot in knots]
    for day, rows in _by_day(stamps):
        lines = [
            (
                knots[n],
                ";".join([f"{stamps[n]:%d.%m.%Y;%H:%M:%S}", *(column[n] for column in columns)]),
            )
            for n in range(rows.start, rows.stop)
        ]
        body = _with_flaws(lines, flaws, header, ";")
        yield f"{COMPRESSED_AIR.name}/air_{day}.csv.gz", _compressed([header, *body])


def _barometer_files(simulated: Simulated) -> Iterator[tuple[str, bytes]]:
    """Yield the barometer's files, plain text."""
    instants, _, logged = simulated.barometer
    values = BAROMETER_WRITING.unit_values(logged, 1.0)
    cells = texts(values, BAROMETER_WRITING.decimals, simulated.digits)
    stamps = [from_microseconds(instant) for instant in instants.tolist()]
    for day, rows in _by_day(stamps):
        lines = [f"{stamps[n]:%Y-%m-%dT%H:%M:%SZ},{cells[n]}" for n in range(rows.start, rows.stop)]
        text = "\n".join(["time,barometer", *lines]) + "\n"
        yield f"weather/barometer_{day}.csv", text.encode("ascii")
