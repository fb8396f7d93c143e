"""GERG-2008: the equation itself, for one composition and arrays of states.

Inside this module densities are amounts, in kmol/m3. The residual Helmholtz energy is a sum of
terms n delta^d tau^t times an exponential in delta, with delta = D/D_r and tau = T_r/T. A
composition turns the terms of its components and pairs into one list, in which those that share
exponents are added once and for all; terms of one exponential are kept together. Every sum over
components, pairs and terms is an explicit loop in the standard's order, so that no batch can
change a bit.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import exponential, logarithm, power
from meterfix.calc.gas.gerg_tables import (
    GAS_CONSTANT,
    DensityFunction,
    GergComponent,
    GergTables,
    GergTerm,
    gerg_tables,
)
from meterfix.calc.gas.helmholtz import (
    Properties,
    ResidualSums,
    ideal_mixture_heat_capacity,
    properties_from_sums,
)
from meterfix.errors import GasError
from meterfix.frames import Floats

_HIGHEST_POWER = 7
"""Of delta in any term; exp(-delta^c) has c up to 6."""


@dataclass(frozen=True, slots=True)
class DensityPower:
    """The terms that share delta^d and its exponential."""

    d: int
    temperature_terms: tuple[tuple[float, float], ...]
    """(t, coefficient) of each term: coefficient tau^t."""


@dataclass(frozen=True, slots=True)
class TermFamily:
    """The terms that share one exponential in density."""

    function: DensityFunction
    powers: tuple[DensityPower, ...]


@dataclass(frozen=True, slots=True)
class GergMixture:
    """The equation with one composition put in."""

    mole_fractions: tuple[tuple[str, float], ...]
    """Components with a fraction above 0, in the standard's order."""
    molar_mass: float
    """kg/mol."""
    temperature_scale: float
    """The reducing temperature T_r [K]."""
    size_cubed: float
    """1/D_r [m3/kmol]: reduced density is this times the amount density."""
    families: tuple[TermFamily, ...]
    ideal_terms: tuple[tuple[float, GergComponent], ...]

    @property
    def gas_constant(self) -> float:
        """8.314472 J/(mol K), the equation's own."""
        return GAS_CONSTANT

    @property
    def free_step(self) -> float:
        """Largest step in reduced density of a search where every isotherm rises [-]."""
        return 0.5

    def isotherms(self, temperature: Floats) -> GergIsotherms:
        """Return the isotherms at (n,) temperatures [K]."""
        return GergIsotherms(self, _temperature_sums(self, temperature, orders=1))

    def properties(self, temperature: Floats, density: Floats) -> Properties:
        """Return the properties at (n,) temperatures [K] and amount densities [kmol/m3].

        References
        ----------
        .. [1] AGA Report No. 8 Part 2:2017, clause on thermodynamic properties; ISO 20765-2:2015.
        """
        sums = _temperature_sums(self, temperature, orders=3)
        Z, Z_D = np.ones_like(density), np.zeros_like(density)
        Z_T, A_T, A_TT = (np.zeros_like(density) for _ in range(3))
        delta = _powers(self.size_cubed * density)
        place = 0
        for family in self.families:
            count = len(family.powers)
            part = slice(place, place + count)
            place += count
            exponential_part, one, two = _shape(family.function, delta)
            A, A_D, A_DD = _density_sums(family, sums[0, part], delta)
            A_t, A_Dt = _density_sums(family, sums[1, part], delta)[:2]
            A_tt = _density_sums(family, sums[2, part], delta)[0]
            Z = Z + (A_D + one * A) * exponential_part
            Z_D = Z_D + (A_DD + 2.0 * one * A_D + two * A) * exponential_part
            Z_T = Z_T + (A_Dt + one * A_t) * exponential_part
            A_T = A_T + A_t * exponential_part
            A_TT = A_TT + A_tt * exponential_part
        return properties_from_sums(
            ResidualSums(Z, Z_D, Z_T, A_T, A_TT),
            self.ideal_heat_capacity(temperature),
            temperature,
            density,
            gas_constant=GAS_CONSTANT,
            molar_mass=self.molar_mass,
        )

    def ideal_heat_capacity(self, temperature: Floats) -> Floats:
        """Return the isobaric heat capacity of the ideal gas over R [-]."""
        return ideal_mixture_heat_capacity(self.ideal_terms, temperature)


@dataclass(frozen=True, slots=True)
class GergIsotherms:
    """The equation with composition and temperatures put in."""

    mixture: GergMixture
    sums: Floats
    """(1, density powers, n): the coefficient of each power of density, family by family."""

    def part(self, chosen: np.ndarray) -> GergIsotherms:
        """Return the isotherms of the chosen states."""
        return GergIsotherms(self.mixture, self.sums[:, :, chosen])

    def pressure_terms(self, density: Floats) -> tuple[Floats, Floats]:
        """Return Z and (dp/dD)_T / (R T), at (n,) amount densities [kmol/m3]."""
        Z, slope = np.ones_like(density), np.zeros_like(density)
        delta = _powers(self.mixture.size_cubed * density)
        for family, coefficients in self._families():
            exponential_part, one, two = _shape(family.function, delta)
            A, A_D, A_DD = _density_sums(family, coefficients, delta)
            Z = Z + (A_D + one * A) * exponential_part
            slope = slope + (A_DD + 2.0 * one * A_D + two * A) * exponential_part
        return Z, Z + slope

    def residual_helmholtz_energy(self, density: Floats) -> Floats:
        """Return the residual Helmholtz energy over R T [-], at (n,) amount densities."""
        total: Floats = np.zeros_like(density)
        delta = _powers(self.mixture.size_cubed * density)
        for family, coefficients in self._families():
            exponential_part = _shape(family.function, delta)[0]
            total = total + _density_sums(family, coefficients, delta)[0] * exponential_part
        return total

    def _families(self) -> Iterator[tuple[TermFamily, Floats]]:
        place = 0
        for family in self.mixture.families:
            yield family, self.sums[0, place : place + len(family.powers)]
            place += len(family.powers)


def _powers(delta: Floats) -> list[Floats]:
    """Return delta^0 to the highest power that the equation has, by multiplication."""
    powers: list[Floats] = [np.ones_like(delta), delta]
    for _ in range(_HIGHEST_POWER - 1):
        powers.append(powers[-1] * delta)
    return powers


def _shape(function: DensityFunction, delta: list[Floats]) -> tuple[Floats, Floats, Floats]:
    """Return E, delta E'/E and delta^2 E''/E + delta E'/E of a family's exponential E."""
    if function.polynomial:
        return delta[0], np.zeros_like(delta[0]), np.zeros_like(delta[0])
    if function.c:
        c = float(function.c)
        E = exponential(-delta[function.c])
        one = -c * delta[function.c]
        return E, one, one * one + c * one
    offset = delta[1] - function.epsilon
    E = exponential(-function.eta * offset * offset - function.beta * (delta[1] - function.gamma))
    one = -delta[1] * (2.0 * function.eta * offset + function.beta)
    return E, one, one * one + one - 2.0 * function.eta * delta[2]


def _density_sums(
    family: TermFamily, coefficients: Floats, delta: list[Floats]
) -> tuple[Floats, Floats, Floats]:
    """Return the family's polynomial in delta, and that with delta d/d delta once and twice."""
    A, A_D, A_DD = (np.zeros_like(delta[0]) for _ in range(3))
    for n, entry in enumerate(family.powers):
        part = coefficients[n] * delta[entry.d]
        A += part
        part *= float(entry.d)
        A_D += part
        part *= float(entry.d)
        A_DD += part
    return A, A_D, A_DD


def _temperature_sums(mixture: GergMixture, temperature: Floats, *, orders: int) -> Floats:
    """Return the coefficient of each power of density and its derivatives by temperature.

    Parameters
    ----------
    temperature : (n,) array
        K.
    orders
        1 for pressure alone, 3 for every property.

    Returns
    -------
    (orders, density powers, n) array
        Index 0: the coefficients; 1: T times their first derivative; 2: T^2 times the second.
    """
    tau = mixture.temperature_scale / temperature
    log_tau = logarithm(tau)
    made: dict[float, Floats] = {0.0: np.ones_like(tau), 1.0: tau}
    count = sum(len(family.powers) for family in mixture.families)
    sums = np.zeros((orders, count, len(temperature)))
    place = 0
    for family in mixture.families:
        for entry in family.powers:
            for t, coefficient in entry.temperature_terms:
                if t not in made:
                    made[t] = exponential(t * log_tau)
                part = coefficient * made[t]
                sums[0, place] += part
                if orders > 1:
                    sums[1, place] += -t * part
                    sums[2, place] += t * (t + 1.0) * part
            place += 1
    return sums


def _reducing(
    tables: GergTables, components: list[GergComponent], fractions: list[float]
) -> tuple[float, float]:
    """Return 1/D_r [m3/kmol] and T_r [K].

    Y = sum x_i^2 Y_i + sum_(i<j) 2 x_i x_j beta gamma (x_i + x_j)/(beta^2 x_i + x_j) Y_ij, with
    Y_ij = (1/D_i^(1/3) + 1/D_j^(1/3))^3 / 8 for the volume and (T_i T_j)^(1/2) for the temperature.
    """
    roots = power([1.0 / c.critical_density for c in components], 1.0 / 3.0)
    volume = temperature = 0.0
    for i, one in enumerate(components):
        x = fractions[i]
        volume += x * x / one.critical_density
        temperature += x * x * one.critical_temperature
        for j in range(i + 1, len(components)):
            other, y = components[j], fractions[j]
            pair = tables.pairs[one.name, other.name]
            size = float(roots[i] + roots[j])
            energy = float(np.sqrt(one.critical_temperature * other.critical_temperature))
            weight = 2.0 * x * y * (x + y)
            bv, bT = pair.volume_beta, pair.temperature_beta
            volume += (
                weight * bv * pair.volume_gamma / (bv * bv * x + y) * 0.125 * size * size * size
            )
            temperature += weight * bT * pair.temperature_gamma / (bT * bT * x + y) * energy
    return volume, temperature


def _families(
    tables: GergTables, components: list[GergComponent], fractions: list[float]
) -> tuple[TermFamily, ...]:
    """Return the terms of the components and of the departure functions, put together."""
    grouped: dict[DensityFunction, dict[int, dict[float, float]]] = {}

    def add(terms: tuple[GergTerm, ...], weight: float) -> None:
        for term in terms:
            coefficients = grouped.setdefault(term.function, {}).setdefault(term.d, {})
            coefficients[term.t] = coefficients.get(term.t, 0.0) + weight * term.n

    for x, component in zip(fractions, components, strict=True):
        add(component.terms, x)
    for i, one in enumerate(components):
        for j in range(i + 1, len(components)):
            pair = tables.pairs[one.name, components[j].name]
            if pair.weight != 0.0:
                weight = fractions[i] * fractions[j] * pair.weight
                add(tables.departures[pair.model], weight)
    return tuple(
        TermFamily(
            function,
            tuple(DensityPower(d, tuple(terms.items())) for d, terms in sorted(powers.items())),
        )
        for function, powers in grouped.items()
    )


def gerg_mixture(mole_fractions: tuple[tuple[str, float], ...]) -> GergMixture:
    """Return the equation for one composition.

    Parameters
    ----------
    mole_fractions
        Component (one of the 21 of the tables) and mole fraction, normalised to a sum of 1.
        Their order does not matter.

    Raises
    ------
    GasError
        If a component is unknown or named twice, or no fraction is above 0.

    References
    ----------
    .. [1] AGA Report No. 8 Part 2:2017, GERG-2008; ISO 20765-2:2015; Kunz and Wagner, J. Chem.
       Eng. Data 57 (2012) 3032.
    """
    tables = gerg_tables()
    given = dict(mole_fractions)
    known = {component.name for component in tables.components}
    unknown = sorted(set(given) - known)
    if unknown or len(given) != len(mole_fractions):
        message = f"GERG-2008 knows no {unknown}" if unknown else "a component is named twice"
        raise GasError(f"{message}; its components are {sorted(known)}")
    components = [c for c in tables.components if given.get(c.name, 0.0) > 0.0]
    if not components:
        raise GasError("GERG-2008: the composition is empty; at least one fraction must be above 0")
    fractions = [given[c.name] for c in components]
    molar_mass = 0.0
    for x, c in zip(fractions, components, strict=True):
        molar_mass += x * c.molar_mass
    volume, temperature = _reducing(tables, components, fractions)
    return GergMixture(
        mole_fractions=tuple((c.name, x) for c, x in zip(components, fractions, strict=True)),
        molar_mass=1e-3 * molar_mass,
        temperature_scale=temperature,
        size_cubed=volume,
        families=_families(tables, components, fractions),
        ideal_terms=tuple(zip(fractions, components, strict=True)),
    )
