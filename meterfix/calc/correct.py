"""Readings at the instants of dp to corrected rates, for many meters and eras at once.

All of it is element-wise: a record's bits depend on its own readings and its era's constants,
never on what else is in the batch. NaN = not known; a rate is exactly 0 only where there is
no flow.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, fields
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from meterfix.calc.gas.properties import GasLibrary, GasProperties
from meterfix.calc.primary.flow import Flow, orifice_flow
from meterfix.calc.primary.orifice import (
    LOWEST_PRESSURE_RATIO,
    geometry_outside_limits,
    pressure_loss,
    reynolds_number_outside_limits,
)
from meterfix.calc.primary.plates import Plates, plates_of
from meterfix.frames import FLAGS, MISSING, Era, Floats, Integers, Truths
from meterfix.model.gas import BaseConditions, CalorificBasis, GasTerms
from meterfix.model.site import EnergyTerms, Tapping, Thermometer

FLAG_BITS: dict[str, np.uint32] = {name: np.uint32(1 << n) for n, (name, _) in enumerate(FLAGS)}
"""The bit of each flag in `Corrected.flags`, in the order of `frames.FLAGS`."""
MISSING_CODES: dict[str, int] = {name: n for n, (name, _) in enumerate(MISSING)}
"""The value of each reason in `Corrected.missing`: its index in `frames.MISSING`."""
MEASURED = -1
"""The value of `Corrected.missing` where the record is measured, a zero flow included."""

_THERMOMETER_PASSES = 3
"""Passes that bring a downstream thermometer back to the upstream tapping: each makes the
temperature's error about 1,000 times smaller."""
_BLOCK = 1 << 18
"""Records worked on at a time, in whole eras; bounds the memory of a large batch."""


@dataclass(frozen=True, slots=True)
class EraRecords:
    """One era's records: aligned (n,) arrays at the instants of dp; n may be 0."""

    era: Era
    differential_pressure: Floats
    """As logged: Pa, or the fraction of full-scale flow where the era's dp is rooted [-]."""
    static_pressure: Floats
    """As logged, gauge or absolute as the era says [Pa]; NaN = missing."""
    temperature: Floats
    """As logged [K]; NaN = missing."""
    barometric_pressure: Floats | None
    """Absolute [Pa], NaN = missing; needed where the era has no atmospheric pressure. None
    there: missing for every record."""


@dataclass(frozen=True, slots=True)
class Corrected:
    """Corrected records, concatenated over the eras in the order given; (n,) arrays.

    What belongs to a flow (states, coefficients, flags) is given only for records with flow.
    """

    offsets: Integers
    """(eras + 1,): era k's records are [offsets[k], offsets[k + 1])."""
    differential_pressure: Floats
    """Linear, before the cut-off [Pa]."""
    static_pressure_absolute: Floats
    """At the upstream tapping [Pa]."""
    temperature_upstream: Floats
    """At the upstream tapping [K]."""
    line_density: Floats
    """At the upstream tapping [kg/m3]; NaN where there is no flow."""
    base_density: Floats
    """kg/m3; the era's."""
    mass_flow: Floats
    """kg/s; exactly 0 below the cut-off, NaN where not known."""
    line_volume_flow: Floats
    """m3/s at the upstream tapping; 0 and NaN as `mass_flow`."""
    base_volume_flow: Floats
    """m3/s at base conditions; 0 and NaN as `mass_flow`."""
    energy_flow: Floats
    """W; 0 and NaN as `mass_flow`, and NaN throughout an era without energy."""
    discharge_coefficient: Floats
    expansibility: Floats
    reynolds_number: Floats
    """Re_D."""
    isentropic_exponent: Floats
    dynamic_viscosity: Floats
    """Pa s."""
    compression_factor: Floats
    flags: NDArray[np.uint32]
    """Bits of `FLAG_BITS`, those that can be judged from a record alone; 0 without flow."""
    missing: Integers
    """`MEASURED`, or why the record is not: an index in `frames.MISSING`."""


@dataclass(frozen=True, slots=True)
class _States:
    """Line states of records that are ordered by gas; as the gas library gives them."""

    density: Floats
    compression_factor: Floats
    isentropic_exponent: Floats
    joule_thomson_coefficient: Floats
    dynamic_viscosity: Floats
    outside_range: Truths
    no_gas: Truths


class _Gases:
    """The gases of a batch, each evaluated once per distinct set of terms."""

    def __init__(self, library: GasLibrary) -> None:
        self._library = library
        self._numbers: dict[GasTerms, int] = {}
        self._seen: dict[int, tuple[GasTerms, int]] = {}
        self._properties: list[GasProperties] = []
        self._base_densities: dict[tuple[int, BaseConditions], float] = {}
        self._factors: dict[
            tuple[int, BaseConditions, EnergyTerms], tuple[float, CalorificBasis]
        ] = {}

    def number(self, terms: GasTerms) -> int:
        """Return the number by which this batch knows the gas; equal terms share one."""
        # hashing a composition costs more than looking its object up; the object is kept so
        # that its id cannot pass to another one
        known = self._seen.get(id(terms))
        if known is None:
            number = self._numbers.get(terms)
            if number is None:
                number = len(self._properties)
                self._numbers[terms] = number
                self._properties.append(self._library.properties(terms))
            known = (terms, number)
            self._seen[id(terms)] = known
        return known[1]

    def simplified(self, era: Era) -> bool:
        """Return whether the era's line density is from the ideal gas or a fixed Z."""
        return self._properties[self.number(era.gas)].simplified

    def base_density(self, era: Era) -> float:
        """Return the density at the era's base conditions [kg/m3]."""
        key = (self.number(era.gas), era.base)
        if key not in self._base_densities:
            self._base_densities[key] = self._properties[key[0]].base_density(era.base)
        return self._base_densities[key]

    def energy_factor(self, era: Era) -> tuple[float, CalorificBasis]:
        """Return the era's energy per base volume [J/m3] or mass [J/kg]; NaN if it has none."""
        if era.energy is None or era.gas.calorific_value is None:
            return float("nan"), CalorificBasis.MASS
        key = (self.number(era.gas), era.base, era.energy)
        if key not in self._factors:
            self._factors[key] = self._properties[key[0]].energy_factor(era.base, era.energy)
        return self._factors[key]

    def line_states(self, gas: Integers, static_pressure: Floats, temperature: Floats) -> _States:
        """Return the states of records in ascending order of their gas's number."""
        edges = np.searchsorted(gas, np.arange(len(self._properties) + 1))
        parts = [
            self._properties[n].line_state(static_pressure[a:b], temperature[a:b])
            for n, (a, b) in enumerate(pairwise(edges.tolist()))
            if b > a
        ]
        if not parts:
            nothing, never = np.zeros(0), np.zeros(0, dtype=np.bool_)
            return _States(nothing, nothing, nothing, nothing, nothing, never, never)
        return _States(
            *(
                np.concatenate([np.asarray(getattr(part, field.name)) for part in parts])
                for field in fields(_States)
            )
        )


def correct(records: Sequence[EraRecords], gases: GasLibrary) -> Corrected:
    """Correct the records of many meters and eras.

    Parameters
    ----------
    records : sequence of EraRecords
        One entry per meter and era, in any order; SI.
    gases : GasLibrary
        Gives the properties of the eras' gases.

    Returns
    -------
    Corrected
        Bad readings are values, never errors: a record that cannot be measured is NaN with
        its reason. Reasons are given in this order: no dp; (a dp below the cut-off is a
        measured zero, whatever else is missing); reverse flow; static pressure, temperature
        or barometer missing; impossible state (an absolute pressure or temperature that is
        not positive, or a dp that leaves no pressure downstream); no gas state; not converged
        (also below Re_D = 500).

    Raises
    ------
    ValueError
        If a plate is impossible (bore not between 0 and the pipe diameter).
    GasError
        If a gas cannot be computed at all, has no gas state at base conditions, or states a
        calorific value of a kind that the contract does not allow.

    References
    ----------
    .. [1] ISO 5167-1:2003, 5.4 (density and temperature at the upstream tapping) and
       ISO 5167-2:2003, 5.3 (limits of use, flow equation).
    """
    batch = _Gases(gases)
    # readings may be NaN, infinite or absurd: what comes of them is sorted out by value
    with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
        blocks = [_correct_block(block, batch) for block in _blocks(records)]
    joined = {
        field.name: np.concatenate([getattr(block, field.name) for block in blocks])
        for field in fields(Corrected)
        if field.name != "offsets"
    }
    return Corrected(offsets=_offsets(records), **joined)


def _blocks(records: Sequence[EraRecords]) -> Iterator[Sequence[EraRecords]]:
    """Yield consecutive eras with about `_BLOCK` records; one empty block of no eras."""
    first = count = 0
    for n, entry in enumerate(records):
        count += len(entry.differential_pressure)
        if count >= _BLOCK:
            yield records[first : n + 1]
            first, count = n + 1, 0
    if first < len(records) or not records:
        yield records[first:]


def _offsets(records: Sequence[EraRecords]) -> Integers:
    offsets = np.zeros(len(records) + 1, dtype=np.int64)
    np.cumsum([len(entry.differential_pressure) for entry in records], out=offsets[1:])
    return offsets


def _correct_block(records: Sequence[EraRecords], gases: _Gases) -> Corrected:
    offsets = _offsets(records)
    eras = [entry.era for entry in records]
    lengths = np.diff(offsets)
    count = int(offsets[-1])

    def spread(constant: Callable[[Era], float | None]) -> Floats:
        """Return a constant of each era, one per record; NaN for None."""
        values = np.array([constant(era) for era in eras], dtype=np.float64)
        return np.repeat(values, lengths)

    def told(condition: Callable[[Era], bool]) -> Truths:
        """Return a yes or no of each era, one per record."""
        return np.repeat(np.array([condition(era) for era in eras], dtype=np.bool_), lengths)

    dp_lower = spread(lambda era: era.differential_pressure_range.lower_range_value)
    dp_upper = spread(lambda era: era.differential_pressure_range.upper_range_value)
    logged_dp = _joined([entry.differential_pressure for entry in records])
    dp = np.where(
        told(lambda era: era.differential_pressure_rooted),
        # the root's sign is the flow's: a negative one must not become a forward flow
        dp_lower + logged_dp * np.abs(logged_dp) * (dp_upper - dp_lower),
        logged_dp,
    )
    cut_off = spread(lambda era: era.meter.low_flow_cut_off)
    known_dp = np.isfinite(dp)
    still = known_dp & ((np.abs(dp) < cut_off) | (dp == 0.0))
    reverse = known_dp & ~still & (dp < 0.0)
    forward = known_dp & ~still & (dp > 0.0)

    logged_pressure = _joined([entry.static_pressure for entry in records])
    gauge = told(lambda era: era.static_pressure_gauge)
    atmosphere = np.where(gauge, _atmospheric_pressure(records), 0.0)
    at_tapping = logged_pressure + atmosphere
    downstream = told(lambda era: era.meter.static_pressure_tapping is Tapping.DOWNSTREAM)
    static_pressure = np.where(downstream, at_tapping + dp, at_tapping)
    temperature = _joined([entry.temperature for entry in records]).copy()

    missing = np.full(count, MEASURED, dtype=np.int64)
    possible = (at_tapping > 0.0) & (static_pressure > dp) & (temperature > 0.0)
    for reason, condition in (  # the last one that applies stands
        ("impossible_state", forward & ~possible),
        ("missing_barometric_pressure", forward & ~np.isfinite(atmosphere)),
        ("missing_temperature", forward & ~np.isfinite(temperature)),
        ("missing_static_pressure", forward & ~np.isfinite(logged_pressure)),
        ("reverse_flow", reverse),
        ("missing_differential_pressure", ~known_dp),
    ):
        missing[condition] = MISSING_CODES[reason]

    # records whose flow is to be computed, in order of their gas
    gas = np.repeat(np.array([gases.number(era.gas) for era in eras], dtype=np.int64), lengths)
    flowing = np.flatnonzero(forward & (missing == MEASURED))
    flowing = flowing[np.argsort(gas[flowing], kind="stable")]
    plates = plates_of([era.meter.device for era in eras], lengths).chosen(flowing)
    p1, dp_flowing = static_pressure[flowing], dp[flowing]
    far = told(lambda era: era.meter.thermometer is Thermometer.DOWNSTREAM)[flowing]
    T1 = _temperature_upstream(
        gases, gas[flowing], far, dp_flowing, p1, temperature[flowing], plates
    )
    states, flow = _flow_at(gases, gas[flowing], dp_flowing, p1, T1, plates)

    no_gas = states.no_gas | ~(states.density > 0.0)
    solved = flow.converged & ~no_gas
    missing[flowing[~flow.converged]] = MISSING_CODES["not_converged"]
    missing[flowing[no_gas]] = MISSING_CODES["no_gas_state"]

    def placed(values: Floats, where: Truths | None = None) -> Floats:
        """Return the flowing records' values at their places, NaN elsewhere."""
        everywhere = np.full(count, np.nan)
        everywhere[flowing] = values if where is None else np.where(where, values, np.nan)
        return everywhere

    temperature[flowing] = T1
    mass_flow = placed(flow.mass_flow, solved)
    mass_flow[still] = 0.0
    line_density = placed(states.density)
    base_density = spread(gases.base_density)
    line_volume_flow = mass_flow / line_density
    base_volume_flow = mass_flow / base_density
    line_volume_flow[still] = base_volume_flow[still] = 0.0

    factors = [gases.energy_factor(era) for era in eras]
    per_base_volume = np.repeat(
        np.array([basis is CalorificBasis.VOLUME for _, basis in factors], dtype=np.bool_), lengths
    )
    energy_flow = np.where(per_base_volume, base_volume_flow, mass_flow) * np.repeat(
        np.array([factor for factor, _ in factors], dtype=np.float64), lengths
    )

    flags = np.zeros(count, dtype=np.uint32)
    bore, pipe_diameter = plates.bore, plates.pipe_diameter
    for name, condition in (
        (
            "pressure_ratio_outside_limits",
            p1 - dp_flowing < LOWEST_PRESSURE_RATIO * p1,
        ),
        (
            "reynolds_number_outside_limits",
            reynolds_number_outside_limits(
                flow.reynolds_number,
                bore=bore,
                pipe_diameter=pipe_diameter,
                tappings=plates.tappings,
            ),
        ),
        # the limits are judged at the plate's reference temperature, else a plate of exactly
        # 12.5 mm would go in and out of them with the weather
        (
            "geometry_outside_limits",
            geometry_outside_limits(bore=bore, pipe_diameter=pipe_diameter),
        ),
        ("gas_model_outside_range", states.outside_range),
        (
            "gas_model_simplified",
            told(gases.simplified)[flowing],
        ),
        ("over_range", dp_flowing >= dp_upper[flowing]),
        ("signal_outside_range", _outside_ranges(records, lengths)[flowing]),
    ):
        flags[flowing[condition & solved]] |= FLAG_BITS[name]

    return Corrected(
        offsets=offsets,
        differential_pressure=dp,
        static_pressure_absolute=static_pressure,
        temperature_upstream=temperature,
        line_density=line_density,
        base_density=base_density,
        mass_flow=mass_flow,
        line_volume_flow=line_volume_flow,
        base_volume_flow=base_volume_flow,
        energy_flow=energy_flow,
        discharge_coefficient=placed(flow.discharge_coefficient, solved),
        expansibility=placed(flow.expansibility, solved),
        reynolds_number=placed(flow.reynolds_number, solved),
        isentropic_exponent=placed(states.isentropic_exponent),
        dynamic_viscosity=placed(states.dynamic_viscosity),
        compression_factor=placed(states.compression_factor),
        flags=flags,
        missing=missing,
    )


def _joined(parts: Sequence[Floats]) -> Floats:
    """Return the arrays one after the other, as float64."""
    return np.concatenate([np.zeros(0), *parts])


def _atmospheric_pressure(records: Sequence[EraRecords]) -> Floats:
    """Return the atmospheric pressure of each record: the era's, or the barometer's [Pa]."""
    parts = []
    for entry in records:
        count = len(entry.differential_pressure)
        if entry.era.atmospheric_pressure is not None:
            parts.append(np.full(count, entry.era.atmospheric_pressure))
        elif entry.barometric_pressure is not None:
            parts.append(entry.barometric_pressure)
        else:
            parts.append(np.full(count, np.nan))
    return _joined(parts)


def _outside_ranges(records: Sequence[EraRecords], lengths: Integers) -> Truths:
    """Return whether a record's static pressure or temperature is outside its transmitter's."""
    outside = np.zeros(int(lengths.sum()), dtype=np.bool_)
    for values, ranges in (
        (
            _joined([entry.static_pressure for entry in records]),
            [entry.era.static_pressure_range for entry in records],
        ),
        (
            _joined([entry.temperature for entry in records]),
            [entry.era.temperature_range for entry in records],
        ),
    ):
        lower = [-np.inf if span is None else span.lower_range_value for span in ranges]
        upper = [np.inf if span is None else span.upper_range_value for span in ranges]
        outside |= values < np.repeat(np.array(lower, dtype=np.float64), lengths)
        outside |= values > np.repeat(np.array(upper, dtype=np.float64), lengths)
    return outside


def _flow_at(
    gases: _Gases,
    gas: Integers,
    differential_pressure: Floats,
    static_pressure: Floats,
    temperature: Floats,
    plates: Plates,
) -> tuple[_States, Flow]:
    """Return states and flows at the upstream tapping's pressure and temperature."""
    states = gases.line_states(gas, static_pressure, temperature)
    bore, pipe_diameter = plates.diameters_at(temperature)
    flow = orifice_flow(
        differential_pressure=differential_pressure,
        static_pressure=static_pressure,
        density=states.density,
        dynamic_viscosity=states.dynamic_viscosity,
        isentropic_exponent=states.isentropic_exponent,
        bore=bore,
        pipe_diameter=pipe_diameter,
        tappings=plates.tappings,
    )
    return states, flow


def _temperature_upstream(
    gases: _Gases,
    gas: Integers,
    far: Truths,
    differential_pressure: Floats,
    static_pressure: Floats,
    temperature: Floats,
    plates: Plates,
) -> Floats:
    """Return the temperature at the upstream tapping [K].

    Where the thermometer is downstream, the gas has cooled on its way there by the
    Joule-Thomson coefficient times the permanent pressure loss; both are taken at the upstream
    tapping, whose temperature is what is sought: a fixed number of passes.

    References
    ----------
    .. [1] ISO 5167-1:2003, 5.4.4.1 (from memory).
    """
    upstream = temperature.copy()
    if not far.any():
        return upstream
    dp, p1, measured = differential_pressure[far], static_pressure[far], temperature[far]
    gas, plates = gas[far], plates.chosen(far)
    T1 = measured
    for _ in range(_THERMOMETER_PASSES):
        states, flow = _flow_at(gases, gas, dp, p1, T1, plates)
        bore, pipe_diameter = plates.diameters_at(T1)
        loss = pressure_loss(dp, flow.discharge_coefficient, diameter_ratio=bore / pipe_diameter)
        # where the flow does not converge the last word is the final state's, not a NaN here
        loss = np.where(flow.converged, loss, 0.0)
        T1 = measured + states.joule_thomson_coefficient * loss
    upstream[far] = T1
    return upstream
