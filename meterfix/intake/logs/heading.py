"""The header line: which cell of a row is which declared column, or its tag and value."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from meterfix.frames import Problem
from meterfix.intake.logs.text import kept, shown
from meterfix.model.source import Layout, LayoutKind


@dataclass(frozen=True, slots=True)
class Heading:
    """A header that fits the layout; positions are 0-based cells of a row."""

    names: tuple[str, ...]
    times: tuple[int, ...]
    """Positions of the time columns, in the layout's order."""
    columns: tuple[tuple[int, int], ...]
    """(position, index in layout.columns) of the declared columns, by position; in a tag log
    the position of the value, and 0: a row has one value, and its tag says whose."""
    unknown: tuple[str, ...]
    """Columns that the layout neither declares nor ignores."""
    tag: int = -1
    """Position of the tag; -1 in a wide log."""
    quality: int = -1
    """Position of the quality code; -1 where the log has none."""


@dataclass(frozen=True, slots=True)
class Unfit:
    """Why a header does not fit the layout."""

    reason: str


def header_names(cells: Sequence[str]) -> tuple[str, ...]:
    """Return a line's cells as column names: empty ones at its end are dropped."""
    names = [cell.removeprefix("\ufeff").strip(" \t") for cell in cells]
    while names and not names[-1]:
        names.pop()
    return tuple(names)


def resolve(names: tuple[str, ...], layout: Layout) -> Heading | Unfit:
    """Return where the declared columns stand, or why the header does not fit the layout."""
    listed = ", ".join(shown(name) for name in names[:30]) + (", ..." if len(names) > 30 else "")
    twice = [name for name, times in Counter(names).items() if name and times > 1]
    if twice:
        return Unfit(f"two columns are named {shown(twice[0])}; the header holds {listed}")
    required = [*(("time column", name) for name in layout.time_columns), *_required(layout)]
    missing = [f"{kind} {shown(name)}" for kind, name in required if name not in names]
    if missing:
        return Unfit(
            f"{' and '.join(missing)} missing; the header holds {listed} "
            f"(delimiter {layout.delimiter!r}{_other_delimiter(names)})"
        )
    index = {layout.value_column: 0}
    if layout.kind is LayoutKind.WIDE:
        index = {column.header: n for n, column in enumerate(layout.columns)}
    named = {name for name in (layout.tag_column, layout.quality_column) if name}
    expected = {*layout.time_columns, *layout.ignored_columns, *named}
    return Heading(
        names=names,
        times=tuple(names.index(name) for name in layout.time_columns),
        columns=tuple((n, index[name]) for n, name in enumerate(names) if name in index),
        unknown=tuple(
            name or f"(column {n}, unnamed)"
            for n, name in enumerate(names, start=1)
            if name not in index and name not in expected
        ),
        tag=names.index(layout.tag_column) if layout.tag_column else -1,
        quality=names.index(layout.quality_column) if layout.quality_column else -1,
    )


def _other_delimiter(names: Sequence[str]) -> str:
    """Return the question that a header asks which is one cell and holds a delimiter itself."""
    for mark in (";", "\t") if len(names) == 1 else ():
        if mark in names[0]:
            return f"; is the delimiter {mark!r}?"
    return ""


def _required(layout: Layout) -> list[tuple[str, str]]:
    """Return what a header must hold beside the time, each as its kind and name."""
    if layout.kind is LayoutKind.WIDE:
        return [("required column", column.header) for column in layout.columns if column.required]
    return [
        (kind, name)
        for kind, name in (
            ("tag column", layout.tag_column),
            ("value column", layout.value_column),
            ("quality column", layout.quality_column),
        )
        if name
    ]


def resembles_header(cells: Sequence[str], layout: Layout) -> bool:
    """Return whether a line in the middle of a file must be taken for a header.

    It must if it names a time column or at least two declared columns (in a tag log: of tag,
    value and quality). If it then does not fit, the rows after it cannot be read either: their
    columns may hold another unit.
    """
    names = {cell.removeprefix("\ufeff").strip(" \t") for cell in cells}
    if not names.isdisjoint(layout.time_columns):
        return True
    if layout.kind is LayoutKind.WIDE:
        return sum(column.header in names for column in layout.columns) > 1
    return sum(name in names for _, name in _required(layout)) > 1


def unknown_column(name: str, line: int) -> Problem:
    """Return the note that a column is neither declared nor ignored."""
    return Problem(
        line,
        name,
        f"column {shown(name)} is neither declared nor ignored for this source; it is not read",
        kept(name),
    )


def header_warning(unknown: Sequence[str], *, any_rows: bool) -> str:
    """Return the warning that a file's header and rows call for, '' if none."""
    warnings = []
    if unknown:
        warnings.append("unknown columns not read: " + ", ".join(map(shown, unknown)))
    if not any_rows:
        warnings.append("the file holds a header and no rows")
    return "; ".join(warnings)
