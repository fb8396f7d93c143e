"""The statement against the truth: totals of simulated logs, and how far they are off."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date
from functools import cache
from math import fsum

import numpy as np
from works_simulated import EVERY_THIRD, QUANTITIES, Campaign, Period, Simulated
from works_site import DESIGNS, GROUPS, METERS, NOISE_GROUP, index_of

from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.totals import day_total, hourly_records
from meterfix.calc.uncertainty import Doubt, add_up, day_doubt
from meterfix.calc.uncertainty.propagate import NOTHING
from meterfix.frames import Carry, Era, MeterDay, Series
from meterfix.model.calendar import SECOND
from meterfix.model.source import Between
from meterfix.model.uncertainty import UncertaintySource
from meterfix.run.days import eras_of

NOMINAL = dict.fromkeys([*GROUPS, NOISE_GROUP], 1.0)
ROWS = (*METERS, "imbalance")
BATCH = 50
"""Sites computed together."""
_LIBRARY = GasLibrary()


@dataclass(frozen=True)
class Outcome:
    """What came of the sites of a campaign, (sites, rows, 3) arrays; rows as `ROWS`."""

    error: np.ndarray
    """meterfix's total minus the truth; kg, m3, J."""
    stated: np.ndarray
    """Its standard uncertainty."""
    total: np.ndarray
    """The true total; of the imbalance, what went in."""

    @property
    def ratio(self):
        """Return the error in standard uncertainties."""
        return self.error / self.stated


def only(group: str, factor: float = 1.0) -> dict[str, float]:
    """Return the factors with which nothing but one group errs."""
    return {**dict.fromkeys(NOMINAL, 0.0), group: factor}


def enlarged(group: str, factor: float) -> dict[str, float]:
    """Return the factors with which one group errs more than stated in the site file."""
    return {**NOMINAL, group: factor}


def compare(
    campaign: Campaign,
    factors: Mapping[str, float],
    *,
    whole: bool = False,
    repeatability_stated: bool = True,
) -> Outcome:
    """Return errors and stated uncertainties of the sites of a campaign.

    Parameters
    ----------
    campaign : Campaign
    factors : mapping
        By group: how large its errors are, in truth and in the statement, beside what is
        written in the site file. Where noise errs not at all, no random variance is stated.
    whole : bool
        The period is computed in one piece, as if it were one long gas day: much faster.
    repeatability_stated : bool
        False: the noise of readings is left to be estimated.
    """
    simulated = campaign.simulate(factors)
    found = []
    for first in range(0, len(simulated.sites), BATCH):
        some = range(first, min(first + BATCH, len(simulated.sites)))
        found += _compare(
            simulated, some, factors, whole=whole, repeatability_stated=repeatability_stated
        )
    return Outcome(*(np.array(part) for part in zip(*found, strict=True)))


def _compare(
    simulated: Simulated,
    sites: Sequence[int],
    factors: Mapping[str, float],
    *,
    whole: bool,
    repeatability_stated: bool,
) -> list[tuple[np.ndarray, np.ndarray, np.ndarray]]:
    noise = factors[NOISE_GROUP]
    stated = index_of(0)
    repeatability = {name: noise * size for name, size in stated.repeatability.items()}
    records = hourly_records(
        [
            day
            for site in sites
            for meter in METERS
            for day in _meter_days(simulated, site, meter, whole=whole)
        ],
        _LIBRARY,
        components=stated.components,
        repeatability=repeatability if repeatability_stated else {},
    )
    by_site = iter(records)
    pieces = 1 if whole else simulated.period.days
    found = []
    for site in sites:
        totals, doubts = [], []
        for _ in METERS:
            days = [next(by_site) for _ in range(pieces)]
            figures = [day_total(day) for day in days]
            assert all(figure.measured_fraction == 1.0 for figure in figures)
            totals.append([fsum(getattr(figure, q) for figure in figures) for q in QUANTITIES])
            sources = _sources(
                simulated.sites[site] % DESIGNS, days[0].parameters, tuple(factors.items())
            )
            doubts.append(add_up((1.0, day_doubt(day, sources)) for day in days))
        if noise == 0.0:
            doubts = [Doubt(doubt.contributions, NOTHING) for doubt in doubts]
        true = np.array([simulated.truth[meter][site] for meter in METERS])
        measured = np.array(totals)
        imbalance = measured[0] - measured[1:].sum(axis=0)
        doubts.append(add_up([(1.0, doubts[0]), *((-1.0, doubt) for doubt in doubts[1:])]))
        found.append(
            (
                np.vstack([measured - true, imbalance]),
                np.array(
                    [[doubt.standard_uncertainty(q) for q in QUANTITIES] for doubt in doubts],
                    dtype=np.float64,
                ),
                np.vstack([true, true[0]]),
            )
        )
    assert next(by_site, None) is None
    return found


@cache
def _sources(
    number: int, parameters: tuple[tuple[str, str], ...], factors: tuple[tuple[str, float], ...]
) -> tuple[UncertaintySource, ...]:
    """Return the sources of a design that act on a meter, each as many times as large as asked."""
    by_group = dict(factors)
    found = []
    for source in index_of(number).sources_of(parameters):
        (group,) = [name for name, names in GROUPS.items() if re.fullmatch(names, source.name)]
        factor = by_group[group]
        if factor != 0.0:
            parts = tuple(
                replace(part, size=factor * part.size, growth=factor * part.growth)
                for part in source.parts
            )
            found.append(replace(source, parts=parts))
    return tuple(found)


def _meter_days(simulated: Simulated, site: int, meter: str, *, whole: bool) -> Iterator[MeterDay]:
    """Yield the gas days of a meter with the readings that can serve."""
    number = simulated.sites[site] % DESIGNS
    terms = index_of(number).meters[meter].terms.entries[0].value
    roles = ("differential_pressure", "static_pressure", "temperature")
    for gas_day, start, end in _spans(simulated.period, number, whole=whole):
        served = {}
        for role in roles:
            name = getattr(terms, role)
            at = _instants(simulated.period, every_third=role == "temperature")
            low = int(np.searchsorted(at, start, side="right")) - 1
            high = int(np.searchsorted(at, end, side="left")) + 1
            values = np.ascontiguousarray(simulated.logs[name][site, low:high])
            served[role] = ((start, end, _series(number, name, at[low:high], values)),)
        yield MeterDay(
            meter=meter,
            gas_day=gas_day,
            start=start,
            end=end,
            eras=_eras(number, meter, start, end),
            barometer=(),
            **served,
        )


def _series(number, signal, instants, values):
    of = index_of(number).signals[signal]
    never = np.zeros(len(instants), dtype=np.bool_)
    carry = Carry(of.between is Between.LINEAR, of.maximum_gap, of.maximum_age, of.interval)
    return Series(instants, values, never, never, carry)


@cache
def _instants(period: Period, *, every_third: bool) -> np.ndarray:
    instants = period.instants.astype(np.int64) * SECOND
    return instants[::EVERY_THIRD] if every_third else instants


@cache
def _spans(period: Period, number: int, *, whole: bool) -> tuple[tuple[date, int, int], ...]:
    """Return gas days with start and end [UTC us], or the whole period as one."""
    calendar = index_of(number).site.calendar
    days = [(day, calendar.start(day), calendar.end(day)) for day in period.gas_days]
    return ((days[0][0], days[0][1], days[-1][2]),) if whole else tuple(days)


@cache
def _eras(number: int, meter: str, start: int, end: int) -> tuple[Era, ...]:
    index = index_of(number)
    return eras_of(index, index.meters[meter], start, end)
