"""The gas properties that the correction of records uses: one interface over every model."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.calorific import (
    ComputedValue,
    computed_value,
    energy_factor,
    stated_or_computed,
)
from meterfix.calc.gas.composition import MoleFractions, mole_fractions, single_component
from meterfix.calc.gas.equations import SIMPLIFIED, equation_of_state
from meterfix.calc.gas.pure import PureGas
from meterfix.calc.gas.state import EquationOfState, not_known
from meterfix.calc.gas.stated_uncertainty import COVERAGE_FACTOR, density_relative_uncertainty
from meterfix.calc.gas.tiles import Bound, PropertyTiles
from meterfix.errors import GasError
from meterfix.frames import Floats, Truths
from meterfix.model.gas import (
    BaseConditions,
    CalorificBasis,
    Composition,
    DensityModel,
    GasTerms,
    PropertyChoice,
    StateModel,
)
from meterfix.model.site import EnergyTerms

if TYPE_CHECKING:
    from meterfix.calc.gas.gradients import CompositionGradients

EQUATION_OF_STATE = "equation_of_state"
IDEAL_GAS = "ideal_gas"
REFERENCE_EQUATION = "reference_equation"

COMPRESSION_FACTOR_BOUND = Bound(2e-7)
ISENTROPIC_EXPONENT_BOUND = Bound(2e-6)
JOULE_THOMSON_BOUND = Bound(1e-11)
"""K/Pa, which is 1e-5 K/MPa."""
VISCOSITY_BOUND = Bound(0.0, 1e-5)


@dataclass(frozen=True, slots=True)
class LineState:
    """The gas at n line states; all arrays are (n,)."""

    density: Floats
    """kg/m3."""
    compression_factor: Floats
    isentropic_exponent: Floats
    joule_thomson_coefficient: Floats
    """K/Pa; 0 for the ideal gas and a fixed compression factor."""
    dynamic_viscosity: Floats
    """Pa s."""
    outside_range: Truths
    """Composition, pressure or temperature outside the line model's stated range."""
    no_gas: Truths
    """No gas phase there: every property is NaN. False with NaN: the state is not known."""


@dataclass(frozen=True, slots=True)
class LineSlopes:
    """Derivatives of line states, (n,) arrays: per Pa, and per K, the other constant."""

    log_density_by_pressure: Floats
    log_density_by_temperature: Floats
    isentropic_exponent_by_pressure: Floats
    isentropic_exponent_by_temperature: Floats
    joule_thomson_coefficient: Floats
    """Its value [K/Pa]; 0, as its derivatives, where it was not asked for."""
    joule_thomson_by_pressure: Floats
    """K/Pa per Pa."""
    joule_thomson_by_temperature: Floats
    log_viscosity_by_pressure: Floats
    log_viscosity_by_temperature: Floats


@dataclass(frozen=True, slots=True)
class TileRows:
    """Which row of a gas's property tiles is what; None: it is not tiled."""

    compression_factor: int | None
    joule_thomson_coefficient: int | None
    isentropic_exponent: int | None
    dynamic_viscosity: int | None
    count: int


class GasProperties:
    """The properties of one gas as its terms say; made by a `GasLibrary`.

    Attributes
    ----------
    simplified
        True where the line or the base density comes from the ideal gas or a fixed
        compression factor.
    molar_mass
        Of the line model [kg/mol].
    tiles, rows
        The property tiles, None where no property needs them, and what their rows are.
    """

    def __init__(
        self,
        terms: GasTerms,
        line: EquationOfState,
        base: EquationOfState,
        tiles: PropertyTiles | None,
    ) -> None:
        self.terms = terms
        self.simplified = (
            terms.line_model.model in SIMPLIFIED or terms.base_model.model in SIMPLIFIED
        )
        self.molar_mass = line.molar_mass
        self._line = line
        self._base = base
        self.tiles = tiles
        self.rows = _rows(terms)
        self._base_densities: dict[BaseConditions, float] = {}
        self._fractions_by_model: dict[StateModel, MoleFractions] = {}

    def line_state(self, static_pressure: Floats, temperature: Floats) -> LineState:
        """Return the gas's properties at line conditions.

        Parameters
        ----------
        static_pressure, temperature : (n,) arrays
            Absolute pressure [Pa] and temperature [K]; NaN where not known.

        Returns
        -------
        LineState
            From property tiles within the bounds of this module; each record's numbers depend
            on its own state only.
        """
        p, T = contiguous(static_pressure), contiguous(temperature)
        known = ~not_known(p, T)
        usable = known & np.isfinite(p) & np.isfinite(T) & (p > 0.0) & (T > 0.0)
        tiled = () if self.tiles is None else self.tiles.evaluate(p, T)
        rows: Iterator[Floats] = iter(tiled)
        terms = self.terms
        if terms.line_model.model in SIMPLIFIED:
            factor = terms.line_model.fixed_compression_factor
            Z = np.full(len(p), 1.0 if factor is None else factor)
            joule_thomson = np.zeros(len(p))
        else:
            Z, joule_thomson = next(rows), next(rows)
        kappa = _stated_or_next(terms.isentropic_exponent, rows, len(p))
        viscosity = _stated_or_next(terms.dynamic_viscosity, rows, len(p))
        gas = usable & ~(np.isnan(Z) | np.isnan(kappa) | np.isnan(viscosity))
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            density = p * self._line.molar_mass / (Z * self._line.gas_constant * T)
        return LineState(
            density=np.where(gas, density, np.nan),
            compression_factor=np.where(gas, Z, np.nan),
            isentropic_exponent=np.where(gas, kappa, np.nan),
            joule_thomson_coefficient=np.where(gas, joule_thomson, np.nan),
            dynamic_viscosity=np.where(gas, viscosity, np.nan),
            outside_range=self._line.outside_range(p, T),
            no_gas=known & ~gas,
        )

    def line_slopes(
        self,
        static_pressure: Floats,
        temperature: Floats,
        compression_factor: Floats,
        *,
        throttled: bool,
    ) -> LineSlopes:
        """Return the derivatives of the properties that `line_state` gives.

        Parameters
        ----------
        static_pressure, temperature : (n,) arrays
            Absolute pressure [Pa] and temperature [K] of states where there is gas.
        compression_factor : (n,) array
            What `line_state` gives there [-].
        throttled : bool
            Whether the Joule-Thomson coefficient and its derivatives are wanted.

        Returns
        -------
        LineSlopes
            Of the very polynomials that give the properties.
        """
        p, T = contiguous(static_pressure), contiguous(temperature)
        nothing = np.zeros(len(p))
        rows = (
            self.rows.compression_factor,
            self.rows.isentropic_exponent,
            self.rows.joule_thomson_coefficient if throttled else None,
            self.rows.dynamic_viscosity,
        )
        wanted = tuple(row for row in rows if row is not None)
        found: list[tuple[Floats, Floats]] = [(nothing, nothing)] * len(rows)
        joule_thomson = nothing
        if self.tiles is not None and wanted:
            slopes = self.tiles.slopes(p, T, wanted)
            for n, row in enumerate(rows):
                if row is not None:
                    found[n] = slopes[wanted.index(row)][0], slopes[wanted.index(row)][1]
            if rows[2] is not None or rows[3] is not None:
                values = self.tiles.evaluate(p, T)
                if rows[2] is not None:
                    joule_thomson = values[rows[2]]
                if rows[3] is not None:
                    found[3] = found[3][0] / values[rows[3]], found[3][1] / values[rows[3]]
        (Z_p, Z_T), (kappa_p, kappa_T), (jt_p, jt_T), (mu_p, mu_T) = found
        return LineSlopes(
            log_density_by_pressure=1.0 / p - Z_p / compression_factor,
            log_density_by_temperature=-1.0 / T - Z_T / compression_factor,
            isentropic_exponent_by_pressure=kappa_p,
            isentropic_exponent_by_temperature=kappa_T,
            joule_thomson_coefficient=joule_thomson,
            joule_thomson_by_pressure=jt_p,
            joule_thomson_by_temperature=jt_T,
            log_viscosity_by_pressure=mu_p,
            log_viscosity_by_temperature=mu_T,
        )

    def line_density_uncertainty(self, static_pressure: Floats, temperature: Floats) -> Floats:
        """Return the stated relative standard uncertainty of the line density.

        NaN where nothing is stated; see `stated_uncertainty`.
        """
        return self._density_uncertainty(self.terms.line_model, static_pressure, temperature)

    def base_density_uncertainty(self, base: BaseConditions) -> float:
        """Return the stated relative standard uncertainty of the base density; NaN if none is."""
        return float(
            self._density_uncertainty(
                self.terms.base_model,
                contiguous(base.base_pressure),
                contiguous(base.base_temperature),
            )[0]
        )

    def _density_uncertainty(self, model: DensityModel, p: Floats, T: Floats) -> Floats:
        if model.relative_standard_uncertainty is not None:
            return np.full(len(p), model.relative_standard_uncertainty)
        fractions = mole_fractions(self.terms.composition, model.model)
        return density_relative_uncertainty(model.model, fractions, p, T) / COVERAGE_FACTOR

    def base_density(self, base: BaseConditions) -> float:
        """Return the density at base conditions by the base model's exact equation [kg/m3].

        Raises
        ------
        GasError
            If there is no gas at the base conditions.
        """
        if base not in self._base_densities:
            states = self._base.states(
                contiguous(base.base_pressure), contiguous(base.base_temperature)
            )
            density = float(states.density[0])
            if not np.isfinite(density):
                raise GasError(
                    f"{self.terms.base_model.model.value} has no gas at the base conditions "
                    f"{base.base_pressure:.6g} Pa and {base.base_temperature:.6g} K; "
                    f"a base volume needs one there"
                )
            self._base_densities[base] = density
        return self._base_densities[base]

    def energy_factor(
        self, base: BaseConditions, energy: EnergyTerms
    ) -> tuple[float, CalorificBasis]:
        """Return J/m3 at `base` (VOLUME) or J/kg (MASS), as the contract reckons energy.

        Raises
        ------
        GasError
            If the gas states no calorific value or one of another kind, or ISO 6976:2016 cannot
            compute it; see `calorific.energy_factor` and `calorific.computed_value`.
        """
        value = self.terms.calorific_value
        if value is not None:
            value = stated_or_computed(value, self._fractions)
        return energy_factor(value, energy, base, self.base_density)

    def computed_calorific_value(self) -> ComputedValue | None:
        """Return the calorific value by ISO 6976:2016; None where it is stated, or there is none.

        Raises
        ------
        GasError
            As `calorific.computed_value`.
        """
        return self._computed

    @cached_property
    def _computed(self) -> ComputedValue | None:
        # milliseconds, and asked for by every meter-day
        value = self.terms.calorific_value
        if value is None or value.value is not None:
            return None
        return computed_value(value, self._fractions)

    @cached_property
    def _fractions(self) -> MoleFractions:
        """The mole fractions, with the base model's molar masses."""
        return mole_fractions(self.terms.composition, self.terms.base_model.model)


def _rows(terms: GasTerms) -> TileRows:
    """Return what the rows of the gas's tiles are, in the order in which `_tiles` makes them."""
    exact = terms.line_model.model not in SIMPLIFIED
    first = 2 if exact else 0
    kappa = terms.isentropic_exponent.method is not None
    viscosity = terms.dynamic_viscosity.method is not None
    return TileRows(
        compression_factor=0 if exact else None,
        joule_thomson_coefficient=1 if exact else None,
        isentropic_exponent=first if kappa else None,
        dynamic_viscosity=first + kappa if viscosity else None,
        count=first + kappa + viscosity,
    )


def _stated_or_next(choice: PropertyChoice, rows: Iterator[Floats], count: int) -> Floats:
    return next(rows) if choice.value is None else np.full(count, choice.value)


class GasLibrary:
    """Gas properties by their terms; owned by its caller, so that nothing is global.

    Gases whose density model, composition and methods agree share their tiles. Tiles live as
    long as the library, within one version of the calculation; they are never stored. Nor are
    its gases' derivatives by composition, `gradients`, see `gradients.gradients_of`.
    """

    def __init__(self) -> None:
        self.gradients: dict[tuple[GasTerms, tuple[str, ...]], CompositionGradients] = {}
        self._properties: dict[GasTerms, GasProperties] = {}
        self._equations: dict[tuple[Composition, DensityModel], EquationOfState] = {}
        self._tiles: dict[
            tuple[Composition, DensityModel, str | None, str | None], PropertyTiles | None
        ] = {}

    def properties(self, terms: GasTerms) -> GasProperties:
        """Return the properties of a gas; the same object for equal terms.

        Raises
        ------
        GasError
            If a model cannot compute the composition, or a method is unknown or cannot serve
            this gas.
        """
        if terms not in self._properties:
            self._properties[terms] = self._made(terms)
        return self._properties[terms]

    def _equation(self, composition: Composition, model: DensityModel) -> EquationOfState:
        key = (composition, model)
        if key not in self._equations:
            self._equations[key] = equation_of_state(composition, model)
        return self._equations[key]

    def _made(self, terms: GasTerms) -> GasProperties:
        _check_choice("isentropic exponent", terms.isentropic_exponent)
        _check_choice("dynamic viscosity", terms.dynamic_viscosity)
        line = self._equation(terms.composition, terms.line_model)
        base = self._equation(terms.composition, terms.base_model)
        kappa, viscosity = terms.isentropic_exponent.method, terms.dynamic_viscosity.method
        if kappa not in {None, EQUATION_OF_STATE, IDEAL_GAS}:
            raise GasError(
                f"isentropic exponent method is {kappa!r}; it must be a value, "
                f"{EQUATION_OF_STATE!r} or {IDEAL_GAS!r}"
            )
        if kappa == EQUATION_OF_STATE and terms.line_model.model is StateModel.FIXED:
            raise GasError(
                "a fixed compression factor gives no isentropic exponent; state a value, "
                f"or {IDEAL_GAS!r} for cp0/cv0"
            )
        key = (terms.composition, terms.line_model, kappa, viscosity)
        if key not in self._tiles:
            viscous = None if viscosity is None else _viscous_gas(terms, viscosity)
            self._tiles[key] = _tiles(terms, line, viscous)
        return GasProperties(terms, line, base, self._tiles[key])


def _check_choice(what: str, choice: PropertyChoice) -> None:
    if (choice.value is None) == (choice.method is None):
        raise GasError(f"{what} is {choice}; it must be either a value or a method")
    if choice.value is not None and not (np.isfinite(choice.value) and choice.value > 0.0):
        raise GasError(f"{what} is {choice.value!r}; it must be a number above 0")


def _viscous_gas(terms: GasTerms, method: str) -> PureGas:
    """Return the gas whose reference equation gives the viscosity."""
    if method != REFERENCE_EQUATION:
        raise GasError(
            f"dynamic viscosity method is {method!r}; it must be a value or {REFERENCE_EQUATION!r}"
        )
    component = single_component(terms.composition)
    if component is None:
        raise GasError(
            "a reference equation for viscosity is for one pure gas or 'air'; "
            "state a value for a mixture"
        )
    gas = PureGas(component)
    if not gas.has_viscosity():
        raise GasError(f"there is no reference equation for the viscosity of {component!r}")
    return gas


def _tiles(terms: GasTerms, line: EquationOfState, viscous: PureGas | None) -> PropertyTiles | None:
    """Return the tiles of what does not follow from stated values; None where all of it does."""
    simplified = terms.line_model.model in SIMPLIFIED
    kappa = terms.isentropic_exponent.method
    bounds: list[Bound] = []
    if not simplified:
        bounds += [COMPRESSION_FACTOR_BOUND, JOULE_THOMSON_BOUND]
    if kappa is not None:
        bounds.append(ISENTROPIC_EXPONENT_BOUND)
    if viscous is not None:
        bounds.append(VISCOSITY_BOUND)
    if not bounds:
        return None

    def exact(p: Floats, T: Floats) -> Floats:
        """Return the tiled rows: Z and the Joule-Thomson coefficient, kappa, viscosity."""
        rows: list[Floats] = []
        if not simplified or kappa == EQUATION_OF_STATE:
            # one call serves density and viscosity where one equation gives both
            both = viscous is not None and isinstance(line, PureGas)
            states = (
                line.states(p, T, viscosity=both)
                if isinstance(line, PureGas)
                else line.states(p, T)
            )
            if not simplified:
                rows += [states.compression_factor, states.joule_thomson_coefficient]
            if kappa == EQUATION_OF_STATE:
                rows.append(states.isentropic_exponent)
            transport = states.dynamic_viscosity if both else None
        else:
            transport = None
        if kappa == IDEAL_GAS:
            rows.append(line.ideal_isentropic_exponent(T))
        if viscous is not None:
            if transport is None:
                transport = viscous.states(p, T, viscosity=True).dynamic_viscosity
            rows.append(transport)
        values = np.array(rows)
        # a state that lacks one property is of no use for a flow: it has none of them
        values[:, np.isnan(values).any(axis=0)] = np.nan
        return values

    return PropertyTiles(exact, tuple(bounds))
