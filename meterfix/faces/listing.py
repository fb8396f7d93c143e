"""What `show` prints: stored rows as a table with its notes, as CSV or as JSON."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import click

from meterfix.faces import budget, events, render, shown
from meterfix.faces.asked import Asked, Row
from meterfix.run.opening import OpenSite

ROWS: dict[str, Callable[[OpenSite, Asked], list[Row]]] = {
    "totals": shown.totals,
    "balances": shown.balances,
    "budget": budget.budget,
    "alerts": events.alerts,
    "files": events.files,
    "passes": events.passes,
}
PER = {"hour": " per hour", "gas-day": " per gas day", "month": " per month"}
TITLES = {
    "totals": "corrected totals",
    "balances": "balances",
    "budget": "what each source of uncertainty costs",
    "alerts": "alerts",
    "files": "log files",
    "passes": "passes that changed something",
}
NOTES = 20
"""Notes under a table; JSON holds them all."""


def listing(what: str, opened: OpenSite, asked: Asked, form: str) -> None:
    """Print what is asked: `form` is 'table', 'csv' or 'json'."""
    rows = ROWS[what](opened, asked)
    if form == "csv":
        click.echo(render.as_csv(what, rows), nl=False)
    elif form == "json":
        click.echo(render.as_json(what, rows), nl=False)
    else:
        _as_table(what, opened, asked, rows)


def meters_with_totals(opened: OpenSite) -> set[str]:
    """Return the meters that the ledger has figures of, those no longer in the site file too."""
    return {
        row["meter"]
        for table in ("open_total", "total_revision")
        for row in opened.ledger.rows(table, columns=("meter",))
    }


def _as_table(what: str, opened: OpenSite, asked: Asked, rows: Sequence[Row]) -> None:
    console = render.console_for()
    title = f"{opened.site.name}: {TITLES[what]}"
    by = ""
    if what in {"totals", "balances", "budget"}:
        by = asked.by
        title += PER[by]
    if what in {"totals", "budget"} and asked.meter is not None:
        title += f", {asked.meter}"
        rows = [{**row, "meter": None, "subject": asked.meter} for row in rows]
    render.print_table(console, what, rows, title, by=by, remarks=shown.remarks(what, rows))
    if what in {"totals", "balances"}:
        render.print_notes(console, "Not wholly measured", render.gaps(rows, by), NOTES)
        render.print_notes(console, "Without uncertainty", render.doubts(rows), NOTES)
    if what == "files":
        sources = events.by_source(list(rows))
        if sources:
            render.print_table(console, "sources", sources, "By source")
        troubles = render.troubles(rows[::-1])
        render.print_notes(console, "Rejected, waiting, noted or set aside", troubles, NOTES)
