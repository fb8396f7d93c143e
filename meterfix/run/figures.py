"""Stored rows of totals: from computed hours to a row and back."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import date
from typing import Any

from meterfix.calc.totals import PeriodTotal, month_total
from meterfix.frames import (
    CALCULATION_VERSION,
    FLAGS,
    HOURLY_COLUMNS,
    MISSING,
    TOTALS,
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


def total_figures(total: PeriodTotal, absent: float = 0.0) -> Row:
    """Return the columns of a total that hold its figures.

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
    }


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


def day_row(index: SiteIndex, meter: str, gas_day: date, total: PeriodTotal, digest: str) -> Row:
    """Return the row of a gas day, without its status."""
    calendar = index.site.calendar
    start = calendar.start(gas_day)
    return {
        "meter": meter,
        "kind": "gas_day",
        "period_start_us": start,
        "period_end_us": calendar.end(gas_day),
        "gas_day": gas_day.isoformat(),
        **total_figures(total),
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
        **total_figures(total, (end - start - present) / SECOND),
        **terms,
        "input_digest": _json([[row["gas_day"], row["input_digest"]] for row in days]),
    }


def hourly_row(record: HourlyRecord) -> Row:
    """Return the row of a gas day's hours, without its status."""
    return {
        "meter": record.meter,
        "gas_day": record.gas_day.isoformat(),
        "period_start_us": record.start,
        "hours": len(record.statistics),
        "columns": len(HOURLY_COLUMNS),
        "statistics": encode_array(record.statistics),
        "sensitivities": None,
        "parameters": None,
    }


def hourly_from(row: Mapping[str, Any]) -> HourlyRecord:
    """Return a stored gas day's hours."""
    return HourlyRecord(
        meter=row["meter"],
        gas_day=date.fromisoformat(row["gas_day"]),
        start=row["period_start_us"],
        statistics=decode_array(row["statistics"], row["columns"]),
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
        "base_pressure_Pa",
        "base_temperature_K",
        "calorific_value_kind",
        "combustion_reference_temperature_K",
    )
    return all(one[name] == other[name] for name in names)


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
