"""The example from logs to results: what each kind of user would look at first."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime, timedelta
from pathlib import Path

import click

from meterfix.demo.example import EXAMPLE_NOW, lay
from meterfix.faces import events, render, shown
from meterfix.faces.asked import Asked, Row
from meterfix.faces.commands import CAUTION, progress, say_processed
from meterfix.model.calendar import to_microseconds
from meterfix.run.opening import OpenSite, open_site
from meterfix.run.process import process

DAYS_OF_BALANCE = 7
NOTES = 8


def tour(folder: Path) -> None:
    """Lay the example in a folder, process it, and print what its users would want first."""
    site_file = lay(folder)
    click.echo(f"The example site is in {folder}: {site_file} and its logs.")
    now = to_microseconds(datetime.fromisoformat(EXAMPLE_NOW))
    with open_site(site_file) as opened:
        with progress(quiet=False) as report:
            done = process(opened, now, report, lambda text: click.echo(text, err=True))
        say_processed(done)
        day, month = _last_day(opened), Asked(by="month")
        _totals(opened, day, month)
        _balances(opened, day, month)
        _what_to_look_at(opened, month)
        _proof(opened)
    click.echo()
    render.print_text(render.console_for(), CAUTION)
    click.echo(
        "\nGo on with, for example:\n"
        f"  meterfix show totals --by hour --meter FT-101 --site {site_file}\n"
        f"  meterfix show balances --format csv --site {site_file}\n"
        f"  meterfix show files --site {site_file}\n"
        f"  meterfix verify --site {site_file}"
    )


def _last_day(opened: OpenSite) -> Asked:
    """Return the last gas day that has figures."""
    calendar = opened.site.calendar
    latest = max(row["period_start"] for row in shown.totals(opened, Asked()))
    day = calendar.day_of(to_microseconds(datetime.fromisoformat(latest)))
    return Asked(start=calendar.start(day), end=calendar.end(day))


def _totals(opened: OpenSite, day: Asked, month: Asked) -> None:
    console = render.console_for()
    for title, asked in (("the last gas day", day), ("the month", month)):
        rows = shown.totals(opened, asked)
        render.print_table(
            console,
            "totals",
            rows,
            f"{opened.site.name}: corrected totals of {title}",
            by=asked.by,
            remarks=shown.remarks("totals", rows),
        )


def _balances(opened: OpenSite, day: Asked, month: Asked) -> None:
    console = render.console_for()
    calendar = opened.site.calendar
    assert day.end is not None
    last = calendar.day_of(day.end - 1)
    week = Asked(start=calendar.start(last - timedelta(days=DAYS_OF_BALANCE - 1)), end=day.end)
    for title, asked in ((f"the last {DAYS_OF_BALANCE} gas days", week), ("the month", month)):
        rows = _masses(shown.balances(opened, asked))
        render.print_table(
            console,
            "balances",
            rows,
            f"Mass balance of {title}",
            by=asked.by,
            remarks=shown.remarks("balances", rows),
        )
        render.print_notes(console, "Without a complete input", render.gaps(rows, asked.by), NOTES)


def _masses(rows: Sequence[Row]) -> list[Row]:
    return [row for row in rows if row["quantity"] == "mass"]


def _what_to_look_at(opened: OpenSite, month: Asked) -> None:
    """Print open alerts, gaps in the month's measurement and what was set aside."""
    console = render.console_for()
    alerts = [row for row in events.alerts(opened, Asked()) if row["until"] is None]
    render.print_table(console, "alerts", alerts, "Open alerts")
    gaps = render.gaps(shown.totals(opened, month), month.by)
    render.print_notes(console, "Not wholly measured in the month", gaps, NOTES)
    rows = events.files(opened, Asked())
    render.print_notes(console, "Set aside, file and line", render.troubles(rows), NOTES)
    sums = events.by_source(rows)
    render.print_table(
        console,
        "sources",
        sums,
        "Log lines",
        remarks="read = used + set aside + duplicate + skipped (headers, repeated ones too)",
    )


def _proof(opened: OpenSite) -> None:
    """Print what an auditor would write down: the head of the audit chain."""
    last = [row for row in events.passes(opened, Asked()) if row.get("sequence")][-1]
    click.echo(f"\nAudit chain: pass {last['sequence']}, row hash {last['row_hash']}")
