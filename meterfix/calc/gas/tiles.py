"""Property tiles: polynomials in (p, 1/T) on a fixed grid, within stated bounds of the equation.

The plane of states is cut at absolute multiples of 2 MPa and 15 K. On a tile each property is
a polynomial of degree 6 in p and 5 in 1/T through the exact values at 7 x 6 Chebyshev nodes.
When a tile is made it is checked against the equation where such polynomials err most; one
that fails is halved in both directions, at most three times; a state whose smallest tile
fails is computed by the exact equation. Which tile serves a state, and every number in it,
follows from the state, the model and the composition alone, never from the other records.

A tile that the limit of the gas crosses fails at its corner of highest pressure and lowest
temperature, which is always checked: the limit's pressure rises with temperature.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.frames import Floats, Integers, Truths

TILE_PRESSURE = 2e6
"""Pa."""
TILE_TEMPERATURE = 15.0
"""K."""
HALVINGS = 3
_PRESSURE_NODES = 7
_TEMPERATURE_NODES = 6
_LOWEST_CHECKED_PRESSURE = 1e3
"""Pa; the first tile's edge at zero pressure is checked here: no equation has a state at 0."""
_CHUNK = 4096
"""Records evaluated together, so that intermediate arrays stay in cache."""

Exact = Callable[[Floats, Floats], Floats]
"""(n,) pressures and temperatures -> (properties, n) values, NaN where there is no gas."""


@dataclass(frozen=True, slots=True)
class Bound:
    """How far a property may be from the exact equation: absolute + relative x |value|."""

    absolute: float
    relative: float = 0.0


@dataclass(frozen=True, slots=True)
class _Tile:
    """Coefficients of x^i y^j, x and y from -1 to 1 across the tile; None: did not fit."""

    coefficients: tuple[tuple[tuple[float, ...], ...], ...] | None
    """One (7 x 6) table per property."""
    middle_pressure: float
    half_pressure: float
    middle_inverse: float
    half_inverse: float


def _node_to_power(count: int) -> list[list[float]]:
    """Return the matrix from values at Chebyshev nodes to coefficients of powers.

    Column k is the Lagrange polynomial that is 1 at node k, multiplied out.
    """
    nodes = _nodes(count)
    matrix = [[0.0] * count for _ in range(count)]
    for k, node in enumerate(nodes):
        polynomial = [1.0]
        for m, other in enumerate(nodes):
            if m == k:
                continue
            scale = 1.0 / (node - other)
            grown = [0.0] * (len(polynomial) + 1)
            for power, value in enumerate(polynomial):
                grown[power + 1] += value * scale
                grown[power] -= value * scale * other
            polynomial = grown
        for power, value in enumerate(polynomial):
            matrix[power][k] = value
    return matrix


def _nodes(count: int) -> list[float]:
    """Return the zeros of the Chebyshev polynomial of this degree."""
    return [math.cos(math.pi * (k + 0.5) / count) for k in range(count)]


def _extrema(count: int) -> list[float]:
    """Return the extrema of the Chebyshev polynomial of this degree, both ends among them."""
    return [math.cos(math.pi * k / count) for k in range(count + 1)]


def _combine(matrix: list[list[float]], values: Floats) -> Floats:
    """Return the matrix times the first axis of the values, by explicit loops."""
    result = np.zeros((len(matrix), *values.shape[1:]))
    for i, row in enumerate(matrix):
        for k, factor in enumerate(row):
            result[i] += factor * values[k]
    return result


def _polynomial(
    table: tuple[tuple[float, ...], ...], x: Floats, y: Floats, result: Floats, row: Floats
) -> None:
    """Write sum of table[i][j] x^i y^j into the result, by Horner's scheme in both directions."""
    for i in range(len(table) - 1, -1, -1):
        coefficients = table[i]
        target = result if i == len(table) - 1 else row
        np.multiply(y, coefficients[-1], out=target)
        for j in range(len(coefficients) - 2, 0, -1):
            target += coefficients[j]
            target *= y
        target += coefficients[0]
        if i < len(table) - 1:
            result *= x
            result += row


class PropertyTiles:
    """Tiles of one model, version and composition; they are made when a state first needs one.

    Parameters
    ----------
    exact
        The exact equation, element by element.
    bounds
        One per property, in the order of the exact values. A tile must keep within half of
        each at its check points, so that states between them keep within all of it.
    """

    def __init__(self, exact: Exact, bounds: tuple[Bound, ...]) -> None:
        self._exact = exact
        self._bounds = bounds
        self._tiles: dict[tuple[int, int, int], _Tile] = {}
        self._pressure_matrix = _node_to_power(_PRESSURE_NODES)
        self._temperature_matrix = _node_to_power(_TEMPERATURE_NODES)

    def evaluate(self, pressure: Floats, temperature: Floats) -> Floats:
        """Return (properties, n) values at (n,) pressures [Pa] and temperatures [K].

        NaN where the exact equation has no gas, or the state is not known or not positive.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        values = np.full((len(self._bounds), len(p)), np.nan)
        usable = np.isfinite(p) & np.isfinite(T) & (p > 0.0) & (T > 0.0)
        # beyond any equation's range the tile numbers would overflow: the exact equation decides
        tiled: Truths = usable & (p < 1e9) & (T >= TILE_TEMPERATURE) & (T < 1e4)
        waiting: list[Integers] = [np.flatnonzero(usable & ~tiled)]
        rest = np.flatnonzero(tiled)
        for level in range(HALVINGS + 1):
            if len(rest) == 0:
                break
            rest = self._level(level, rest, p, T, values)
        waiting.append(rest)
        for part in waiting:
            if len(part):
                values[:, part] = self._exact(p[part], T[part])
        return values

    def _level(
        self, level: int, records: Integers, p: Floats, T: Floats, values: Floats
    ) -> Integers:
        """Evaluate the records whose tile of this level fits; return the others."""
        # the sizes are halved exactly, so that a smaller tile lies inside its larger one
        size = 2**level
        whole = len(records) == len(p)
        p_part, T_part = (p, T) if whole else (p[records], T[records])
        column = np.floor(p_part * (size / TILE_PRESSURE)).astype(np.int64)
        row = np.floor(T_part * (size / TILE_TEMPERATURE)).astype(np.int64)
        groups = _groups(column, row)
        self._make([(level, i, j) for i, j, _ in groups])
        rest: list[Integers] = []
        for i, j, members in groups:
            tile = self._tiles[level, i, j]
            if tile.coefficients is None:
                rest.append(records if members is None else records[members])
            elif members is None:
                self._fill(tile, p_part, T_part, values, None if whole else records)
            else:
                chosen = records[members]
                self._fill(tile, p_part[members], T_part[members], values, chosen)
        if not rest:
            return np.zeros(0, dtype=np.int64)
        return np.sort(np.concatenate(rest))

    def _fill(
        self, tile: _Tile, p: Floats, T: Floats, values: Floats, records: Integers | None
    ) -> None:
        """Write the tile's values of the records; None: all records, in their own places."""
        assert tile.coefficients is not None
        result, row = np.empty(min(_CHUNK, len(p))), np.empty(min(_CHUNK, len(p)))
        for start in range(0, len(p), _CHUNK):
            part = slice(start, start + _CHUNK)
            x = (p[part] - tile.middle_pressure) / tile.half_pressure
            y = (1.0 / T[part] - tile.middle_inverse) / tile.half_inverse
            m = len(x)
            for n, table in enumerate(tile.coefficients):
                if records is None:
                    _polynomial(table, x, y, values[n, part], row[:m])
                else:
                    _polynomial(table, x, y, result[:m], row[:m])
                    values[n, records[part]] = result[:m]

    def _make(self, keys: list[tuple[int, int, int]]) -> None:
        """Make the tiles that do not exist yet, all their states in one call."""
        new = [key for key in keys if key not in self._tiles]
        if not new:
            return
        x_nodes, y_nodes = _nodes(_PRESSURE_NODES), _nodes(_TEMPERATURE_NODES)
        x_checks, y_checks = _extrema(_PRESSURE_NODES), _extrema(_TEMPERATURE_NODES)
        points = [(x, y) for x in x_nodes for y in y_nodes]
        nodes = len(points)
        points += [(x, y) for x in x_checks for y in y_checks]
        frames = [_frame(key) for key in new]
        p = np.array(
            [max(f[0] + x * f[1], _LOWEST_CHECKED_PRESSURE) for f in frames for x, _ in points]
        )
        T = np.array([1.0 / (f[2] + y * f[3]) for f in frames for _, y in points])
        exact = self._exact(p, T)
        for n, (key, frame) in enumerate(zip(new, frames, strict=True)):
            part = slice(n * len(points), (n + 1) * len(points))
            self._tiles[key] = self._fit(frame, p[part], T[part], exact[:, part], nodes)

    def _fit(
        self,
        frame: tuple[float, float, float, float],
        p: Floats,
        T: Floats,
        exact: Floats,
        nodes: int,
    ) -> _Tile:
        """Return the tile through the nodes' values, without coefficients if it fails a check."""
        failed = _Tile(None, *frame)
        if not np.isfinite(exact).all():
            return failed
        tables: list[tuple[tuple[float, ...], ...]] = []
        for values in exact:
            grid = values[:nodes].reshape(_PRESSURE_NODES, _TEMPERATURE_NODES)
            by_pressure = _combine(self._pressure_matrix, grid)
            both = _combine(self._temperature_matrix, np.ascontiguousarray(by_pressure.T))
            tables.append(tuple(tuple(float(c) for c in line) for line in both.T))
        tile = _Tile(tuple(tables), *frame)
        checked = np.empty((len(exact), len(p) - nodes))
        self._fill(tile, p[nodes:], T[nodes:], checked, None)
        for bound, made, true in zip(self._bounds, checked, exact[:, nodes:], strict=True):
            allowed = 0.5 * (bound.absolute + bound.relative * np.abs(true))
            if (np.abs(made - true) > allowed).any():
                return failed
        return tile


def _frame(key: tuple[int, int, int]) -> tuple[float, float, float, float]:
    """Return the middle and half width of a tile in pressure and in inverse temperature."""
    level, i, j = key
    pressure, temperature = TILE_PRESSURE / 2**level, TILE_TEMPERATURE / 2**level
    cold, warm = 1.0 / (j * temperature), 1.0 / ((j + 1) * temperature)
    return (
        (i + 0.5) * pressure,
        0.5 * pressure,
        0.5 * (cold + warm),
        0.5 * (cold - warm),
    )


def _groups(column: Integers, row: Integers) -> list[tuple[int, int, Integers | None]]:
    """Return (column, row, members) of each tile; members None: the one tile holds them all."""
    key = column * 65536 + row
    if (key == key[0]).all():
        return [(int(column[0]), int(row[0]), None)]
    order = np.argsort(key, kind="stable")
    ordered = key[order]
    edges = np.flatnonzero(np.concatenate(([True], ordered[1:] != ordered[:-1])))
    ends = [*edges[1:].tolist(), len(key)]
    return [
        (int(column[order[start]]), int(row[order[start]]), order[start:end])
        for start, end in zip(edges.tolist(), ends, strict=True)
    ]
