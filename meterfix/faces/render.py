"""Rows as a table for a screen, CSV or JSON."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from meterfix.faces.columns import ALL, BRIEF, HEADINGS

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

Row = Mapping[str, Any]
DIGITS = 6
"""Significant digits of a figure in a table; CSV and JSON carry all of them."""


def as_csv(what: str, rows: Sequence[Row]) -> str:
    """Return rows as CSV: every column, full precision, an empty cell where nothing is known."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(ALL[what])
    for row in rows:
        writer.writerow([_cell(row.get(name)) for name in ALL[what]])
    return text.getvalue()


def as_json(what: str, rows: Sequence[Row]) -> str:
    """Return rows as a JSON list: every column, null where nothing is known."""
    full = [{name: row.get(name) for name in ALL[what]} for row in rows]
    return json.dumps(full, indent=1, allow_nan=False) + "\n"


def table(what: str, rows: Sequence[Row]) -> Table:
    """Return rows as a table of the columns that matter most."""
    from rich.table import Table
    from rich.text import Text

    shown = [name for name in BRIEF[what] if _says_something(name, rows)]
    if {"gas_day", "period_start"} <= set(shown) and _whole_days(rows):
        shown.remove("period_start")
    grid = Table(box=None, pad_edge=False, header_style="bold", padding=(0, 1))
    for name in shown:
        number = any(isinstance(row.get(name), (int, float)) for row in rows)
        grid.add_column(
            HEADINGS.get(name, name.replace("_", " ")),
            justify="right" if number else "left",
            overflow="fold",
            no_wrap=name not in {"flags", "message", "reason", "name", "beyond_tolerance", "note"},
        )
    for row in rows:
        grid.add_row(*(Text(_shown(name, row.get(name))) for name in shown))
    return grid


def _whole_days(rows: Sequence[Row]) -> bool:
    """Return whether each gas day stands once per subject, so that its start says nothing new."""
    keys = [
        (row.get("meter"), row.get("envelope"), row.get("quantity"), row.get("gas_day"))
        for row in rows
    ]
    return all(row.get("gas_day") for row in rows) and len(set(keys)) == len(keys)


def print_table(console: Console, what: str, rows: Sequence[Row], title: str = "") -> None:
    """Print a table under its title, or say that there is nothing."""
    if title:
        console.print(f"\n{title}", style="bold", markup=False, highlight=False)
    if rows:
        console.print(table(what, rows), highlight=False)
    else:
        console.print("nothing to show", highlight=False)


def console_for(width: int | None = None, *, error: bool = False) -> Console:
    """Return a console of the terminal's width, 100 columns where there is no terminal."""
    from rich.console import Console

    console = Console(stderr=error, highlight=False, soft_wrap=False)
    if width is not None or not console.is_terminal:
        console = Console(stderr=error, highlight=False, width=width or 100)
    return console


def _says_something(name: str, rows: Sequence[Row]) -> bool:
    return any(
        row.get(name) not in {None, ""} for row in rows if not isinstance(row.get(name), dict)
    )


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, float):
        return repr(value + 0.0)
    if isinstance(value, (dict, list)):
        return json.dumps(value, sort_keys=True)
    text = str(value)
    # a spreadsheet takes text that begins like this for a formula
    return "'" + text if text[:1] in {"=", "+", "-", "@"} else text


def _shown(name: str, value: Any) -> str:
    if value is None:
        return ""
    if name == "measured_fraction":
        return f"{math.floor(value * 1e4) / 100:.2f} %"
    if isinstance(value, float):
        return _number(value)
    if name in {"period_start", "period_end", "since", "until", "now"}:
        return str(value)[:16].replace("T", " ")
    if name == "beyond_tolerance":
        return str(value).partition(":")[0]
    return str(value)


def _number(value: float) -> str:
    """Return a figure with six significant digits, never in powers of ten where it fits."""
    if value == 0:
        return "0"
    if not 1e-3 <= abs(value) < 1e12:
        return f"{value:.{DIGITS}g}"
    whole = len(str(int(abs(value)))) if abs(value) >= 1 else 0
    return f"{value:.{max(DIGITS - whole, 0)}f}"
