"""AGA8 DETAIL: the equation itself, for one composition and arrays of states.

Inside this module densities are amounts, in kmol/m3 (the same number in mol/L), because the
equation's size parameter is in (m3/kmol)^(1/3). Every sum over components, pairs and terms is
an explicit loop in the standard's order, so that no batch can change a bit.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import exponential, power
from meterfix.calc.gas.coefficient_tables import DetailComponent, DetailTables, detail_tables
from meterfix.calc.gas.helmholtz import (
    Properties,
    ResidualSums,
    ideal_mixture_heat_capacity,
    properties_from_sums,
)
from meterfix.errors import GasError
from meterfix.frames import Floats

GAS_CONSTANT = 8.31451
"""Of AGA8 DETAIL [J/(mol K)]; AGA Report No. 8 Part 1:2017."""


@dataclass(frozen=True, slots=True)
class TermGroup:
    """The terms that share one density function D_r^b exp(-D_r^k); k = 0: no exponential."""

    density_exponent: int
    exponential_exponent: int
    temperature_terms: tuple[tuple[int, float], ...]
    """(2u, coefficient) of each term: coefficient (T_scale/T)^u."""


@dataclass(frozen=True, slots=True)
class DetailMixture:
    """The equation with one composition put in."""

    mole_fractions: tuple[tuple[str, float], ...]
    """Components with a fraction above 0, in the standard's order."""
    molar_mass: float
    """kg/mol."""
    temperature_scale: float
    """The mixture's energy parameter U [K]; temperatures enter as (U/T)^(1/2)."""
    size_cubed: float
    """K^3: reduced density is K^3 times the amount density [m3/kmol]."""
    virial_terms: tuple[tuple[int, float], ...]
    """(2u, coefficient) of the second virial coefficient [m3/kmol]."""
    linear_terms: tuple[tuple[int, float], ...]
    """(2u, coefficient) of the part of the series that the virial already holds (13-18)."""
    groups: tuple[TermGroup, ...]
    ideal_terms: tuple[tuple[float, DetailComponent], ...]

    @property
    def gas_constant(self) -> float:
        """8.31451 J/(mol K), the equation's own."""
        return GAS_CONSTANT

    @property
    def free_step(self) -> float:
        """Largest step in reduced density of a search where every isotherm rises [-]."""
        return 0.05

    def isotherms(self, temperature: Floats) -> DetailIsotherms:
        """Return the isotherms at (n,) temperatures [K]."""
        return DetailIsotherms(self, temperature_sums(self, temperature, orders=1))

    def properties(self, temperature: Floats, density: Floats) -> Properties:
        """Return the properties at (n,) temperatures [K] and amount densities [kmol/m3]."""
        return properties(self, temperature, density)

    def ideal_heat_capacity(self, temperature: Floats) -> Floats:
        """Return the isobaric heat capacity of the ideal gas over R [-]."""
        return ideal_heat_capacity(self, temperature)


@dataclass(frozen=True, slots=True)
class TemperatureSums:
    """Everything in the equation that depends on temperature only, for n states.

    Index 0: the sums; 1: T times their first derivative; 2: T^2 times their second one.
    """

    virial: Floats
    """(orders, n) [m3/kmol]."""
    linear: Floats
    """(orders, n) [-]."""
    groups: Floats
    """(orders, groups, n) [-]."""

    def part(self, chosen: np.ndarray) -> TemperatureSums:
        """Return the sums of the chosen states."""
        return TemperatureSums(
            self.virial[:, chosen], self.linear[:, chosen], self.groups[:, :, chosen]
        )


@dataclass(frozen=True, slots=True)
class DetailIsotherms:
    """The equation with composition and temperatures put in."""

    mixture: DetailMixture
    sums: TemperatureSums

    def part(self, chosen: np.ndarray) -> DetailIsotherms:
        """Return the isotherms of the chosen states."""
        return DetailIsotherms(self.mixture, self.sums.part(chosen))

    def pressure_terms(self, density: Floats) -> tuple[Floats, Floats]:
        """Return Z and (dp/dD)_T / (R T), at (n,) amount densities [kmol/m3]."""
        return pressure_terms(self.mixture, self.sums, density)

    def residual_helmholtz_energy(self, density: Floats) -> Floats:
        """Return the residual Helmholtz energy over R T [-], at (n,) amount densities."""
        return residual_helmholtz_energy(self.mixture, self.sums, density)


def _mean_of_powers(
    fractions: list[float], values: list[float], factors: dict[tuple[int, int], float]
) -> float:
    """Return the mixing rule of the size and energy parameters.

    X^5 = (sum x_i X_i^(5/2))^2 + 2 sum_(i<j) x_i x_j (X_ij^5 - 1) (X_i X_j)^(5/2).
    """
    roots = power(values, 2.5)
    total = 0.0
    for x, root in zip(fractions, roots, strict=True):
        total += x * float(root)
    fifth = total * total
    for (i, j), factor in factors.items():
        f5 = factor * factor * factor * factor * factor
        fifth += 2.0 * fractions[i] * fractions[j] * (f5 - 1.0) * float(roots[i] * roots[j])
    return float(power(fifth, 0.2)[0])


def _virial_coefficients(
    tables: DetailTables, fractions: list[float], components: list[DetailComponent], scale: float
) -> list[float]:
    """Return the coefficients of (scale/T)^u in the second virial coefficient [m3/kmol]."""
    terms = tables.terms[:18]
    u = np.array([0.5 * term.half_temperature_exponent for term in terms])
    flags = np.array([term.flags for term in terms], dtype=np.float64)
    total = np.zeros(len(terms))
    for i, one in enumerate(components):
        for j in range(i, len(components)):
            other = components[j]
            E_ij, _, _, G_ij = tables.pairs.get((one.name, other.name), (1.0, 1.0, 1.0, 1.0))
            energy = E_ij * float(np.sqrt(one.E * other.E))
            orientation = G_ij * 0.5 * (one.G + other.G)
            size = one.K * other.K
            shape = (
                orientation,
                one.Q * other.Q,
                float(np.sqrt(one.F * other.F)),
                one.S * other.S,
                one.W * other.W,
            )
            weight = fractions[i] * fractions[j] * (1.0 if i == j else 2.0)
            part = weight * size * float(np.sqrt(size)) * power(energy / scale, u)
            for n, value in enumerate(shape):
                # (value + 1 - flag)^flag is the value where the term's flag is set, else 1
                part = part * np.where(flags[:, n] == 1.0, value, 1.0)
            total = total + part
    return [term.coefficient * float(b) for term, b in zip(terms, total, strict=True)]


def detail_mixture(mole_fractions: tuple[tuple[str, float], ...]) -> DetailMixture:
    """Return the equation for one composition.

    Parameters
    ----------
    mole_fractions
        Component (one of the 21 of the tables) and mole fraction; normalised to a sum of 1.
        Their order does not matter.

    Raises
    ------
    GasError
        If a component is unknown or named twice, or no fraction is above 0.

    References
    ----------
    .. [1] AGA Report No. 8 Part 1:2017, DETAIL; ISO 20765-1:2005.
    """
    tables = detail_tables()
    given = dict(mole_fractions)
    known = {component.name for component in tables.components}
    unknown = sorted(set(given) - known)
    if unknown or len(given) != len(mole_fractions):
        message = f"AGA8 DETAIL knows no {unknown}" if unknown else "a component is named twice"
        raise GasError(f"{message}; its components are {sorted(known)}")
    components = [c for c in tables.components if given.get(c.name, 0.0) > 0.0]
    if not components:
        raise GasError(
            "AGA8 DETAIL: the composition is empty; at least one fraction must be above 0"
        )
    fractions = [given[c.name] for c in components]
    place = {c.name: n for n, c in enumerate(components)}
    pairs = {
        (place[a], place[b]): values
        for (a, b), values in tables.pairs.items()
        if a in place and b in place
    }

    U = _mean_of_powers(fractions, [c.E for c in components], {k: v[1] for k, v in pairs.items()})
    K = _mean_of_powers(fractions, [c.K for c in components], {k: v[2] for k, v in pairs.items()})
    G = Q = F = molar_mass = 0.0
    for x, c in zip(fractions, components, strict=True):
        molar_mass += x * c.molar_mass
        G += x * c.G
        Q += x * c.Q
        F += x * x * c.F
    for (i, j), (_, _, _, G_ij) in pairs.items():
        G += fractions[i] * fractions[j] * (G_ij - 1.0) * (components[i].G + components[j].G)

    virial = _virial_coefficients(tables, fractions, components, U)
    grouped: dict[tuple[int, int], list[tuple[int, float]]] = {}
    linear: list[tuple[int, float]] = []
    for term in tables.terms[12:]:
        g, q, f, _, _ = term.flags
        C = term.coefficient * (G if g else 1.0) * (Q * Q if q else 1.0) * (F if f else 1.0)
        if C == 0.0:
            continue
        entry = (term.half_temperature_exponent, C)
        key = (term.density_exponent, term.exponential_exponent)
        grouped.setdefault(key, []).append(entry)
        if term.number <= 18:
            linear.append(entry)
    return DetailMixture(
        mole_fractions=tuple((c.name, x) for c, x in zip(components, fractions, strict=True)),
        molar_mass=1e-3 * molar_mass,
        temperature_scale=U,
        size_cubed=K * K * K,
        virial_terms=tuple(
            (term.half_temperature_exponent, b)
            for term, b in zip(tables.terms[:18], virial, strict=True)
            if b != 0.0
        ),
        linear_terms=tuple(linear),
        groups=tuple(TermGroup(b, k, tuple(entries)) for (b, k), entries in grouped.items()),
        ideal_terms=tuple(zip(fractions, components, strict=True)),
    )


class _HalfPowers:
    """(U/T)^(m/2) for integers m, by multiplication, each made once."""

    def __init__(self, mixture: DetailMixture, temperature: Floats) -> None:
        root = np.sqrt(mixture.temperature_scale / temperature)
        self._made: dict[int, Floats] = {0: np.ones_like(root), 1: root, -1: 1.0 / root}

    def __call__(self, m: int) -> Floats:
        if m not in self._made:
            half = m // 2 if m > 0 else -(-m // 2)
            self._made[m] = self(half) * self(m - half)
        return self._made[m]


def temperature_sums(
    mixture: DetailMixture, temperature: Floats, *, orders: int
) -> TemperatureSums:
    """Return the temperature-dependent sums and their derivatives up to `orders` - 1.

    Parameters
    ----------
    temperature : (n,) array
        K.
    orders
        1 for pressure alone, 3 for every property.
    """
    powers = _HalfPowers(mixture, temperature)

    def sums(terms: tuple[tuple[int, float], ...]) -> Floats:
        total = np.zeros((orders, len(temperature)))
        for m, coefficient in terms:
            u = 0.5 * m
            part = coefficient * powers(m)
            total[0] += part
            if orders > 1:
                total[1] += -u * part
                total[2] += u * (u + 1.0) * part
        return total

    groups = np.zeros((orders, len(mixture.groups), len(temperature)))
    for n, group in enumerate(mixture.groups):
        groups[:, n] = sums(group.temperature_terms)
    return TemperatureSums(sums(mixture.virial_terms), sums(mixture.linear_terms), groups)


def _density_functions(
    mixture: DetailMixture, density: Floats
) -> list[tuple[Floats, Floats, Floats]]:
    """Return f = D_r^b exp(-D_r^k), D f' / f and D (D f')' / f of each group."""
    r = mixture.size_cubed * density
    powers: list[Floats] = [np.ones_like(r), r]
    for _ in range(8):
        powers.append(powers[-1] * r)
    needed = {group.exponential_exponent for group in mixture.groups} - {0}
    exponentials = {k: exponential(-powers[k]) for k in sorted(needed)}
    functions: list[tuple[Floats, Floats, Floats]] = []
    for group in mixture.groups:
        b, k = group.density_exponent, group.exponential_exponent
        if k == 0:
            slope = np.full_like(r, float(b))
            functions.append((powers[b], slope, slope * slope))
        else:
            kX = float(k) * powers[k]
            slope = float(b) - kX
            functions.append((powers[b] * exponentials[k], slope, slope * slope - float(k) * kX))
    return functions


def pressure_terms(
    mixture: DetailMixture, sums: TemperatureSums, density: Floats
) -> tuple[Floats, Floats]:
    """Return Z and Z + D dZ/dD, which is (dp/dD)_T / (R T), at amount densities [kmol/m3]."""
    first = sums.virial[0] * density - mixture.size_cubed * density * sums.linear[0]
    Z = 1.0 + first
    slope = first.copy()
    for n, (f, one, two) in enumerate(_density_functions(mixture, density)):
        part = sums.groups[0, n] * f
        Z = Z + part * one
        slope = slope + part * two
    return Z, Z + slope


def residual_helmholtz_energy(
    mixture: DetailMixture, sums: TemperatureSums, density: Floats
) -> Floats:
    """Return the residual Helmholtz energy over R T [-] at amount densities [kmol/m3]."""
    total: Floats = sums.virial[0] * density - mixture.size_cubed * density * sums.linear[0]
    for n, (f, _, _) in enumerate(_density_functions(mixture, density)):
        total = total + sums.groups[0, n] * f
    return total


def ideal_heat_capacity(mixture: DetailMixture, temperature: Floats) -> Floats:
    """Return the isobaric heat capacity of the ideal gas over R [-], per amount.

    References
    ----------
    .. [1] Jaeschke and Schley, Int. J. Thermophysics 16 (1995) 1381, as AGA 8 Part 1 uses it.
    """
    return ideal_mixture_heat_capacity(mixture.ideal_terms, temperature)


def properties(mixture: DetailMixture, temperature: Floats, density: Floats) -> Properties:
    """Return the properties at temperature and amount density.

    Parameters
    ----------
    temperature : (n,) array
        K.
    density : (n,) array
        Amount density [kmol/m3]; at 0 the Joule-Thomson coefficient is NaN.

    References
    ----------
    .. [1] AGA Report No. 8 Part 1:2017, clause on thermodynamic properties; ISO 20765-1:2005.
    """
    sums = temperature_sums(mixture, temperature, orders=3)
    size_density = mixture.size_cubed * density
    first = sums.virial[0] * density - size_density * sums.linear[0]
    # Z_T is T dZ/dT; a_T and a_TT are T and T^2 times derivatives of the Helmholtz energy
    Z_T = sums.virial[1] * density - size_density * sums.linear[1]
    a_T = Z_T.copy()
    a_TT = sums.virial[2] * density - size_density * sums.linear[2]
    Z = 1.0 + first
    Z_D = first.copy()
    for n, (f, one, two) in enumerate(_density_functions(mixture, density)):
        part, part_T = sums.groups[0, n] * f, sums.groups[1, n] * f
        Z = Z + part * one
        Z_D = Z_D + part * two
        Z_T = Z_T + part_T * one
        a_T = a_T + part_T
        a_TT = a_TT + sums.groups[2, n] * f
    return properties_from_sums(
        ResidualSums(Z, Z_D, Z_T, a_T, a_TT),
        ideal_heat_capacity(mixture, temperature),
        temperature,
        density,
        gas_constant=GAS_CONSTANT,
        molar_mass=mixture.molar_mass,
    )
