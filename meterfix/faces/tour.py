"""The example from logs to results: what each kind of user would look at first."""

from __future__ import annotations

from datetime import datetime, timedelta
from pathlib import Path

import click

from meterfix.demo.example import EXAMPLE_NOW, lay
from meterfix.faces import render, shown
from meterfix.faces.commands import CAUTION, progress, say_processed
from meterfix.model.calendar import to_microseconds
from meterfix.run.opening import OpenSite, open_site
from meterfix.run.process import process

DAYS_OF_BALANCE = 7


def tour(folder: Path) -> None:
    """Lay the example in a folder, process it, and print what its users would want first."""
    site_file = lay(folder)
    click.echo(f"The example site is in {folder}: {site_file} and its logs.")
    now = to_microseconds(datetime.fromisoformat(EXAMPLE_NOW))
    with open_site(site_file) as opened:
        with progress(quiet=False) as report:
            done = process(opened, now, report, lambda text: click.echo(text, err=True))
        say_processed(done)
        _totals(opened, now)
        _balances(opened, now)
        _alerts(opened)
        _files(opened)
    click.echo(f"\n{CAUTION}")
    click.echo(
        "\nGo on with, for example:\n"
        f"  meterfix show totals --by hour --meter FT-101 --site {site_file}\n"
        f"  meterfix show balances --format csv --site {site_file}\n"
        f"  meterfix verify --site {site_file}"
    )


def _last_day(opened: OpenSite, now: int) -> tuple[int, int]:
    """Return the edges of the last gas day that was over, with all its readings in."""
    calendar = opened.site.calendar
    latest = max((row["period_start"] for row in shown.totals(opened, shown.Asked())), default=None)
    if latest is None:
        day = calendar.day_of(now) - timedelta(days=1)
    else:
        day = calendar.day_of(to_microseconds(datetime.fromisoformat(latest)))
    return calendar.start(day), calendar.end(day)


def _totals(opened: OpenSite, now: int) -> None:
    console = render.console_for()
    start, end = _last_day(opened, now)
    rows = shown.totals(opened, shown.Asked(start=start, end=end))
    render.print_table(
        console,
        "totals",
        rows,
        "Corrected totals of the last gas day. " + shown.heading("totals", opened, rows),
    )
    months = shown.totals(opened, shown.Asked(by="month", start=start, end=end))
    render.print_table(console, "totals", months, "Corrected totals of the month")


def _balances(opened: OpenSite, now: int) -> None:
    _, end = _last_day(opened, now)
    calendar = opened.site.calendar
    last = calendar.day_of(end - 1)
    first = calendar.start(last - timedelta(days=DAYS_OF_BALANCE - 1))
    rows = [
        row
        for row in shown.balances(opened, shown.Asked(start=first, end=end))
        if row["quantity"] == "mass"
    ]
    render.print_table(
        render.console_for(),
        "balances",
        rows,
        f"Balance of the last {DAYS_OF_BALANCE} gas days. "
        + shown.heading("balances", opened, rows),
    )


def _alerts(opened: OpenSite) -> None:
    rows = [row for row in shown.alerts(opened, shown.Asked()) if row["until"] is None]
    render.print_table(render.console_for(), "alerts", rows, "Open alerts")


def _files(opened: OpenSite) -> None:
    rows = shown.files(opened, shown.Asked())
    counts = {
        name: sum(row.get(f"lines_{name}") or 0 for row in rows)
        for name in ("read", "used", "set_aside", "duplicate", "skipped")
    }
    click.echo(
        f"\nLog lines: {counts['read']} read = {counts['used']} used + "
        f"{counts['set_aside']} set aside + {counts['duplicate']} duplicate + "
        f"{counts['skipped']} skipped, in {len(rows)} file(s)."
    )
