"""Computing meter-days: readings and constants in, hours and totals out."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date

from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.totals import PeriodTotal, day_total, hourly_records
from meterfix.calc.uncertainty import Doubt, day_doubt, hourly_standard_uncertainty
from meterfix.frames import Floats, HourlyRecord, MeterDay
from meterfix.run.days import input_digest, meter_day
from meterfix.run.pool import Pool
from meterfix.run.signals import SiteIndex

BATCH = 1_000
"""Meter-days computed together."""

Key = tuple[str, date]
Report = Callable[[str, int, int], None]
"""Called with what is being done, how much of it is done, and how much there is."""


@dataclass(frozen=True)
class Computed:
    """The result for one meter and gas day."""

    digest: str
    record: HourlyRecord
    total: PeriodTotal
    doubt: Doubt | None
    """None where no sensitivities were computed."""
    standard_uncertainty: Floats | None
    """(hours, 3), see `frames.SENSITIVE`."""


def compute(
    index: SiteIndex,
    pool: Pool,
    wanted: Iterable[Key],
    known: Mapping[Key, str],
    gases: GasLibrary,
    report: Report | None = None,
) -> dict[Key, Computed]:
    """Return the figures of the wanted meter-days whose inputs are not what they were.

    Parameters
    ----------
    index, pool : constants and readings.
    wanted : meters and gas days.
    known : input digests of the figures that stand; a day with the same digest is left out.
    gases : gas properties.
    report : progress.
    """
    by_day: dict[date, list[str]] = {}
    for meter, gas_day in wanted:
        by_day.setdefault(gas_day, []).append(meter)
    results: dict[Key, Computed] = {}
    batch: list[tuple[str, MeterDay]] = []
    for number, gas_day in enumerate(sorted(by_day)):
        if report is not None:
            report("computing gas days", number, len(by_day))
        for day in _meter_days(index, pool, gas_day, sorted(by_day[gas_day])):
            digest = input_digest(index, day)
            if known.get((day.meter, day.gas_day)) != digest:
                batch.append((digest, day))
        if len(batch) >= BATCH:
            results.update(_run(index, batch, gases))
            batch = []
    results.update(_run(index, batch, gases))
    if report is not None:
        report("computing gas days", len(by_day), len(by_day))
    return results


def _meter_days(
    index: SiteIndex, pool: Pool, gas_day: date, meters: list[str]
) -> Iterable[MeterDay]:
    calendar = index.site.calendar
    start, end = calendar.start(gas_day), calendar.end(gas_day)
    reach = max(index.reach(index.meters[meter]) for meter in meters)
    signals = sorted({name for m in meters for name in index.signals_of(index.meters[m])})
    chosen = pool.chosen(signals, start - reach, end + reach)
    for meter in meters:
        yield meter_day(index, index.meters[meter], gas_day, chosen)


def _run(
    index: SiteIndex, batch: list[tuple[str, MeterDay]], gases: GasLibrary
) -> dict[Key, Computed]:
    records = hours_of(index, [day for _, day in batch], gases)
    return {
        (record.meter, record.gas_day): computed(index, record, digest)
        for (digest, _), record in zip(batch, records, strict=True)
    }


def hours_of(index: SiteIndex, days: Sequence[MeterDay], gases: GasLibrary) -> list[HourlyRecord]:
    """Return the hours of meter-days with the sensitivities that the site's sources ask for."""
    return hourly_records(
        days, gases, components=index.components, repeatability=index.repeatability
    )


def computed(index: SiteIndex, record: HourlyRecord, digest: str) -> Computed:
    """Return a meter-day's hours with its total and what is not known of it."""
    doubt = uncertainty = None
    if record.sensitivities is not None:
        sources = index.sources_of(record.parameters)
        doubt = day_doubt(record, sources)
        uncertainty = hourly_standard_uncertainty([(1.0, record)], sources)
    return Computed(digest, record, day_total(record), doubt, uncertainty)
