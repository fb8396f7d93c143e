"""Hourly records of many meters and gas days at once; the rules stand in the package."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from meterfix.calc.correct import Corrected, correct
from meterfix.calc.elementary import segment_sum
from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.totals.pieces import (
    MEASURED,
    REASON,
    Pieces,
    Weights,
    contributions,
    cut,
    end_rates,
    joined,
    settled,
    weights,
)
from meterfix.calc.totals.sensitive import Batch, SensitiveHours, sensitive_hours
from meterfix.calc.totals.statistics import (
    Readings,
    flowing_statistics,
    integer_sum,
    segments,
    signal_statistics,
)
from meterfix.calc.totals.stretches import FLAG_BIT, Parts, Stretch, cleaned, serving, stretches
from meterfix.calc.totals.subjects import Disturbances, disturbance_of
from meterfix.frames import (
    HOURLY_COLUMNS,
    HOURLY_INDEX,
    SIGNAL_ROLES,
    SIGNAL_STATISTICS,
    TOTALS,
    Floats,
    HourlyRecord,
    Instants,
    Integers,
    MeterDay,
)
from meterfix.model.calendar import HOUR, SECOND

BATCH_READINGS = 200_000
"""Readings of differential pressure computed at once: enough to make Python's share small, few
enough for the arrays to stay near the processor."""


@dataclass(frozen=True, slots=True)
class _Asked:
    """What sensitivities and random variances need to know, see `hourly_records`."""

    components: Mapping[str, tuple[str, ...]]
    repeatability: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class _Rates:
    """The corrected records of a batch, as far as totals need them."""

    instants: Instants
    row: Integers
    """Hour of the record; -1 for a neighbour outside its stretch."""
    rates: dict[str, Floats]
    """Per name in `frames.TOTALS`, per second."""
    differential_pressure: Floats
    static_pressure: Floats
    flags: Integers
    missing: Integers


def hourly_records(
    days: Sequence[MeterDay],
    gases: GasLibrary,
    *,
    sensitive: bool = True,
    components: Mapping[str, tuple[str, ...]] | None = None,
    repeatability: Mapping[str, float] | None = None,
    disturbances: Disturbances | None = None,
) -> list[HourlyRecord]:
    """Return the hourly record of every meter-day, in the order given.

    Parameters
    ----------
    days : sequence of MeterDay
        Any meters, any gas days; nothing in a result depends on what else is among them.
    gases : GasLibrary
        Source of gas properties.
    sensitive : bool
        False: no sensitivities and no random variance.
    components : mapping, optional
        By name of a gas: its components whose stated fractions are uncertain.
    repeatability : mapping, optional
        By name of a signal: one standard deviation of a reading [Pa or K]; others are
        estimated from their successive differences.
    disturbances : mapping, optional
        By field of `Disturbance` and subject (see `frames.PARAMETERS`): what is changed. The
        result then has no sensitivities: they are those of the undisturbed calculation.

    Returns
    -------
    list of HourlyRecord
        ``statistics`` is (hours, len(HOURLY_COLUMNS)): kg, m3, J, s, Pa, K; NaN: not known.
        A sensitivity is NaN where the hour has a flow for which no uncertainty is stated (C,
        expansibility and densities, in multiples of it), 0 where nothing flows.

    Raises
    ------
    ValueError
        If a gas day does not end after its start.
    """
    for day in days:
        if day.end <= day.start:
            message = f"meter {day.meter}, gas day {day.gas_day}: its end must be after its start"
            raise ValueError(message)
    asked = None
    if sensitive and not disturbances:
        asked = _Asked(components or {}, repeatability or {})
    return [
        record
        for batch in _batches(days)
        for record in _batch(batch, gases, asked, disturbances or {})
    ]


def _batches(days: Sequence[MeterDay]) -> Iterator[list[MeterDay]]:
    """Yield the days in runs of about `BATCH_READINGS` readings."""
    batch: list[MeterDay] = []
    readings = 0
    for day in days:
        batch.append(day)
        readings += sum(len(series.instants) for _, _, series in day.differential_pressure)
        if readings >= BATCH_READINGS:
            yield batch
            batch, readings = [], 0
    if batch:
        yield batch


def _batch(
    days: list[MeterDay], gases: GasLibrary, asked: _Asked | None, disturbances: Disturbances
) -> list[HourlyRecord]:
    """Return the hourly records of one batch."""
    hours = [-((day.start - day.end) // HOUR) for day in days]
    row_offsets = np.concatenate([[0], np.cumsum(hours)]).astype(np.int64)
    count = int(row_offsets[-1])
    signals = [
        {role: cleaned(getattr(day, role)) for role in (*SIGNAL_ROLES, "barometer")} for day in days
    ]
    parts: list[Stretch] = []
    day_of_part: list[int] = []
    pieces_of: list[Pieces] = []
    rows_of: list[Integers] = []
    records = 0
    for number, (day, parts_of_day) in enumerate(zip(days, signals, strict=True)):
        row_offset = int(row_offsets[number])
        for stretch in stretches(day, parts_of_day):
            pieces_of.append(cut(stretch, day.start, row_offset, records))
            inside = (stretch.instants >= stretch.start) & (stretch.instants < stretch.end)
            row = (stretch.instants - day.start) // HOUR + row_offset
            rows_of.append(np.where(inside, row, -1))
            parts.append(stretch)
            day_of_part.append(number)
            records += len(stretch.instants)
    pieces = joined(pieces_of)
    rates, corrected = _rates(
        days, parts, day_of_part, np.concatenate(rows_of), gases, disturbances
    )
    table = np.full((count, len(HOURLY_COLUMNS)), np.nan)

    def put(name: str, values: Floats) -> None:
        table[:, HOURLY_INDEX[name]] = values + 0.0  # -0.0 + 0.0 is 0.0

    reason = settled(pieces, rates.missing)
    measured = np.flatnonzero(reason == MEASURED)
    ends_of = weights(pieces, measured, rates.instants)
    _totals(put, pieces, rates, count, parts, reason, measured, ends_of)
    flowing = np.flatnonzero((rates.row >= 0) & (rates.rates["mass"] > 0.0))
    for name, values in flowing_statistics(
        rates.row[flowing],
        rates.differential_pressure[flowing],
        rates.static_pressure[flowing],
        count,
    ).items():
        put(name, values)
    for role in SIGNAL_ROLES:
        readings = _readings(days, [of_day[role] for of_day in signals], row_offsets, role)
        statistics = signal_statistics(readings, count)
        for n, name in enumerate(SIGNAL_STATISTICS):
            put(f"{role}_{name}", statistics[:, n])
    unsolved = np.flatnonzero((rates.row >= 0) & (rates.missing == REASON["not_converged"]))
    lengths = [len(of_part.start) for of_part in pieces_of]
    part_of_piece = np.repeat(np.arange(len(parts)), lengths)
    sensitive: list[SensitiveHours | None] = [None] * len(days)
    if asked is not None:
        batch = Batch(
            days=days,
            row_offsets=row_offsets,
            parts=parts,
            day_of_part=day_of_part,
            corrected=corrected,
            instants=rates.instants,
            weights=ends_of,
            row=pieces.row[measured],
            stretch=part_of_piece[measured],
        )
        sensitive = [*sensitive_hours(batch, gases, asked.components, asked.repeatability)]
    return [
        HourlyRecord(
            meter=day.meter,
            gas_day=day.gas_day,
            start=day.start,
            statistics=table[low:high].copy(),
            unsolved=tuple(
                rates.instants[
                    unsolved[(rates.row[unsolved] >= low) & (rates.row[unsolved] < high)]
                ].tolist()
            ),
            parameters=() if beside is None else beside.parameters,
            sensitivities=None if beside is None else beside.sensitivities,
            random_variance=None if beside is None else beside.random_variance,
        )
        for day, low, high, beside in zip(
            days, row_offsets[:-1].tolist(), row_offsets[1:].tolist(), sensitive, strict=True
        )
    ]


def _rates(
    days: list[MeterDay],
    parts: list[Stretch],
    day_of_part: list[int],
    row: Integers,
    gases: GasLibrary,
    disturbances: Disturbances,
) -> tuple[_Rates, Corrected | None]:
    """Return the corrected records of all stretches, one after the other."""
    records = [part.records for part in parts if part.records is not None]
    if not records:
        nothing = np.zeros(0)
        none = np.zeros(0, dtype=np.int64)
        no_rates = dict.fromkeys(TOTALS, nothing)
        return _Rates(none, none, no_rates, nothing, nothing, none, none), None
    if disturbances:
        corrected = correct(
            records,
            gases,
            [
                disturbance_of(days[number].meter, part.records.era, disturbances)
                for number, part in zip(day_of_part, parts, strict=True)
                if part.records is not None
            ],
        )
    else:
        corrected = correct(records, gases)
    marks = np.concatenate([part.marks for part in parts])
    assert int(corrected.offsets[-1]) == len(marks) == len(row)
    rates = _Rates(
        instants=np.concatenate([part.instants for part in parts]),
        row=row,
        rates={
            "mass": corrected.mass_flow,
            "line_volume": corrected.line_volume_flow,
            "base_volume": corrected.base_volume_flow,
            "energy": corrected.energy_flow,
        },
        differential_pressure=corrected.differential_pressure,
        static_pressure=corrected.static_pressure_absolute,
        flags=corrected.flags.astype(np.int64) | marks,
        missing=corrected.missing.astype(np.int64),
    )
    return rates, corrected


def _totals(
    put: Callable[[str, Floats], None],
    pieces: Pieces,
    rates: _Rates,
    count: int,
    parts: list[Stretch],
    reason: Integers,
    measured: Integers,
    ends_of: Weights,
) -> None:
    """Put times, totals, losses, the flags' shares and the disputed readings."""
    length = pieces.end - pieces.start
    starts, ends = segments(pieces.row, count)
    put("duration", integer_sum(length, starts, ends) / SECOND)
    for name, number in REASON.items():
        lost = np.where(reason == number, length, 0)
        put(f"lost_{name}", integer_sum(lost, starts, ends) / SECOND)

    rows = pieces.row[measured]
    starts, ends = segments(rows, count)
    time = integer_sum(length[measured], starts, ends)
    put("measured_time", time / SECOND)
    flow = np.zeros(len(measured), dtype=np.int64)
    for name in TOTALS:
        at_start, at_end = end_rates(ends_of, rates.rates[name])
        total = segment_sum(contributions(ends_of, at_start, at_end), starts, ends)
        put(name, np.where(time > 0, total, np.nan))
        if name == "mass":
            flow = np.where((at_start > 0.0) | (at_end > 0.0), length[measured], 0)
    flow_time = integer_sum(flow, starts, ends)
    put("flow_time", flow_time / SECOND)
    flags = rates.flags[ends_of.first] | rates.flags[ends_of.second]
    for name, bit in FLAG_BIT.items():
        flagged = integer_sum(np.where(flags & bit != 0, flow, 0), starts, ends)
        put(f"share_{name}", np.where(flow_time > 0, flagged / np.maximum(flow_time, 1), np.nan))
    hit = np.flatnonzero(flags & FLAG_BIT["disputed_reading"] != 0)
    put(
        "disputed_readings",
        _disputed_readings(
            parts,
            np.concatenate([ends_of.first[hit], ends_of.second[hit]]),
            np.concatenate([rows[hit], rows[hit]]),
            count,
        ),
    )


def _disputed_readings(
    parts: list[Stretch], records: Integers, rows: Integers, count: int
) -> Floats:
    """Return how many distinct disputed readings the given records use in the given hours."""
    offsets = np.cumsum([0, *(len(part.instants) for part in parts)])
    uses = [
        (part.disputed.record + offset, part.disputed)
        for part, offset in zip(parts, offsets[:-1].tolist(), strict=True)
        if part.disputed is not None
    ]
    if not uses or len(records) == 0:
        return np.zeros(count)
    by_record = np.concatenate([record for record, _ in uses])
    low = np.searchsorted(by_record, records, side="left")
    number = np.searchsorted(by_record, records, side="right") - low
    # every use of every record, with the hour that the record serves
    nth = np.arange(number.sum()) - np.repeat(np.cumsum(number) - number, number)
    found = np.repeat(low, number) + nth
    keys = np.stack(
        [
            np.repeat(rows, number),
            np.concatenate([use.role for _, use in uses])[found],
            np.concatenate([use.part for _, use in uses])[found],
            np.concatenate([use.instant for _, use in uses])[found],
        ]
    )
    keys = keys[:, np.lexsort(keys[::-1])]
    new = np.append(True, (keys[:, 1:] != keys[:, :-1]).any(axis=0))[: keys.shape[1]]
    return np.bincount(keys[0][new], minlength=count).astype(np.float64)


def _readings(
    days: list[MeterDay], parts_of: list[Parts], row_offsets: Integers, role: str
) -> Readings:
    """Return the readings of one role inside their days and parts, with what limits them."""
    rows: list[Integers] = []
    signals: list[Integers] = []
    instants: list[Instants] = []
    values: list[Floats] = []
    limits: list[Floats] = []
    for day, parts, row_offset in zip(days, parts_of, row_offsets[:-1].tolist(), strict=True):
        for part_start, part_end, series in parts:
            inside = (max(part_start, day.start), min(part_end, day.end))
            low, high = np.searchsorted(series.instants, inside).tolist()
            if high <= low:
                continue
            at = series.instants[low:high]
            limit = np.full(high - low, np.nan)
            for era in day.eras:
                transmitter = getattr(era, f"{role}_range")
                within = slice(*np.searchsorted(at, (era.start, era.end)).tolist())
                if role == "differential_pressure" and era.differential_pressure_rooted:
                    limit[within] = 1.0
                elif transmitter is not None:
                    limit[within] = transmitter.upper_range_value
            rows.append((at - day.start) // HOUR + row_offset)
            signals.append(np.full(len(at), serving(parts, part_start), dtype=np.int64))
            instants.append(at)
            values.append(series.values[low:high])
            limits.append(limit)
    if not rows:
        none = np.zeros(0, dtype=np.int64)
        return Readings(none, none, none, np.zeros(0), np.zeros(0))
    return Readings(
        np.concatenate(rows),
        np.concatenate(signals),
        np.concatenate(instants),
        np.concatenate(values),
        np.concatenate(limits),
    )
