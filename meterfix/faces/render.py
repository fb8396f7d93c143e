"""Rows as a table for a screen, CSV or JSON."""

from __future__ import annotations

import csv
import io
import json
import math
import re
import textwrap
from collections.abc import Mapping, Sequence
from decimal import ROUND_FLOOR, Decimal
from typing import TYPE_CHECKING, Any

from meterfix.faces.columns import ALL, BRIEF, HEADINGS, PERIOD, SHORT_FLAGS

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

Row = Mapping[str, Any]
DIGITS = 6
"""Significant digits of a figure in a table; CSV and JSON carry all of them."""
_LONG = re.compile(r"(?<![\w.-])[0-9]+(?:\.[0-9]+)?(?:e[+-]?[0-9]+)?(?= (?:s|%)(?!\w))")
"""A number of seconds or percent inside a sentence; never a part of a name."""
WRAPPED = frozenset(
    {"flags", "message", "name", "source", "kind", "note", "envelope", "source_of_uncertainty"}
)
"""Columns of text that may take several lines."""
LONGEST_TEXT = 60
"""Characters of a set-aside text that a table shows."""


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


def table(what: str, rows: Sequence[Row], by: str = "") -> Table:
    """Return rows as a table of the columns that matter most; `by` says what a period is."""
    from rich.table import Table
    from rich.text import Text

    hidden = PERIOD.get(by, frozenset())
    shown = [n for n in BRIEF[what] if n not in hidden and _says_something(n, rows)]
    grid = Table(box=None, pad_edge=False, header_style="bold", padding=(0, 2, 0, 0))
    for name in shown:
        number = any(isinstance(row.get(name), (int, float)) for row in rows)
        grid.add_column(
            HEADINGS.get(name, name.replace("_", " ")),
            justify="right" if number else "left",
            overflow="fold",
            no_wrap=name not in WRAPPED,
        )
    for row in rows:
        grid.add_row(*(Text(_shown(name, row)) for name in shown))
    return grid


def print_table(
    console: Console,
    what: str,
    rows: Sequence[Row],
    title: str,
    *,
    by: str = "",
    remarks: str = "",
) -> None:
    """Print a table under its title, or say that there is nothing."""
    console.print(f"\n{title}", style="bold", markup=False, highlight=False)
    if remarks:
        console.print(remarks, markup=False, highlight=False)
    if rows:
        grid = table(what, rows, by)
        if _width(console, grid) > console.width:
            grid.padding = (0, 1, 0, 0)
        console.print(grid, highlight=False)
    else:
        console.print("nothing to show", highlight=False)


def _width(console: Console, grid: Table) -> int:
    """Return how wide a table would be on a screen without an edge."""
    from rich.measure import Measurement

    return Measurement.get(console, console.options.update(width=10_000), grid).maximum


def print_notes(console: Console, title: str, notes: Sequence[str], limit: int) -> None:
    """Print sentences under a table, the first of them if there are too many."""
    if not notes:
        return
    console.print(f"\n{title}", style="bold", markup=False, highlight=False)
    for note in notes[:limit]:
        print_text(console, note, indent="  ")
    if len(notes) > limit:
        console.print(f"  and {len(notes) - limit} more: --format json lists them all")


def print_text(console: Console, text: str, indent: str = "") -> None:
    """Print a sentence, wrapped to the console's width."""
    wrapped = textwrap.fill(
        text,
        width=console.width,
        initial_indent=indent,
        subsequent_indent=2 * indent,
        break_on_hyphens=False,
    )
    console.print(wrapped, markup=False, highlight=False)


def gaps(rows: Sequence[Row], by: str) -> list[str]:
    """Return why periods of a table are not wholly measured or have no imbalance."""
    notes: dict[str, None] = {}
    for row in rows:
        if row["losses"]:
            when = _shown({"hour": "period_start", "month": "month"}.get(by, "gas_day"), row)
            subject = row.get("meter") or row.get("subject") or row["envelope"]
            notes[f"{subject} {when}: {shortened(', '.join(row['losses']))}"] = None
    return list(notes)


def doubts(rows: Sequence[Row]) -> list[str]:
    """Return why figures of a table have no uncertainty, once for each meter or envelope."""
    notes: dict[str, None] = {}
    for row in rows:
        subject = row.get("meter") or row.get("subject") or row["envelope"]
        notes.update(dict.fromkeys(f"{subject}: {text}" for text in row["unstated"]))
    return list(notes)


def shortened(text: str) -> str:
    """Return a sentence with its times and percentages cut to two decimals, never rounded up."""
    return _LONG.sub(lambda found: _cut(float(found[0])), text)


def _cut(value: float) -> str:
    hundredths = Decimal(value).quantize(Decimal("0.01"), ROUND_FLOOR)
    return f"{hundredths:f}".removesuffix(".00") if hundredths or not value else "<0.01"


def troubles(rows: Sequence[Row]) -> list[str]:
    """Return what was rejected, waits or was set aside, file by file and line by line."""
    notes: list[str] = []
    for row in rows:
        file = f"{row['source']}/{row['name']}" if row["name"] else row["source"]
        if row["reason"]:
            verdict = "" if row["verdict"] == "accepted" else f"{row['verdict']}: "
            notes.append(f"{file}: {verdict}{row['reason']}")
        for problem in row["set_aside"]:
            reason, text = problem["reason"], _plain(problem["text"])
            quoted = f" | {text}" if problem["text"] and text not in reason else ""
            notes.append(f"{file}:{problem['line']}: {reason}{quoted}")
    return notes


def _plain(text: str) -> str:
    """Return a set-aside text, shortened, its control characters escaped."""
    plain = "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)
    return plain if len(plain) <= LONGEST_TEXT else f"{plain[:LONGEST_TEXT]}..."


def console_for(width: int | None = None, *, error: bool = False) -> Console:
    """Return a console of the terminal's width, 100 columns where there is no terminal."""
    from rich.console import Console

    console = Console(stderr=error, highlight=False, soft_wrap=False)
    if width is not None or not console.is_terminal:
        console = Console(stderr=error, highlight=False, width=width or 100)
    return console


def _says_something(name: str, rows: Sequence[Row]) -> bool:
    silent = {None, "", {"vented": 0.0, "version": 1}.get(name)}
    return any(row.get(name) not in silent for row in rows)


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


def _shown(name: str, row: Row) -> str:
    value = row.get(name)
    if value is None:
        # a budget's source of which nothing is known is no source without effect
        unstated = name == "base_volume_contribution_m3" and "is stated" in row.get("reason", "")
        text = "not stated" if unstated else ""
    elif name == "version":
        text = str(value) if value > 1 else ""
    elif name == "measured_fraction":
        text = f"{math.floor(value * 1e4) / 100:.2f} %"
    elif name == "flags":
        text = "\n".join(
            f"{short} {_percent(row['shares'][flag])}"
            for flag, short in SHORT_FLAGS.items()
            if flag in row["shares"]
        )
    elif name == "variance_fraction":
        text = f"{_percent(value) if value else 0} %"
    elif name == "base_volume_contribution_percent":
        text = f"{value:.4f}" if value == 0 or abs(value) >= 5e-5 else "<0.0001"
    elif isinstance(value, float):
        text = _number(value)
    elif name in {"period_start", "since", "until", "now"}:
        text = str(value)[:16].replace("T", " ")
    elif name in {"significant", "beyond_tolerance"}:
        answer = str(value).partition(":")[0]
        text = "not judged" if answer == "cannot be judged" else answer
        if row.get("part") and name == "beyond_tolerance":
            text = textwrap.fill(f"{text}, {row['part']}", width=len("no, on 3 of 31"))
    else:
        text = str(value)
    return text


def _percent(share: float) -> str:
    return f"{100 * share:.2f}" if share >= 1e-4 else "<0.01"


def _number(value: float) -> str:
    """Return a figure with six significant digits, never in powers of ten where it fits."""
    if value == 0:
        return "0"
    if not 1e-3 <= abs(value) < 1e12:
        return f"{value:.{DIGITS}g}"
    whole = len(str(int(abs(value)))) if abs(value) >= 1 else 0
    return f"{value:.{max(DIGITS - whole, 0)}f}"
