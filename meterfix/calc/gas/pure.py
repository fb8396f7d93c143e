"""Pure gases and dry air by their reference equations of state, through CoolProp.

CoolProp is imported when the first such gas is asked for (it takes seconds), never before.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.state import GasStates, not_known
from meterfix.errors import GasError
from meterfix.frames import Floats, Truths

REFERENCE_FLUIDS: tuple[tuple[str, str], ...] = (
    ("methane", "Methane"),
    ("nitrogen", "Nitrogen"),
    ("carbon_dioxide", "CarbonDioxide"),
    ("ethane", "Ethane"),
    ("propane", "n-Propane"),
    ("isobutane", "IsoButane"),
    ("n_butane", "n-Butane"),
    ("isopentane", "Isopentane"),
    ("n_pentane", "n-Pentane"),
    ("n_hexane", "n-Hexane"),
    ("n_heptane", "n-Heptane"),
    ("n_octane", "n-Octane"),
    ("n_nonane", "n-Nonane"),
    ("n_decane", "n-Decane"),
    ("hydrogen", "Hydrogen"),
    ("oxygen", "Oxygen"),
    ("carbon_monoxide", "CarbonMonoxide"),
    ("water", "Water"),
    ("hydrogen_sulfide", "HydrogenSulfide"),
    ("helium", "Helium"),
    ("argon", "Argon"),
    ("air", "Air"),
)
"""Component as meterfix spells it, and the library's name of the fluid."""


class PureGas:
    """The reference equation of state of one gas, or of dry air as one substance.

    Parameters
    ----------
    component
        One of `REFERENCE_FLUIDS`.

    Raises
    ------
    GasError
        If the component has no reference equation here.

    References
    ----------
    .. [1] Bell, Wronski, Quoilin and Lemort, Ind. Eng. Chem. Res. 53 (2014) 2498 (CoolProp,
       which cites the equation of each fluid). Dry air: Lemmon, Jacobsen, Penoncello and
       Friend, J. Phys. Chem. Ref. Data 29 (2000) 331.
    """

    def __init__(self, component: str) -> None:
        names = dict(REFERENCE_FLUIDS)
        if component not in names:
            raise GasError(
                f"there is no reference equation of state for {component!r}; "
                f"there is one for each of {sorted(names)}"
            )
        from CoolProp import CoolProp  # noqa: PLC0415 - takes seconds; only where it is needed

        self.component = component
        self._library: Any = CoolProp
        self._fluid: Any = CoolProp.AbstractState("HEOS", names[component])
        self._critical_temperature = float(self._fluid.T_critical())
        self._lowest_temperature = float(self._fluid.Tmin())
        self._highest_temperature = float(self._fluid.Tmax())
        self._highest_pressure = float(self._fluid.pmax())

    @property
    def gas_constant(self) -> float:
        """The equation's own molar gas constant [J/(mol K)]."""
        return float(self._fluid.gas_constant())

    @property
    def molar_mass(self) -> float:
        """The equation's own molar mass [kg/mol]."""
        return float(self._fluid.molar_mass())

    def has_viscosity(self) -> bool:
        """Return whether the library has a viscosity equation for this gas."""
        try:
            # a warm, thin gas: within the range of every fluid and far from its saturation
            self._fluid.unspecify_phase()
            self._fluid.update(self._library.DmassT_INPUTS, 0.01, 0.9 * self._highest_temperature)
            return bool(np.isfinite(self._fluid.viscosity()))
        except ValueError:
            return False

    def saturation_pressure(self, temperature: float) -> float:
        """Return the pressure [Pa] from which on there is no gas at a temperature [K].

        The vapour pressure of a pure gas, the dew-point pressure of air; infinite from the
        critical temperature on, where a dense gas is fine; 0 below the triple point.
        """
        if temperature >= self._critical_temperature:
            return np.inf
        if temperature < self._lowest_temperature:
            return 0.0
        self._fluid.unspecify_phase()
        self._fluid.update(self._library.QT_INPUTS, 1.0, temperature)
        return float(self._fluid.p())

    def states(
        self, pressure: Floats, temperature: Floats, *, viscosity: bool = False
    ) -> GasStates:
        """Return the properties at pressure and temperature, state by state.

        Parameters
        ----------
        pressure, temperature : (n,) arrays
            Absolute pressure [Pa] and temperature [K].
        viscosity
            True: also the dynamic viscosity; False: NaN in its place.

        Returns
        -------
        GasStates
            NaN and `no_gas` where the pressure is at or above the saturation curve below the
            critical temperature, the equation gives no state, or pressure or temperature is
            not positive or infinite; NaN alone where either is NaN.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        columns = np.full((8, len(p)), np.nan)
        usable = np.isfinite(p) & np.isfinite(T) & (p > 0.0) & (T > 0.0)
        for n in np.flatnonzero(usable):
            values = self._state(float(p[n]), float(T[n]), viscosity=viscosity)
            if values is not None:
                columns[:, n] = values
        return GasStates(
            density=columns[0],
            compression_factor=columns[1],
            isochoric_heat_capacity=columns[2],
            isobaric_heat_capacity=columns[3],
            isentropic_exponent=columns[4],
            speed_of_sound=columns[5],
            joule_thomson_coefficient=columns[6],
            dynamic_viscosity=columns[7],
            no_gas=np.isnan(columns[0]) & ~not_known(p, T),
        )

    def _state(self, p: float, T: float, *, viscosity: bool) -> tuple[float, ...] | None:
        library, fluid = self._library, self._fluid
        try:
            if p >= self.saturation_pressure(T):
                return None
            if self._critical_temperature > T:
                fluid.specify_phase(library.iphase_gas)
            else:
                fluid.unspecify_phase()
            fluid.update(library.PT_INPUTS, p, T)
            density = float(fluid.rhomass())
            speed = float(fluid.speed_sound())
            joule_thomson = float(fluid.first_partial_deriv(library.iT, library.iP, library.iHmass))
            values = (
                density,
                p * self.molar_mass / (density * self.gas_constant * T),
                float(fluid.cvmass()),
                float(fluid.cpmass()),
                density * speed * speed / p,
                speed,
                joule_thomson,
            )
        except ValueError:
            # the library's way to say that the equation has no state here
            return None
        if not all(np.isfinite(value) for value in values) or density <= 0.0:
            return None
        return (*values, self._viscosity() if viscosity else np.nan)

    def _viscosity(self) -> float:
        try:
            return float(self._fluid.viscosity())
        except ValueError:
            return float("nan")

    def ideal_isentropic_exponent(self, temperature: Floats) -> Floats:
        """Return cp0/cv0 of the ideal gas at (n,) temperatures [K]; NaN where not computable."""
        T = contiguous(temperature)
        result = np.full(len(T), np.nan)
        self._fluid.unspecify_phase()
        for n in np.flatnonzero(np.isfinite(T) & (T > 0.0)):
            try:
                # the ideal-gas part depends on temperature only; any thin density serves
                self._fluid.update(self._library.DmassT_INPUTS, 1e-3, float(T[n]))
                cp = float(self._fluid.cp0molar())
            except ValueError:
                continue
            result[n] = cp / (cp - self.gas_constant)
        return result

    def outside_range(self, pressure: Floats, temperature: Floats) -> Truths:
        """Return where pressure or temperature is outside the equation's stated range.

        NaN is not outside.
        """
        p, T = contiguous(pressure), contiguous(temperature)
        result: Truths = (
            (p > self._highest_pressure)
            | (self._lowest_temperature > T)
            | (self._highest_temperature < T)
        )
        return result
