"""How a gas's properties change with the stated fractions of its components.

A derivative with respect to a stated fraction is taken before normalising: the others stay as
stated, and all of them are normalised again. It is a central difference of the equations at
compositions on either side (a one-sided one of the same order where there is next to nothing
of the component), on tiles of their own: the differences are taken at the very nodes of the
property tiles and run between them as the properties do.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from meterfix.calc.elementary import contiguous, logarithm
from meterfix.calc.gas.properties import GasLibrary, GasProperties
from meterfix.calc.gas.tiles import Key, coordinates, nodes_of, table_through
from meterfix.frames import Floats
from meterfix.model.gas import BaseConditions, Composition, GasTerms
from meterfix.model.site import EnergyTerms

STEP = 2e-5
"""Of a stated fraction [-]: the differences' own error is about its square."""
_NEGLIGIBLE = 1e-9
"""Terms of a gradient's polynomial below this share of its largest are left out."""


@dataclass(frozen=True, slots=True)
class _Shifted:
    """A composition beside the stated one, and its weight in the difference."""

    properties: GasProperties
    weight: float


class CompositionGradients:
    """The derivatives of one gas by the stated fractions of some of its components.

    Parameters
    ----------
    terms
        The gas.
    components
        Names, in the order of the results' first axis.
    library
        Makes the neighbouring gases.

    Raises
    ------
    GasError
        If the gas's model does not know a component.
    """

    def __init__(self, terms: GasTerms, components: Sequence[str], library: GasLibrary) -> None:
        self.count = len(components)
        self._gas = library.properties(terms)
        self._shifted = [
            [
                _Shifted(library.properties(replace(terms, composition=composition)), weight)
                for composition, weight in _neighbours(terms.composition, component)
            ]
            for component in components
        ]
        self._tables: dict[Key, Floats | None] = {}
        self._log_molar_mass = self._difference(
            [
                [float(logarithm(one.properties.molar_mass)[0]) for one in shifted]
                for shifted in self._shifted
            ]
        )

    def log_density(self, pressure: Floats, temperature: Floats) -> Floats:
        """Return the derivatives of the logarithm of the line density.

        Parameters
        ----------
        pressure, temperature : (n,) arrays
            [Pa], [K]

        Returns
        -------
        (components, n) array
            NaN where there is no gas; so do the other two.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        found = np.repeat(self._log_molar_mass[:, np.newaxis], len(p), axis=1)
        row = self._gas.rows.compression_factor
        if row is None:
            return found
        assert self._gas.tiles is not None
        found -= self._row(row, p, T) / self._gas.tiles.evaluate(p, T)[row]
        return found

    def isentropic_exponent(self, pressure: Floats, temperature: Floats) -> Floats:
        """Return those of the isentropic exponent; 0 where it is a stated value."""
        return self._row(self._gas.rows.isentropic_exponent, pressure, temperature)

    def joule_thomson_coefficient(self, pressure: Floats, temperature: Floats) -> Floats:
        """Return those of the Joule-Thomson coefficient [K/Pa]."""
        return self._row(self._gas.rows.joule_thomson_coefficient, pressure, temperature)

    def log_base_density(self, base: BaseConditions) -> Floats:
        """Return the derivatives of the logarithm of the density at base conditions."""
        return self._difference(
            [
                [float(logarithm(one.properties.base_density(base))[0]) for one in shifted]
                for shifted in self._shifted
            ]
        )

    def log_energy_factor(self, base: BaseConditions, energy: EnergyTerms) -> Floats:
        """Return the derivatives of the logarithm of the energy per base volume or mass."""
        return self._difference(
            [
                [
                    float(logarithm(one.properties.energy_factor(base, energy)[0])[0])
                    for one in shifted
                ]
                for shifted in self._shifted
            ]
        )

    def _difference(self, values: list[list[float]]) -> Floats:
        """Return each component's difference of the values at its neighbouring compositions."""
        result = np.zeros(len(self._shifted))
        for n, (shifted, of_component) in enumerate(zip(self._shifted, values, strict=True)):
            for one, value in zip(shifted, of_component, strict=True):
                result[n] += one.weight * value
        return result

    def _row(self, row: int | None, pressure: Floats, temperature: Floats) -> Floats:
        """Return (components, n) derivatives of a tiled property; None: of a constant."""
        p, T = contiguous(pressure), contiguous(temperature)
        tiles = self._gas.tiles
        if row is None or tiles is None:
            return np.zeros((self.count, len(p)))
        result = np.full((self.count, len(p)), np.nan)
        served, others = tiles.serving(p, T)
        for key, records in served:
            table = self._table(key)
            if table is None:
                result[:, records] = self._exact(p[records], T[records])[row]
            else:
                result[:, records] = _polynomials(
                    table[row], *coordinates(key, p[records], T[records])
                )
        if len(others):
            result[:, others] = self._exact(p[others], T[others])[row]
        return result

    def _table(self, key: Key) -> Floats | None:
        """Return the tile's (rows, components, 7, 6) factors; None: a neighbour has no gas."""
        if key not in self._tables:
            values = self._exact(*nodes_of(key))
            table = None
            if np.isfinite(values).all():
                rows, components, nodes = values.shape
                flat = table_through(values.reshape(-1, nodes))
                table = flat.reshape(rows, components, *flat.shape[1:])
            self._tables[key] = table
        return self._tables[key]

    def _exact(self, p: Floats, T: Floats) -> Floats:
        """Return the (rows, components, n) differences by the exact equations."""
        result = np.zeros((self._gas.rows.count, len(self._shifted), len(p)))
        for n, shifted in enumerate(self._shifted):
            for one in shifted:
                assert one.properties.tiles is not None
                result[:, n] += one.weight * one.properties.tiles.exact(p, T)
        return result


def gradients_of(
    library: GasLibrary, terms: GasTerms, components: tuple[str, ...]
) -> CompositionGradients:
    """Return the derivatives of a gas by the stated fractions of components, made once."""
    key = (terms, components)
    if key not in library.gradients:
        library.gradients[key] = CompositionGradients(terms, components, library)
    return library.gradients[key]


def _neighbours(composition: Composition, component: str) -> list[tuple[Composition, float]]:
    """Return the compositions beside the stated one, and their weights in the difference."""
    stated = {name: x * composition.sum_as_given for name, x in composition.fractions}
    at = stated.get(component, 0.0)
    steps: tuple[tuple[float, float], ...] = ((STEP, 0.5 / STEP), (-STEP, -0.5 / STEP))
    if at < STEP:  # a one-sided difference of second order
        steps = ((0.0, -1.5 / STEP), (STEP, 2.0 / STEP), (2.0 * STEP, -0.5 / STEP))
    found: list[tuple[Composition, float]] = []
    for step, weight in steps:
        moved = {**stated, component: at + step}
        total = 0.0
        for x in moved.values():
            total += x
        fractions = tuple((name, x / total) for name, x in moved.items())
        found.append((Composition(composition.basis, fractions, total), weight))
    return found


def _polynomials(tables: Floats, x: Floats, y: Floats) -> Floats:
    """Return (m, n) values of m polynomials at n points, term by term."""
    largest = np.abs(tables).max(axis=(1, 2))
    result = np.zeros((len(tables), len(x)))
    power_x = np.ones(len(x))
    for i in range(tables.shape[1]):
        term = power_x
        for j in range(tables.shape[2]):
            factors = tables[:, i, j]
            if (np.abs(factors) > _NEGLIGIBLE * largest).any():
                result += factors[:, np.newaxis] * term
            term = term * y
        power_x = power_x * x
    return result
