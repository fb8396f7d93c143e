"""The simulator's own AGA8 DETAIL: natural-gas density and Joule-Thomson coefficient.

Written from the equations of AGA Report No. 8 Part 1:2017 (ISO 20765-1), independently of the
calculation that it is there to test. Terms that share a power of the reduced density are
collected per state first, so that the search for the density runs over few groups.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from meterfix.demo.tables import coefficient_rows
from meterfix.errors import GasError

Floats = NDArray[np.float64]

GAS_CONSTANT = 8.31451
"""J/(mol K), the constant that belongs to DETAIL."""

_NEWTON_STEPS = 9


@dataclass(frozen=True)
class _Term:
    """One of the 58 terms, its coefficient already mixed: value = c (1/T)^u."""

    virial: float
    """Coefficient in the second virial coefficient [dm3/mol]; 0 for terms 19 to 58."""
    series: float
    """Coefficient in the density series [-]; 0 for terms 1 to 12."""
    exponent: float
    density_exponent: int
    exponential: int
    subtracted: bool
    """True for terms 13 to 18, which the series also subtracts once, times D_r."""


class DetailGas:
    """A natural gas by AGA8 DETAIL.

    Parameters
    ----------
    fractions : mapping of str to float
        Mole fractions by component [-]; they must sum to 1 within 1e-9.

    Raises
    ------
    GasError
        If a component is not one of the 21, or the sum is wrong.
    """

    def __init__(self, fractions: Mapping[str, float]) -> None:
        self._pure = {row["component"]: row for row in coefficient_rows("detail_pure")}
        unknown = sorted(set(fractions) - set(self._pure))
        if unknown:
            raise GasError(f"component {unknown[0]} is not one of the 21 of AGA8 DETAIL")
        total = sum(fractions.values())
        if abs(total - 1.0) > 1e-9:
            raise GasError(f"mole fractions sum to {total:.9f}; they must sum to 1")
        self.fractions = {name: x for name, x in fractions.items() if x > 0.0}
        self.molar_mass = (
            sum(x * self._number(name, "molar_mass_g_mol") for name, x in self.fractions.items())
            / 1000.0
        )
        """kg/mol."""

    def _number(self, name: str, column: str) -> float:
        return float(self._pure[name][column])

    @cached_property
    def _mixing(self) -> tuple[float, float, float, float, float]:
        """Mixture size cubed K^3, energy U, orientation G, quadrupole Q, high-temperature F."""
        pairs = {
            (row["component_i"], row["component_j"]): row
            for row in coefficient_rows("detail_binary")
        }
        items = list(self.fractions.items())
        size = sum(x * self._number(n, "K") ** 2.5 for n, x in items) ** 2
        energy = sum(x * self._number(n, "E") ** 2.5 for n, x in items) ** 2
        orientation = sum(x * self._number(n, "G") for n, x in items)
        for (name_i, x_i), (name_j, x_j) in (
            (a, b) for n, a in enumerate(items) for b in items[n + 1 :]
        ):
            row = pairs.get((name_i, name_j)) or pairs.get((name_j, name_i))
            if row is None:
                continue
            both = 2.0 * x_i * x_j
            size += (
                both
                * (float(row["K_ij"]) ** 5 - 1.0)
                * (self._number(name_i, "K") * self._number(name_j, "K")) ** 2.5
            )
            energy += (
                both
                * (float(row["U_ij"]) ** 5 - 1.0)
                * (self._number(name_i, "E") * self._number(name_j, "E")) ** 2.5
            )
            orientation += (
                x_i
                * x_j
                * (float(row["G_ij"]) - 1.0)
                * (self._number(name_i, "G") + self._number(name_j, "G"))
            )
        quadrupole = sum(x * self._number(n, "Q") for n, x in items)
        high_temperature = sum(x * x * self._number(n, "F") for n, x in items)
        return size**0.6, energy**0.2, orientation, quadrupole, high_temperature

    def _virial_sum(self, row: Mapping[str, str]) -> float:
        """Return the double sum over components of one term of the second virial coefficient."""
        pairs = {
            (pair["component_i"], pair["component_j"]): pair
            for pair in coefficient_rows("detail_binary")
        }
        u = float(row["u"])
        g, q, f, s, w = (int(row[flag]) for flag in "gqfsw")
        total = 0.0
        for name_i, x_i in self.fractions.items():
            for name_j, x_j in self.fractions.items():
                pair = pairs.get((name_i, name_j)) or pairs.get((name_j, name_i))
                e_factor = float(pair["E_ij"]) if pair else 1.0
                g_factor = float(pair["G_ij"]) if pair else 1.0
                i, j = self._pure[name_i], self._pure[name_j]
                energy = e_factor * (float(i["E"]) * float(j["E"])) ** 0.5
                g_ij = g_factor * (float(i["G"]) + float(j["G"])) / 2.0
                size = (float(i["K"]) * float(j["K"])) ** 1.5
                total += (
                    x_i
                    * x_j
                    * energy**u
                    * size
                    * (g_ij + 1.0 - g) ** g
                    * (float(i["Q"]) * float(j["Q"]) + 1.0 - q) ** q
                    * ((float(i["F"]) * float(j["F"])) ** 0.5 + 1.0 - f) ** f
                    * (float(i["S"]) * float(j["S"]) + 1.0 - s) ** s
                    * (float(i["W"]) * float(j["W"]) + 1.0 - w) ** w
                )
        return total

    @cached_property
    def _terms(self) -> tuple[_Term, ...]:
        _, energy, orientation, quadrupole, high_temperature = self._mixing
        terms = []
        for row in coefficient_rows("detail_terms"):
            n, a, u = int(row["n"]), float(row["a"]), float(row["u"])
            g, q, f = (int(row[flag]) for flag in "gqf")
            series = (
                a
                * (orientation + 1.0 - g) ** g
                * (quadrupole * quadrupole + 1.0 - q) ** q
                * (high_temperature + 1.0 - f) ** f
                * energy**u
            )
            terms.append(
                _Term(
                    virial=a * self._virial_sum(row) if n <= 18 else 0.0,
                    series=series if n >= 13 else 0.0,
                    exponent=u,
                    density_exponent=int(row["b"]),
                    exponential=int(row["k"]),
                    subtracted=13 <= n <= 18,
                )
            )
        return tuple(terms)

    def _collect(
        self, temperature: Floats, order: int
    ) -> tuple[Floats, dict[tuple[int, int], Floats]]:
        """Return what stands before D, and before each D_r^b exp(-D_r^k), at the temperatures.

        `order` 0 gives the values, 1 T times their first, 2 T^2 times their second derivative.
        """
        size_cubed = self._mixing[0]
        linear = np.zeros_like(temperature)
        groups: dict[tuple[int, int], Floats] = {}
        powers: dict[float, Floats] = {}
        for term in self._terms:
            u = term.exponent
            if u not in powers:
                powers[u] = np.power(temperature, -u)
            factor = (1.0, -u, u * (u + 1.0))[order]
            before_density = term.virial - (size_cubed * term.series if term.subtracted else 0.0)
            linear = linear + factor * before_density * powers[u]
            if term.series != 0.0:
                key = (term.density_exponent, term.exponential)
                groups[key] = groups.get(key, 0.0) + factor * term.series * powers[u]
        return linear, groups

    def _slopes(
        self, molar: Floats, linear: Floats, groups: dict[tuple[int, int], Floats]
    ) -> tuple[Floats, Floats, Floats]:
        """Return the sum a of the terms, D da/dD, and D d/dD of that."""
        reduced = self._mixing[0] * molar
        powers = [np.ones_like(reduced)]
        for _ in range(9):
            powers.append(powers[-1] * reduced)
        decays = [np.ones_like(reduced), *(np.exp(-powers[k]) for k in range(1, 5))]
        value = linear * molar
        first = linear * molar
        second = linear * molar
        for (b, k), factor in groups.items():
            part = factor * powers[b] * decays[k]
            stretch = k * powers[k] if k else np.zeros_like(reduced)
            slope = b - stretch
            value = value + part
            first = first + part * slope
            second = second + part * (slope * slope - k * stretch)
        return value, first, second

    def molar_density(self, static_pressure: Floats, temperature: Floats) -> Floats:
        """Return the molar density of the gas.

        Parameters
        ----------
        static_pressure, temperature : (n,) array
            Absolute pressure [Pa] and temperature [K]; of a gas well outside its dome.

        Returns
        -------
        (n,) array
            Molar density. [mol/dm3]

        Raises
        ------
        GasError
            If the search did not reach the pressure to 1e-12 everywhere.
        """
        linear, groups = self._collect(temperature, 0)
        kilopascal = static_pressure / 1000.0
        ideal = GAS_CONSTANT * temperature
        molar = kilopascal / ideal
        miss = np.ones_like(molar)
        for _ in range(_NEWTON_STEPS):
            _, first, second = self._slopes(molar, linear, groups)
            miss = molar * ideal * (1.0 + first) - kilopascal
            molar = molar - miss / (ideal * (1.0 + first + second))
        if molar.size and not np.all(np.abs(miss) <= 1e-12 * kilopascal):
            worst = int(np.argmax(~(np.abs(miss) <= 1e-12 * kilopascal)))
            raise GasError(
                f"no density found at {static_pressure[worst]} Pa and {temperature[worst]} K"
            )
        return molar

    def density(self, static_pressure: Floats, temperature: Floats) -> Floats:
        """Return the density [kg/m3] at absolute pressure [Pa] and temperature [K]."""
        return 1000.0 * self.molar_mass * self.molar_density(static_pressure, temperature)

    def _ideal_heat_capacity(self, temperature: Floats) -> Floats:
        """Return the ideal gas's isobaric heat capacity over R [-]."""
        rows = {row["component"]: row for row in coefficient_rows("detail_ideal")}
        total = np.zeros_like(temperature)
        for name, x in self.fractions.items():
            row = {key: float(text) for key, text in rows[name].items() if key != "component"}
            total = total + x * row["n0_3"]
            for n, hyperbolic in ((4, np.sinh), (5, np.cosh), (6, np.sinh), (7, np.cosh)):
                weight, theta = row[f"n0_{n}"], row[f"th0_{n}"]
                if weight != 0.0:
                    ratio = theta / temperature
                    total = total + x * weight * (ratio / hyperbolic(ratio)) ** 2
        return total

    def joule_thomson(self, static_pressure: Floats, temperature: Floats) -> Floats:
        """Return the Joule-Thomson coefficient.

        Parameters
        ----------
        static_pressure, temperature : (n,) array
            Absolute pressure [Pa] and temperature [K].

        Returns
        -------
        (n,) array
            Change of temperature per pressure at constant enthalpy. [K/Pa]
        """
        molar = self.molar_density(static_pressure, temperature)
        _, first, second = self._slopes(molar, *self._collect(temperature, 0))
        value_t, first_t, _ = self._slopes(molar, *self._collect(temperature, 1))
        value_tt, _, _ = self._slopes(molar, *self._collect(temperature, 2))
        cv = self._ideal_heat_capacity(temperature) - 1.0 - 2.0 * value_t - value_tt
        by_temperature = 1.0 + first + first_t
        by_density = 1.0 + first + second
        cp = cv + by_temperature * by_temperature / by_density
        per_kilopascal = (by_temperature / by_density - 1.0) / (molar * cp * GAS_CONSTANT)
        return per_kilopascal / 1000.0
