"""The example's kiln hall once more, its signals logged as tags: a row per tag and time.

The values are the simulator's, without noise, calibration errors and flaws, with nine digits. A
wide log and a tag log of them hold the same texts.
"""

from __future__ import annotations

import gzip
import json
import os
import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from functools import lru_cache
from pathlib import Path
from typing import Any

from meterfix.demo.logs import files_of
from meterfix.demo.simulated import Simulated
from meterfix.demo.simulator import simulate
from meterfix.model.calendar import to_microseconds
from meterfix.run.opening import open_site
from meterfix.run.process import Processed, process
from meterfix.run.replay import Proof, verify

METERS = ("FT-202", "FT-301", "FT-302", "FT-303")
DAY = "2026-10-01"
NOW = "2026-10-04T12:00:00Z"
"""After the deadline of the one gas day."""
WRITTEN = datetime(2026, 10, 3, tzinfo=UTC).timestamp()
OTHERS = ("-101", "-102", "-201", "-203", "FA-4", "PDT-4", "PT-4", "TT-4", "supply",
          "compressed_air", "envelope.works", "envelope.air", "source.historian",
          "uncertainty.")  # fmt: skip
KINDS = {"dp": "PDT", "q": "PDT", "p": "PT", "t": "TT"}
ODD = {"PT-303": "NA", "TT-303": "007"}
"""Signals whose tags bear names that careless readers take for nothing, or for 7."""


@dataclass(frozen=True)
class Row:
    """A line of a tag log."""

    time: str
    tag: str
    value: str
    quality: str = "GOOD"

    @property
    def instant(self) -> int:
        """The time in UTC microseconds."""
        return instant(self.time)


def instant(text: str) -> int:
    """Return an ISO time as UTC microseconds."""
    return to_microseconds(datetime.fromisoformat(text))


def tag_of(signal: str) -> str:
    """Return the tag under which the historian knows a signal."""
    return ODD.get(signal, f"{signal}.PV")


@lru_cache(maxsize=1)
def simulated() -> Simulated:
    """Return the one day that all is about."""
    return simulate(seed=7, days=1, noise=False, calibration=False, flaws=False, digits=9)


@lru_cache(maxsize=1)
def wide_files() -> dict[str, bytes]:
    """Return the hall's wide logs and the barometer's, by path below the logs' folder."""
    return {
        name.removesuffix(".gz"): gzip.decompress(content) if name.endswith(".gz") else content
        for name, content in files_of(simulated())
        if name.split("/")[1].split("_")[0] in {*METERS, "barometer"}
    }


@lru_cache(maxsize=1)
def tag_rows() -> tuple[Row, ...]:
    """Return the same values as rows of tags, in order of time."""
    rows = []
    for name, content in sorted(wide_files().items()):
        meter = name.split("/")[1].split("_")[0]
        if meter == "barometer":
            continue
        header, *lines = content.decode().splitlines()
        _, *columns = header.split(",")
        tags = [tag_of(f"{KINDS[column]}-{meter[3:]}") for column in columns]
        for line in lines:
            time, *cells = line.split(",")
            rows += [Row(time, tag, cell) for tag, cell in zip(tags, cells, strict=True)]
    return tuple(sorted(rows, key=lambda row: row.time))


def written(rows: Iterable[Row]) -> bytes:
    """Return rows as a file."""
    lines = [f"{row.tag},{row.time},{row.value},{row.quality}" for row in rows]
    return "\n".join(["tag,time,value,quality", *lines, ""]).encode()


def wide_text() -> str:
    """Return the site file of the hall with wide logs only."""
    blocks = re.split(r"(?m)^(?=\[)", simulated().site_text)
    kept = [block for block in blocks if not any(o in block.split("\n", 1)[0] for o in OTHERS)]
    return "".join(kept).replace(".csv.gz", ".csv")


SOURCE = """\
[source.historian]
layout = "tags"
folder = "logs/historian"
files = "export_*.csv*"
delivery = "whole"
stamp = "instant"
between = "linear"
maximum_gap = "5 min"
delimiter = ","
decimal_mark = "."
time_columns = ["time"]
time_format = "%Y-%m-%dT%H:%M:%SZ"
time_zone = "UTC"
tag_column = "tag"
value_column = "value"
quality_column = "quality"

[source.historian.quality]
good = ["GOOD"]
doubtful = { "UNC" = "last usable value" }
bad = { "BAD" = "not connected" }

"""
_MEANING = {
    "p": 'quantity = "static_pressure"\nreference = "gauge"\n',
    "t": 'quantity = "temperature"\nunit = "degC"\n',
    "dp": 'quantity = "differential_pressure"\nunit = "kPa"\n',
    "q": 'quantity = "differential_pressure"\nunit = "%"\nroot = "taken"\n',
}


def tag_table(signal: str, rule: str = "") -> str:
    """Return the table of a signal's tag; `rule` is added to it."""
    kind, number = signal.split("-")
    column = {"PDT": "q" if number == "302" else "dp", "PT": "p", "TT": "t"}[kind]
    meaning = _MEANING[column]
    if column == "p":
        meaning += 'unit = "bar"\n' if number == "302" else 'unit = "kPa"\n'
    return f'[source.historian.tag."{tag_of(signal)}"]\n{meaning}{rule}\n'


def signals_of(meters: Sequence[str]) -> list[str]:
    """Return the names of the signals of some meters."""
    return [f"{kind}-{meter[3:]}" for meter in meters for kind in ("PDT", "PT", "TT")]


def tag_text(
    meters: Sequence[str] = METERS, rules: Mapping[str, str] | None = None, source: str = SOURCE
) -> str:
    """Return the site file with the signals of these meters from tags, the others as before.

    `rules` adds lines to the tables of some signals' tags.
    """
    rules = rules or {}
    text = wide_text()
    for meter in meters:
        for column, kind in KINDS.items():
            text = re.sub(
                rf'\{{ source = "\w+", binding = "{meter}", column = "{column}" \}}',
                f'{{ source = "historian", tag = "{tag_of(f"{kind}-{meter[3:]}")}" }}',
                text,
            )
    tables = [tag_table(signal, rules.get(signal, "")) for signal in signals_of(meters)]
    place = text.index("# --- Signals")
    return text[:place] + source + "\n".join(tables) + "\n" + text[place:]


def tags_of(meters: Sequence[str]) -> set[str]:
    """Return the tags of some meters' signals."""
    return {tag_of(signal) for signal in signals_of(meters)}


def new_site(folder: Path, text: str, files: Mapping[str, bytes]) -> Path:
    """Lay a site file and logs, by path below the logs' folder; return the site file."""
    folder.mkdir(parents=True, exist_ok=True)
    for source in re.findall(r'(?m)^folder = "(.+)"$', text):
        (folder / source).mkdir(parents=True, exist_ok=True)
    site = folder / "site.toml"
    site.write_text(text)
    for name, content in files.items():
        lay(site, name, content)
    return site


def lay(site: Path, name: str, content: bytes, changed: float = WRITTEN) -> Path:
    """Write a log file that has long been finished."""
    path = site.parent / "logs" / name
    path.write_bytes(content)
    os.utime(path, (changed, changed))
    return path


def mixed_files(meters: Sequence[str], rows: Iterable[Row]) -> dict[str, bytes]:
    """Return one tag log for these meters, and the wide logs of the others and the barometer."""
    others = {
        name: content
        for name, content in wide_files().items()
        if name.split("/")[1].split("_")[0] not in meters
    }
    return {**others, "historian/export_1.csv": written(rows)}


def run(site: Path, now: str = NOW) -> Processed:
    """Run passes until nothing is new."""
    with open_site(site) as opened:
        done = process(opened, instant(now))
    assert not done.rejected
    assert not done.waiting
    return done


def processed(folder: Path, text: str, files: Mapping[str, bytes]) -> Path:
    """Lay a site and process it."""
    site = new_site(folder, text, files)
    run(site)
    return site


def prove(site: Path) -> Proof:
    """Run the whole proof."""
    with open_site(site, read_only=True) as opened:
        return verify(opened)


def rows_of(site: Path, table: str, **where: Any) -> list[dict[str, Any]]:
    """Return rows of a table of the ledger."""
    with open_site(site, read_only=True) as opened:
        return opened.ledger.rows(table, where=where)


_ARRIVAL = {"revision", "reason", "basis", "links", "as_of_delivery", "as_of_pass", "site_digest",
            "pass_sequence", "revision_reason"}  # fmt: skip
"""What of a figure's row depends on when its readings came, or on the site file's text."""


def figures(site: Path) -> dict[str, Any]:
    """Return every figure that stands, to the bit, with the digest of what it follows from."""
    found: dict[str, Any] = {}
    groups = {
        "total_revision": ("meter", "kind", "period_start_us"),
        "hourly_record": ("meter", "gas_day"),
        "balance_revision": ("envelope", "kind", "period_start_us", "quantity"),
    }
    with open_site(site, read_only=True) as opened:
        for table, group in groups.items():
            for row in opened.ledger.latest(table, group=group, number="revision"):
                key = tuple(row[name] for name in group)
                found[f"{table} {key}"] = {k: v for k, v in row.items() if k not in _ARRIVAL}
    assert len(found) >= 2 * len(METERS)
    return found


def day(site: Path, meter: str) -> dict[str, Any]:
    """Return the total of a meter's day that stands."""
    where = {"meter": meter, "kind": "gas_day", "gas_day": DAY}
    return max(rows_of(site, "total_revision", **where), key=lambda row: row["revision"])


def shares(site: Path, meter: str) -> dict[str, float]:
    """Return the flags of a meter's day, with their shares of the flow time."""
    found: dict[str, float] = json.loads(day(site, meter)["flags"])["shares"]
    return found


def some(rows: Iterable[Row], keep: Callable[[Row], bool]) -> list[Row]:
    """Return the rows that are kept."""
    return [row for row in rows if keep(row)]
