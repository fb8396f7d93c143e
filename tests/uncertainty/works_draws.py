"""Monte Carlo over the whole calculation (JCGM 101): nothing linearised but the statement.

Every draw disturbs what the calculation reads, is told or computes on its way, and gives the
readings their noise. Draws stand side by side as hours of one long day: a reading holds for its
interval, so an hour's total is a rate, and a draw's total is the sum of its rates times their
time. The statement comes from meter-days as they are.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from datetime import date, timedelta
from functools import cache

import numpy as np
from works_campaign import ROWS
from works_physics import COMPONENTS
from works_simulated import QUANTITIES
from works_site import (
    GROUPS,
    METERS,
    NOISE,
    RECTANGULAR,
    ROOT3,
    ROOTED,
    SUPPLY,
    design,
    index_of,
    transmitter,
)

from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.totals import day_total, hourly_records
from meterfix.calc.uncertainty import Doubt, add_up, day_doubt, hourly_standard_uncertainty
from meterfix.frames import HOURLY_INDEX, SENSITIVE, Carry, Era, MeterDay, Series
from meterfix.model.calendar import DAY, HOUR, SECOND
from meterfix.model.gas import Composition
from meterfix.model.uncertainty import UncertaintySource
from meterfix.run.days import eras_of

PERIODS = ("hour", "day", "month")
FIRST_DAY = date(2026, 9, 1)
ALIKE = 200
"""Draws that share a composition: each composition is a gas of its own, with its own tables."""
_LIBRARY = GasLibrary()


@dataclass(frozen=True)
class Level:
    """At what differential pressure the meters work."""

    words: str
    differential_pressure: float
    """Of the consumers [Pa]; the supply's is 2.5 times as large."""
    swing: float
    """Of dp, pressure and temperature over the period, relative to the usual one."""
    over_uncertainty: float | None
    """dp over its own standard uncertainty, which the transmitters' zero is made large enough
    for; None: as the site file says."""

    def of(self, meter: str) -> float:
        return self.differential_pressure * (2.5 if meter == SUPPLY else 1.0)


HIGH = Level("high dp", 6000.0, 1.0, None)
LOW = Level("dp = 10 u(dp)", 3000.0, 0.0, 10.0)
VERY_LOW = Level("dp = 4 u(dp)", 3000.0, 0.0, 4.0)


@dataclass(frozen=True)
class _States:
    """Readings of a meter: (states,) arrays; twelve of an hour, 24 of a gas day, 30 of a month."""

    start: np.ndarray
    """UTC us."""
    interval: np.ndarray
    """us."""
    values: Mapping[str, np.ndarray]
    """By signal, as logged."""

    @property
    def middle(self):
        return self.start + 0.5 * self.interval


@dataclass(frozen=True)
class Compared:
    """Standard uncertainties by draws and as stated, (rows, periods, 3); kg, m3, J."""

    drawn: np.ndarray
    half_interval: np.ndarray
    """Of the drawn one's own 95 % interval, relative."""
    stated: np.ndarray
    total: np.ndarray
    """As computed without disturbance; of the imbalance, what went in."""
    coverage: np.ndarray
    """(2, rows, periods, 3): between these 95 % of the drawn totals lie, less that total."""

    @property
    def ratio(self):
        with np.errstate(invalid="ignore"):
            return self.stated / self.drawn


def monte_carlo(number: int, level: Level, draws: int, seed: int) -> Compared:
    """Return the standard uncertainties of one design's meters and imbalance at a level.

    Parameters
    ----------
    number : int
        Of the design.
    level : Level
    draws : int
        A multiple of `ALIKE`.
    seed : int
    """
    index = index_of(number)
    start = index.site.calendar.start(FIRST_DAY)
    states = {meter: _states(meter, level, start, number) for meter in METERS}
    sources = _sources(number, level, states)
    generator = np.random.default_rng([seed, number])
    every = np.concatenate(
        [_draw(number, level, states, sources, generator) for _ in range(draws // ALIKE)]
    )
    imbalance = every[:, 0] - every[:, 1:].sum(axis=1)
    every = np.concatenate([every, imbalance[:, np.newaxis]], axis=1)
    centred = every - every.mean(axis=0)
    variance = (centred**2).mean(axis=0)
    fourth = (centred**4).mean(axis=0)
    uncertainty, total = _stated(number, states, sources)
    middle = total.copy()
    middle[-1] = total[0] - total[1:-1].sum(axis=0)
    coverage = np.quantile(every, (0.025, 0.975), axis=0) - middle
    with np.errstate(invalid="ignore", divide="ignore"):
        half = 1.96 * np.sqrt((fourth / variance**2 - 1.0) / draws) / 2.0
    return Compared(np.sqrt(variance), half, uncertainty, total, coverage)


# --- readings --------------------------------------------------------------------------------


def _states(meter: str, level: Level, start: int, number: int) -> _States:
    begin = np.concatenate(
        [
            start + 300 * SECOND * np.arange(12),
            start + HOUR * np.arange(24),
            start + DAY * np.arange(30),
        ]
    )
    interval = np.repeat([300 * SECOND, HOUR, DAY], [12, 24, 30])
    turn = np.arange(len(begin)) * 0.7
    place = list(METERS).index(meter)
    dp = level.of(meter) * (1.0 + 0.25 * level.swing * np.sin(turn + place))
    terms = index_of(number).meters[meter].terms.entries[0].value
    middle = 8.5e5 if meter == SUPPLY else 2.9e5
    pressure = middle * (1.0 + 0.03 * level.swing * np.cos(turn))
    temperature = 284.0 + 2.0 * level.swing * np.sin(0.3 * turn)
    return _States(
        begin,
        interval,
        {
            terms.differential_pressure: _logged(meter, dp),
            terms.static_pressure: pressure,
            terms.temperature: temperature,
        },
    )


def _logged(meter, dp):
    full = 100.0 * METERS[meter][4][1]
    return np.sqrt(dp / full) if meter == ROOTED else dp


def _sources(
    number: int, level: Level, states: Mapping[str, _States]
) -> tuple[UncertaintySource, ...]:
    """Return the design's sources, the zeros as large as the level asks."""
    sources = index_of(number).site.uncertainty
    if level.over_uncertainty is None:
        return sources
    found = []
    for source in sources:
        one = source
        for meter in METERS:
            if source.name == f"{transmitter(meter)} zero":
                dp = level.of(meter)
                last = states[meter].middle[-1]
                others = NOISE[transmitter(meter)] ** 2 + sum(
                    _dp_size(part, dp, last) ** 2
                    for other in sources
                    for part in other.parts
                    if part.subject == transmitter(meter) and other is not source
                )
                size = ((dp / level.over_uncertainty) ** 2 - others) ** 0.5
                one = replace(source, parts=(replace(source.parts[0], size=size),))
        found.append(one)
    return tuple(found)


def _dp_size(part, dp, instant):
    size = _size(part, instant)
    return size * dp if part.parameter.endswith("_span") else size


def _size(part, instant):
    """Return a part's size at an instant, drift included."""
    assert part.end is None
    return part.size + part.growth * max(instant - (part.since or 0), 0) / SECOND


# --- draws -----------------------------------------------------------------------------------


def _draw(number, level, states, sources, generator) -> np.ndarray:
    """Return the (ALIKE, meters, periods, 3) totals of draws that share a composition."""
    z = {}
    for source in sources:
        count = 1 if source.kind == "composition" else ALIKE
        (group,) = [name for name, names in GROUPS.items() if re.fullmatch(names, source.name)]
        if group in RECTANGULAR:
            z[source.name] = generator.uniform(-ROOT3, ROOT3, count)
        else:
            z[source.name] = generator.normal(size=count)
    middle = states[SUPPLY].middle
    noise = {
        name: size * generator.normal(size=len(middle) * ALIKE) for name, size in NOISE.items()
    }
    fractions = dict(design(number).composition)
    disturbances: dict[tuple[str, str], np.ndarray] = {}
    for source in sources:
        for part in source.parts:
            kind, _, component = part.parameter.partition(":")
            if kind == "fraction":
                fractions[component] += part.size * z[source.name][0]
                continue
            size = np.array([_size(part, instant) for instant in middle])
            amount = (size[:, np.newaxis] * z[source.name]).ravel()
            key = part.parameter, part.subject
            if level == VERY_LOW and part.parameter == "discharge_coefficient":
                # a dp near nothing leaves the limits of use, where no multiple is stated
                throat = design(number).throats[part.subject]
                ratio = np.array([throat.bore / throat.pipe])
                amount = amount * throat.coefficient_uncertainty(ratio)[0]
                key = "discharge_coefficient_relative", part.subject
            disturbances[key] = disturbances.get(key, 0.0) + amount
    total = sum(fractions[name] for name in COMPONENTS)
    composition = Composition(
        "mole", tuple((name, fractions[name] / total) for name in COMPONENTS), total
    )
    days = [_long_day(number, meter, states[meter], composition, noise) for meter in METERS]
    records = hourly_records(days, _LIBRARY, disturbances=disturbances)
    columns = [HOURLY_INDEX[name] for name in SENSITIVE]
    rates = np.stack([record.statistics[:, columns] for record in records], axis=1) / 3600.0
    assert level == VERY_LOW or np.isfinite(rates).all()
    # a dp that is drawn below minus the cut-off counts as no flow
    rates = np.nan_to_num(rates).reshape(len(middle), ALIKE, len(METERS), 3)
    amounts = rates * (states[SUPPLY].interval / SECOND)[:, np.newaxis, np.newaxis, np.newaxis]
    return np.stack(
        [amounts[:12].sum(axis=0), amounts[12:36].sum(axis=0), amounts[36:].sum(axis=0)], axis=2
    )


def _long_day(number, meter, states, composition, noise) -> MeterDay:
    """Return the readings of all draws, one an hour."""
    index = index_of(number)
    count = len(states.start) * ALIKE
    start = int(states.start[0])
    end = start + count * HOUR
    era = _era(number, meter, start)
    era = replace(era, end=end, gas=replace(era.gas, composition=composition))
    served = {}
    for role in ("differential_pressure", "static_pressure", "temperature"):
        name = getattr(index.meters[meter].terms.entries[0].value, role)
        values = np.repeat(states.values[name], ALIKE)
        if role == "differential_pressure" and meter == ROOTED:
            full = 100.0 * METERS[meter][4][1]
            dp = values**2 * full + noise[name]
            values = np.sign(dp) * np.sqrt(np.abs(dp) / full)
        else:
            values = values + noise[name]
        instants = start + HOUR * np.arange(count)
        served[role] = ((start, end, _held(instants, values, HOUR)),)
    return MeterDay(
        meter=meter, gas_day=FIRST_DAY, start=start, end=end, eras=(era,), barometer=(), **served
    )


def _held(instants, values, interval) -> Series:
    never = np.zeros(len(instants), dtype=np.bool_)
    carry = Carry(linear=False, maximum_gap=interval, maximum_age=interval, interval=interval)
    return Series(
        instants.astype(np.int64),
        np.ascontiguousarray(values),
        never,
        never,
        carry,
        mean_values=True,
    )


@cache
def _era(number: int, meter: str, start: int) -> Era:
    index = index_of(number)
    (era,) = eras_of(index, index.meters[meter], start, start + DAY)
    return era


# --- the statement ---------------------------------------------------------------------------


def _stated(number, states, sources) -> tuple[np.ndarray, np.ndarray]:
    """Return standard uncertainties and totals, (rows, periods, 3)."""
    index = index_of(number)
    asked = {"components": index.components, "repeatability": index.repeatability}
    uncertainty = np.zeros((len(ROWS), len(PERIODS), len(QUANTITIES)))
    total = np.zeros_like(uncertainty)
    doubts: dict[tuple[str, str], Doubt] = {}
    hours = []
    for n, meter in enumerate(METERS):
        hour, *days = hourly_records(_meter_days(number, meter, states[meter]), _LIBRARY, **asked)
        uncertainty[n, 0] = hourly_standard_uncertainty([(1.0, hour)], sources)[0]
        hours.append((1.0 if meter == SUPPLY else -1.0, hour))
        by_day = [day_doubt(day, sources) for day in days]
        doubts[meter, "day"] = by_day[0]
        doubts[meter, "month"] = add_up((1.0, doubt) for doubt in by_day[1:])
        figures = [day_total(record) for record in (hour, *days)]
        for place, some in enumerate((figures[:1], figures[1:2], figures[2:])):
            total[n, place] = [sum(getattr(one, q) for one in some) for q in QUANTITIES]
    uncertainty[-1, 0] = hourly_standard_uncertainty(hours, sources)[0]
    total[-1] = total[0]
    for place, period in enumerate(PERIODS[1:], start=1):
        signs = [(1.0 if meter == SUPPLY else -1.0, doubts[meter, period]) for meter in METERS]
        every = [*(doubt for _, doubt in signs), add_up(signs)]
        uncertainty[:, place] = [[d.standard_uncertainty(q) for q in QUANTITIES] for d in every]
    return uncertainty, total


def _meter_days(number, meter, states) -> list[MeterDay]:
    """Return an hour, a gas day and the gas days of a month with their readings."""
    index = index_of(number)
    terms = index.meters[meter].terms.entries[0].value
    found = []
    edges = [(0, 12, HOUR), (12, 36, DAY), *((36 + n, 37 + n, DAY) for n in range(30))]
    for low, high, length in edges:
        start, interval = int(states.start[low]), int(states.interval[low])
        end = start + length
        served = {}
        for role in ("differential_pressure", "static_pressure", "temperature"):
            values = states.values[getattr(terms, role)][low:high]
            served[role] = ((start, end, _held(states.start[low:high], values, interval)),)
        era = replace(_era(number, meter, start), end=end)
        found.append(
            MeterDay(
                meter=meter,
                gas_day=FIRST_DAY + timedelta(days=(start - int(states.start[0])) // DAY),
                start=start,
                end=end,
                eras=(era,),
                barometer=(),
                **served,
            )
        )
    return found
