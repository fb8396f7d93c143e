"""One meter's gas day as calc wants it: constants cut into eras, readings cut to what serves."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping
from datetime import date
from itertools import pairwise
from typing import TypeVar

import numpy as np

from meterfix.frames import Carry, Era, MeterDay, Series
from meterfix.model.site import Meter, MeterTerms
from meterfix.model.source import Between, Excluded, Holds, Signal, Transmitter
from meterfix.model.versions import Versions, change_instants
from meterfix.run.choose import Chosen
from meterfix.run.signals import SiteIndex, signals_in

Part = tuple[int, int, Series]
Value = TypeVar("Value")


def meter_day(
    index: SiteIndex, meter: Meter, gas_day: date, chosen: Mapping[str, Chosen]
) -> MeterDay:
    """Return the meter's gas day with its constants and readings.

    Parameters
    ----------
    index : the site.
    meter, gas_day : what is to be computed.
    chosen : readings by signal, over a window that holds the gas day and the meter's reach.
    """
    calendar = index.site.calendar
    start, end = calendar.start(gas_day), calendar.end(gas_day)
    eras = eras_of(index, meter, start, end)
    reach = index.reach(meter)
    terms = [(era.start, era.end, era.meter) for era in eras]
    differential = _parts(
        index, [(a, b, t.differential_pressure) for a, b, t in terms], chosen, 0, reach
    )
    # pressures and temperatures serve the dp records, the one beyond each edge included
    first = min((int(s.instants[0]) for _, _, s in differential if len(s.instants)), default=start)
    last = max((int(s.instants[-1]) for _, _, s in differential if len(s.instants)), default=end)
    outward = max(start - first, last - end, 0)

    def served(name_of: Callable[[MeterTerms], str]) -> tuple[Part, ...]:
        return _parts(index, [(a, b, name_of(t)) for a, b, t in terms], chosen, outward, reach)

    barometers = [
        (era.start, era.end, atmosphere.signal)
        for era in eras
        if (atmosphere := _in_force(index.site.atmosphere, era.start)).signal is not None
    ]
    return MeterDay(
        meter=meter.name,
        gas_day=gas_day,
        start=start,
        end=end,
        eras=eras,
        differential_pressure=differential,
        static_pressure=served(lambda t: t.static_pressure),
        temperature=served(lambda t: t.temperature),
        barometer=_parts(index, barometers, chosen, outward, reach),
    )


def eras_of(index: SiteIndex, meter: Meter, start: int, end: int) -> tuple[Era, ...]:
    """Return the intervals of [start, end) over which the meter's constants stand still."""
    site = index.site
    gases = {gas.name: gas for gas in site.gases}
    histories: list[Versions[object]] = [meter.terms, site.base_conditions, site.atmosphere]
    for version in meter.terms.entries:
        histories.append(gases[version.value.gas].terms)
        histories.extend(index.signals[name].transmitter for name in signals_in(version.value))
    edges = (start, *change_instants(histories, start, end), end)
    eras: list[Era] = []
    for a, b in pairwise(edges):
        terms = meter.terms.in_force(a)
        gas = gases[terms.gas].terms.in_force(a) if terms is not None else None
        if terms is None or gas is None:
            continue
        differential = index.signals[terms.differential_pressure]
        static = index.signals[terms.static_pressure]
        temperature = index.signals[terms.temperature]
        transmitter = differential.transmitter.in_force(a)
        if transmitter is None:
            continue
        eras.append(
            Era(
                start=a,
                end=b,
                meter=terms,
                gas=gas,
                base=_in_force(site.base_conditions, a),
                energy=site.contract.energy if gas.calorific_value is not None else None,
                atmospheric_pressure=_in_force(site.atmosphere, a).value,
                static_pressure_gauge=static.gauge,
                differential_pressure_rooted=differential.rooted,
                differential_pressure_range=transmitter,
                static_pressure_range=_transmitter(static, a),
                temperature_range=_transmitter(temperature, a),
                barometer=_in_force(site.atmosphere, a).signal,
            )
        )
    return tuple(eras)


def input_digest(index: SiteIndex, day: MeterDay) -> str:
    """Return the SHA-256 of everything that the day's figures follow from, by typed value."""
    digest = hashlib.sha256()

    def text(*parts: object) -> None:
        digest.update(("\x1f".join(repr(part) for part in parts) + "\x1e").encode())

    text(day.meter, day.gas_day.isoformat(), day.start, day.end, day.eras)
    subjects = subjects_of(index, day)
    text("uncertainty", index.sources_on(subjects))
    text("repeatability", {s: r for s, r in index.repeatability.items() if s in subjects})
    for role in ("differential_pressure", "static_pressure", "temperature", "barometer"):
        for start, end, series in getattr(day, role):
            excluded = tuple(x for x in series.excluded if x.end > day.start and x.start < day.end)
            text(role, start, end, series.carry, series.mean_values, excluded)
            text("readings", len(series.instants))
            digest.update(np.ascontiguousarray(series.instants, dtype="<i8").tobytes())
            digest.update(np.ascontiguousarray(series.values, dtype="<f8").tobytes())
            digest.update(np.ascontiguousarray(series.disputed, dtype=np.uint8).tobytes())
            digest.update(np.ascontiguousarray(series.implausible, dtype=np.uint8).tobytes())
            if series.doubtful is not None and series.doubtful.any():
                text("doubtful")
                digest.update(np.ascontiguousarray(series.doubtful, dtype=np.uint8).tobytes())
    return digest.hexdigest()


def subjects_of(index: SiteIndex, day: MeterDay) -> tuple[str, ...]:
    """Return the names under which sources of uncertainty act on the day, see PARAMETERS."""
    found: set[str] = set()
    for era in day.eras:
        found.update(signals_in(era.meter))
        found.add(f"{day.meter} {era.meter.device.label}".strip())
        found.add(era.meter.gas)
        atmosphere = _in_force(index.site.atmosphere, era.start).signal
        found.add("site" if atmosphere is None else f"barometer {atmosphere}")
    return tuple(sorted(found))


def _parts(
    index: SiteIndex,
    named: list[tuple[int, int, str]],
    chosen: Mapping[str, Chosen],
    outward: int,
    reach: int,
) -> tuple[Part, ...]:
    """Return each signal's stretch of the day, neighbouring stretches of one signal joined."""
    joined: list[tuple[int, int, str]] = []
    for start, end, name in named:
        if joined and joined[-1][1] == start and joined[-1][2] == name:
            joined[-1] = (joined[-1][0], end, name)
        else:
            joined.append((start, end, name))
    return tuple(
        (start, end, _series(index.signals[name], chosen.get(name), start, end, outward, reach))
        for start, end, name in joined
    )


def _series(
    signal: Signal, chosen: Chosen | None, start: int, end: int, outward: int, reach: int
) -> Series:
    """Return the signal's readings over [start, end] with the one beyond each edge."""
    empty = np.zeros(0, dtype=np.int64)
    instants = empty if chosen is None else chosen.instants
    kept = (instants >= start - reach) & (instants <= end + reach)
    for excluded in signal.excluded:
        kept &= (instants < excluded.start) | (instants >= excluded.end)
    at = np.flatnonzero(kept)
    # one reading at or before the window's start and one at or after its end can matter
    first = max(int(np.searchsorted(instants[at], start - outward, side="right")) - 1, 0)
    last = int(np.searchsorted(instants[at], end + outward, side="left")) + 1
    at = at[first:last]
    if chosen is None:
        values, disputed, implausible = np.zeros(0), empty.astype(bool), empty.astype(bool)
        doubtful = implausible
    else:
        values, disputed = chosen.values[at], chosen.disputed[at]
        implausible, doubtful = chosen.implausible[at], chosen.doubtful[at]
    return Series(
        instants=np.ascontiguousarray(instants[at]),
        values=np.ascontiguousarray(values),
        disputed=np.ascontiguousarray(disputed),
        implausible=np.ascontiguousarray(implausible),
        carry=Carry(
            linear=signal.between is Between.LINEAR,
            maximum_gap=signal.maximum_gap,
            maximum_age=signal.maximum_age,
            interval=signal.interval,
        ),
        excluded=_near(signal.excluded, start - reach, end + reach),
        mean_values=signal.holds is Holds.MEAN,
        doubtful=np.ascontiguousarray(doubtful),
    )


def _near(excluded: tuple[Excluded, ...], start: int, end: int) -> tuple[Excluded, ...]:
    return tuple(x for x in excluded if x.end > start and x.start < end)


def _transmitter(signal: Signal, instant: int) -> Transmitter | None:
    return signal.transmitter.in_force(instant) if signal.transmitter.entries else None


def _in_force(history: Versions[Value], instant: int) -> Value:
    """Return the version in force; the site file guarantees that there is one."""
    value = history.in_force(instant)
    if value is None:
        message = f"nothing is in force at {instant} us"
        raise LookupError(message)
    return value
