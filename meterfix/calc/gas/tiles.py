"""Property tiles: polynomials in (p, 1/T) on a fixed grid, within stated bounds of the equation.

The plane of states is cut at absolute multiples of 2 MPa and 15 K. On a tile each property is
a polynomial of degree 6 in p and 5 in 1/T through the exact values at 7 x 6 Chebyshev nodes.
When a tile is made it is checked against the equation where such polynomials err most; one
that fails is halved in both directions, at most three times; a state whose smallest tile
fails is computed by the exact equation. Which tile serves a state, and every number in it,
follows from the state, the model and the composition alone, never from the other records.

Derivatives are those of the polynomials themselves, so that they belong to the values that a
tile gives; terms too small to matter are left out of them.

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
_SLOPE_SHARE = 0.05
"""What a derivative's left-out terms may add up to over half a tile, of the property's bound."""
_STEP = 2e-5
"""Relative step of the central differences that stand in where no tile fits."""

Exact = Callable[[Floats, Floats], Floats]
"""(n,) pressures and temperatures -> (properties, n) values, NaN where there is no gas."""
Table = tuple[tuple[float, ...], ...]
"""Factors of x^i y^j, row i; rows of a derivative's table may be short."""
Key = tuple[int, int, int]
"""Level of halving, column and row of a tile."""


@dataclass(frozen=True, slots=True)
class Bound:
    """How far a property may be from the exact equation: absolute + relative x |value|."""

    absolute: float
    relative: float = 0.0


@dataclass(frozen=True, slots=True)
class _Tile:
    """Coefficients of x^i y^j, x and y from -1 to 1 across the tile; None: did not fit."""

    coefficients: tuple[Table, ...] | None
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


def _polynomial(table: Table, x: Floats, y: Floats, result: Floats, row: Floats) -> None:
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


def _short_polynomial(table: Table, x: Floats, y: Floats, result: Floats, row: Floats) -> None:
    """Write the same for a table whose rows may be short or empty."""
    result.fill(0.0)
    for i in range(len(table) - 1, -1, -1):
        coefficients = table[i]
        if len(coefficients) > 1:
            np.multiply(y, coefficients[-1], out=row)
            for j in range(len(coefficients) - 2, 0, -1):
                row += coefficients[j]
                row *= y
            result += row
        if coefficients:
            result += coefficients[0]
        if i:
            result *= x


def _shortened(table: list[list[float]], bound: float) -> Table:
    """Return the table without the last terms of its rows as long as they do not matter.

    x and y are at most 1, so that what is left out is at most the sum of its factors.
    """
    rows = [list(row) for row in table]
    left = bound
    while True:
        ends = [(abs(row[-1]), i) for i, row in enumerate(rows) if row]
        if not ends or min(ends)[0] > left:
            break
        smallest, i = min(ends)
        left -= smallest
        rows[i].pop()
    while rows and not rows[-1]:
        rows.pop()
    return tuple(tuple(row) for row in rows)


def _slope_tables(table: Table, bound: Bound) -> tuple[Table, Table]:
    """Return the tables of the derivatives with respect to x and y."""
    allowed = _SLOPE_SHARE * (bound.absolute + bound.relative * abs(table[0][0]))
    by_x = [[i * c for c in table[i]] for i in range(1, len(table))]
    by_y = [[j * c for j, c in enumerate(row)][1:] for row in table]
    return _shortened(by_x, allowed), _shortened(by_y, allowed)


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
        self._tiles: dict[Key, _Tile] = {}
        self._slopes: dict[Key, tuple[tuple[Table, Table], ...]] = {}
        self._pressure_matrix = _node_to_power(_PRESSURE_NODES)
        self._temperature_matrix = _node_to_power(_TEMPERATURE_NODES)

    def evaluate(self, pressure: Floats, temperature: Floats) -> Floats:
        """Return (properties, n) values at (n,) pressures [Pa] and temperatures [K].

        NaN where the exact equation has no gas, or the state is not known or not positive.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        values = np.full((len(self._bounds), len(p)), np.nan)

        def fill(key: Key, p_part: Floats, T_part: Floats, records: Integers | None) -> None:
            self._fill(self._tiles[key], p_part, T_part, values, records)

        for part in self._tiled(p, T, fill):
            values[:, part] = self._exact(p[part], T[part])
        return values

    def slopes(self, pressure: Floats, temperature: Floats, which: tuple[int, ...]) -> Floats:
        """Return the derivatives of the values that `evaluate` gives.

        Parameters
        ----------
        pressure, temperature : (n,) arrays
            [Pa], [K]
        which : tuple of int
            Which of the properties, by their order.

        Returns
        -------
        (len(which), 2, n) array
            Per Pa at constant temperature, and per K at constant pressure: the derivatives of
            the tile's polynomials, or differences of the exact equation where no tile fits
            (central ones, one-sided where a step leaves the gas). NaN as `evaluate`.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        slopes = np.full((len(which), 2, len(p)), np.nan)

        def fill(key: Key, p_part: Floats, T_part: Floats, records: Integers | None) -> None:
            self._fill_slopes(key, p_part, T_part, slopes, which, records)

        for part in self._tiled(p, T, fill):
            slopes[:, :, part] = self._exact_slopes(p[part], T[part])[list(which)]
        return slopes

    def _exact_slopes(self, p: Floats, T: Floats) -> Floats:
        """Return (properties, 2, n) differences of the exact equation."""
        found = np.empty((len(self._bounds), 2, len(p)))
        at: Floats | None = None
        for n, (up, down, step) in enumerate(
            (
                ((p * (1.0 + _STEP), T), (p * (1.0 - _STEP), T), _STEP * p),
                ((p, T * (1.0 + _STEP)), (p, T * (1.0 - _STEP)), _STEP * T),
            )
        ):
            above, below = self._exact(*up), self._exact(*down)
            found[:, n] = (above - below) / (2.0 * step)
            if np.isnan(found[:, n]).any():
                at = self._exact(p, T) if at is None else at
                one_sided = np.where(np.isnan(above), at - below, above - at) / step
                found[:, n] = np.where(np.isnan(found[:, n]), one_sided, found[:, n])
        return found

    def exact(self, pressure: Floats, temperature: Floats) -> Floats:
        """Return (properties, n) values by the exact equation, NaN where there is no gas."""
        return self._exact(contiguous(pressure), contiguous(temperature))

    def serving(
        self, pressure: Floats, temperature: Floats
    ) -> tuple[list[tuple[Key, Integers]], Integers]:
        """Return the tiles that serve (n,) states, each with its records, and other records.

        The others are those that the exact equation serves. A state that is not known or not
        positive is in none.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        served: list[tuple[Key, Integers]] = []

        def fill(key: Key, p_part: Floats, _T_part: Floats, records: Integers | None) -> None:
            served.append((key, np.arange(len(p_part)) if records is None else records))

        others = self._tiled(p, T, fill)
        return served, np.sort(np.concatenate([np.zeros(0, dtype=np.int64), *others]))

    def _tiled(self, p: Floats, T: Floats, fill: Callable[..., None]) -> list[Integers]:
        """Call `fill` for the records of every tile; return those that no tile serves."""
        usable = np.isfinite(p) & np.isfinite(T) & (p > 0.0) & (T > 0.0)
        # beyond any equation's range the tile numbers would overflow: the exact equation decides
        tiled: Truths = usable & (p < 1e9) & (T >= TILE_TEMPERATURE) & (T < 1e4)
        waiting: list[Integers] = [np.flatnonzero(usable & ~tiled)]
        rest = np.flatnonzero(tiled)
        for level in range(HALVINGS + 1):
            if len(rest) == 0:
                break
            rest = self._level(level, rest, p, T, fill)
        waiting.append(rest)
        return [part for part in waiting if len(part)]

    def _level(
        self, level: int, records: Integers, p: Floats, T: Floats, fill: Callable[..., None]
    ) -> Integers:
        """Fill in the records whose tile of this level fits; return the others."""
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
            key = (level, i, j)
            if self._tiles[key].coefficients is None:
                rest.append(records if members is None else records[members])
            elif members is None:
                fill(key, p_part, T_part, None if whole else records)
            else:
                fill(key, p_part[members], T_part[members], records[members])
        if not rest:
            return np.zeros(0, dtype=np.int64)
        return np.sort(np.concatenate(rest))

    def _fill_slopes(
        self,
        key: Key,
        p: Floats,
        T: Floats,
        slopes: Floats,
        which: tuple[int, ...],
        records: Integers | None,
    ) -> None:
        """Write the derivatives of the tile's polynomials; None: all records, in their places."""
        tile = self._tiles[key]
        assert tile.coefficients is not None
        if key not in self._slopes:
            self._slopes[key] = tuple(
                _slope_tables(*of_property)
                for of_property in zip(tile.coefficients, self._bounds, strict=True)
            )
        tables = self._slopes[key]
        result, row = np.empty(min(_CHUNK, len(p))), np.empty(min(_CHUNK, len(p)))
        for start in range(0, len(p), _CHUNK):
            part = slice(start, start + _CHUNK)
            inverse = 1.0 / T[part]
            x = (p[part] - tile.middle_pressure) / tile.half_pressure
            y = (inverse - tile.middle_inverse) / tile.half_inverse
            by_T = inverse * inverse * (-1.0 / tile.half_inverse)
            m = len(x)
            where = part if records is None else records[part]
            for n, number in enumerate(which):
                by_x, by_y = tables[number]
                _short_polynomial(by_x, x, y, result[:m], row[:m])
                slopes[n, 0, where] = result[:m] * (1.0 / tile.half_pressure)
                _short_polynomial(by_y, x, y, result[:m], row[:m])
                slopes[n, 1, where] = result[:m] * by_T

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

    def _make(self, keys: list[Key]) -> None:
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
        tables: list[Table] = []
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


def _frame(key: Key) -> tuple[float, float, float, float]:
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


def nodes_of(key: Key) -> tuple[Floats, Floats]:
    """Return the pressures [Pa] and temperatures [K] of a tile's nodes, (nodes,) arrays."""
    middle_p, half_p, middle_i, half_i = _frame(key)
    points = [(x, y) for x in _nodes(_PRESSURE_NODES) for y in _nodes(_TEMPERATURE_NODES)]
    p = np.array([max(middle_p + x * half_p, _LOWEST_CHECKED_PRESSURE) for x, _ in points])
    return p, np.array([1.0 / (middle_i + y * half_i) for _, y in points])


def table_through(values: Floats) -> Floats:
    """Return the factors of x^i y^j of the polynomials through values at a tile's nodes.

    Parameters
    ----------
    values : (m, nodes) array
        m properties at the nodes of `nodes_of`.

    Returns
    -------
    (m, 7, 6) array
    """
    grid = np.ascontiguousarray(values.T).reshape(_PRESSURE_NODES, _TEMPERATURE_NODES, -1)
    by_pressure = _combine(_node_to_power(_PRESSURE_NODES), grid)
    both = _combine(
        _node_to_power(_TEMPERATURE_NODES), np.ascontiguousarray(by_pressure.swapaxes(0, 1))
    )
    return np.ascontiguousarray(both.transpose(2, 1, 0))


def coordinates(key: Key, pressure: Floats, temperature: Floats) -> tuple[Floats, Floats]:
    """Return x and y, from -1 to 1 across the tile, of (n,) states [Pa], [K]."""
    middle_p, half_p, middle_i, half_i = _frame(key)
    return (pressure - middle_p) / half_p, (1.0 / temperature - middle_i) / half_i


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
