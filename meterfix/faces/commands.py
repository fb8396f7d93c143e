"""The command line."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

import click

from meterfix import __version__
from meterfix.errors import MeterfixError, SiteFileError
from meterfix.model.wording import counted, utc_text

if TYPE_CHECKING:
    from meterfix.model.site import Site
    from meterfix.run.process import Processed

DONE, FAILED, UNUSABLE = 0, 1, 2
"""Exit codes: done; done but a file was rejected or a check failed; cannot be used at all."""

CAUTION = (
    "Results are for accounting, never for safety functions. Fuel gas is flammable and under "
    "pressure: before a hand goes near a tapping, valve or transmitter, follow the site's "
    "permits and local codes, and leave isolation to licensed people."
)


class Instant(click.ParamType[Any]):
    """A date or time; a time needs its offset, a date means the gas day's start."""

    name = "time"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Any:
        """Return a datetime with offset, or a date."""
        from datetime import date, datetime

        if not isinstance(value, str):
            return value
        try:
            if len(value) == len("2026-10-25"):
                return date.fromisoformat(value)
            instant = datetime.fromisoformat(value)
        except ValueError:
            self.fail(f"{value!r} is not a date (2026-10-25) or an ISO 8601 time", param, ctx)
        if instant.tzinfo is None:
            self.fail(f"{value!r} has no offset; write for example {value}+01:00", param, ctx)
        return instant


SITE = click.option(
    "--site",
    type=click.Path(path_type=Path, dir_okay=False),
    default=Path("config/site.toml"),
    show_default=True,
    help="The site file.",
)


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(__version__, prog_name="meterfix")
def main() -> None:
    """Turn raw differential-pressure logs into corrected gas totals, balances and their proof.

    Exit codes: 0 done (lines set aside and open alerts included); 1 done, but a whole file was
    rejected or a check failed; 2 arguments, site file or ledger unusable.

    Example: meterfix demo
    """


@main.command()
@click.argument("folder", type=click.Path(path_type=Path, file_okay=False), default=Path("demo"))
def demo(folder: Path) -> None:
    """Lay the example site and its logs in FOLDER, process them, and show the results.

    Example: meterfix demo /tmp/works
    """
    with _errors():
        from meterfix.faces.tour import tour

        tour(folder)


@main.command()
@SITE
@click.option("--schema", is_flag=True, help="Print the JSON Schema of site files and stop.")
@click.option(
    "--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True
)
def check(site: Path, form: str, *, schema: bool) -> None:
    """Validate the site file; report every mistake at once.

    Example: meterfix check --site config/site.toml
    """
    from meterfix.intake.site import read_site
    from meterfix.intake.site import schema as site_schema

    if schema:
        click.echo(json.dumps(site_schema(), indent=2))
        return
    from meterfix.run.gas_check import check_gases

    notes: list[str] = []
    with _errors():
        try:
            found = read_site(site)
            check_gases(found, site)
            notes = [*found.notes, *_missing_folders(found, site)]
        except SiteFileError as error:
            if form == "text":
                raise
            mistakes = [
                {"where": m.where, "given": m.given, "allowed": m.allowed} for m in error.mistakes
            ]
            click.echo(json.dumps({"usable": False, "mistakes": mistakes}, indent=1))
            sys.exit(UNUSABLE)
    import sqlite3

    counts = {
        "sources": len(found.sources),
        "signals": len(found.signals),
        "gases": len(found.gases),
        "meters": len(found.meters),
        "envelopes": len(found.envelopes),
    }
    if form == "json":
        click.echo(
            json.dumps(
                {
                    "usable": True,
                    "mistakes": [],
                    "digest": found.digest,
                    **counts,
                    "notes": notes,
                    "sqlite": sqlite3.sqlite_version,
                },
                indent=1,
            )
        )
        return
    told = [
        counted(n, "gas" if what == "gases" else what.removesuffix("s"), what)
        for what, n in counts.items()
    ]
    click.echo(f"{site}: usable; " + ", ".join(told))
    for note in notes:
        click.echo(f"  {note}")
    click.echo(f"  SQLite {sqlite3.sqlite_version}")


def _missing_folders(found: Site, site: Path) -> list[str]:
    """Return a note for every source whose folder is not there (yet)."""
    folders = [(source.name, site.parent / source.folder) for source in found.sources]
    return [
        f"source {name}: there is no folder {folder}; its logs are waited for"
        for name, folder in folders
        if not folder.is_dir()
    ]


@main.command()
@SITE
@click.option(
    "--now",
    type=Instant(),
    help="The time to take for the present; default: the clock. What closes at a time ahead of "
    "the clock stays closed, and nothing else closes until the clock gets there.",
)
@click.option("--quiet", is_flag=True, help="No progress.")
@click.option(
    "--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True
)
def process(site: Path, now: Any, form: str, *, quiet: bool) -> None:
    """Take in new logs, correct, total and balance them, until nothing is new.

    Example: meterfix process --site config/site.toml --now 2026-11-02T09:00:00+01:00
    """
    with _errors():
        from meterfix.run.opening import open_site
        from meterfix.run.process import process as run

        instant = _instant(now, site)
        if instant is not None:
            _warn_if_ahead(instant)
        with open_site(site) as opened, progress(quiet=quiet) as report:
            done = run(opened, instant, report, lambda text: click.echo(text, err=True))
        say_processed(done, form)
        if done.rejected or done.crashes or any(": refused: " in w for w in done.waiting):
            sys.exit(FAILED)


def say_processed(done: Processed, form: str = "text") -> None:
    """Print what the passes did."""
    from meterfix.run.outcome import judged_again_text

    if form == "json":
        click.echo(
            json.dumps(
                {
                    "passes": done.passes,
                    "files": done.files,
                    "readings": done.readings,
                    "files_judged_again": done.judged_again,
                    "meter_days": done.days,
                    "rejected": done.rejected,
                    "waiting": list(done.waiting),
                    "crashes": done.crashes,
                    "alerts": [
                        {
                            "state": news.state,
                            "kind": news.kind,
                            "subject": news.subject,
                            "since": utc_text(news.since),
                            "message": news.message,
                        }
                        for news in done.alerts
                    ],
                    "recorded": done.facts,
                },
                indent=1,
            )
        )
        return
    if done.passes:
        parts = [
            counted(done.files, "file"),
            counted(done.readings, "new reading"),
            judged_again_text(done.judged_again),
            f"{counted(done.days, 'meter-day')} computed",
        ]
        click.echo(
            f"{counted(done.passes, 'pass', 'passes')}: {', '.join(part for part in parts if part)}"
        )
    else:
        click.echo("nothing new")
    for text in done.facts:
        click.echo(f"recorded: {text}", err=True)
    for news in done.alerts:
        click.echo(f"alert {news.state}: {news.kind}, {news.subject}: {news.message}", err=True)
    for text in done.rejected:
        click.echo(f"rejected: {text}", err=True)
    for text in done.waiting:
        click.echo(f"waiting: {text}", err=True)


@main.command()
@click.argument(
    "what", type=click.Choice(["totals", "balances", "budget", "alerts", "files", "passes"])
)
@SITE
@click.option(
    "--by",
    type=click.Choice(["hour", "gas-day", "month"]),
    help="The period of totals and balances.  [default: gas-day]",
)
@click.option(
    "--meter", help="Only this meter; of balances its envelopes, of files those that feed it."
)
@click.option("--from", "start", type=Instant(), help="Only periods that end after this.")
@click.option("--to", "end", type=Instant(), help="Only periods that begin before this.")
@click.option(
    "--format",
    "form",
    type=click.Choice(["table", "csv", "json"]),
    default="table",
    show_default=True,
)
def show(
    what: str, site: Path, by: str | None, meter: str | None, start: Any, end: Any, form: str
) -> None:
    """Show what the database holds; nothing is computed.

    A bare date in --from or --to means the start of that gas day. Of alerts, files and passes
    the time is when they were raised, arrived or ran.

    Example: meterfix show totals --by hour --meter FT-101 --from 2026-10-25 --format csv
    """
    if by is not None and what not in {"totals", "balances", "budget"}:
        raise click.UsageError(f"--by goes with totals, balances and budget, not with {what}")
    if by == "hour" and what == "budget":
        raise click.UsageError("a budget is kept per gas day and month, not per hour")
    if meter is not None and what == "passes":
        raise click.UsageError("--meter does not go with passes")
    with _errors():
        from meterfix.faces import listing
        from meterfix.faces.asked import Asked
        from meterfix.run.opening import open_site

        with open_site(site, read_only=True) as opened:
            meters = {*opened.index.meters, *listing.meters_with_totals(opened)}
            if meter is not None and meter not in meters:
                known = ", ".join(sorted(meters))
                raise click.UsageError(f"no meter {meter!r}; there are {known}")
            asked = Asked(by or "gas-day", meter, _edge(start, opened), _edge(end, opened))
            listing.listing(what, opened, asked, form)


@main.command()
@SITE
@click.option("--quiet", is_flag=True, help="No progress.")
@click.option(
    "--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True
)
def verify(site: Path, form: str, *, quiet: bool) -> None:
    """Re-hash the archive, replay it, compare every stored figure, check the audit chain.

    Example: meterfix verify --site config/site.toml
    """
    with _errors():
        from meterfix.run.opening import open_site
        from meterfix.run.replay import verify as prove

        with open_site(site, read_only=True) as opened, progress(quiet=quiet) as report:
            proof = prove(opened, report)
        if form == "json":
            click.echo(
                json.dumps(
                    {
                        "proved": not proof.findings,
                        "findings": [
                            {"check": f.check, "where": f.where, "message": f.message}
                            for f in proof.findings
                        ],
                        "passes": proof.passes,
                        "files": proof.files,
                        "figures": proof.figures,
                        "balances": proof.balances,
                        "computed_elsewhere": proof.elsewhere,
                        "not_replayable_here": proof.not_replayable,
                        "flags_that_differ_here": proof.flipped,
                    },
                    indent=1,
                )
            )
        else:
            _say_proof(proof)
        if proof.findings:
            sys.exit(FAILED)


def _say_proof(proof: Any) -> None:
    for finding in proof.findings[:20]:
        click.echo(f"{finding.check}: {finding.where}: {finding.message}", err=True)
    if len(proof.findings) > 20:
        click.echo(f"and {len(proof.findings) - 20} more", err=True)
    verdict = "differences found" if proof.findings else "proved"
    click.echo(
        f"{verdict}: {counted(proof.passes, 'pass', 'passes')}, {counted(proof.files, 'file')}, "
        f"{counted(proof.figures, 'total')}, {counted(proof.balances, 'balance')} replayed"
    )
    if proof.elsewhere:
        click.echo(
            f"{counted(proof.elsewhere, 'total')} computed on another machine: the same within "
            "1e-12"
        )
    if proof.not_replayable:
        click.echo(
            f"{counted(proof.not_replayable, 'figure')} of another calculation version: proved by "
            "digest, not replayable here"
        )
    for text in proof.flipped:
        click.echo(f"flags differ on this machine: {text}")


# --- shared --------------------------------------------------------------------------------------


@contextmanager
def _errors() -> Iterator[None]:
    """End with exit code 2 and one clear sentence where something cannot be used at all."""
    try:
        yield
    except MeterfixError as error:
        _unusable(str(error))
    except PermissionError as error:
        _unusable(f"{error.filename}: {error.strerror}")


def _unusable(sentence: str) -> NoReturn:
    click.echo(sentence, err=True)
    sys.exit(UNUSABLE)


@contextmanager
def progress(*, quiet: bool) -> Iterator[Callable[[str, int, int], None] | None]:
    """Yield a report function that draws a progress bar on a terminal's standard error."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.progress import Progress

    from meterfix.faces.render import console_for

    with Progress(console=console_for(error=True), transient=True) as progress:
        tasks: dict[str, Any] = {}

        def report(what: str, done: int, whole: int) -> None:
            if what not in tasks:
                tasks[what] = progress.add_task(what, total=whole)
            progress.update(tasks[what], completed=done, total=whole)

        yield report


def _instant(value: Any, site: Path) -> int | None:
    """Return UTC microseconds of a --now; a bare date is refused."""
    from datetime import datetime

    from meterfix.model.calendar import to_microseconds

    if value is None:
        return None
    if not isinstance(value, datetime):
        raise click.UsageError(f"--now for {site} needs a time with its offset, not only a date")
    return to_microseconds(value)


AHEAD = 5 * 60 * 1_000_000
"""How far a --now may be ahead of the clock before that is said [us]."""


def _warn_if_ahead(instant: int) -> None:
    """Say what follows from a --now that is ahead of this machine's clock."""
    from meterfix.model.calendar import DAY
    from meterfix.run import clock

    ahead = instant - clock.now()
    if ahead <= AHEAD:
        return
    far = counted(round(ahead / DAY), "day")
    if ahead < DAY:
        far = counted(round(ahead / (60 * 1_000_000)), "minute")
    click.echo(
        f"--now is {far} ahead of this machine's clock: what closes now stays closed, and nothing "
        "else closes until the clock gets there",
        err=True,
    )


def _edge(value: Any, opened: Any) -> int | None:
    """Return UTC microseconds of a --from or --to; a date is the start of that gas day."""
    from datetime import datetime

    from meterfix.model.calendar import to_microseconds

    if value is None:
        return None
    if isinstance(value, datetime):
        return to_microseconds(value)
    start: int = opened.site.calendar.start(value)
    return start
