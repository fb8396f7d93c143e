"""Stored rows of totals: from computed hours to a row and back."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import date
from math import isnan, nan
from typing import Any

import numpy as np

from meterfix.calc.totals import PeriodTotal, month_total
from meterfix.calc.uncertainty import Doubt, add_up
from meterfix.frames import (
    CALCULATION_VERSION,
    FLAGS,
    HOURLY_COLUMNS,
    MISSING,
    SENSITIVE,
    TOTALS,
    Floats,
    HourlyRecord,
)
from meterfix.model.calendar import SECOND
from meterfix.run.signals import SiteIndex
from meterfix.store.values import decode_array, encode_array

Row = dict[str, Any]

FIGURES = ("mass_kg", "line_volume_m3", "base_volume_m3", "energy_J")
BASIS = "measured"
ABSENT = "absent"
"""In a month's `missing`, beside the names of `frames.MISSING`: seconds of gas days without a row.
Measured time, lost time and absent time add up to the month's duration."""


def total_figures(total: PeriodTotal, doubt: Doubt | None, absent: float = 0.0) -> Row:
    """Return the columns of a total that hold its figures and their uncertainty.

    `absent` is the time of a month's gas days that have no figures at all [s].
    """
    missing = {**total.lost, ABSENT: absent}
    return {
        "duration_s": total.duration,
        "measured_time_s": total.measured_time,
        "flow_time_s": total.flow_time,
        "mass_kg": total.mass,
        "line_volume_m3": total.line_volume,
        "base_volume_m3": total.base_volume,
        "energy_J": total.energy,
        "measured_fraction": total.measured_fraction,
        "flags": _json(
            {
                "shares": {k: v for k, v in total.flag_shares.items() if v},
                "without_flow": all(v is None for v in total.flag_shares.values()),
                "without": {k: v for k, v in total.without.items() if v},
                "disputed_readings": total.disputed_readings,
            }
        ),
        "missing": _json({k: v for k, v in missing.items() if v}),
        "mass_expanded_uncertainty_kg": _expanded(doubt, "mass", total.mass),
        "base_volume_expanded_uncertainty_m3": _expanded(doubt, "base_volume", total.base_volume),
        "energy_expanded_uncertainty_J": _expanded(doubt, "energy", total.energy),
        "uncertainty": doubt_text(doubt),
    }


def doubt_text(doubt: Doubt | None) -> str | None:
    """Return what is not known of a total as stored: contributions by source, random variance.

    null: nothing is stated for the source.
    """
    if doubt is None:
        return None
    return _json(
        {
            "contributions": {name: _nulls(a) for name, a in doubt.contributions.items()},
            "random_variance": _nulls(doubt.random_variance),
        }
    )


def doubt_from(text: str | None) -> Doubt | None:
    """Return stored contributions and random variance."""
    if text is None:
        return None
    stored = json.loads(text)
    return Doubt(
        {name: _amounts(a) for name, a in stored["contributions"].items()},
        _amounts(stored["random_variance"]),
    )


def _nulls(amounts: Sequence[float]) -> list[float | None]:
    return [None if isnan(amount) else amount for amount in amounts]


def _amounts(stored: Sequence[float | None]) -> tuple[float, float, float]:
    mass, base_volume, energy = (nan if amount is None else amount for amount in stored)
    return mass, base_volume, energy


def _expanded(doubt: Doubt | None, quantity: str, value: float | None) -> float | None:
    """Return the expanded uncertainty of a figure; None where there is no figure."""
    if doubt is None or value is None:
        return None
    return doubt.expanded_uncertainty(quantity)


def total_from(row: Mapping[str, Any]) -> PeriodTotal:
    """Return a stored day's figures as they were computed."""
    flags, lost = json.loads(row["flags"]), json.loads(row["missing"])
    nothing = None if flags["without_flow"] else 0.0
    return PeriodTotal(
        mass=row["mass_kg"],
        line_volume=row["line_volume_m3"],
        base_volume=row["base_volume_m3"],
        energy=row["energy_J"],
        duration=row["duration_s"],
        measured_time=row["measured_time_s"],
        flow_time=row["flow_time_s"],
        measured_fraction=row["measured_fraction"],
        flag_shares={name: flags["shares"].get(name, nothing) for name, _ in FLAGS},
        lost={name: lost.get(name, 0.0) for name, _ in MISSING},
        without={name: flags["without"].get(name, 0.0) for name in TOTALS},
        disputed_readings=flags["disputed_readings"],
    )


def day_row(
    index: SiteIndex,
    meter: str,
    gas_day: date,
    total: PeriodTotal,
    doubt: Doubt | None,
    digest: str,
) -> Row:
    """Return the row of a gas day, without its status."""
    calendar = index.site.calendar
    start = calendar.start(gas_day)
    return {
        "meter": meter,
        "kind": "gas_day",
        "period_start_us": start,
        "period_end_us": calendar.end(gas_day),
        "gas_day": gas_day.isoformat(),
        **total_figures(total, doubt),
        **terms_of(index, start),
        "input_digest": digest,
    }


def month_row(index: SiteIndex, meter: str, month: date, days: Sequence[Mapping[str, Any]]) -> Row:
    """Return the row of a month from its gas days' rows; days without a row are absent."""
    calendar = index.site.calendar
    all_days = calendar.month_days(month)
    start, end = calendar.start(all_days[0]), calendar.end(all_days[-1])
    duration = (end - start) / SECOND
    total = month_total([total_from(row) for row in days])
    total = replace(total, duration=duration, measured_fraction=total.measured_time / duration)
    present = sum(row["period_end_us"] - row["period_start_us"] for row in days)
    terms = terms_of(index, calendar.start(date.fromisoformat(days[-1]["gas_day"])))
    bases = {(row["base_pressure_Pa"], row["base_temperature_K"]) for row in days}
    if len(bases) > 1:
        # volumes at different base conditions do not add up; mass and energy do
        total = replace(total, base_volume=None)
        terms |= {"base_pressure_Pa": None, "base_temperature_K": None}
    return {
        "meter": meter,
        "kind": "month",
        "period_start_us": start,
        "period_end_us": end,
        "gas_day": month.isoformat(),
        **total_figures(total, _month_doubt(days), (end - start - present) / SECOND),
        **terms,
        "input_digest": _json([[row["gas_day"], row["input_digest"]] for row in days]),
    }


def _month_doubt(days: Sequence[Mapping[str, Any]]) -> Doubt | None:
    """Return what is not known of a month: its days added up source by source."""
    doubts = [doubt_from(row["uncertainty"]) for row in days]
    known = [(1.0, doubt) for doubt in doubts if doubt is not None]
    return add_up(known) if known and len(known) == len(doubts) else None


def hourly_row(record: HourlyRecord, standard_uncertainty: Floats | None) -> Row:
    """Return the row of a gas day's hours, without its status.

    Sensitivities are stored as (hours, parameters + 1, quantities): the last entry, named
    'random variance', is the hours' variance.
    """
    sensitivities = parameters = None
    if record.sensitivities is not None and record.random_variance is not None:
        sensitivities = encode_array(
            np.concatenate([record.sensitivities, record.random_variance[:, np.newaxis]], axis=1)
        )
        parameters = _json([list(parameter) for parameter in record.parameters])
    return {
        "meter": record.meter,
        "gas_day": record.gas_day.isoformat(),
        "period_start_us": record.start,
        "hours": len(record.statistics),
        "columns": len(HOURLY_COLUMNS),
        "statistics": encode_array(record.statistics),
        "sensitivities": sensitivities,
        "parameters": parameters,
        "standard_uncertainty": None
        if standard_uncertainty is None
        else encode_array(standard_uncertainty),
    }


def hourly_from(row: Mapping[str, Any]) -> HourlyRecord:
    """Return a stored gas day's hours."""
    sensitivities = variance = None
    parameters: tuple[tuple[str, str], ...] = ()
    if row["sensitivities"] is not None:
        parameters = tuple((name, subject) for name, subject in json.loads(row["parameters"]))
        stored = decode_array(row["sensitivities"], len(SENSITIVE)).reshape(
            row["hours"], len(parameters) + 1, len(SENSITIVE)
        )
        sensitivities, variance = stored[:, :-1], stored[:, -1]
    return HourlyRecord(
        meter=row["meter"],
        gas_day=date.fromisoformat(row["gas_day"]),
        start=row["period_start_us"],
        statistics=decode_array(row["statistics"], row["columns"]),
        parameters=parameters,
        sensitivities=sensitivities,
        random_variance=variance,
    )


def same_figures(one: Mapping[str, Any], other: Mapping[str, Any]) -> bool:
    """Return whether two rows of totals say the same, bit for bit."""
    names = (
        *FIGURES,
        "duration_s",
        "measured_time_s",
        "flow_time_s",
        "measured_fraction",
        "flags",
        "missing",
        "uncertainty",
        "base_pressure_Pa",
        "base_temperature_K",
        "calorific_value_kind",
        "combustion_reference_temperature_K",
    )
    return all(one[name] == other[name] for name in names)


def same_hours(record: HourlyRecord, row: Mapping[str, Any]) -> bool:
    """Return whether a gas day's hours are those of a row, bit for bit."""
    again = hourly_row(record, None)
    return all(again[name] == row[name] for name in ("statistics", "parameters", "sensitivities"))


def version_columns(index: SiteIndex, as_of_pass: int, as_of_delivery: int, mark: str) -> Row:
    """Return the columns that say by what a figure was computed."""
    return {
        "as_of_delivery": as_of_delivery,
        "as_of_pass": as_of_pass,
        "site_digest": index.site.digest,
        "calculation_version": CALCULATION_VERSION,
        "fingerprint": mark,
    }


def terms_of(index: SiteIndex, instant: int) -> Row:
    """Return the columns that say what volumes and energies of a gas day stand at."""
    base = index.site.base_conditions.in_force(instant)
    energy = index.site.contract.energy
    if base is None:
        message = f"no base conditions are in force at {instant} us"
        raise LookupError(message)
    return {
        "base_pressure_Pa": base.base_pressure,
        "base_temperature_K": base.base_temperature,
        "calorific_value_kind": energy.kind.value if energy is not None else "",
        "combustion_reference_temperature_K": (
            energy.combustion_reference_temperature if energy is not None else None
        ),
    }


def _json(value: object) -> str:
    return json.dumps(value, sort_keys=True, separators=(",", ":"), allow_nan=False)
