"""The packaged coefficients of GERG-2008."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

from meterfix.calc.gas.coefficient_tables import coefficient_rows

GAS_CONSTANT = 8.314472
"""Of GERG-2008 [J/(mol K)]; ISO 20765-2:2015, Kunz and Wagner 2012."""
IDEAL_GAS_CONSTANT = 8.31451
"""Of the heat capacities of the ideal gas [J/(mol K)]; Kunz and Wagner 2012."""


@dataclass(frozen=True, slots=True)
class DensityFunction:
    """What a term's delta^d is multiplied with; both exponents 0: with nothing.

    exp(-delta^c), c an integer above 0; or exp(-eta (delta - epsilon)^2 - beta (delta - gamma)).
    """

    c: int = 0
    eta: float = 0.0
    epsilon: float = 0.0
    beta: float = 0.0
    gamma: float = 0.0

    @property
    def polynomial(self) -> bool:
        """Whether there is no exponential at all."""
        return self.c == 0 and self.eta == 0.0 and self.beta == 0.0


@dataclass(frozen=True, slots=True)
class GergTerm:
    """n delta^d tau^t times the density function."""

    n: float
    d: int
    t: float
    function: DensityFunction


@dataclass(frozen=True, slots=True)
class GergComponent:
    """One component: molar mass [g/mol], critical density [kmol/m3] and temperature [K], terms."""

    name: str
    molar_mass: float
    critical_density: float
    critical_temperature: float
    terms: tuple[GergTerm, ...]
    ideal_coefficients: tuple[float, float, float, float, float]
    """cp0/R at rest and n0_4 to n0_7 [-], brought to the gas constant of GERG-2008."""
    ideal_temperatures: tuple[float, float, float, float]
    """th0_4 to th0_7 [K]."""


@dataclass(frozen=True, slots=True)
class GergPair:
    """Parameters of two components; i before j in the standard's order."""

    volume_beta: float
    volume_gamma: float
    temperature_beta: float
    temperature_gamma: float
    weight: float
    """F_ij; 0: no departure function."""
    model: int


@dataclass(frozen=True, slots=True)
class GergTables:
    """Everything that the equation needs apart from a composition."""

    components: tuple[GergComponent, ...]
    """The 21 components in the standard's order."""
    pairs: dict[tuple[str, str], GergPair]
    """All 210 pairs."""
    departures: dict[int, tuple[GergTerm, ...]]
    """Terms of each departure model."""


def _ideal(row: dict[str, str]) -> tuple[float, float, float, float, float]:
    ratio = IDEAL_GAS_CONSTANT / GAS_CONSTANT
    return (
        1.0 + ratio * (float(row["n0_3"]) - 1.0),
        ratio * float(row["n0_4"]),
        ratio * float(row["n0_5"]),
        ratio * float(row["n0_6"]),
        ratio * float(row["n0_7"]),
    )


def _integer(text: str) -> int:
    value = float(text)
    if not value.is_integer():
        raise ValueError(f"an exponent of density is {text}; it must be an integer")
    return int(value)


@cache
def gerg_tables() -> GergTables:
    """Return the coefficients of GERG-2008, read once from the package and never changed.

    References
    ----------
    .. [1] AGA Report No. 8 Part 2:2017; ISO 20765-2:2015; Kunz and Wagner, J. Chem. Eng. Data
       57 (2012) 3032.
    """
    pure: dict[str, list[GergTerm]] = {}
    for row in coefficient_rows("gerg2008_pure_terms"):
        function = DensityFunction(c=_integer(row["c"]))
        term = GergTerm(float(row["n"]), _integer(row["d"]), float(row["t"]), function)
        pure.setdefault(row["component"], []).append(term)
    departures: dict[int, list[GergTerm]] = {}
    for row in coefficient_rows("gerg2008_departure"):
        function = DensityFunction(0, *(float(row[x]) for x in ("eta", "epsilon", "beta", "gamma")))
        term = GergTerm(float(row["n"]), _integer(row["d"]), float(row["t"]), function)
        departures.setdefault(int(row["model"]), []).append(term)
    ideal = {row["component"]: row for row in coefficient_rows("gerg2008_ideal")}
    components = tuple(
        GergComponent(
            name=row["component"],
            molar_mass=float(row["molar_mass_g_mol"]),
            critical_density=float(row["critical_density_mol_L"]),
            critical_temperature=float(row["critical_temperature_K"]),
            terms=tuple(pure[row["component"]]),
            ideal_coefficients=_ideal(ideal[row["component"]]),
            ideal_temperatures=(
                float(ideal[row["component"]]["th0_4"]),
                float(ideal[row["component"]]["th0_5"]),
                float(ideal[row["component"]]["th0_6"]),
                float(ideal[row["component"]]["th0_7"]),
            ),
        )
        for row in coefficient_rows("gerg2008_pure")
    )
    pairs = {
        (row["component_i"], row["component_j"]): GergPair(
            volume_beta=float(row["beta_v"]),
            volume_gamma=float(row["gamma_v"]),
            temperature_beta=float(row["beta_T"]),
            temperature_gamma=float(row["gamma_T"]),
            weight=float(row["F_ij"]),
            model=int(row["departure_model"]),
        )
        for row in coefficient_rows("gerg2008_reducing")
    }
    return GergTables(
        components, pairs, {model: tuple(terms) for model, terms in departures.items()}
    )
