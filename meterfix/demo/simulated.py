"""A simulated span of the works: what was, what is logged of it, and the totals that follow."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date
from functools import cached_property
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from meterfix.demo import logs, sitefile
from meterfix.demo.flaws import Flaws
from meterfix.demo.rates import Signals, periods, rates_of
from meterfix.demo.transmitters import BAROMETER, REPEATABILITY
from meterfix.demo.truth import Records, Sources, sources_of, totals
from meterfix.demo.works import (
    BAROMETER_INTERVAL_S,
    DP,
    PRESSURE,
    RUN_BY_NAME,
    TEMPERATURE,
    Month,
    Run,
)
from meterfix.model.calendar import SECOND

Floats = NDArray[np.float64]
Instants = NDArray[np.int64]
Truths = NDArray[np.bool_]

KINDS = (DP, PRESSURE, TEMPERATURE)


@dataclass(frozen=True)
class RunLog:
    """One run over the simulated span; every array has one value per knot."""

    run: Run
    knots: Instants
    instants: Instants
    """What the logger stamps on the rows."""
    flaws: Flaws
    written: Mapping[str, Truths]
    """Kind of signal to whether it is logged at the knot at all."""
    mass_flow: Floats
    """True flow [kg/s]."""
    true: Mapping[str, Floats]
    """Kind of signal to SI values as they were, at their tappings and pockets."""
    shown: Mapping[str, Floats]
    """As the transmitters show them without noise: with their calibration errors."""
    logged: Mapping[str, Floats]
    """With noise, before rounding; SI."""
    noise: Mapping[str, Floats]
    """Standard deviation of the noise and of the rounding; SI."""
    atmosphere: Floats
    shown_atmosphere: Floats
    """Of the barometer, carried to the instants; without and with its calibration error."""

    def good(self, kind: str) -> Truths:
        """Return the knots at which a signal has a reading that counts."""
        return self.written[kind] & self.flaws.shown(self.knots) & self.flaws.good(self.knots, kind)

    def sources(self, kind: str, targets: Instants) -> tuple[Instants, Sources]:
        """Return the rows of a signal's readings, and which of those serve other instants."""
        rows = np.flatnonzero(self.good(kind))
        carry = self.run.feed.carry(kind)
        return rows, sources_of(
            self.instants[rows], targets, linear=carry.linear, reach=carry.reach_s * SECOND
        )


@dataclass(frozen=True)
class Simulated:
    """A simulated span of the works: its logs, its truth, its noise."""

    seed: int
    month: Month
    days: tuple[date, ...]
    digits: int | None
    run_logs: dict[str, RunLog]
    barometer: tuple[Instants, Floats, Floats]
    """Instants; true values; logged values before rounding [Pa]."""
    air_file_flaws: Flaws = field(default_factory=Flaws)
    stray_lines: tuple[int, ...] = ()
    """Instants of the historian's lines whose tag the site file does not know [UTC us]."""

    @property
    def meters(self) -> tuple[str, ...]:
        """Every meter's name."""
        return tuple(self.run_logs)

    @property
    def start(self) -> int:
        """The first instant of the first gas day [UTC us]."""
        return self.month.calendar.start(self.days[0])

    @property
    def end(self) -> int:
        """The first instant after the last gas day [UTC us]."""
        return self.month.calendar.end(self.days[-1])

    def records(self, meter: str, *, calibrated: bool) -> Records:
        """Return the instants at which the meter has a rate, and the values behind it.

        Parameters
        ----------
        meter : str
            Its name.
        calibrated : bool
            True: values with the drawn calibration errors; False: as they were.

        Returns
        -------
        Records
            Noise-free, unrounded.
        """
        log = self.run_logs[meter]
        values = log.shown if calibrated else log.true
        counts = log.good(DP)
        for out in self.month.out_of_service:
            if out.run == meter:
                counts &= ~((log.instants >= out.start) & (log.instants < out.end))
        at = log.instants[counts]
        slow = {}
        for kind in (PRESSURE, TEMPERATURE):
            rows, sources = log.sources(kind, at)
            slow[kind] = sources.of(values[kind][rows])
        whole = np.isfinite(slow[PRESSURE]) & np.isfinite(slow[TEMPERATURE])
        atmosphere = log.shown_atmosphere if calibrated else log.atmosphere
        return Records(
            at[whole],
            Signals(values[DP][counts][whole], slow[PRESSURE][whole], slow[TEMPERATURE][whole]),
            atmosphere[counts][whole],
            np.flatnonzero(counts)[whole],
        )

    def truth(self, meter: str, *, calibrated: bool = False) -> pd.DataFrame:
        """Return a meter's totals per gas day.

        Parameters
        ----------
        meter : str
            Its name.
        calibrated : bool
            False: of what really flowed in the measured time. True: what a faultless
            calculation makes of the transmitters' calibration errors, without noise.

        Returns
        -------
        pandas.DataFrame
            Indexed by gas day: mass_kg, base_volume_m3, energy_J (NaN for air), measured_time_s.
        """
        run = RUN_BY_NAME[meter]
        return totals(
            run,
            self.records(meter, calibrated=calibrated),
            periods(run, self.month, self.start, self.end),
            self.month.calendar,
            self.days,
        )

    @cached_property
    def rates(self) -> dict[str, pd.DataFrame]:
        """Every meter's rates at the instants that count, as they were and as shown.

        Columns: mass_flow_kg_per_s, base_volume_flow_m3_per_s, calibrated_mass_flow_kg_per_s;
        index: instant [UTC us].
        """
        return {meter: self._rates(meter) for meter in self.meters}

    def _rates(self, meter: str) -> pd.DataFrame:
        run = RUN_BY_NAME[meter]
        found: dict[bool, Floats] = {}
        for calibrated in (False, True):
            records = self.records(meter, calibrated=calibrated)
            flow = np.zeros(records.instants.size)
            base = np.ones(records.instants.size)
            for period in periods(run, self.month, self.start, self.end):
                part = records.part(period.start, period.end)
                rates = rates_of(run, period, part.signals, part.atmosphere)
                where = np.searchsorted(records.instants, part.instants)
                inside = (part.instants >= period.start) | (part.instants < self.start)
                flow[where[inside]] = rates[inside]
                base[where[inside]] = period.base_density
            found[calibrated] = flow
            instants = records.instants
        return pd.DataFrame(
            {
                "mass_flow_kg_per_s": found[False],
                "base_volume_flow_m3_per_s": found[False] / base,
                "calibrated_mass_flow_kg_per_s": found[True],
            },
            index=pd.Index(instants, name="instant_us"),
        )

    def noise_error(self, meter: str) -> pd.DataFrame:
        """Return what the noise does to a meter's totals per gas day, to second order.

        Parameters
        ----------
        meter : str
            Its name.

        Returns
        -------
        pandas.DataFrame
            Indexed by gas day: mass_kg and base_volume_m3 (standard errors of the totals from
            noise and rounding), mass_root_bias_kg (expected part that the root of a noisy dp
            adds, always negative or 0).
        """
        run = RUN_BY_NAME[meter]
        log = self.run_logs[meter]
        records = self.records(meter, calibrated=True)
        flow = self.rates[meter]["calibrated_mass_flow_kg_per_s"].to_numpy()
        mass = flow * float(run.feed.interval_s)
        shown = np.maximum(records.signals.differential_pressure, run.cut_off)
        absolute = records.signals.static_pressure + records.atmosphere
        relative_dp = log.noise[DP][records.rows] / shown
        shared = 0.5 * self._barometer_deviation / absolute
        per_hour = BAROMETER_INTERVAL_S / run.feed.interval_s
        table = []
        for day in self.days:
            start, end = self.month.calendar.start(day), self.month.calendar.end(day)
            inside = (records.instants >= start) & (records.instants < end)
            square = float(
                ((0.5 * mass * relative_dp)[inside] ** 2).sum()
                + ((mass * shared)[inside] ** 2).sum() * per_hour
            )
            for kind, by in (
                (PRESSURE, 0.5 * mass / absolute),
                (TEMPERATURE, 0.5 * mass / records.signals.temperature),
            ):
                square += _carried_variance(log, kind, records.instants[inside], by[inside])
            bias = -float((mass * relative_dp**2)[inside].sum()) / 8.0
            density = periods(run, self.month, start, end)[0].base_density
            table.append([square**0.5, square**0.5 / density, bias])
        return pd.DataFrame(
            table,
            index=pd.Index(list(self.days), name="gas_day"),
            columns=["mass_kg", "base_volume_m3", "mass_root_bias_kg"],
        )

    @property
    def _barometer_deviation(self) -> float:
        noisy = any(log.noise[DP].any() for log in self.run_logs.values())
        return REPEATABILITY[BAROMETER] if noisy else 0.0

    def write(self, folder: Path) -> Path:
        """Write the site file and the logs as they would lie at the works.

        Parameters
        ----------
        folder : Path
            Made if it is missing; gets `site.toml` and `logs/`.

        Returns
        -------
        Path
            The site file.
        """
        folder.mkdir(parents=True, exist_ok=True)
        site = folder / "site.toml"
        site.write_bytes(self.site_text.encode())
        self.write_logs(folder / "logs")
        return site

    def write_logs(self, folder: Path) -> None:
        """Write the logs only, one folder per source."""
        for name, content in logs.files_of(self):
            path = folder / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_bytes(content)
            logs.settle(path)

    @property
    def site_text(self) -> str:
        """The site file."""
        return sitefile.site_text(self.month)


def _carried_variance(log: RunLog, kind: str, instants: Instants, by: Floats) -> float:
    """Return the variance that a signal's noise makes in the sum of `by` times its values.

    A reading that serves many instants moves all of them.
    """
    rows, sources = log.sources(kind, instants)
    moved = np.zeros(rows.size)
    np.add.at(moved, sources.first, by * (1.0 - sources.share))
    np.add.at(moved, sources.second, by * sources.share)
    return float(((moved * log.noise[kind][rows]) ** 2).sum())
