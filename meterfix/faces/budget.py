"""Rows of `show budget`: what each source of uncertainty costs a meter's total."""

from __future__ import annotations

import json
from collections.abc import Mapping
from math import sqrt
from typing import Any

from meterfix.faces.asked import Asked, Row
from meterfix.faces.shown import base_terms, energy_terms, period, standing, status
from meterfix.run.opening import OpenSite

RANDOM = "scatter of readings, and what happens between them"


def budget(opened: OpenSite, asked: Asked) -> list[Row]:
    """Return every source's contribution to each gas day or month, the largest first.

    Contributions are one standard deviation of the source, with the sign in which it moves the
    total; the share is of the variance of the base volume. Sources for which nothing is stated
    stand before all others, without a contribution: they leave the total without an uncertainty.
    """
    where: dict[str, Any] = {"kind": "month" if asked.by == "month" else "gas_day"}
    if asked.meter is not None:
        where["meter"] = asked.meter
    stored = standing(
        opened.ledger,
        "open_total",
        "total_revision",
        ("meter", "kind", "period_start_us"),
        where,
    )
    stored = [row for row in stored if asked.covers(row) and row["uncertainty"] is not None]
    stored.sort(key=lambda row: (row["period_start_us"], row["meter"]))
    return [line for row in stored for line in _lines(row)]


def _lines(row: Mapping[str, Any]) -> list[Row]:
    doubt = json.loads(row["uncertainty"])
    entries: dict[str, list[float | None]] = dict(doubt["contributions"])
    entries[RANDOM] = [None if v is None else sqrt(v) for v in doubt["random_variance"]]
    expanded = row["base_volume_expanded_uncertainty_m3"]
    whole, has_energy = row["base_volume_m3"], row["energy_J"] is not None
    lines = []
    for source, (mass, base_volume, energy) in entries.items():
        volume = None if whole is None else base_volume
        joules = energy if has_energy else None
        lines.append(
            {
                **period(row),
                "meter": row["meter"],
                "source_of_uncertainty": source,
                "mass_contribution_kg": mass,
                "base_volume_contribution_m3": volume,
                "energy_contribution_MJ": None if joules is None else joules / 1e6 + 0.0,
                "base_volume_contribution_percent": 100.0 * volume / whole
                if volume is not None and whole
                else None,
                "variance_fraction": volume * volume / (expanded * expanded / 4.0)
                if volume is not None and expanded
                else None,
                "reason": _reason(row, mass, base_volume, energy, expanded),
                **base_terms(row),
                **energy_terms(row, known=has_energy),
                **status(row),
            }
        )
    return sorted(lines, key=_place)


def _reason(
    row: Mapping[str, Any],
    mass: float | None,
    base_volume: float | None,
    energy: float | None,
    expanded: float | None,
) -> str:
    """Return why figures of a source are empty; '' where none is."""
    if None in (mass, base_volume, energy):
        return "no uncertainty is stated for it"
    parts = []
    if row["base_volume_m3"] is None:
        parts.append("no base volume")
    elif expanded is None:
        parts.append("no share: the base volume's uncertainty is not known")
    elif not expanded:
        parts.append("no share: nothing is uncertain")
    if row["base_volume_m3"] == 0:
        parts.append("no percentage of nothing")
    if row["energy_J"] is None:
        parts.append("no energy")
    return "; ".join(parts)


def _place(line: Row) -> tuple[bool, float, float, float, str]:
    """Return what lines are sorted by: nothing stated, size by quantity, name."""
    sizes = [
        line[name]
        for name in (
            "base_volume_contribution_m3",
            "mass_contribution_kg",
            "energy_contribution_MJ",
        )
    ]
    volume, mass, energy = (-abs(size or 0.0) for size in sizes)
    stated = not line["reason"].startswith("no uncertainty is stated")
    return stated, volume, mass, energy, line["source_of_uncertainty"]
