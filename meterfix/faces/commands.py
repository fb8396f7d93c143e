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

if TYPE_CHECKING:
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

    with _errors():
        try:
            found = read_site(site)
            check_gases(found, site)
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
                    "notes": list(found.notes),
                    "sqlite": sqlite3.sqlite_version,
                },
                indent=1,
            )
        )
        return
    click.echo(f"{site}: usable; " + ", ".join(f"{n} {what}" for what, n in counts.items()))
    for note in found.notes:
        click.echo(f"  {note}")
    click.echo(f"  SQLite {sqlite3.sqlite_version}")


@main.command()
@SITE
@click.option("--now", type=Instant(), help="The time to take for the present; default: the clock.")
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

        with open_site(site) as opened, progress(quiet=quiet) as report:
            done = run(opened, _instant(now, site), report, lambda text: click.echo(text, err=True))
        say_processed(done, form)
        if done.rejected or done.crashes or any(": refused: " in w for w in done.waiting):
            sys.exit(FAILED)


def say_processed(done: Processed, form: str = "text") -> None:
    """Print what the passes did."""
    if form == "json":
        click.echo(
            json.dumps(
                {
                    "passes": done.passes,
                    "files": done.files,
                    "readings": done.readings,
                    "meter_days": done.days,
                    "rejected": done.rejected,
                    "waiting": list(done.waiting),
                    "crashes": done.crashes,
                },
                indent=1,
            )
        )
        return
    if done.passes:
        click.echo(
            f"{done.passes} pass(es): {done.files} file(s), {done.readings} new readings, "
            f"{done.days} meter-day(s) computed"
        )
    else:
        click.echo("nothing new")
    for text in done.rejected:
        click.echo(f"rejected: {text}", err=True)
    for text in done.waiting:
        click.echo(f"waiting: {text}", err=True)


@main.command()
@click.argument("what", type=click.Choice(["totals", "balances", "alerts", "files", "passes"]))
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
    if by is not None and what not in {"totals", "balances"}:
        raise click.UsageError(f"--by goes with totals and balances, not with {what}")
    if meter is not None and what == "passes":
        raise click.UsageError("--meter does not go with passes")
    with _errors():
        from meterfix.faces import listing
        from meterfix.faces.asked import Asked
        from meterfix.run.opening import open_site

        with open_site(site, read_only=True) as opened:
            if meter is not None and meter not in opened.index.meters:
                known = ", ".join(sorted(opened.index.meters))
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
        f"{verdict}: {proof.passes} pass(es), {proof.files} file(s), {proof.figures} total(s), "
        f"{proof.balances} balance(s) replayed"
    )
    if proof.elsewhere:
        click.echo(
            f"{proof.elsewhere} total(s) were computed on another machine and agree within 1e-12"
        )
    if proof.not_replayable:
        click.echo(
            f"{proof.not_replayable} figure(s) of another calculation version: proved by digest, "
            "not replayable here"
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
