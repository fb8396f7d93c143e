"""Contributions of sources to hours, gas days, months and envelopes."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from math import fsum, isnan, sqrt

import numpy as np

from meterfix.frames import SENSITIVE, Floats, HourlyRecord
from meterfix.model.calendar import HOUR, SECOND
from meterfix.model.uncertainty import Part, UncertaintySource

COVERAGE_FACTOR = 2.0
"""k of the expanded uncertainty: about 95 % for a normal distribution (JCGM 100:2008, 6.3)."""

Amounts = tuple[float, float, float]
"""Mass [kg], base volume [m3] and energy [J]; 0 where the quantity does not exist."""
NOTHING: Amounts = (0.0, 0.0, 0.0)


@dataclass(frozen=True, slots=True)
class Doubt:
    """What is not known of a total: contributions with sign, and a random variance."""

    contributions: Mapping[str, Amounts]
    """By name of the source, one standard deviation of it; sources without effect left out. NaN:
    nothing is stated for it, such as the discharge coefficient's outside the limits of use."""
    random_variance: Amounts

    def standard_uncertainty(self, quantity: str) -> float | None:
        """Return the standard uncertainty of 'mass', 'base_volume' or 'energy' in its unit.

        None where something that the total depends on has no stated uncertainty: a part of an
        uncertainty is not one.
        """
        at = SENSITIVE.index(quantity)
        squares = [amounts[at] * amounts[at] for amounts in self.contributions.values()]
        total = fsum([*squares, self.random_variance[at]])
        return None if isnan(total) else sqrt(total)

    def expanded_uncertainty(self, quantity: str) -> float | None:
        """Return the expanded uncertainty at k = 2; None as `standard_uncertainty`."""
        standard = self.standard_uncertainty(quantity)
        return None if standard is None else COVERAGE_FACTOR * standard

    def unstated(self, quantity: str) -> tuple[str, ...]:
        """Return the sources for which nothing is stated."""
        at = SENSITIVE.index(quantity)
        return tuple(name for name, a in self.contributions.items() if isnan(a[at]))


def relevant_sources(
    sources: Iterable[UncertaintySource], parameters: Iterable[tuple[str, str]]
) -> tuple[UncertaintySource, ...]:
    """Return the sources that act on any of the parameters (name and subject)."""
    known = set(parameters)
    return tuple(
        source
        for source in sources
        if any((part.parameter, part.subject) in known for part in source.parts)
    )


def hourly_contributions(
    record: HourlyRecord, sources: Sequence[UncertaintySource]
) -> dict[str, Floats]:
    """Return each source's contribution to each hour of a meter's gas day.

    Parameters
    ----------
    record : HourlyRecord
        With sensitivities.
    sources : sequence of UncertaintySource

    Returns
    -------
    dict of (hours, len(SENSITIVE)) arrays
        By name of the source; those that do not act on this meter are left out.

    Raises
    ------
    ValueError
        If the record has no sensitivities.
    """
    if record.sensitivities is None:
        message = f"meter {record.meter}, gas day {record.gas_day}: no sensitivities"
        raise ValueError(message)
    column = {parameter: n for n, parameter in enumerate(record.parameters)}
    middles = _middles(record)
    found: dict[str, Floats] = {}
    for source in sources:
        total: Floats | None = None
        for part in source.parts:
            n = column.get((part.parameter, part.subject))
            if n is None:
                continue
            size = sizes(part, middles)[:, np.newaxis]
            # outside its time a part counts for nothing, whether or not anything is stated there
            added = np.where(size == 0.0, 0.0, record.sensitivities[:, n, :] * size)
            total = added if total is None else total + added
        if total is not None:
            found[source.name] = total
    return found


def sizes(part: Part, instants: Floats) -> Floats:
    """Return a part's size at instants [UTC us], drift included; 0 outside its time."""
    size = np.full(len(instants), part.size)
    if part.growth and part.since is not None:
        # growth since a calibration: before it there is none
        size = size + part.growth * np.maximum((instants - part.since) / SECOND, 0.0)
    if part.start is not None:
        size = np.where(instants >= part.start, size, 0.0)
    if part.end is not None:
        size = np.where(instants < part.end, size, 0.0)
    return size


def day_doubt(record: HourlyRecord, sources: Sequence[UncertaintySource]) -> Doubt:
    """Return what is not known of a meter's gas day: its hours added up source by source."""
    contributions = {
        name: amounts
        for name, hours in hourly_contributions(record, sources).items()
        if (amounts := _summed(hours)) != NOTHING
    }
    variance = NOTHING if record.random_variance is None else _summed(record.random_variance)
    return Doubt(contributions, variance)


def add_up(parts: Iterable[tuple[float, Doubt]]) -> Doubt:
    """Return what is not known of a sum of totals with signs.

    Contributions of one source are added with sign before anything is squared, so that averaging
    never shrinks them and what an envelope's meters share cancels; random variances add.

    Parameters
    ----------
    parts : iterable of (sign, Doubt)
        +1 for what goes in, -1 for what goes out; +1 for the days of a month.
    """
    by_source: dict[str, list[Amounts]] = {}
    variances: list[Amounts] = []
    for sign, doubt in parts:
        for name, amounts in doubt.contributions.items():
            signed = (sign * amounts[0], sign * amounts[1], sign * amounts[2])
            by_source.setdefault(name, []).append(signed)
        variances.append(doubt.random_variance)
    return Doubt(
        {name: _total(some) for name, some in sorted(by_source.items())}, _total(variances)
    )


def hourly_standard_uncertainty(
    signed_records: Sequence[tuple[float, HourlyRecord]], sources: Sequence[UncertaintySource]
) -> Floats:
    """Return the standard uncertainty of each hour of a signed sum of meters.

    Parameters
    ----------
    signed_records : sequence of (sign, HourlyRecord)
        Meters of one gas day; a single one with +1 gives the meter's own.
    sources : sequence of UncertaintySource

    Returns
    -------
    (hours, len(SENSITIVE)) array
    """
    totals: dict[str, Floats] = {}
    hours = len(signed_records[0][1].statistics)
    square: Floats = np.zeros((hours, len(SENSITIVE)), dtype=np.float64)
    for sign, record in signed_records:
        for name, amounts in hourly_contributions(record, sources).items():
            totals[name] = sign * amounts + totals.get(name, np.zeros_like(amounts))
        if record.random_variance is not None:
            square = square + record.random_variance
    for name in sorted(totals):
        square = square + totals[name] * totals[name]
    uncertainty: Floats = np.sqrt(square)
    return uncertainty


def _middles(record: HourlyRecord) -> Floats:
    """Return the middle of each hour [UTC us], as if it were a whole one."""
    hours = np.arange(len(record.statistics), dtype=np.float64)
    middles: Floats = record.start + (hours + 0.5) * HOUR
    return middles


def _summed(hours: Floats) -> Amounts:
    mass, base_volume, energy = hours.T.tolist()
    return fsum(mass) + 0.0, fsum(base_volume) + 0.0, fsum(energy) + 0.0


def _total(parts: Sequence[Amounts]) -> Amounts:
    return (
        fsum(part[0] for part in parts) + 0.0,
        fsum(part[1] for part in parts) + 0.0,
        fsum(part[2] for part in parts) + 0.0,
    )
