"""Rows of `show totals` and `show balances`: read from the ledger, named as promised.

Nothing is computed here but the unit of a figure.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping, Sequence
from datetime import date
from functools import lru_cache
from typing import Any

from meterfix import units
from meterfix.calc.balance.envelopes import BALANCE_COLUMNS, NO_UNCERTAINTY, why_no_uncertainty
from meterfix.calc.balance.months import BASE_CHANGES
from meterfix.calc.uncertainty import COVERAGE_FACTOR
from meterfix.faces.asked import Asked, Row, time_text
from meterfix.frames import FLAGS, HOURLY_INDEX, MISSING, SENSITIVE, Floats
from meterfix.frames import TOTALS as QUANTITIES
from meterfix.model.calendar import HOUR
from meterfix.run.figures import ABSENT
from meterfix.run.opening import OpenSite
from meterfix.store.ledger import Ledger
from meterfix.store.values import decode_array

UNIT = {"mass": "kg", "base_volume": "m3", "energy": "MJ"}
FIGURE = {"mass": "mass_kg", "base_volume": "base_volume_m3", "energy": "energy_J"}
UNCERTAINTY = {
    "mass": "mass_expanded_uncertainty_kg",
    "base_volume": "base_volume_expanded_uncertainty_m3",
    "energy": "energy_expanded_uncertainty_J",
}
"""Columns of a stored total by quantity."""
VERDICTS = ("significant", "beyond_tolerance")
EXPANDED = "uncertainties are expanded, k = 2"
EVERY_FLAG = [name for name, _ in FLAGS]
EVERY_LOSS = [name for name, _ in MISSING]


def totals(opened: OpenSite, asked: Asked) -> list[Row]:
    """Return totals per hour, gas day or month."""
    kind = "month" if asked.by == "month" else "gas_day"
    where: dict[str, Any] = {"kind": kind}
    if asked.meter is not None:
        where["meter"] = asked.meter
    stored = standing(
        opened.ledger,
        "open_total",
        "total_revision",
        ("meter", "kind", "period_start_us"),
        where,
    )
    stored = [row for row in stored if asked.covers(row)]
    stored.sort(key=lambda row: (row["period_start_us"], row["meter"]))
    if asked.by == "hour":
        return [hour for row in stored for hour in _hours(opened.ledger, row, asked)]
    return [_total(row) for row in stored]


def balances(opened: OpenSite, asked: Asked) -> list[Row]:
    """Return balances per hour, gas day or month."""
    stored = standing(
        opened.ledger,
        "open_balance",
        "balance_revision",
        ("envelope", "kind", "period_start_us", "quantity"),
        {"kind": "month" if asked.by == "month" else "gas_day"},
    )
    among = None if asked.meter is None else _envelopes_with(opened, asked.meter)
    stored = [
        row for row in stored if asked.covers(row) and (among is None or row["envelope"] in among)
    ]
    order = {"mass": 0, "base_volume": 1, "energy": 2}
    stored.sort(key=lambda row: (row["period_start_us"], row["envelope"], order[row["quantity"]]))
    if asked.by == "hour":
        return [hour for row in stored for hour in _balance_hours(row, asked)]
    return [_balance(row) for row in stored]


# --- totals ------------------------------------------------------------------------------------


def _total(row: Mapping[str, Any]) -> Row:
    flags, missing = json.loads(row["flags"]), json.loads(row["missing"])
    energy = row["energy_J"]
    return {
        **period(row),
        "meter": row["meter"],
        **base_terms(row),
        "line_volume_m3": row["line_volume_m3"],
        "base_volume_m3": row["base_volume_m3"],
        "mass_kg": row["mass_kg"],
        "energy_MJ": _divided(energy, 1e6),
        **_uncertainties(row),
        **energy_terms(row, known=energy is not None),
        "flow_time_s": row["flow_time_s"],
        "measured_fraction": row["measured_fraction"],
        "basis": row.get("basis", "measured"),
        "flags": _flags(flags["shares"]),
        "shares": flags["shares"],
        "reason": _reasons(missing, flags["without"], row),
        "losses": [*_losses(missing), *_parts_without(flags["without"], row)],
        "unstated": _unstated(row),
        **status(row),
    }


def _uncertainties(row: Mapping[str, Any]) -> Row:
    """Return the expanded uncertainties (k = 2); the percentage is the base volume's."""
    base, base_doubt = row["base_volume_m3"], row["base_volume_expanded_uncertainty_m3"]
    return {
        "base_volume_expanded_uncertainty_m3": base_doubt,
        "mass_expanded_uncertainty_kg": row["mass_expanded_uncertainty_kg"],
        "energy_expanded_uncertainty_MJ": _divided(row["energy_expanded_uncertainty_J"], 1e6),
        "expanded_uncertainty_percent": 100.0 * base_doubt / base
        if base and base_doubt is not None
        else None,
    }


def _unstated(row: Mapping[str, Any]) -> list[str]:
    """Return why figures of a total's row have no uncertainty, and which where not all lack it."""
    text = row["uncertainty"]
    known: Mapping[str, Any] = {} if text is None else json.loads(text)["contributions"]
    names = [name for name in SENSITIVE if row[FIGURE[name]] is not None]
    lacking: dict[str, list[str]] = {}
    for name in names:
        if row[UNCERTAINTY[name]] is None:
            at = SENSITIVE.index(name)
            unstated = [source for source, amounts in known.items() if amounts[at] is None]
            lacking.setdefault(why_no_uncertainty(unstated), []).append(name)
    return [
        why if some == names else f"{', '.join(some).replace('_', ' ')}: {why}"
        for why, some in lacking.items()
    ]


def _hours(ledger: Ledger, row: Mapping[str, Any], asked: Asked) -> Iterator[Row]:
    where: dict[str, Any] = {"meter": row["meter"], "gas_day": row["gas_day"]}
    revision = row.get("revision")
    if revision:
        where["revision"] = revision
    stored = ledger.rows("hourly_record" if revision else "open_hourly", where=where)[0]
    doubts = None
    if stored["standard_uncertainty"] is not None:
        doubts = decode_array(stored["standard_uncertainty"], len(SENSITIVE)) * COVERAGE_FACTOR
    for number, hour in enumerate(decode_array(stored["statistics"], stored["columns"])):
        value = {name: float(hour[at]) for name, at in HOURLY_INDEX.items()}
        start = row["period_start_us"] + number * HOUR
        shown = {
            **row,
            "period_start_us": start,
            "period_end_us": start + round(value["duration"] * 1e6),
            "line_volume_m3": _known(value["line_volume"]),
            "base_volume_m3": _known(value["base_volume"]),
            "mass_kg": _known(value["mass"]),
            "energy_J": _known(value["energy"]),
            **_hour_doubt(value, None if doubts is None else doubts[number]),
            "flow_time_s": value["flow_time"],
            "measured_fraction": value["measured_time"] / value["duration"],
            "measured_time_s": value["measured_time"],
            "flags": json.dumps({"shares": _known_shares(value), "without": _without(value)}),
            "missing": json.dumps(
                {k: value[f"lost_{k}"] for k in EVERY_LOSS if value[f"lost_{k}"]}
            ),
        }
        if asked.covers(shown):
            yield _total(shown)


def _hour_doubt(value: Mapping[str, float], doubt: Floats | None) -> Row:
    """Return an hour's expanded uncertainties under the names of a total's row."""
    return {
        name: None
        if doubt is None or _known(value[quantity]) is None
        else _known(float(doubt[SENSITIVE.index(quantity)]))
        for quantity, name in UNCERTAINTY.items()
    }


def _known_shares(value: Mapping[str, float]) -> dict[str, float]:
    return {k: value[f"share_{k}"] for k in EVERY_FLAG if value[f"share_{k}"] > 0}


def _without(value: Mapping[str, float]) -> dict[str, float]:
    """Return the measured time of an hour by the totals that it does not have [s]."""
    return {
        name: value["measured_time"]
        for name in QUANTITIES
        if value["measured_time"] > 0 and _known(value[name]) is None
    }


def _flags(shares: Mapping[str, float]) -> str:
    """Return flags with their shares of the flow time, in the order of `frames.FLAGS`."""
    return "; ".join(f"{name} {shares[name]!r}" for name in EVERY_FLAG if name in shares)


def _losses(missing: Mapping[str, float]) -> list[str]:
    """Return why time is not measured, in the order of `frames.MISSING`; absent gas days last."""
    losses = [
        f"{name.replace('_', ' ')} {missing[name]!r} s" for name in EVERY_LOSS if name in missing
    ]
    if ABSENT in missing:
        losses.append(f"gas days without readings or not yet over {missing[ABSENT]!r} s")
    return losses


def _lacking(without: Mapping[str, float]) -> dict[str, str]:
    """Return sentences about the totals that measured time does not have, by total."""
    causes = {"energy": " (no calorific value)"}
    return {
        name: f"no {name.replace('_', ' ')} for {without[name]!r} s of the measured time"
        + causes.get(name, "")
        for name in QUANTITIES
        if name in without
    }


def _parts_without(without: Mapping[str, float], row: Mapping[str, Any]) -> list[str]:
    """Return the sentences about totals that a part only of the measured time does not have."""
    return [
        text for name, text in _lacking(without).items() if without[name] < row["measured_time_s"]
    ]


def _reasons(
    missing: Mapping[str, float], without: Mapping[str, float], row: Mapping[str, Any]
) -> str:
    parts = [*_losses(missing), *_lacking(without).values()]
    if row["base_pressure_Pa"] is None:
        parts.append(f"base volume: {BASE_CHANGES}")
    parts += _unstated(row)
    if row["base_volume_m3"] == 0 and row[UNCERTAINTY["base_volume"]] is not None:
        parts.append("no uncertainty in percent of nothing")
    if row.get("reason"):
        parts.append(f"revision: {row['reason']}")
    return "; ".join(parts)


# --- balances ----------------------------------------------------------------------------------


def _balance(row: Mapping[str, Any]) -> Row:
    reasons = json.loads(row["reason"])
    by = 1e6 if row["quantity"] == "energy" else 1.0
    # a verdict that is one has a reason only where it rests on a part of the period
    parts = {
        name: reasons[name]
        for name in VERDICTS
        if row[name] != "cannot be judged" and reasons.get(name)
    }
    unstated = ""
    if row["imbalance"] is not None and row["expanded_uncertainty"] is None:
        unstated = reasons.get("uncertainty") or NO_UNCERTAINTY
    return {
        **period(row),
        "envelope": row["envelope"],
        "quantity": row["quantity"],
        "in": _divided(row["inflow"], by),
        "out": _divided(row["outflow"], by),
        "vented": _divided(row["vented"], by),
        "storage_change": _divided(row["storage_change"], by),
        "imbalance": _divided(row["imbalance"], by),
        "expanded_uncertainty": _divided(row["expanded_uncertainty"], by),
        "tolerance": _divided(row["tolerance"], by),
        "unit": UNIT[row["quantity"]],
        **base_terms(row),
        **energy_terms(row, known=row["quantity"] == "energy"),
        **{name: _verdict(row[name], reasons.get(name)) for name in VERDICTS},
        "measured_fraction": row["measured_fraction"],
        "part": parts.get("beyond_tolerance", ""),
        "losses": [reasons["input"]] if reasons.get("input") else [],
        "unstated": [unstated] if unstated else [],
        "reason": "; ".join(
            text
            for text in (
                reasons.get("input"),
                *(f"{name.replace('_', ' ')}: {part}" for name, part in parts.items()),
                f"storage change: {reasons['storage_change']}"
                if "storage_change" in reasons
                else None,
                unstated,
                f"revision: {row['revision_reason']}" if row.get("revision_reason") else None,
            )
            if text
        ),
        **status(row),
    }


def _balance_hours(row: Mapping[str, Any], asked: Asked) -> Iterator[Row]:
    reasons = json.loads(row["reason"])
    by_hour: Sequence[str] = reasons.get("input_by_hour", [])
    array = decode_array(row["hourly"], len(BALANCE_COLUMNS))
    for number, hour in enumerate(array):
        value = {name: _known(float(hour[at])) for at, name in enumerate(BALANCE_COLUMNS)}
        start = row["period_start_us"] + number * HOUR
        shown = {
            **row,
            "period_start_us": start,
            "period_end_us": min(start + HOUR, row["period_end_us"]),
            "inflow": value["in"],
            "outflow": value["out"],
            "vented": value["vented"],
            "imbalance": value["imbalance"],
            "expanded_uncertainty": None
            if value["standard_uncertainty"] is None
            else COVERAGE_FACTOR * value["standard_uncertainty"],
            "tolerance": None,
            "measured_fraction": value["measured_fraction"],
            "significant": "cannot be judged",
            "beyond_tolerance": "cannot be judged",
            "reason": json.dumps(
                {
                    "input": by_hour[number] if by_hour else "",
                    "storage_change": reasons.get("storage_change", ""),
                    "uncertainty": reasons.get("uncertainty", ""),
                    "significant": reasons.get("hours", ""),
                    "beyond_tolerance": reasons.get("hours", ""),
                }
            ),
        }
        if asked.covers(shown):
            yield _balance(shown)


def _envelopes_with(opened: OpenSite, meter: str) -> set[str]:
    return {
        envelope.name
        for envelope in opened.site.envelopes
        if meter in {*envelope.inflow, *envelope.outflow, *envelope.vented}
    }


def _verdict(answer: str, reason: str | None) -> str:
    return f"{answer}: {reason}" if reason and answer == "cannot be judged" else answer


# --- shared ------------------------------------------------------------------------------------


def standing(
    ledger: Ledger, open_table: str, table: str, group: Sequence[str], where: Mapping[str, Any]
) -> list[Row]:
    """Return open rows, and the latest revision of closed ones."""
    return [
        *ledger.rows(open_table, where=where),
        *ledger.latest(table, group=group, number="revision", where=where),
    ]


def period(row: Mapping[str, Any]) -> Row:
    """Return a stored row's period under the names that are shown."""
    day = date.fromisoformat(row["gas_day"])
    return {
        "period_start": time_text(row["period_start_us"]),
        "period_end": time_text(row["period_end_us"]),
        "gas_day": None if row["kind"] == "month" else day.isoformat(),
        "month": f"{day:%Y-%m}",
    }


def status(row: Mapping[str, Any]) -> Row:
    """Return a stored row's status and revision."""
    revision = row.get("revision")
    return {"status": "provisional" if revision else "open", "revision": revision}


def _known(value: float) -> float | None:
    return None if value != value else value + 0.0  # noqa: PLR0124 - NaN is the one value unlike itself


def _divided(value: float | None, by: float) -> float | None:
    return None if value is None else value / by + 0.0


@lru_cache(maxsize=64)
def _in(value: float | None, unit: str) -> float | None:
    """Return an SI value in a unit, with no more digits than it takes to read it back."""
    return None if value is None else units.render(value, unit)


def base_terms(row: Mapping[str, Any]) -> Row:
    """Return what the row's base volume stands at."""
    return {
        "base_pressure_kPa": _in(row["base_pressure_Pa"], "kPa"),
        "base_temperature_degC": _in(row["base_temperature_K"], "degC"),
    }


def energy_terms(row: Mapping[str, Any], *, known: bool) -> Row:
    """Return what the row's energy stands at; nothing where it has none."""
    kind, kelvin = row["calorific_value_kind"], row["combustion_reference_temperature_K"]
    return {
        "calorific_value_kind": kind if known else None,
        "combustion_reference_temperature_degC": _in(kelvin, "degC") if known else None,
    }


def remarks(what: str, rows: Sequence[Mapping[str, Any]]) -> str:
    """Return what the figures of a table stand at, in one sentence or two."""
    rule = {
        "totals": f"measured time only, never scaled up; {EXPANDED}",
        "balances": f"in = out + vented + imbalance; storage is not configured; {EXPANDED}",
        "budget": "one standard deviation of each source, with the sign in which it moves the "
        "total; shares are of the variance of the base volume",
    }
    if what not in rule or not rows:
        return ""
    still_open = any(row["status"] == "open" for row in rows)
    # a table of balances has no room for the status
    hint = "; without rev: still open" if what == "balances" and still_open else ""
    text = f"{_stand_at(rows)}{rule[what]}{hint}."
    return text[0].upper() + text[1:] if text.startswith(("base", "one")) else text


def _stand_at(rows: Sequence[Mapping[str, Any]]) -> str:
    """Return the base conditions and the meaning of energy of all rows that have them."""
    bases = _sets(rows, "base_pressure_kPa", "base_temperature_degC")
    energies = _sets(rows, "calorific_value_kind", "combustion_reference_temperature_degC")
    text = ""
    if bases:
        text += f"base volume at {' or '.join(f'{p:g} kPa and {t:g} degC' for p, t in bases)}; "
    if energies:
        kinds = " or ".join(f"{kind}, combustion reference {t:g} degC" for kind, t in energies)
        text += f"energy: {kinds}; "
    return text


def _sets(rows: Sequence[Mapping[str, Any]], *names: str) -> list[tuple[Any, ...]]:
    """Return the different sets of values under the names, those not known left out."""
    found = {tuple(row[name] for name in names) for row in rows}
    return sorted(values for values in found if None not in values)
