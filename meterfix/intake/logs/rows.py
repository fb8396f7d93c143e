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
from meterfix.model.source import Column, Layout


@dataclass(frozen=True)
class Rules:
    """A layout made ready for reading cells."""

    layout: Layout
    number: re.Pattern[str]
    time: TimeGrammar
    bad: dict[str, str]
    time_name: str
    """Under which a bad time is reported."""


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
    )


@dataclass(slots=True)
class Row:
    """A well-formed line: its time as written and its values in SI, NaN where not usable."""

    wall: int | None
    """None: the time cannot be read, and with it no cell of the line."""
    time_text: str
    values: list[float]
    """One per heading.columns."""
    problems: list[Problem]


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
    width = len(heading.names)
    if len(cells) < width or any(cells[width:]):
        return Malformed(f"the line has {len(cells)} cells; its header has {width} columns")
    time_text = " ".join(cells[position] for position in heading.times)
    wall = rules.time.read(time_text)
    if isinstance(wall, str):
        problem = Problem(line, rules.time_name, wall, kept(time_text))
        return Row(None, time_text, [math.nan] * len(heading.columns), [problem])
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


def read_value(text: str, column: Column, rules: Rules) -> float | str:
    """Return a cell's value in SI, or a sentence that says why it holds none."""
    if not text:
        return f"column {shown(column.header)}: no value"
    meaning = rules.bad.get(text)
    if meaning is not None:
        return f"column {shown(column.header)}: {shown(text)} stands for: {meaning}"
    if rules.number.fullmatch(text) is None:
        marks = f"decimal mark {rules.layout.decimal_mark!r}"
        if rules.layout.thousands_mark:
            marks += f", thousands mark {rules.layout.thousands_mark!r}"
        return f"column {shown(column.header)}: {shown(text)} is not a number ({marks})"
    value = read_number(text, rules) * column.scale + column.offset
    if not math.isfinite(value):
        return f"column {shown(column.header)}: {shown(text)} is too large for a number"
    return value


def read_number(text: str, rules: Rules) -> float:
    """Return the number that a text of the number grammar holds, as it is written there."""
    if rules.layout.thousands_mark:
        text = text.replace(rules.layout.thousands_mark, "")
    return float(text.replace(rules.layout.decimal_mark, "."))


def not_a_row(found: Row | Malformed) -> bool:
    """Return whether a line has no cells or no time, so that it may be a header."""
    return isinstance(found, Malformed) or found.wall is None
