"""One line to one row, cell by cell: the careful reading that every doubtful line gets."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

from meterfix.frames import Problem
from meterfix.intake.logs.grammar import TimeGrammar, number_pattern, time_grammar
from meterfix.intake.logs.heading import Heading
from meterfix.intake.logs.text import Malformed, kept, shown
from meterfix.model.source import Column, Layout, LayoutKind, Quality, Use
from meterfix.model.wording import counted


@dataclass(frozen=True)
class Rules:
    """A layout made ready for reading cells."""

    layout: Layout
    number: re.Pattern[str]
    time: TimeGrammar
    bad: dict[str, str]
    time_name: str
    """Under which a bad time is reported."""
    kind_name: str
    """What messages call that which a cell belongs to: column or tag."""
    places: dict[str, int]
    """Index in layout.columns by header or tag."""
    ignored_tags: frozenset[str]
    qualities: dict[str, Quality]
    """By code."""


@lru_cache(maxsize=256)
def rules_of(layout: Layout) -> Rules:
    """Return the rules of a layout.

    Raises
    ------
    ValueError
        If its time format or encoding is none that can be read.
    """
    pattern = number_pattern(layout.decimal_mark, layout.thousands_mark)
    return Rules(
        layout=layout,
        number=re.compile(pattern, re.ASCII),
        time=time_grammar(layout.time_format, hour_24=layout.hour_24),
        bad=dict(layout.bad_values),
        time_name=" ".join(layout.time_columns),
        kind_name="column" if layout.kind is LayoutKind.WIDE else "tag",
        places={column.header: n for n, column in enumerate(layout.columns)},
        ignored_tags=frozenset(layout.ignored_tags),
        qualities={quality.code: quality for quality in layout.qualities},
    )


UNKNOWN_TAG, IGNORED_TAG = -1, -2
"""In place of a tag's index: tags that are not declared, and those declared to be left out."""


@dataclass(slots=True)
class Row:
    """A well-formed line: its time as written and its values in SI, NaN where not usable."""

    wall: int | None
    """None: the time cannot be read, and with it no cell of the line."""
    time_text: str
    values: list[float]
    """One per heading.columns."""
    problems: list[Problem]
    tag: int = 0
    """Index of the tag in layout.columns, or UNKNOWN_TAG or IGNORED_TAG; 0 in a wide log."""
    tag_name: str = ""
    doubtful: bool = False


def read_row(cells: Sequence[str], line: int, heading: Heading, rules: Rules) -> Row | Malformed:
    """Return what a line's cells hold, or why they are not the header's cells.

    Parameters
    ----------
    cells : sequence of str
        The line's cells without surrounding blanks.
    line : int
        Its 1-based number.
    heading : Heading
        The header in force.
    rules : Rules
        The source's layout.
    """
    malformed = cells_of_width(cells, heading)
    if malformed is not None:
        return malformed
    time_text = " ".join(cells[position] for position in heading.times)
    wall = rules.time.read(time_text)
    if heading.tag >= 0:
        return _tag_row(cells, line, heading, rules, time_text, wall)
    if isinstance(wall, str):
        return _without_time(line, heading, rules, time_text, wall)
    values: list[float] = []
    problems: list[Problem] = []
    for position, index in heading.columns:
        column = rules.layout.columns[index]
        value = read_value(cells[position], column, rules)
        if isinstance(value, str):
            problems.append(Problem(line, column.header, value, kept(cells[position])))
            values.append(math.nan)
        else:
            values.append(value)
    return Row(wall, time_text, values, problems)


def _tag_row(
    cells: Sequence[str], line: int, heading: Heading, rules: Rules, time_text: str, wall: int | str
) -> Row:
    """Return what a line of a tag log holds: one cell, its tag's."""
    name = cells[heading.tag]
    tag = tag_index(name, rules)
    if tag < 0:
        return Row(None if isinstance(wall, str) else wall, time_text, [math.nan], [], tag, name)
    if isinstance(wall, str):
        row = _without_time(line, heading, rules, time_text, wall)
        row.tag, row.tag_name = tag, name
        return row
    text = cells[heading.columns[0][0]]
    use = Use.GOOD
    found: float | str
    if heading.quality >= 0:
        use, found = read_quality(cells[heading.quality], name, rules)
    if use is not Use.BAD:
        found = read_value(text, rules.layout.columns[tag], rules)
    if isinstance(found, str):
        return Row(wall, time_text, [math.nan], [Problem(line, name, found, kept(text))], tag, name)
    return Row(wall, time_text, [found], [], tag, name, use is Use.DOUBTFUL)


def _without_time(line: int, heading: Heading, rules: Rules, time_text: str, why: str) -> Row:
    problem = Problem(line, rules.time_name, why, kept(time_text))
    return Row(None, time_text, [math.nan] * len(heading.columns), [problem])


def tag_index(name: str, rules: Rules) -> int:
    """Return a tag's index in layout.columns, or UNKNOWN_TAG or IGNORED_TAG."""
    return IGNORED_TAG if name in rules.ignored_tags else rules.places.get(name, UNKNOWN_TAG)


def read_quality(code: str, tag: str, rules: Rules) -> tuple[Use, str]:
    """Return what becomes of a value with this quality code, and why if it is set aside."""
    quality = rules.qualities.get(code)
    if quality is None:
        known = ", ".join(shown(known) for known in list(rules.qualities)[:12])
        return Use.BAD, (
            f"tag {shown(tag)}: quality {shown(code)} is not declared for this source ({known})"
        )
    return quality.use, (
        f"tag {shown(tag)}: quality {shown(code)} stands for: {quality.meaning}"
        if quality.use is Use.BAD
        else ""
    )


def read_value(text: str, column: Column, rules: Rules) -> float | str:
    """Return a cell's value in SI, or a sentence that says why it holds none."""
    name = f"{rules.kind_name} {shown(column.header)}"
    if not text:
        return f"{name}: no value"
    meaning = rules.bad.get(text)
    if meaning is not None:
        return f"{name}: {shown(text)} stands for: {meaning}"
    if rules.number.fullmatch(text) is None:
        marks = f"decimal mark {rules.layout.decimal_mark!r}"
        if rules.layout.thousands_mark:
            marks += f", thousands mark {rules.layout.thousands_mark!r}"
        return f"{name}: {shown(text)} is not a number ({marks})"
    value = read_number(text, rules) * column.scale + column.offset
    if not math.isfinite(value):
        return f"{name}: {shown(text)} is too large for a number"
    return value


def read_number(text: str, rules: Rules) -> float:
    """Return the number that a text of the number grammar holds, as it is written there."""
    if rules.layout.thousands_mark:
        text = text.replace(rules.layout.thousands_mark, "")
    return float(text.replace(rules.layout.decimal_mark, "."))


def value_arrays(layout: Layout) -> int:
    """Return how many arrays of values its rows have: one per column, in a tag log one in all."""
    return len(layout.columns) if layout.kind is LayoutKind.WIDE else 1


def not_a_row(found: Row | Malformed) -> bool:
    """Return whether a line has no cells or no time, so that it may be a header."""
    return isinstance(found, Malformed) or found.wall is None


def cells_of_width(cells: Sequence[str], heading: Heading) -> Malformed | None:
    """Return why a line's cells are not the header's, None if they are."""
    width = len(heading.names)
    if len(cells) < width or any(cells[width:]):
        given, wanted = counted(len(cells), "cell"), counted(width, "column")
        return Malformed(f"the line has {given}; its header has {wanted}")
    return None
