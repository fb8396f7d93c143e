"""From parsed files to fates: which cells are new, which lines count as used or duplicate."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from meterfix.frames import Cells, Instants, Integers, ParsedFile, Problem, Truths
from meterfix.model.source import LayoutKind, Origin
from meterfix.model.wording import counted
from meterfix.run.pool import Pool
from meterfix.run.signals import SiteIndex
from meterfix.store.readings import RawReadings


@dataclass(frozen=True)
class Judged:
    """One delivery with what its bytes hold, before it is known what of it is new."""

    sequence: int
    judgement: int
    source: str
    binding: str
    parsed: ParsedFile
    quarantined: str = ""
    """Why the bytes were not parsed at all; '' if they were."""


@dataclass
class Verdicts:
    """What a pass stores of the files it judged."""

    fates: list[dict[str, Any]]
    set_aside: list[dict[str, Any]]
    readings: dict[str, RawReadings]
    """Every usable cell by signal, duplicates included: which of two equal readings counts may
    change when one of them is replaced."""
    fresh: int
    """Cells of newly arrived files that say something new; files judged again do not count."""
    contested: dict[str, Instants]
    """Instants at which a signal now has different values, some of them from these files."""


def judge(files: Sequence[Judged], index: SiteIndex, pool: Pool, site_digest: str) -> Verdicts:
    """Return fates, set-aside rows and readings of the files, in the order given."""
    placed = [_place(file, index) for file in files]
    new_cells, contested = _new_cells(placed, pool)
    fates: list[dict[str, Any]] = []
    aside: list[dict[str, Any]] = []
    fresh_total = 0
    for number, (file, place) in enumerate(zip(files, placed, strict=True)):
        parsed = file.parsed
        used = np.zeros(0, dtype=np.int64)
        candidates = np.zeros(0, dtype=np.int64)
        fresh = duplicate = 0
        if place.cells:
            news = new_cells[number]
            candidates = np.unique(np.concatenate([cells.lines for cells in place.cells]))
            used = np.unique(
                np.concatenate(
                    [cells.lines[new] for cells, new in zip(place.cells, news, strict=True)]
                )
            )
            fresh = sum(int(new.sum()) for new in news)
            duplicate = sum(int((~new).sum()) for new in news)
        orphan_lines = len(np.setdiff1d(place.orphan_lines, candidates))
        if file.judgement == 1:
            fresh_total += fresh
        verdict = "rejected" if parsed.rejected else "accepted"
        fates.append(
            {
                "delivery_sequence": file.sequence,
                "judgement": file.judgement,
                "site_digest": site_digest,
                "verdict": "quarantined" if file.quarantined else verdict,
                "reason": file.quarantined or parsed.rejected,
                "warning": parsed.warning,
                "lines_read": parsed.lines_read,
                "lines_used": len(used),
                "lines_set_aside": parsed.lines_set_aside + orphan_lines,
                "lines_duplicate": len(candidates) - len(used),
                "lines_skipped": parsed.lines_skipped,
                "cells_read": fresh + duplicate + parsed.cells_set_aside + place.orphan_cells,
                "cells_used": fresh,
                "cells_set_aside": parsed.cells_set_aside + place.orphan_cells,
                "cells_duplicate": duplicate,
                "readings_digest": readings_digest(parsed),
            }
        )
        aside.extend(set_aside_rows(file, place.problems))
    return Verdicts(fates, aside, _readings(files, placed), fresh_total, contested)


def readings_digest(parsed: ParsedFile) -> str:
    """Return the SHA-256 of a file's usable cells by column, instant and value."""
    digest = hashlib.sha256()
    for cells in sorted(parsed.cells, key=lambda c: c.column):
        digest.update(f"{cells.column}\x1f{len(cells.instants)}\x1e".encode())
        digest.update(np.ascontiguousarray(cells.instants, dtype="<i8").tobytes())
        digest.update(np.ascontiguousarray(cells.values, dtype="<f8").tobytes())
        digest.update(np.ascontiguousarray(cells.lines, dtype="<i8").tobytes())
        digest.update(np.ascontiguousarray(cells.implausible, dtype=np.uint8).tobytes())
        if cells.doubtful.any():
            digest.update(b"doubtful")
            digest.update(np.ascontiguousarray(cells.doubtful, dtype=np.uint8).tobytes())
    return digest.hexdigest()


def set_aside_rows(file: Judged, problems: Sequence[Problem]) -> list[dict[str, Any]]:
    """Return the rows that keep every problem of a file with its place, text and reason."""
    seen: dict[tuple[int, str], int] = {}
    rows = []
    for problem in problems:
        place = (problem.line, problem.cell)
        seen[place] = seen.get(place, 0) + 1
        rows.append(
            {
                "delivery_sequence": file.sequence,
                "judgement": file.judgement,
                "line": problem.line,
                "cell": problem.cell,
                "number": seen[place],
                "reason": problem.reason,
                "text": problem.text,
            }
        )
    return rows


def readings_of(files: Sequence[Judged], index: SiteIndex) -> dict[str, RawReadings]:
    """Return every usable cell of the files by signal, in the order of the files."""
    return _readings(files, [_place(file, index) for file in files])


def problems_of(file: Judged, index: SiteIndex) -> tuple[Problem, ...]:
    """Return all problems of a file, those that its bindings cause included."""
    return _place(file, index).problems


@dataclass(frozen=True)
class _Placed:
    """A file's cells with their signals; cells that no signal takes are orphans."""

    cells: tuple[Cells, ...]
    signals: tuple[str, ...]
    problems: tuple[Problem, ...]
    orphan_cells: int
    orphan_lines: Integers


def _place(file: Judged, index: SiteIndex) -> _Placed:
    cells: list[Cells] = []
    signals: list[str] = []
    problems = list(file.parsed.problems)
    orphan_cells = 0
    orphan_lines = np.zeros(0, dtype=np.int64)
    for column in file.parsed.cells:
        signal = index.by_origin.get(Origin(file.source, file.binding, column.column))
        if signal is not None:
            cells.append(column)
            signals.append(signal)
            continue
        orphan_cells += len(column.lines)
        orphan_lines = np.union1d(orphan_lines, column.lines)
        what = "tag" if index.sources[file.source].layout.kind is LayoutKind.TAGS else "column"
        whose = f" of {file.binding!r}" if file.binding else ""
        problems.append(
            Problem(
                line=0,
                cell=column.column,
                reason=f"no signal of the site file takes {what} {column.column!r}{whose}; "
                f"{counted(len(column.lines), 'cell is', 'cells are')} kept "
                "and judged again once one does",
                text=b"",
            )
        )
    return _Placed(tuple(cells), tuple(signals), tuple(problems), orphan_cells, orphan_lines)


def _new_cells(
    placed: Sequence[_Placed], pool: Pool
) -> tuple[list[list[Truths]], dict[str, Instants]]:
    """Return, per file and column, which cells say something not known before them.

    Beside it: the instants at which a signal has different values.
    """
    contested: dict[str, Instants] = {}
    by_signal: dict[str, list[tuple[int, int]]] = {}
    answer: list[list[Truths]] = []
    for number, place in enumerate(placed):
        answer.append([np.ones(len(cells.instants), dtype=bool) for cells in place.cells])
        for column, signal in enumerate(place.signals):
            by_signal.setdefault(signal, []).append((number, column))
    groups: dict[tuple[int, int], list[str]] = {}
    for signal, where in by_signal.items():
        filled = [placed[n].cells[c].instants for n, c in where if len(placed[n].cells[c].lines)]
        if filled:
            span = (min(int(i.min()) for i in filled), max(int(i.max()) for i in filled))
            groups.setdefault(span, []).append(signal)
    for (start, end), names in groups.items():
        known = pool.standing(names, start, end)
        for signal in names:
            parts = [placed[n].cells[c] for n, c in by_signal[signal]]
            before = known.get(signal)
            old = 0 if before is None else len(before.instants)
            instants = np.concatenate(
                [*([] if before is None else [before.instants]), *(p.instants for p in parts)]
            )
            if old == 0 and bool((np.diff(instants) > 0).all()):
                continue
            values = np.concatenate(
                [*([] if before is None else [before.values]), *(p.values for p in parts)]
            )
            order = np.lexsort((np.arange(len(instants)), values, instants))
            first = np.ones(len(order), dtype=bool)
            same_instant = instants[order][1:] == instants[order][:-1]
            first[1:] = ~(same_instant & (values[order][1:] == values[order][:-1]))
            differs = same_instant & (values[order][1:] != values[order][:-1])
            if bool(differs.any()):
                contested[signal] = np.unique(instants[order][1:][differs])
            new = np.zeros(len(order), dtype=bool)
            new[order] = first
            at = old
            for n, c in by_signal[signal]:
                count = len(placed[n].cells[c].instants)
                answer[n][c] = new[at : at + count]
                at += count
    return answer, contested


def _readings(files: Sequence[Judged], placed: Sequence[_Placed]) -> dict[str, RawReadings]:
    parts: dict[str, list[RawReadings]] = {}
    for file, place in zip(files, placed, strict=True):
        for cells, signal in zip(place.cells, place.signals, strict=True):
            count = len(cells.instants)
            if count == 0:
                continue
            parts.setdefault(signal, []).append(
                RawReadings(
                    cells.instants,
                    cells.values,
                    cells.implausible,
                    np.full(count, file.sequence, dtype=np.int64),
                    np.full(count, file.judgement, dtype=np.int64),
                    cells.doubtful,
                )
            )
    return {
        signal: RawReadings(
            np.concatenate([p.instants for p in some]),
            np.concatenate([p.values for p in some]),
            np.concatenate([p.implausible for p in some]),
            np.concatenate([p.delivery for p in some]),
            np.concatenate([p.judgement for p in some]),
            np.concatenate([p.doubtful for p in some]),
        )
        for signal, some in parts.items()
    }
