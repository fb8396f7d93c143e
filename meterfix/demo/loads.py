"""What really flows and at what state: weather, shifts, kilns, compressors, supply pressure.

All of it is drawn for the whole month from one random seed, so that a few days of the month are the
same days whether simulated alone or with the rest. Every stream of random numbers belongs to a
name; adding one changes no other.
"""

from __future__ import annotations

from dataclasses import dataclass
from zlib import crc32

import numpy as np
from numpy.typing import NDArray

from meterfix.demo.works import BAROMETER_INTERVAL_S, ZERO_CELSIUS, ZONE, Month
from meterfix.model.calendar import SECOND, from_microseconds

Floats = NDArray[np.float64]
Instants = NDArray[np.int64]
Truths = NDArray[np.bool_]

GAS_INTERVAL_S = 120
AIR_INTERVAL_S = 60
_DAY_S = 86_400.0


def stream_of(seed: int, name: str) -> np.random.Generator:
    """Return the random numbers that belong to a name under a seed."""
    return np.random.Generator(np.random.PCG64([seed, crc32(name.encode())]))


def wander(
    rng: np.random.Generator, count: int, interval_s: float, memory_s: float, spread: float
) -> Floats:
    """Return a wandering value around 0.

    Parameters
    ----------
    rng : numpy.random.Generator
        Where its steps come from.
    count : int
        Number of values.
    interval_s, memory_s : float
        Time between values, and the time over which it forgets where it was. [s]
    spread : float
        Standard deviation, in the unit of what wanders.

    Returns
    -------
    (count,) array
        A first-order autoregressive series, stationary from the first value on.
    """
    kept = float(np.exp(-interval_s / memory_s))
    fresh = spread * float(np.sqrt(1.0 - kept * kept))
    value = spread * float(rng.standard_normal())
    values = []
    for step in rng.standard_normal(count).tolist():
        values.append(value)
        value = kept * value + fresh * step
    return np.array(values)


def grid(start: int, end: int, interval_s: int) -> Instants:
    """Return every instant from start to end, both included [UTC us]."""
    return np.arange(start, end + 1, interval_s * SECOND, dtype=np.int64)


@dataclass(frozen=True)
class LocalClock:
    """What wall clocks and calendars at the works show at some instants."""

    weekday: NDArray[np.int64]
    """0 is Monday."""
    hour: Floats
    """0 to 24."""
    day: NDArray[np.int64]
    """Days since 1970."""


def local_clock(instants: Instants) -> LocalClock:
    """Return the local clock at the instants; zones change at whole hours of UTC."""
    hours = instants // (3600 * SECOND)
    distinct, which = np.unique(hours, return_inverse=True)
    offsets = np.array(
        [_offset_s(int(hour) * 3600 * SECOND) for hour in distinct.tolist()], dtype=np.float64
    )
    local = instants / SECOND + offsets[which]
    day = np.floor(local / _DAY_S).astype(np.int64)
    return LocalClock((day + 3) % 7, (local - day * _DAY_S) / 3600.0, day)


def _offset_s(instant: int) -> float:
    offset = from_microseconds(instant).astimezone(ZONE).utcoffset()
    assert offset is not None
    return offset.total_seconds()


@dataclass(frozen=True)
class RunState:
    """What is true in a run at its knots; between them it runs linearly.

    `static_pressure` is gauge, so that the barometer's own course need not be known here.
    """

    mass_flow: Floats
    """kg/s."""
    static_pressure: Floats
    """Gauge, at the upstream tapping [Pa]."""
    temperature: Floats
    """At the upstream tapping [K]."""


@dataclass(frozen=True)
class Truth:
    """The whole month as it was."""

    gas_knots: Instants
    air_knots: Instants
    barometer_knots: Instants
    barometric_pressure: Floats
    """Absolute, at the barometer's knots [Pa]."""
    runs: dict[str, RunState]

    def knots_of(self, run: str) -> Instants:
        """Return the instants at which a run's state is given."""
        return self.air_knots if run.startswith("FA") else self.gas_knots


def month_truth(seed: int, month: Month) -> Truth:
    """Return what really flowed in the month.

    Parameters
    ----------
    seed : int
        The same seed gives the same month.
    month : Month
        Whose month.

    Returns
    -------
    Truth
        Closed: at every instant what the mains carry is what their consumers take.
    """
    barometer = grid(month.start, month.end, BAROMETER_INTERVAL_S)
    gas = grid(month.start, month.end, GAS_INTERVAL_S)
    air = grid(month.start, month.end, AIR_INTERVAL_S)
    weather = wander(
        stream_of(seed, "barometric pressure"),
        barometer.size,
        BAROMETER_INTERVAL_S,
        60 * 3600,
        850.0,
    )
    return Truth(
        gas_knots=gas,
        air_knots=air,
        barometer_knots=barometer,
        barometric_pressure=98_600.0 + weather,
        runs={**_gas_side(seed, month, gas), **_air_side(seed, month, air)},
    )


def _ambient(seed: int, month: Month, knots: Instants, interval_s: int) -> Floats:
    """Outdoor temperature [degC]: autumn, day and night, and weather."""
    hourly = grid(month.start, month.end, 3600)
    weather = wander(stream_of(seed, "weather"), hourly.size, 3600.0, 36 * 3600.0, 2.0)
    elapsed = (knots - month.start) / (SECOND * _DAY_S)
    clock = local_clock(knots)
    daily = 3.4 * np.cos(2.0 * np.pi * (clock.hour - 15.0) / 24.0)
    gust = wander(stream_of(seed, f"gusts {interval_s}"), knots.size, interval_s, 1800.0, 0.2)
    return 12.5 - 0.22 * elapsed + daily + np.interp(knots, hourly, weather) + gust


def _spray_dryer(seed: int, month: Month, knots: Instants, clock: LocalClock) -> Floats:
    """Mass flow [kg/s]: Monday 06:30 to Saturday 14:00, a level per shift, nozzle cleaning."""
    rng = stream_of(seed, "spray dryer")
    week = clock.weekday * 24.0 + clock.hour
    working = (week >= 6.5) & (week < 5 * 24.0 + 14.0)
    shift = clock.day * 3 + (clock.hour // 8.0).astype(np.int64)
    levels = rng.uniform(0.86, 1.06, int(shift.max() - shift.min()) + 1)
    flow = 0.44 * levels[shift - shift.min()]
    flow = flow * (1.0 + wander(rng, knots.size, GAS_INTERVAL_S, 1200.0, 0.02))
    cleaning_start = 120.0 * np.floor(rng.uniform(0.0, 1.0, levels.size) * 200.0)
    into_shift = (clock.hour % 8.0) * 3600.0
    begun = cleaning_start[shift - shift.min()]
    cleaning = (into_shift >= begun) & (into_shift < begun + 1320.0)
    standing_from, standing_to = month.standstill
    standing = (knots >= standing_from) & (knots <= standing_to)
    return np.where(working & ~cleaning & ~standing, flow, 0.0)


def _boiler_house(seed: int, knots: Instants, clock: LocalClock, ambient: Floats) -> Floats:
    """Mass flow [kg/s]: heating by the weather, set back at night, never off."""
    rng = stream_of(seed, "boiler house")
    call = 0.024 + 0.0105 * np.maximum(18.0 - ambient, 1.0)
    night = (clock.hour < 5.0) | (clock.hour >= 22.0)
    swing = 1.0 + wander(rng, knots.size, GAS_INTERVAL_S, 1500.0, 0.04)
    return np.clip(call * np.where(night, 0.74, 1.0) * swing, 0.05, 0.24)


def _roller_kiln(seed: int, knots: Instants, clock: LocalClock) -> Floats:
    """Mass flow [kg/s]: day and night, less at weekends, product changes."""
    rng = stream_of(seed, "roller kiln")
    week = clock.weekday * 24.0 + clock.hour
    weekend = np.clip(np.minimum(week - (5 * 24.0 + 14.0), 7 * 24.0 - week) / 4.0, 0.0, 1.0)
    level = 0.20 - 0.06 * weekend
    days = clock.day - clock.day.min()
    change = rng.uniform(6.0, 20.0, int(days.max()) + 1)[days]
    changing = (clock.hour >= change) & (clock.hour < change + 1.2)
    swing = 1.0 + wander(rng, knots.size, GAS_INTERVAL_S, 7200.0, 0.02)
    return level * np.where(changing, 0.84, 1.0) * swing


def _shuttle_kiln(seed: int, knots: Instants, clock: LocalClock) -> Floats:
    """Mass flow [kg/s]: one firing after another, each with its own start; none on Sundays."""
    rng = stream_of(seed, "shuttle kiln")
    hours = (knots - knots[0]) / (3600.0 * SECOND)
    program_hours = np.array([0.0, 1.0, 5.5, 9.5, 9.6, 12.0])
    program_flow = np.array([0.055, 0.075, 0.175, 0.150, 0.060, 0.055])
    flow = np.zeros(knots.size)
    start = 2.0
    while start < hours[-1]:
        first = min(int(np.searchsorted(hours, start)), knots.size - 1)
        weekend = clock.weekday[first] >= 5
        if not weekend:
            into = hours - start
            firing = (into >= 0.0) & (into < 12.0)
            size = float(rng.uniform(0.92, 1.06))
            fired = size * np.interp(into, program_hours, program_flow)
            flow = np.where(firing, fired, flow)
        start += float(rng.uniform(19.0, 25.0))
    return flow * (1.0 + wander(rng, knots.size, GAS_INTERVAL_S, 900.0, 0.015))


def _tile_dryers(seed: int, knots: Instants, clock: LocalClock) -> Floats:
    """Mass flow [kg/s]: two shifts, burners that go between high and low fire."""
    rng = stream_of(seed, "tile dryers")
    working = (clock.weekday < 5) & (clock.hour >= 6.2) & (clock.hour < 22.0)
    working |= (clock.weekday == 5) & (clock.hour >= 6.2) & (clock.hour < 14.0)
    pace = wander(rng, knots.size, GAS_INTERVAL_S, 4 * 3600.0, 0.15)
    phase = np.cumsum(GAS_INTERVAL_S / 2700.0 * (1.0 + np.clip(pace, -0.5, 0.5)))
    flow = np.where(phase % 1.0 < 0.6, 0.105, 0.052)
    return np.where(working, flow * (1.0 + wander(rng, knots.size, 120.0, 900.0, 0.02)), 0.0)


def _gas_side(seed: int, month: Month, knots: Instants) -> dict[str, RunState]:
    """Return the state of every gas run, mass closed."""
    clock = local_clock(knots)
    ambient = _ambient(seed, month, knots, GAS_INTERVAL_S)
    flows = {
        "FT-201": _spray_dryer(seed, month, knots, clock),
        "FT-203": _boiler_house(seed, knots, clock, ambient),
        "FT-301": _roller_kiln(seed, knots, clock),
        "FT-302": _shuttle_kiln(seed, knots, clock),
        "FT-303": _tile_dryers(seed, knots, clock),
    }
    flows["FT-202"] = flows["FT-301"] + flows["FT-302"] + flows["FT-303"]
    bought = flows["FT-201"] + flows["FT-202"] + flows["FT-203"]
    flows["FT-102"] = _second_run(seed, knots, clock) * bought
    flows["FT-101"] = bought - flows["FT-102"]

    def by(name: str, memory_h: float, spread: float) -> Floats:
        return wander(stream_of(seed, name), knots.size, GAS_INTERVAL_S, memory_h * 3600.0, spread)

    elapsed = (knots - month.start) / (SECOND * _DAY_S)
    daily = np.cos(2.0 * np.pi * (clock.hour - 4.0) / 24.0)
    supply = 12e5 + by("supply pressure", 30.0, 1.4e5) + 0.5e5 * daily - 0.25e5 * bought
    supply = np.clip(supply, 8.1e5, 15.9e5)
    supply_temperature = 11.8 - 0.05 * elapsed + by("supply temperature", 24.0, 0.5)
    header = 3.2e5 + by("works header", 0.5, 0.02e5) - 0.12e5 * bought
    # A regulator throttles: about 0.45 K/bar colder behind it, then the pipe warms it again.
    throttled = supply_temperature - 0.45e-5 * (supply - header)
    hall = header - 0.75e5 - 0.25e5 * flows["FT-202"] + by("hall header", 0.3, 0.01e5)
    warmed = throttled + 0.30 * (ambient - throttled)
    indoors = 19.0 + 0.25 * (ambient - 10.0)
    states = {
        "FT-101": (supply, supply_temperature),
        "FT-102": (supply - 700.0, supply_temperature + 0.08),
        "FT-201": (header, warmed + by("FT-201 temperature", 3.0, 0.3)),
        "FT-202": (header - 1200.0, warmed + 0.5 + by("FT-202 temperature", 3.0, 0.3)),
        "FT-203": (header - 900.0, warmed + 0.2 + by("FT-203 temperature", 3.0, 0.3)),
    }
    for name, mixed in (("FT-301", 0.45), ("FT-302", 0.55), ("FT-303", 0.60)):
        temperature = warmed + mixed * (indoors - warmed) + by(f"{name} temperature", 2.0, 0.4)
        states[name] = (hall - 400.0 * mixed, temperature)
    return {
        name: RunState(flows[name], pressure, celsius + ZERO_CELSIUS)
        for name, (pressure, celsius) in states.items()
    }


def _second_run(seed: int, knots: Instants, clock: LocalClock) -> Floats:
    """Run B's share of the supply [-]: shut from Saturday 15:00 to Monday 06:10."""
    week = clock.weekday * 24.0 + clock.hour
    shut = (week >= 5 * 24.0 + 15.0) | (week < 6.0 + 1.0 / 6.0)
    share = 0.47 + wander(stream_of(seed, "run share"), knots.size, 120.0, 12 * 3600.0, 0.012)
    return np.where(shut, 0.0, share)


def _air_side(seed: int, month: Month, knots: Instants) -> dict[str, RunState]:
    """Return the state of every air run, mass closed."""
    clock = local_clock(knots)
    ambient = _ambient(seed, month, knots, AIR_INTERVAL_S)

    def by(name: str, memory_s: float, spread: float) -> Floats:
        return wander(stream_of(seed, name), knots.size, AIR_INTERVAL_S, memory_s, spread)

    week = clock.weekday * 24.0 + clock.hour
    pressing = (week >= 6.0) & (week < 5 * 24.0 + 14.0)
    press_shop = np.where(pressing, 0.165, 0.062) * (1.0 + by("press shop", 600.0, 0.05))
    glazing = (clock.weekday < 5) & (clock.hour >= 6.0) & (clock.hour < 22.0)
    glaze_line = np.where(glazing, 0.105 * (1.0 + by("glaze line", 900.0, 0.06)), 0.0)
    # A compressor that loads and unloads: a sawtooth between its two set points.
    pace = np.cumsum(AIR_INTERVAL_S / 760.0 * (1.0 + np.clip(by("load", 3600.0, 0.2), -0.6, 0.6)))
    sawtooth = 2.0 * np.abs(2.0 * (pace % 1.0) - 1.0) - 1.0
    main = 6.5e5 + 0.22e5 * sawtooth + by("air main", 6 * 3600.0, 0.03e5)
    aftercooler = 25.0 + 0.3 * (ambient - 10.0) + by("aftercooler", 3600.0, 0.4) + ZERO_CELSIUS
    hall = aftercooler - 2.5
    taken = press_shop + glaze_line
    return {
        "FA-401": RunState(taken, main, aftercooler),
        "FA-411": RunState(press_shop, main - 0.06e5 - 0.5e5 * press_shop, hall),
        "FA-412": RunState(glaze_line, main - 0.05e5 - 0.6e5 * glaze_line, hall - 0.7),
    }
