"""The gases of a batch of records, each evaluated once per distinct set of terms."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields
from itertools import pairwise

import numpy as np

from meterfix.calc.gas.properties import GasLibrary, GasProperties, LineSlopes
from meterfix.frames import Era, Floats, Integers, Truths
from meterfix.model.gas import BaseConditions, CalorificBasis, GasTerms
from meterfix.model.site import EnergyTerms


@dataclass(frozen=True, slots=True)
class BatchStates:
    """Line states of records that are ordered by gas; as the gas library gives them."""

    density: Floats
    compression_factor: Floats
    isentropic_exponent: Floats
    joule_thomson_coefficient: Floats
    dynamic_viscosity: Floats
    outside_range: Truths
    no_gas: Truths


class GasBatch:
    """The gases of a batch, each evaluated once per distinct set of terms."""

    def __init__(self, library: GasLibrary) -> None:
        self._library = library
        self._numbers: dict[GasTerms, int] = {}
        self._seen: dict[int, tuple[GasTerms, int]] = {}
        self._properties: list[GasProperties] = []
        self._base_densities: dict[tuple[int, BaseConditions], float] = {}
        self._base_uncertainties: dict[tuple[int, BaseConditions], float] = {}
        self._calorific_outside: dict[int, bool] = {}
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

    def calorific_value_outside(self, era: Era) -> bool:
        """Return whether the era's calorific value is by ISO 6976 and outside its limits."""
        value = era.gas.calorific_value
        if era.energy is None or value is None or value.value is not None:
            return False
        number = self.number(era.gas)
        if number not in self._calorific_outside:
            computed = self._properties[number].computed_calorific_value()
            self._calorific_outside[number] = computed is not None and computed.outside_limits
        return self._calorific_outside[number]

    def calorific_method_uncertainty(self, era: Era) -> float:
        """Return the relative standard uncertainty of ISO 6976's own figures; 0 if not used."""
        if era.energy is None:
            return 0.0
        computed = self._properties[self.number(era.gas)].computed_calorific_value()
        return 0.0 if computed is None else computed.relative_standard_uncertainty

    def base_density(self, era: Era) -> float:
        """Return the density at the era's base conditions [kg/m3]."""
        key = (self.number(era.gas), era.base)
        if key not in self._base_densities:
            self._base_densities[key] = self._properties[key[0]].base_density(era.base)
        return self._base_densities[key]

    def base_density_uncertainty(self, era: Era) -> float:
        """Return its stated relative standard uncertainty [-]; NaN if none is stated."""
        key = (self.number(era.gas), era.base)
        if key not in self._base_uncertainties:
            self._base_uncertainties[key] = self._properties[key[0]].base_density_uncertainty(
                era.base
            )
        return self._base_uncertainties[key]

    def line_density_uncertainty(self, gas: Integers, p: Floats, T: Floats) -> Floats:
        """Return that of line densities at (n,) states of gases by number; NaN if none is."""
        found = np.full(len(gas), np.nan)
        for properties, which in self._each(gas):
            found[which] = properties.line_density_uncertainty(p[which], T[which])
        return found

    def line_slopes(
        self, gas: Integers, p: Floats, T: Floats, compression_factor: Floats, *, throttled: bool
    ) -> LineSlopes:
        """Return the derivatives of line states of gases by number; see `GasProperties`."""
        parts = [
            (which, properties.line_slopes(p[which], T[which], Z, throttled=throttled))
            for properties, which in self._each(gas)
            for Z in (compression_factor[which],)
        ]
        if len(parts) == 1:
            return parts[0][1]
        joined: dict[str, Floats] = {}
        for field in fields(LineSlopes):
            joined[field.name] = np.zeros(len(gas))
            for which, slopes in parts:
                joined[field.name][which] = getattr(slopes, field.name)
        return LineSlopes(**joined)

    def _each(self, gas: Integers) -> Iterator[tuple[GasProperties, Integers | slice]]:
        """Yield each gas that occurs and its records; a slice where there is one gas."""
        if len(gas) > 0 and (gas == gas[0]).all():
            yield self._properties[int(gas[0])], slice(None)
            return
        for n, properties in enumerate(self._properties):
            which = np.flatnonzero(gas == n)
            if len(which) > 0:
                yield properties, which

    def energy_factor(self, era: Era) -> tuple[float, CalorificBasis]:
        """Return the era's energy per base volume [J/m3] or mass [J/kg]; NaN if it has none."""
        if era.energy is None or era.gas.calorific_value is None:
            return float("nan"), CalorificBasis.MASS
        key = (self.number(era.gas), era.base, era.energy)
        if key not in self._factors:
            self._factors[key] = self._properties[key[0]].energy_factor(era.base, era.energy)
        return self._factors[key]

    def line_states(
        self, gas: Integers, static_pressure: Floats, temperature: Floats
    ) -> BatchStates:
        """Return the states of records in ascending order of their gas's number."""
        edges = np.searchsorted(gas, np.arange(len(self._properties) + 1))
        parts = [
            self._properties[n].line_state(static_pressure[a:b], temperature[a:b])
            for n, (a, b) in enumerate(pairwise(edges.tolist()))
            if b > a
        ]
        if not parts:
            nothing, never = np.zeros(0), np.zeros(0, dtype=np.bool_)
            return BatchStates(nothing, nothing, nothing, nothing, nothing, never, never)
        return BatchStates(
            *(
                np.concatenate([np.asarray(getattr(part, field.name)) for part in parts])
                for field in fields(BatchStates)
            )
        )
