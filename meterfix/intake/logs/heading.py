"""The header line: which cell of a row is which declared column."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

from meterfix.frames import Problem
from meterfix.intake.logs.text import kept, shown
from meterfix.model.source import Layout


@dataclass(frozen=True, slots=True)
class Heading:
    """A header that fits the layout; positions are 0-based cells of a row."""

    names: tuple[str, ...]
    times: tuple[int, ...]
    """Positions of the time columns, in the layout's order."""
    columns: tuple[tuple[int, int], ...]
    """(position, index in layout.columns) of the declared columns, by position."""
    unknown: tuple[str, ...]
    """Columns that the layout neither declares nor ignores."""


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
    required = [
        *(("time column", name) for name in layout.time_columns),
        *(("required column", column.header) for column in layout.columns if column.required),
    ]
    missing = [f"{kind} {shown(name)}" for kind, name in required if name not in names]
    if missing:
        return Unfit(
            f"{' and '.join(missing)} missing; the header holds {listed} "
            f"(delimiter {layout.delimiter!r})"
        )
    index = {column.header: n for n, column in enumerate(layout.columns)}
    expected = {*layout.time_columns, *layout.ignored_columns}
    return Heading(
        names=names,
        times=tuple(names.index(name) for name in layout.time_columns),
        columns=tuple((n, index[name]) for n, name in enumerate(names) if name in index),
        unknown=tuple(
            name or f"(column {n}, unnamed)"
            for n, name in enumerate(names, start=1)
            if name not in index and name not in expected
        ),
    )


def resembles_header(cells: Sequence[str], layout: Layout) -> bool:
    """Return whether a line in the middle of a file must be taken for a header.

    It must if it names a time column or at least two declared columns. If it then does not
    fit, the rows after it cannot be read either: their columns may hold another unit.
    """
    names = {cell.removeprefix("\ufeff").strip(" \t") for cell in cells}
    if not names.isdisjoint(layout.time_columns):
        return True
    return sum(column.header in names for column in layout.columns) > 1


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
