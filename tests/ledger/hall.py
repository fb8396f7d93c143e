"""The kiln hall of the example works as a small site of its own, and what its ledger says.

Four meters on natural gas, one envelope, one barometer. The logs come as tables of rows that a
test cuts into files as it likes; the site file is the example's with all else left out.
"""

from __future__ import annotations

import gzip
import json
import os
import re
import sqlite3
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from meterfix.demo.logs import files_of
from meterfix.demo.simulator import simulate
from meterfix.model.calendar import to_microseconds
from meterfix.run.opening import open_site
from meterfix.run.pool import Pool, ranks_as_of
from meterfix.run.process import Processed, process
from meterfix.run.replay import Proof, verify

METERS = ("FT-202", "FT-301", "FT-302", "FT-303")
OTHERS = ("-101", "-102", "-201", "-203", "FA-4", "PDT-4", "PT-4", "TT-4", "supply",
          "compressed_air", "envelope.works", "envelope.air", "source.historian",
          "uncertainty.")  # fmt: skip
WRITTEN = datetime(2026, 10, 5, tzinfo=UTC).timestamp()
"""When all logs were last changed, unless a test says otherwise."""
EARLY = "2026-10-02T06:00:00Z"
"""After the first gas day, before its deadline; rows later than `now` are set aside."""
LATE = "2026-11-03T12:00:00Z"
"""After every deadline, the month's included."""

ARRIVAL_COLUMNS = {"revision", "reason", "revision_reason", "basis", "links", "as_of_delivery",
                   "as_of_pass", "pass_sequence"}  # fmt: skip
"""What of a figure's row depends on when its readings arrived, by the ledger's rules."""


@dataclass(frozen=True)
class Log:
    """The rows of one recorder over the simulated days, without flaws."""

    source: str
    meter: str
    """'' for the barometer."""
    header: str
    rows: tuple[str, ...]

    def between(self, start: str, end: str) -> Log:
        """Return the rows with start <= time < end; ISO texts compare as times do."""
        rows = tuple(row for row in self.rows if start <= row.split(",", 1)[0] < end)
        return Log(self.source, self.meter, self.header, rows)

    def columns(self, *names: str, source: str) -> Log:
        """Return only some columns, as a recorder of their own writes them."""
        at = [self.header.split(",").index(name) for name in ("time", *names)]
        cut = [",".join(row.split(",")[n] for n in at) for row in (self.header, *self.rows)]
        return Log(source, self.meter, cut[0], tuple(cut[1:]))

    @property
    def content(self) -> bytes:
        """The file's bytes."""
        return ("\n".join((self.header, *self.rows)) + "\n").encode()

    def put(self, site: Path, tag: str, *, changed: float = WRITTEN) -> Path:
        """Lay the rows as a file of their source; nothing if there are none."""
        name = f"{self.meter}_{tag}.csv" if self.meter else f"barometer_{tag}.csv"
        path = site.parent / "logs" / self.source / name
        if self.rows:
            lay(path, self.content, changed=changed)
        return path


def lay(path: Path, content: bytes, *, changed: float = WRITTEN) -> None:
    """Write a log file that has long been finished."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(content)
    os.utime(path, (changed, changed))


def hall_logs(days: int) -> list[Log]:
    """Return the recorders' rows over the first gas days of the example month."""
    rows: dict[tuple[str, str], list[str]] = {}
    headers: dict[tuple[str, str], str] = {}
    for name, content in files_of(simulate(seed=7, days=days, flaws=False)):
        source, file = name.split("/")
        meter = file.split("_")[0]
        if meter not in (*METERS, "barometer"):
            continue
        text = (gzip.decompress(content) if name.endswith(".gz") else content).decode()
        header, *lines = text.splitlines()
        key = (source, "" if meter == "barometer" else meter)
        headers[key] = header
        rows.setdefault(key, []).extend(lines)
    return [Log(*key, headers[key], tuple(lines)) for key, lines in sorted(rows.items())]


def flawed_logs(days: int) -> dict[str, bytes]:
    """Return the hall's log files as the works has them: by day, packed, with malformed lines."""
    return {
        name: content
        for name, content in files_of(simulate(seed=7, days=days))
        if any(part in name for part in (*METERS, "barometer"))
    }


def hall_text(*, packed: bool = False) -> str:
    """Return the hall's site file."""
    text = simulate(seed=7, days=1).site_text
    blocks = [block for block in re.split(r"(?m)^(?=\[)", text)
              if not any(other in block.split("\n", 1)[0] for other in OTHERS)]  # fmt: skip
    text = "".join(blocks)
    return text if packed else text.replace(".csv.gz", ".csv")


def split_text() -> str:
    """Return the hall's site file with dp in one source and pressure, temperature in another."""
    blocks = []
    for block in re.split(r"(?m)^(?=\[)", hall_text()):
        head = block.split("\n", 1)[0]
        if head.startswith("[source.works]"):
            blocks += [
                block.replace("source.works", f"source.{part}").replace("/works", f"/{part}")
                for part in ("works_dp", "works_pt")
            ]
        elif head.startswith("[source.works.column.dp]"):
            blocks.append(block.replace("source.works.", "source.works_dp."))
        elif head.startswith("[source.works.column."):
            blocks.append(block.replace("source.works.", "source.works_pt."))
        elif head.startswith("[signal.PDT"):
            blocks.append(block.replace('source = "works"', 'source = "works_dp"'))
        else:
            blocks.append(block.replace('source = "works"', 'source = "works_pt"'))
    return "".join(blocks)


def split_logs(days: int) -> list[Log]:
    """Return the recorders of `split_text`."""
    found: list[Log] = []
    for log in hall_logs(days):
        if log.source != "works":
            found.append(log)
            continue
        found.append(log.columns("dp", source="works_dp"))
        found.append(log.columns("p", "t", source="works_pt"))
    return found


def new_site(folder: Path, text: str) -> Path:
    """Lay a site file, with a folder for each of its sources; return it."""
    folder.mkdir(parents=True, exist_ok=True)
    for source in re.findall(r'(?m)^folder = "(.+)"$', text):
        (folder / source).mkdir(parents=True, exist_ok=True)
    site = folder / "site.toml"
    site.write_text(text)
    return site


def instant(text: str) -> int:
    """Return an ISO time as UTC microseconds."""
    return to_microseconds(datetime.fromisoformat(text))


def run(site: Path, now: str = LATE, **more: Any) -> Processed:
    """Run passes until nothing is new."""
    with open_site(site) as opened:
        return process(opened, instant(now), **more)


def prove(site: Path) -> Proof:
    """Run the whole proof."""
    with open_site(site, read_only=True) as opened:
        return verify(opened)


def rows(site: Path, table: str, **where: Any) -> list[dict[str, Any]]:
    """Return rows of a table of the ledger."""
    with open_site(site, read_only=True) as opened:
        return opened.ledger.rows(table, where=where)


def figures(site: Path) -> dict[str, Any]:
    """Return everything that is independent of the order in which things arrived, to the bit."""
    with open_site(site, read_only=True) as opened:
        ledger, index = opened.ledger, opened.index
        pool = Pool(ledger, ranks_as_of(ledger, index))
        found: dict[str, Any] = {}
        chosen = pool.chosen(sorted(index.signals), 0, 2**62)
        for name, readings in chosen.items():
            for part in ("instants", "values", "implausible", "disputed"):
                found[f"{name} {part}"] = getattr(readings, part).tobytes()
        totals = _standing(ledger, "total", ("meter", "kind", "period_start_us"))
        found.update({f"total {key}": row for key, row in totals.items()})
        balances = _standing(ledger, "balance", ("envelope", "kind", "period_start_us", "quantity"))
        found.update({f"balance {key}": row for key, row in balances.items()})
        hours = {(r["meter"], r["gas_day"]): r for r in ledger.rows("open_hourly")}
        for row in ledger.latest("hourly_record", group=("meter", "gas_day"), number="revision"):
            assert (row["meter"], row["gas_day"]) not in hours, "hours both open and closed"
            hours[row["meter"], row["gas_day"]] = row
        for key, row in hours.items():
            found[f"hours {key}"] = {k: v for k, v in row.items() if k not in ARRIVAL_COLUMNS}
        found.update(open_alerts(ledger))
        return found


def doubted(found: Mapping[str, Any]) -> int:
    """Return how many totals and balances of `figures` have an uncertainty; check what hours hold.

    A comparison of two ledgers that say nothing of uncertainty would prove nothing of it.
    """
    for name, row in found.items():
        if name.startswith("hours"):
            parameters = json.loads(row["parameters"])
            assert len(parameters) > 20, name
            assert len(row["sensitivities"]) == row["hours"] * (len(parameters) + 1) * 3 * 8
            assert len(row["standard_uncertainty"]) == row["hours"] * 3 * 8
    rows = [row for name, row in found.items() if name.startswith(("total", "balance"))]
    return sum(
        row.get("mass_expanded_uncertainty_kg", row.get("expanded_uncertainty")) is not None
        and len(json.loads(row["uncertainty"])["contributions"]) > 10
        for row in rows
    )


def _standing(ledger: Any, name: str, key: tuple[str, ...]) -> dict[Any, dict[str, Any]]:
    standing = {tuple(row[k] for k in key): row for row in ledger.rows(f"open_{name}")}
    for row in ledger.latest(f"{name}_revision", group=key, number="revision"):
        place = tuple(row[k] for k in key)
        assert place not in standing, f"{place} is both open and closed"
        standing[place] = row
    return {
        place: {k: v for k, v in row.items() if k not in ARRIVAL_COLUMNS}
        for place, row in standing.items()
    }


def open_alerts(ledger: Any) -> dict[str, Any]:
    """Return the episodes that stand, but for those that are about arrivals."""
    last = {r["alert_id"]: r for r in
            ledger.latest("alert_event", group=("alert_id",), number="number")}  # fmt: skip
    return {
        f"alert {row['id']}": (row["kind"], row["subject"], row["since_us"],
                               last[row["id"]]["message"], last[row["id"]]["evidence"])
        for row in ledger.rows("alert")
        if last[row["id"]]["state"] != "closed" and row["kind"] == "disputed hour"
    }  # fmt: skip


def differences(
    one: Mapping[str, Any], other: Mapping[str, Any], *, inputs: bool = True
) -> list[str]:
    """Return the names of what differs, with the columns where they are rows.

    With `inputs` false, digests of inputs may differ: a closed day that later readings touch
    without changing one bit of its figures gets no revision, and so keeps the digest of the
    inputs that it was computed from.
    """
    found = []
    for name in sorted({*one, *other}):
        a, b = one.get(name), other.get(name)
        if a == b:
            continue
        columns = [c for c in a if a[c] != b[c]] if isinstance(a, dict) and b else []
        if columns == ["input_digest"] and not inputs:
            continue
        found.append(f"{name}: {', '.join(columns)}" if columns else name)
    return found


def sums(site: Path) -> dict[str, int]:
    """Return the sums of the four counts over all first judgements, and how many files."""
    fates = rows(site, "fate", judgement=1)
    names = ("lines_read", "lines_used", "lines_set_aside", "lines_duplicate", "lines_skipped",
             "cells_read", "cells_used", "cells_set_aside", "cells_duplicate")  # fmt: skip
    return {
        **{name: sum(fate[name] for fate in fates) for name in names},
        "files": len(rows(site, "delivery")),
        "objects": len(rows(site, "raw_object")),
        "set aside": len(rows(site, "set_aside")),
    }


def everything(site: Path) -> dict[str, Any]:
    """Return every table but the heartbeat, and every file of the archive, lock excepted."""
    found: dict[str, Any] = {}
    with sqlite3.connect(f"file:{site.parent / 'meterfix.sqlite'}?mode=ro", uri=True) as database:
        names = [
            row[0]
            for row in database.execute("SELECT name FROM sqlite_schema WHERE type = 'table'")
        ]
        for name in names:
            if name != "heartbeat":
                found[f"table {name}"] = sorted(
                    map(repr, database.execute(f'SELECT * FROM "{name}"'))
                )
    database.close()
    archive = site.parent / "archive"
    for path in sorted(archive.rglob("*")):
        if path.is_file() and path.name != "lock":
            found[f"file {path.relative_to(archive)}"] = path.read_bytes()
    return found


def put_all(site: Path, logs: Iterable[Log], tag: str = "all") -> list[Path]:
    """Lay one file per recorder."""
    return [log.put(site, tag) for log in logs]


def events(site: Path, kind: str) -> list[tuple[str, dict[str, Any]]]:
    """Return (state, evidence) of every event of a kind of alert, in order."""
    ids = {row["id"] for row in rows(site, "alert", kind=kind)}
    found: Sequence[dict[str, Any]] = sorted(
        rows(site, "alert_event"), key=lambda r: (r["pass_sequence"], r["number"])
    )
    return [(r["state"], json.loads(r["evidence"])) for r in found if r["alert_id"] in ids]
