"""Readings at the instants of dp to corrected rates, for many meters and eras at once.

All of it is element-wise: a record's bits depend on its own readings and its era's constants,
never on what else is in the batch. NaN = not known; a rate is exactly 0 only where there is
no flow.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, fields, replace

import numpy as np
from numpy.typing import NDArray

from meterfix.calc.disturbance import (
    Disturbance,
    Disturbed,
    discharge_standard_uncertainty,
    disturbed,
    expansibility_standard_uncertainty,
)
from meterfix.calc.gas.batch import BatchStates, GasBatch
from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.primary.devices import Devices, devices_of
from meterfix.calc.primary.flow import Flow, device_flow
from meterfix.calc.primary.forms import LOWEST_PRESSURE_RATIO, pressure_loss
from meterfix.frames import FLAGS, MISSING, Era, Floats, Integers, Truths
from meterfix.model.gas import CalorificBasis
from meterfix.model.site import Tapping, Thermometer

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


def correct(
    records: Sequence[EraRecords],
    gases: GasLibrary,
    disturbances: Sequence[Disturbance | None] | None = None,
) -> Corrected:
    """Correct the records of many meters and eras.

    Parameters
    ----------
    records : sequence of EraRecords
        One entry per meter and era, in any order; SI.
    gases : GasLibrary
        Gives the properties of the eras' gases.
    disturbances : sequence of (Disturbance or None), optional
        What is changed, entry by entry of `records`; None: nothing.

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
        If a device is impossible (bore not between 0 and the pipe diameter).
    GasError
        If a gas cannot be computed at all, has no gas state at base conditions, or states a
        calorific value of a kind that the contract does not allow.

    References
    ----------
    .. [1] ISO 5167-1:2003, 5.4 (density and temperature at the upstream tapping) and
       ISO 5167-2, -3 and -4:2003 (limits of use, flow equation).
    """
    batch = GasBatch(gases)
    # readings may be NaN, infinite or absurd: what comes of them is sorted out by value
    with np.errstate(invalid="ignore", over="ignore", divide="ignore"):
        blocks = [
            _correct_block(records[a:b], batch, None if disturbances is None else disturbances[a:b])
            for a, b in _blocks(records)
        ]
    joined = {
        field.name: np.concatenate([getattr(block, field.name) for block in blocks])
        for field in fields(Corrected)
        if field.name != "offsets"
    }
    return Corrected(offsets=_offsets(records), **joined)


def _blocks(records: Sequence[EraRecords]) -> Iterator[tuple[int, int]]:
    """Yield [first, end) of consecutive eras of about `_BLOCK` records; one of no eras."""
    first = count = 0
    for n, entry in enumerate(records):
        count += len(entry.differential_pressure)
        if count >= _BLOCK:
            yield first, n + 1
            first, count = n + 1, 0
    if first < len(records) or not records:
        yield first, len(records)


def _offsets(records: Sequence[EraRecords]) -> Integers:
    offsets = np.zeros(len(records) + 1, dtype=np.int64)
    np.cumsum([len(entry.differential_pressure) for entry in records], out=offsets[1:])
    return offsets


def _correct_block(
    records: Sequence[EraRecords],
    gases: GasBatch,
    disturbances: Sequence[Disturbance | None] | None,
) -> Corrected:
    offsets = _offsets(records)
    eras = [entry.era for entry in records]
    lengths = np.diff(offsets)
    count = int(offsets[-1])
    changed = disturbed(disturbances, lengths)

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
    logged_pressure = _joined([entry.static_pressure for entry in records])
    gauge = told(lambda era: era.static_pressure_gauge)
    atmosphere = np.where(gauge, _atmospheric_pressure(records), 0.0)
    temperature = _joined([entry.temperature for entry in records]).copy()
    if changed is not None:
        dp = changed.moved(dp, "differential_pressure")
        logged_pressure = changed.moved(logged_pressure, "static_pressure")
        atmosphere = np.where(gauge, changed.added(atmosphere, "atmospheric_pressure"), 0.0)
        temperature = changed.added(temperature, "temperature_zero")

    cut_off = spread(lambda era: era.meter.low_flow_cut_off)
    known_dp = np.isfinite(dp)
    still = known_dp & ((np.abs(dp) < cut_off) | (dp == 0.0))
    reverse = known_dp & ~still & (dp < 0.0)
    forward = known_dp & ~still & (dp > 0.0)

    at_tapping = logged_pressure + atmosphere
    downstream = told(lambda era: era.meter.static_pressure_tapping is Tapping.DOWNSTREAM)
    static_pressure = np.where(downstream, at_tapping + dp, at_tapping)

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
    devices = devices_of([era.meter.device for era in eras], lengths).chosen(flowing)
    moved = None if changed is None else changed.chosen(flowing)
    if moved is not None:
        devices = moved.devices(devices)
    p1, dp_flowing = static_pressure[flowing], dp[flowing]
    far = told(lambda era: era.meter.thermometer is Thermometer.DOWNSTREAM)[flowing]
    T1 = _temperature_upstream(
        gases, gas[flowing], far, dp_flowing, p1, temperature[flowing], devices, moved
    )
    states, flow = _flow_at(gases, gas[flowing], dp_flowing, p1, T1, devices, moved)

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
    stated_base = base_density = spread(gases.base_density)
    if changed is not None:
        base_density = changed.scaled(
            stated_base, "base_density", lambda: spread(gases.base_density_uncertainty)
        )
    line_volume_flow = mass_flow / line_density
    base_volume_flow = mass_flow / base_density
    line_volume_flow[still] = base_volume_flow[still] = 0.0

    factors = [gases.energy_factor(era) for era in eras]
    per_base_volume = np.repeat(
        np.array([basis is CalorificBasis.VOLUME for _, basis in factors], dtype=np.bool_), lengths
    )
    factor = np.repeat(np.array([each for each, _ in factors], dtype=np.float64), lengths)
    if changed is not None:
        value_per_mass = told(
            lambda era: (
                era.gas.calorific_value is not None
                and era.gas.calorific_value.basis is CalorificBasis.MASS
            )
        )
        # the energy of an amount of gas is that of its own value, whatever the base density
        heavier = base_density / stated_base
        factor = np.where(per_base_volume & value_per_mass, factor * heavier, factor)
        factor = np.where(~per_base_volume & ~value_per_mass, factor / heavier, factor)
        factor = changed.scaled(factor, "calorific_value")
        factor = changed.multiplied(
            factor, "calorific_method", lambda: spread(gases.calorific_method_uncertainty)
        )
    energy_flow = np.where(per_base_volume, base_volume_flow, mass_flow) * factor

    flags = np.zeros(count, dtype=np.uint32)
    for name, condition in (
        (
            "pressure_ratio_outside_limits",
            p1 - dp_flowing < LOWEST_PRESSURE_RATIO * p1,
        ),
        (
            "reynolds_number_outside_limits",
            devices.reynolds_number_outside_limits(flow.reynolds_number),
        ),
        ("geometry_outside_limits", devices.geometry_outside_limits()),
        ("gas_model_outside_range", states.outside_range),
        (
            "gas_model_simplified",
            told(gases.simplified)[flowing],
        ),
        ("calorific_value_outside_limits", told(gases.calorific_value_outside)[flowing]),
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
    gases: GasBatch,
    gas: Integers,
    differential_pressure: Floats,
    static_pressure: Floats,
    temperature: Floats,
    devices: Devices,
    changed: Disturbed | None,
) -> tuple[BatchStates, Flow]:
    """Return states and flows at the upstream tapping's pressure and temperature."""
    states = gases.line_states(gas, static_pressure, temperature)
    bore, pipe_diameter = devices.diameters_at(temperature)
    if changed is not None:
        density = changed.scaled(
            states.density,
            "line_density",
            lambda: gases.line_density_uncertainty(gas, static_pressure, temperature),
        )
        states = replace(
            states,
            density=density,
            compression_factor=states.compression_factor * (states.density / density),
            isentropic_exponent=changed.scaled(states.isentropic_exponent, "isentropic_exponent"),
            dynamic_viscosity=changed.scaled(states.dynamic_viscosity, "dynamic_viscosity"),
        )

    def solve(density: Floats) -> Flow:
        return device_flow(
            differential_pressure=differential_pressure,
            static_pressure=static_pressure,
            density=density,
            dynamic_viscosity=states.dynamic_viscosity,
            isentropic_exponent=states.isentropic_exponent,
            bore=bore,
            pipe_diameter=pipe_diameter,
            form=devices.form,
            calibrated=devices.calibrated,
        )

    if changed is None:
        return states, solve(states.density)
    return states, changed.flow(
        solve,
        states.density,
        lambda flow: discharge_standard_uncertainty(devices, flow.reynolds_number),
        lambda _: expansibility_standard_uncertainty(
            devices, differential_pressure, static_pressure, states.isentropic_exponent
        ),
    )


def _temperature_upstream(
    gases: GasBatch,
    gas: Integers,
    far: Truths,
    differential_pressure: Floats,
    static_pressure: Floats,
    temperature: Floats,
    devices: Devices,
    changed: Disturbed | None,
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
    gas, devices = gas[far], devices.chosen(far)
    changed = None if changed is None else changed.chosen(far)
    T1 = measured
    for _ in range(_THERMOMETER_PASSES):
        states, flow = _flow_at(gases, gas, dp, p1, T1, devices, changed)
        bore, pipe_diameter = devices.diameters_at(T1)
        loss = pressure_loss(
            dp,
            flow.discharge_coefficient,
            diameter_ratio=bore / pipe_diameter,
            stated_ratio=devices.pressure_loss_ratio,
        )
        # where the flow does not converge the last word is the final state's, not a NaN here
        loss = np.where(flow.converged, loss, 0.0)
        T1 = measured + states.joule_thomson_coefficient * loss
    upstream[far] = T1
    return upstream
