"""Sensitivities and random variances of the hours of a batch."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields

import numpy as np

from meterfix.calc.correct import Corrected, EraRecords
from meterfix.calc.gas.batch import GasBatch
from meterfix.calc.gas.gradients import CompositionGradients, gradients_of
from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.sensitivity.rates import MassSensitivities, mass_sensitivities
from meterfix.calc.totals.composition import CompositionPaths, composition_paths
from meterfix.calc.totals.noise import (
    NoiseBook,
    ReadingEffects,
    reading_variances,
    wandering_variances,
)
from meterfix.calc.totals.pieces import Weights
from meterfix.calc.totals.stretches import Stretch
from meterfix.calc.totals.subjects import subjects
from meterfix.calc.totals.visits import Visits, visits
from meterfix.frames import (
    PARAMETERS,
    SENSITIVE,
    Era,
    Floats,
    Instants,
    Integers,
    MeterDay,
    Truths,
)
from meterfix.model.gas import CalorificBasis

_INTEGRATED = (
    "differential_pressure_zero",
    "differential_pressure_span",
    "static_pressure_zero",
    "static_pressure_span",
    "temperature_zero",
    "bore",
    "pipe_diameter",
    "discharge_coefficient",
    "expansibility",
    "dynamic_viscosity",
    "isentropic_exponent",
    "line_density",
)
"""Parameters that act through the mass rate."""
_PLACE = {name: n for n, (name, _, _) in enumerate(PARAMETERS)}


@dataclass(frozen=True, slots=True)
class SensitiveHours:
    """What a meter-day's record has beside its statistics; see `frames.HourlyRecord`."""

    parameters: tuple[tuple[str, str], ...]
    sensitivities: Floats
    random_variance: Floats


@dataclass(frozen=True, slots=True)
class Batch:
    """What the sensitivities of a batch are computed from."""

    days: list[MeterDay]
    row_offsets: Integers
    """(days + 1,): each day's hours."""
    parts: list[Stretch]
    """All stretches, in order of days and time."""
    day_of_part: list[int]
    corrected: Corrected | None
    """Of the stretches that have records, in their order; None: none has."""
    instants: Instants
    weights: Weights
    """Of the measured pieces."""
    row: Integers
    """Hour of each measured piece."""
    stretch: Integers
    """Stretch of each measured piece."""


@dataclass(frozen=True, slots=True)
class _Constants:
    """What turns a mass into the other quantities: (stretches,) arrays, later (cells,)."""

    volume_per_mass: Floats
    """m3/kg at base conditions."""
    energy_per_mass: Floats
    """J/kg; 0 where there is no energy."""
    base_density_uncertainty: Floats
    """Relative, standard, as stated; NaN where none is."""
    energy_per_volume: Truths
    """The calorific value itself is per volume, so that a heavier gas has less energy per mass;
    one per mass does not ask the base density."""
    method_uncertainty: Floats
    """Relative, standard, of ISO 6976's calorific value."""

    def of(self, which: Integers) -> _Constants:
        """Return the constants of each cell from those of its stretch."""
        return _Constants(*(getattr(self, field.name)[which] for field in fields(self)))


def sensitive_hours(
    batch: Batch,
    library: GasLibrary,
    components: Mapping[str, tuple[str, ...]],
    repeatability: Mapping[str, float],
) -> list[SensitiveHours]:
    """Return the sensitivities and random variances of every meter-day of a batch.

    Parameters
    ----------
    batch : Batch
    library : GasLibrary
    components : mapping
        By name of the gas: the components whose stated fractions are uncertain.
    repeatability : mapping
        By name of the signal: one standard deviation of a reading [Pa or K]; others are
        estimated.
    """
    columns: list[dict[tuple[str, str], int]] = []
    found: list[SensitiveHours] = []
    for day, hours in zip(batch.days, np.diff(batch.row_offsets).tolist(), strict=True):
        keys = sorted({key for era in day.eras for key in _keys(day.meter, era, components)})
        columns.append({key: n for n, key in enumerate(keys)})
        none = np.zeros((hours, len(keys), len(SENSITIVE)))
        found.append(SensitiveHours(tuple(keys), none, np.zeros((hours, len(SENSITIVE)))))
    if batch.corrected is None or len(batch.row) == 0:
        return found
    used = visits(batch.weights, batch.row, batch.stretch)
    gases = GasBatch(library)
    records = [part.records for part in batch.parts if part.records is not None]
    by = mass_sensitivities(records, batch.corrected, gases)
    flow = np.where(batch.corrected.mass_flow > 0.0, batch.corrected.mass_flow, 0.0)
    mass = used.integral(flow)
    constants = _constants(batch.parts, gases).of(used.stretch)
    scale = np.stack(
        [np.ones(len(mass)), constants.volume_per_mass, constants.energy_per_mass], axis=1
    )
    table = _table(_integrals(by, batch, records, used), mass, constants, scale)
    variance = _variances(batch, by, flow, used, repeatability)
    variances = variance[:, np.newaxis] * (scale * scale)
    edges = np.searchsorted(used.stretch, np.arange(len(batch.parts) + 1)).tolist()
    by_fraction: dict[int, Floats] = {}
    if components:
        state = np.where(flow > 0.0, batch.corrected.static_pressure_absolute, 0.0)
        temperature = np.where(flow > 0.0, batch.corrected.temperature_upstream, 0.0)
        paths = composition_paths(by, state, temperature, used)
        by_fraction = _fractions(batch, library, gases, components, paths, mass, edges)
    for number, part in enumerate(batch.parts):
        cells = slice(edges[number], edges[number + 1])
        if part.era is None or cells.start == cells.stop:
            continue
        at = batch.day_of_part[number]
        hour = used.row[cells] - int(batch.row_offsets[at])
        of_subject = subjects(batch.days[at].meter, part.era)
        added = table[cells, [_PLACE[name] for name in of_subject]]
        places = [columns[at][key] for key in of_subject.items()]
        if number in by_fraction:
            gas = part.era.meter.gas
            places += [columns[at][f"fraction:{name}", gas] for name in components[gas]]
            by_component = by_fraction[number].transpose(1, 0, 2) * scale[cells, np.newaxis]
            added = np.concatenate([added, by_component], axis=1)
        # a stretch has one cell an hour, so that no two of these meet in one place
        found[at].sensitivities[hour[:, np.newaxis], places] += added
        found[at].random_variance[hour] += variances[cells]
    return found


def _table(
    by_mass: dict[str, Floats], mass: Floats, constants: _Constants, scale: Floats
) -> Floats:
    """Return each cell's derivatives by each parameter, (cells, parameters, 3)."""
    table = np.zeros((len(mass), len(PARAMETERS), len(SENSITIVE)))
    for name, values in by_mass.items():
        table[:, _PLACE[name]] = values[:, np.newaxis] * scale
    table[:, _PLACE["atmospheric_pressure"]] = table[:, _PLACE["static_pressure_zero"]]
    volume, energy = mass * constants.volume_per_mass, mass * constants.energy_per_mass
    # where nothing flows there is nothing to doubt, whether or not an uncertainty is stated
    stated = np.where(mass == 0.0, 0.0, constants.base_density_uncertainty)
    at = _PLACE["base_density"]
    table[:, at, 1] = -volume * stated
    table[:, at, 2] = np.where(constants.energy_per_volume, -energy * stated, 0.0)
    table[:, _PLACE["calorific_value"], 2] = energy
    table[:, _PLACE["calorific_method"], 2] = energy * constants.method_uncertainty
    return table


def _keys(meter: str, era: Era, components: Mapping[str, tuple[str, ...]]) -> list[tuple[str, str]]:
    """Return the parameters and subjects of an era."""
    gas = era.meter.gas
    return [
        *subjects(meter, era).items(),
        *((f"fraction:{name}", gas) for name in components.get(gas, ())),
    ]


def _constants(parts: list[Stretch], gases: GasBatch) -> _Constants:
    table = np.zeros((4, len(parts)))
    per_volume = np.zeros(len(parts), dtype=np.bool_)
    for n, part in enumerate(parts):
        era = part.era
        if era is None or part.records is None:
            continue
        base_density = gases.base_density(era)
        energy = 0.0
        if era.energy is not None and era.gas.calorific_value is not None:
            energy, way = gases.energy_factor(era)
            if way is CalorificBasis.VOLUME:
                energy /= base_density
            per_volume[n] = era.gas.calorific_value.basis is CalorificBasis.VOLUME
        table[:, n] = (
            1.0 / base_density,
            energy,
            gases.base_density_uncertainty(era),
            gases.calorific_method_uncertainty(era),
        )
    return _Constants(table[0], table[1], table[2], per_volume, table[3])


def _integrals(
    by: MassSensitivities, batch: Batch, records: list[EraRecords], used: Visits
) -> dict[str, Floats]:
    """Return each cell's integral of the mass rate's derivatives, by parameter."""
    assert batch.corrected is not None
    flows = batch.corrected.mass_flow > 0.0
    dp = np.where(flows, batch.corrected.differential_pressure, 0.0)
    logged = np.concatenate([entry.static_pressure for entry in records])
    logged = np.where(flows, logged, 0.0)
    kappa = np.where(flows, batch.corrected.isentropic_exponent, 0.0)
    rates = (
        by.differential_pressure,
        by.differential_pressure * dp,
        by.static_pressure,
        by.static_pressure * logged,
        by.temperature,
        by.bore,
        by.pipe_diameter,
        by.discharge_coefficient,
        by.expansibility,
        by.dynamic_viscosity,
        by.isentropic_exponent * kappa,
        by.line_density,
    )
    return {name: used.integral(rate) for name, rate in zip(_INTEGRATED, rates, strict=True)}


def _variances(
    batch: Batch,
    by: MassSensitivities,
    flow: Floats,
    used: Visits,
    repeatability: Mapping[str, float],
) -> Floats:
    """Return the variance of each cell's mass from what does not repeat [kg2]."""
    weight = used.total_weight(len(flow))
    lengths = [0 if part.records is None else len(part.instants) for part in batch.parts]
    offsets = np.concatenate([[0], np.cumsum(lengths)]).astype(np.int64)
    shared, own = np.zeros(len(flow)), np.zeros(len(flow))
    starts = [batch.days[number].start for number in batch.day_of_part]
    book = NoiseBook(
        repeatability,
        [
            (_signal(part.era, role), series, start)
            for part, start in zip(batch.parts, starts, strict=True)
            if part.era is not None
            for role, series, _ in part.carried
        ],
    )
    for number, part in enumerate(batch.parts):
        if part.era is None or part.records is None:
            continue
        era = part.era
        where = slice(int(offsets[number]), int(offsets[number + 1]))
        by_dp, as_logged = by.differential_pressure[where], by.differential_pressure[where]
        if era.differential_pressure_rooted:
            span = era.differential_pressure_range
            width = span.upper_range_value - span.lower_range_value
            as_logged = by_dp * (2.0 * width * np.abs(part.records.differential_pressure))
        by_p = by.static_pressure[where]
        shared[where], own[where] = reading_variances(
            part,
            ReadingEffects(
                differential_pressure=by_dp,
                differential_pressure_as_logged=as_logged,
                static_pressure=by_p,
                barometer=by_p if era.static_pressure_gauge else np.zeros(len(by_p)),
                temperature=by.temperature[where],
            ),
            weight[where],
            {
                role: book.noise(_signal(era, role), series, starts[number])
                for role, series, _ in part.carried
            },
        )
    wandering = wandering_variances(batch.parts, offsets, batch.weights, flow, batch.instants, own)
    return used.integral(shared) + np.maximum(used.summed_pieces(wandering), 0.0)


def _signal(era: Era, role: str) -> str:
    """Return the name of the signal in a role."""
    if role == "barometer":
        return era.barometer or ""
    name: str = getattr(era.meter, role)
    return name


def _fractions(
    batch: Batch,
    library: GasLibrary,
    gases: GasBatch,
    components: Mapping[str, tuple[str, ...]],
    paths: CompositionPaths,
    mass: Floats,
    edges: list[int],
) -> dict[int, Floats]:
    """Return by stretch the (components, cells, 3) derivatives by the stated fractions."""
    groups: dict[tuple[int, tuple[str, ...]], list[int]] = {}
    for number, part in enumerate(batch.parts):
        if part.era is not None and edges[number + 1] > edges[number]:
            names = components.get(part.era.meter.gas, ())
            if names:
                groups.setdefault((gases.number(part.era.gas), names), []).append(number)
    found: dict[int, Floats] = {}
    for (_, names), numbers in groups.items():
        # one evaluation for all the cells of a gas, whichever meters they belong to
        eras = [era for number in numbers if (era := batch.parts[number].era) is not None]
        gradients = gradients_of(library, eras[0].gas, names)
        cells = np.concatenate([np.arange(edges[n], edges[n + 1]) for n in numbers])
        by_mass = paths.mass(gradients, cells)
        known: dict[tuple[object, object], tuple[Floats, Floats]] = {}
        first = 0
        for number, era in zip(numbers, eras, strict=True):
            key = (era.base, era.energy)
            if key not in known:
                known[key] = _base_and_energy(gradients, gases, era)
            base, energy = known[key]
            last = first + edges[number + 1] - edges[number]
            through_flow = by_mass[:, first:last]
            whole = mass[edges[number] : edges[number + 1]]
            found[number] = np.stack(
                [through_flow, through_flow - base * whole, through_flow + energy * whole], axis=2
            )
            first = last
    return found


def _base_and_energy(
    gradients: CompositionGradients, gases: GasBatch, era: Era
) -> tuple[Floats, Floats]:
    """Return what the logarithms of base density and energy per mass change by, as columns."""
    base = gradients.log_base_density(era.base)
    energy = np.zeros(gradients.count)
    if era.energy is not None and era.gas.calorific_value is not None:
        energy = gradients.log_energy_factor(era.base, era.energy)
        if gases.energy_factor(era)[1] is CalorificBasis.VOLUME:
            energy = energy - base
    return base[:, np.newaxis], energy[:, np.newaxis]
