"""Months that are simulated and processed once, and their stored rows, read without meterfix.

The rows are read with sqlite3 and the arrays in them decoded here, so that what is compared is
what lies in the database, not what the program says lies there.
"""

from __future__ import annotations

import fcntl
import json
import os
import sqlite3
import struct
from collections.abc import Callable
from contextlib import closing
from dataclasses import dataclass, replace
from datetime import date, datetime
from functools import cached_property
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from meterfix.demo.example import EXAMPLE_NOW, lay
from meterfix.demo.simulated import Simulated
from meterfix.demo.simulator import simulate
from meterfix.frames import HOURLY_COLUMNS
from meterfix.model.calendar import HOUR, to_microseconds
from meterfix.run.opening import open_site
from meterfix.run.process import process

METERS = (
    "FT-101", "FT-102", "FT-201", "FT-202", "FT-203", "FT-301", "FT-302", "FT-303",
    "FA-401", "FA-411", "FA-412",
)  # fmt: skip
"""Every meter of the works; FA are compressed air, held between instants and in local time."""

SPRING = date(2026, 3, 1)
SPRING_FIRST, AUTUMN_FIRST = date(2026, 3, 28), date(2026, 10, 24)
"""Gas days begin at 06:00: the clock changes in the night that ends these two."""


def _decoded(row: sqlite3.Row) -> dict[str, tuple[float, ...]]:
    """Return an hourly row's columns: little-endian float64, hour after hour."""
    count = row["hours"] * row["columns"]
    assert row["columns"] == len(HOURLY_COLUMNS)
    values = struct.unpack(f"<{count}d", row["statistics"])
    return {name: values[place :: row["columns"]] for place, name in enumerate(HOURLY_COLUMNS)}


@dataclass(frozen=True)
class Processed:
    """A simulated span, and the database that the real pipeline made of its logs."""

    folder: Path
    simulated: Simulated

    @cached_property
    def _rows(self) -> dict[str, list[dict[str, Any]]]:
        with closing(sqlite3.connect(self.folder / "meterfix.sqlite")) as connection:
            connection.row_factory = sqlite3.Row
            names = [
                name
                for (name,) in connection.execute(
                    "SELECT name FROM sqlite_master WHERE type = 'table'"
                )
            ]
            return {
                name: [dict(row) for row in connection.execute(f'SELECT * FROM "{name}"')]
                for name in names
            }

    def rows(self, table: str, **where: object) -> list[dict[str, Any]]:
        """Return a table's rows that have these values."""
        return [
            row
            for row in self._rows[table]
            if all(row[name] == value for name, value in where.items())
        ]

    def total(self, meter: str, kind: str, gas_day: date) -> dict[str, Any]:
        """Return the one stored total of a period, open or in its last revision."""
        where = {"meter": meter, "kind": kind, "gas_day": gas_day.isoformat()}
        closed = self.rows("total_revision", **where)
        if closed:
            return max(closed, key=lambda row: row["revision"])
        (open_row,) = self.rows("open_total", **where)
        return open_row

    def day(self, meter: str, gas_day: date) -> dict[str, Any]:
        """Return the stored total of a gas day."""
        return self.total(meter, "gas_day", gas_day)

    def month(self, meter: str) -> dict[str, Any]:
        """Return the stored total of the month."""
        return self.total(meter, "month", self.simulated.month.first_day)

    def hours(self, meter: str, gas_day: date) -> dict[str, tuple[float, ...]]:
        """Return the columns of a gas day's stored hourly record."""
        where = {"meter": meter, "gas_day": gas_day.isoformat()}
        closed = self.rows("hourly_record", **where)
        stored = closed or self.rows("open_hourly", **where)
        row = max(stored, key=lambda row: row.get("revision", 0))
        assert row["hours"] == len(row["statistics"]) // 8 // row["columns"]
        return _decoded(row)

    @cached_property
    def _truths(self) -> dict[tuple[str, str], pd.DataFrame]:
        return {}

    def truth(self, meter: str, *, of: str = "true") -> pd.DataFrame:
        """Return the simulator's totals by gas day, computed once.

        `of` is "true" values; "shown" ones, with the drawn calibration errors; or "logged" ones,
        with those and the noise, before rounding (the barometer's without noise).
        """
        if (meter, of) not in self._truths:
            span = self.simulated
            if of == "logged":
                log = span.run_logs[meter]
                span = replace(
                    span, run_logs={**span.run_logs, meter: replace(log, shown=log.logged)}
                )
            self._truths[meter, of] = span.truth(meter, calibrated=of != "true")
        return self._truths[meter, of]

    def balance(
        self, envelope: str, gas_day: date, quantity: str = "mass", kind: str = "gas_day"
    ) -> dict[str, Any]:
        """Return the one closed balance of a gas day or month."""
        (row,) = self.rows(
            "balance_revision",
            envelope=envelope,
            kind=kind,
            gas_day=gas_day.isoformat(),
            quantity=quantity,
        )
        return row

    def flags(self, meter: str, gas_day: date) -> dict[str, float]:
        """Return the flags of a gas day that are not 0, with their shares of the flow time."""
        shares: dict[str, float] = json.loads(self.day(meter, gas_day)["flags"])["shares"]
        return shares


def run_through(site: Path, now: int) -> None:
    """Process a site as `meterfix process --now` does; no file may be refused."""
    with open_site(site) as opened:
        done = process(opened, now)
    assert not done.rejected
    assert not done.crashes
    assert not done.waiting


@pytest.fixture(scope="session")
def once(tmp_path_factory: pytest.TempPathFactory) -> Callable[[str, Callable[[Path], None]], Path]:
    """Return what fills a folder once per test run, however many workers ask for it."""
    base = tmp_path_factory.getbasetemp()
    if "PYTEST_XDIST_WORKER" in os.environ:
        base = base.parent

    def filled(name: str, fill: Callable[[Path], None]) -> Path:
        folder, done = base / name, base / f"{name}.done"
        with (base / f"{name}.lock").open("w") as lock:
            fcntl.flock(lock, fcntl.LOCK_EX)
            if not done.exists():
                fill(folder)
                done.touch()
        return folder

    return filled


def pytest_generate_tests(metafunc: pytest.Metafunc) -> None:
    """Run every test that asks for a meter on each of them."""
    if "meter" in metafunc.fixturenames:
        metafunc.parametrize("meter", METERS)


def processed(
    simulated: Simulated, folder: Path, edit: Callable[[str], str] = lambda text: text
) -> Processed:
    """Write a simulated span's logs and process them two days after its end.

    `edit` may change the site file's text first.
    """
    site = simulated.write(folder)
    site.write_text(edit(simulated.site_text), encoding="utf-8")
    run_through(site, simulated.end + 48 * HOUR)
    return Processed(folder, simulated)


@pytest.fixture(scope="session")
def through() -> Callable[..., Processed]:
    """Return what writes and processes a simulated span in a folder."""
    return processed


@pytest.fixture(scope="session")
def exact(once) -> Processed:
    """October 2026 without noise and calibration errors, 9 significant digits in the logs."""
    simulated = simulate(seed=1, noise=False, calibration=False, digits=9)
    return Processed(once("truth-exact", lambda to: processed(simulated, to)), simulated)


@pytest.fixture(scope="session")
def spring(once) -> Processed:
    """Three gas days around the clock change of March 2026; otherwise like `exact`."""
    simulated = simulate(
        seed=2,
        month=SPRING,
        first_day=SPRING_FIRST,
        days=3,
        noise=False,
        calibration=False,
        digits=9,
    )
    return Processed(once("truth-spring", lambda to: processed(simulated, to)), simulated)


@pytest.fixture(scope="session")
def example(once) -> Processed:
    """Return the packaged example, as `meterfix demo` lays and processes it."""
    now = to_microseconds(datetime.fromisoformat(EXAMPLE_NOW))
    return Processed(
        once("truth-example", lambda to: run_through(lay(to), now)),
        simulate(),
    )
