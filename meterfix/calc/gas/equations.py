"""From a model's name and a composition to the equation of state that serves them."""

from __future__ import annotations

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.composition import AIR, molar_mass, mole_fractions, single_component
from meterfix.calc.gas.detail import detail_mixture, ideal_heat_capacity
from meterfix.calc.gas.detail_gas import DetailGas
from meterfix.calc.gas.gerg_gas import GergGas
from meterfix.calc.gas.pure import PureGas
from meterfix.calc.gas.state import EquationOfState, GasStates, not_known
from meterfix.errors import GasError
from meterfix.frames import Floats, Truths
from meterfix.model.gas import Composition, DensityModel, StateModel

GAS_CONSTANT_SI = 8.31446261815324
"""J/(mol K), exact; the SI (2019). Of the ideal gas and the fixed compression factor."""

SIMPLIFIED = (StateModel.IDEAL, StateModel.FIXED)
"""Models that stand in for an equation of state; every result says so."""


class SimplifiedGas:
    """The ideal gas, or a gas with one compression factor at every state.

    Its isentropic exponent is cp0/cv0 of the ideal gas and its Joule-Thomson coefficient is 0:
    an ideal gas does not cool in a throttle, and a fixed compression factor says nothing of it.

    Parameters
    ----------
    composition
        Components of AGA8 DETAIL's table, or 'air' alone.
    compression_factor
        1 for the ideal gas [-].

    Raises
    ------
    GasError
        If a component is unknown, or 'air' is mixed with others.
    """

    def __init__(self, composition: Composition, compression_factor: float) -> None:
        self._compression_factor = compression_factor
        self._molar_mass = molar_mass(composition, StateModel.IDEAL)
        fractions = mole_fractions(composition, StateModel.IDEAL)
        self._air = PureGas(AIR) if single_component(composition) == AIR else None
        if self._air is None and AIR in dict(fractions):
            raise GasError("'air' stands for dry air alone; it cannot be mixed with components")
        self._mixture = None if self._air is not None else detail_mixture(fractions)

    @property
    def gas_constant(self) -> float:
        """8.31446261815324 J/(mol K), the SI's."""
        return GAS_CONSTANT_SI

    @property
    def molar_mass(self) -> float:
        """By AGA8 DETAIL's table, or of dry air by its reference equation [kg/mol]."""
        return self._molar_mass

    def states(self, pressure: Floats, temperature: Floats) -> GasStates:
        """Return the properties at (n,) absolute pressures [Pa] and temperatures [K].

        There is gas at every positive, finite pressure and temperature.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        usable = np.isfinite(p) & np.isfinite(T) & (p > 0.0) & (T > 0.0)
        p, T = np.where(usable, p, np.nan), np.where(usable, T, np.nan)
        Z = np.where(usable, self._compression_factor, np.nan)
        R = GAS_CONSTANT_SI / self._molar_mass
        density = p / (Z * R * T)
        kappa = self.ideal_isentropic_exponent(T)
        cv = R / (kappa - 1.0)
        return GasStates(
            density=density,
            compression_factor=Z,
            isochoric_heat_capacity=cv,
            isobaric_heat_capacity=kappa * cv,
            isentropic_exponent=kappa,
            speed_of_sound=np.sqrt(kappa * p / density),
            joule_thomson_coefficient=np.where(usable, 0.0, np.nan),
            dynamic_viscosity=np.full(len(p), np.nan),
            no_gas=~usable & ~not_known(contiguous(pressure), contiguous(temperature)),
        )

    def ideal_isentropic_exponent(self, temperature: Floats) -> Floats:
        """Return cp0/cv0 of the ideal gas at (n,) temperatures [K]."""
        if self._mixture is None:
            assert self._air is not None
            return self._air.ideal_isentropic_exponent(temperature)
        cp = ideal_heat_capacity(self._mixture, contiguous(temperature))
        result: Floats = cp / (cp - 1.0)
        return result

    def outside_range(self, pressure: Floats, temperature: Floats) -> Truths:
        """Return False everywhere: these models state no range; results say 'simplified'."""
        return np.zeros(np.broadcast(pressure, temperature).size, dtype=np.bool_)


def equation_of_state(composition: Composition, density_model: DensityModel) -> EquationOfState:
    """Return the equation of state of a model with a composition put in.

    Raises
    ------
    GasError
        If the model does not know a component, a reference equation is asked for a mixture, or
        a fixed compression factor is missing or not positive.
    """
    model = density_model.model
    if model is StateModel.AGA8_DETAIL:
        return DetailGas(mole_fractions(composition, model))
    if model is StateModel.GERG_2008:
        return GergGas(mole_fractions(composition, model))
    if model is StateModel.REFERENCE:
        mole_fractions(composition, model)  # raises what a composition cannot be
        component = single_component(composition)
        if component is None:
            raise GasError(
                f"a reference equation of state is for one pure gas or 'air'; the composition "
                f"has {[name for name, x in composition.fractions if x > 0.0]}"
            )
        return PureGas(component)
    if model is StateModel.IDEAL:
        return SimplifiedGas(composition, 1.0)
    factor = density_model.fixed_compression_factor
    if factor is None or not np.isfinite(factor) or factor <= 0.0:
        raise GasError(f"fixed compression factor is {factor!r}; it must be a number above 0")
    return SimplifiedGas(composition, float(factor))
