"""The figures that stand: what the ledger holds, overlaid with what a pass has computed."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from datetime import date
from typing import Any

from meterfix.frames import HourlyRecord
from meterfix.run.figures import Row, hourly_from
from meterfix.store.ledger import Ledger


@dataclass
class Standing:
    """The figures of one meter and gas day that stand."""

    row: Mapping[str, Any]
    revision: int
    """0 while the day is open."""
    record: HourlyRecord | None = None
    """Read from the ledger when first asked for."""


@dataclass
class Book:
    """Standing figures by meter and gas day."""

    ledger: Ledger
    days: dict[tuple[str, date], Standing] = field(default_factory=dict)
    _loaded: set[date] = field(default_factory=set)

    def load(self, gas_days: Iterable[date]) -> None:
        """Read the standing figures of the gas days, once."""
        wanted = sorted(set(gas_days) - self._loaded)
        if not wanted:
            return
        self._loaded.update(wanted)
        where = {"kind": "gas_day", "gas_day": [day.isoformat() for day in wanted]}
        for row in self.ledger.rows("open_total", where=where):
            self._keep(row, 0)
        for row in self.ledger.latest(
            "total_revision",
            group=("meter", "kind", "period_start_us"),
            number="revision",
            where=where,
        ):
            self._keep(row, row["revision"])

    def known_keys(self) -> set[tuple[str, date]]:
        """Return every meter and gas day for which the ledger holds figures."""
        columns = ("meter", "gas_day")
        rows = [
            *self.ledger.rows("open_total", where={"kind": "gas_day"}, columns=columns),
            *self.ledger.rows(
                "total_revision", where={"kind": "gas_day", "revision": 1}, columns=columns
            ),
        ]
        return {(row["meter"], date.fromisoformat(row["gas_day"])) for row in rows}

    def record(self, meter: str, gas_day: date) -> HourlyRecord | None:
        """Return the hours that stand for a meter's gas day, None if there are none."""
        standing = self.days.get((meter, gas_day))
        if standing is None:
            return None
        if standing.record is None:
            where: dict[str, Any] = {"meter": meter, "gas_day": gas_day.isoformat()}
            if standing.revision:
                where["revision"] = standing.revision
            table = "hourly_record" if standing.revision else "open_hourly"
            standing.record = hourly_from(self.ledger.rows(table, where=where)[0])
        return standing.record

    def load_records(self, gas_days: Iterable[date]) -> None:
        """Read the hours of the gas days in one go where many will be asked for."""
        lacking = {
            key: standing
            for key, standing in self.days.items()
            if standing.record is None and key[1] in set(gas_days)
        }
        if not lacking:
            return
        where = {"gas_day": sorted({day.isoformat() for _, day in lacking})}
        for row in self.ledger.rows("open_hourly", where=where):
            self._keep_hours(lacking, row, 0)
        for row in self.ledger.rows("hourly_record", where=where):
            self._keep_hours(lacking, row, row["revision"])

    def _keep(self, row: Row, revision: int) -> None:
        self.days[row["meter"], date.fromisoformat(row["gas_day"])] = Standing(row, revision)

    @staticmethod
    def _keep_hours(lacking: Mapping[tuple[str, date], Standing], row: Row, revision: int) -> None:
        standing = lacking.get((row["meter"], date.fromisoformat(row["gas_day"])))
        if standing is not None and standing.revision == revision:
            standing.record = hourly_from(row)
