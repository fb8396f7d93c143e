"""Physics of the simulated works, written for them alone: nothing here comes from the calculation.

Everything works on (sites, records) arrays with constants as (sites, 1). The gas's equation of
state is the demo simulator's own.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.demo.detail import GAS_CONSTANT, DetailGas

ROUNDS = 8
"""Of repeated substitution; each shrinks the error at least twentyfold here."""
REFERENCE_TEMPERATURE = 293.15
BORE_EXPANSION, PIPE_EXPANSION = 16e-6, 11e-6

# ISO 6976:2016, tables 2 and 3 at 15 degC: summation factor and its standard uncertainty [-];
# ideal gross molar calorific value and its standard uncertainty [kJ/mol]
CALORIFIC = {
    "methane": (0.04452, 0.0005, 891.51, 0.19),
    "nitrogen": (0.0170, 0.0010, 0.0, 0.0),
    "carbon_dioxide": (0.0752, 0.0020, 0.0, 0.0),
    "ethane": (0.0919, 0.0011, 1562.14, 0.51),
    "propane": (0.1344, 0.0016, 2221.10, 0.51),
    "n_butane": (0.1840, 0.0039, 2879.76, 0.72),
}
COMPONENTS = tuple(CALORIFIC)
_ISO_6976_GAS_CONSTANT = 8.3144621

BASE_PRESSURE, BASE_TEMPERATURE = 101_325.0, 288.15


@dataclass(frozen=True)
class Throat:
    """A device of (sites, 1) diameters [m] at 20 degC."""

    form: str
    """'flange', 'corner', 'D_and_D/2', 'ISA_1932', 'long_radius', 'Venturi_nozzle', 'as_cast',
    'machined' or 'rough_welded'."""
    bore: np.ndarray
    pipe: np.ndarray
    calibrated: float | None = None
    certificate_uncertainty: float = 0.0
    """Standard, relative."""
    short_straight_lengths: bool = False

    def warm(self, temperature):
        """Return bore, pipe diameter and their ratio, while working."""
        rise = temperature - REFERENCE_TEMPERATURE
        bore = self.bore * (1.0 + BORE_EXPANSION * rise)
        pipe = self.pipe * (1.0 + PIPE_EXPANSION * rise)
        return bore, pipe, bore / pipe

    @property
    def is_orifice(self):
        return self.form in {"flange", "corner", "D_and_D/2"}

    def coefficient(self, reynolds, ratio, pipe):
        """Return C: ISO 5167-2:2003 (4); -3:2003, 5.1.6.2, 5.2.6.2, 5.3.4.2; -4:2003, 5.5."""
        if self.calibrated is not None:
            return np.full_like(reynolds, self.calibrated)
        if self.is_orifice:
            return self._reader_harris(reynolds, ratio, pipe)
        if self.form == "ISA_1932":
            slope = 0.00175 * ratio**2 - 0.0033 * ratio**4.15
            return 0.9900 - 0.2262 * ratio**4.1 - slope * (1e6 / reynolds) ** 1.15
        if self.form == "long_radius":
            return 0.9965 - 0.00653 * ratio**0.5 * (1e6 / reynolds) ** 0.5
        if self.form == "Venturi_nozzle":
            return 0.9858 - 0.196 * ratio**4.5
        constant = {"as_cast": 0.984, "machined": 0.995, "rough_welded": 0.985}[self.form]
        return np.full_like(reynolds, constant)

    def _reader_harris(self, reynolds, ratio, pipe):
        """Return C by Reader-Harris/Gallagher, D above 71.12 mm."""
        before, behind = {
            "corner": (np.zeros_like(pipe), np.zeros_like(pipe)),
            "D_and_D/2": (np.ones_like(pipe), np.full_like(pipe, 0.47)),
            "flange": (0.0254 / pipe, 0.0254 / pipe),
        }[self.form]
        A = (19_000.0 * ratio / reynolds) ** 0.8
        M = 2.0 * behind / (1.0 - ratio)
        beta_4 = ratio**4
        return (
            0.5961
            + 0.0261 * ratio**2
            - 0.216 * beta_4**2
            + 0.000521 * (1e6 * ratio / reynolds) ** 0.7
            + (0.0188 + 0.0063 * A) * ratio**3.5 * (1e6 / reynolds) ** 0.3
            + (0.043 + 0.080 * np.exp(-10.0 * before) - 0.123 * np.exp(-7.0 * before))
            * (1.0 - 0.11 * A)
            * beta_4
            / (1.0 - beta_4)
            - 0.031 * (M - 0.8 * M**1.1) * ratio**1.3
        )

    def expansibility(self, dp, pressure, exponent, ratio):
        """Return epsilon: ISO 5167-2:2003 (5); adiabatic, ISO 5167-3:2003 (5) for the others."""
        if self.is_orifice:
            beta_4 = ratio**4
            shrunk = 1.0 - (1.0 - dp / pressure) ** (1.0 / exponent)
            return 1.0 - (0.351 + 0.256 * beta_4 + 0.93 * beta_4**2) * shrunk
        tau = 1.0 - dp / pressure
        tau_2k = tau ** (2.0 / exponent)
        beta_4 = ratio**4
        return np.sqrt(
            exponent
            * tau_2k
            / (exponent - 1.0)
            * (1.0 - beta_4)
            / (1.0 - beta_4 * tau_2k)
            * (1.0 - tau ** ((exponent - 1.0) / exponent))
            / (1.0 - tau)
        )

    def coefficient_uncertainty(self, ratio):
        """Return C's relative standard uncertainty within the limits of use, D above 71.12 mm."""
        if self.calibrated is not None:
            return np.full_like(ratio, self.certificate_uncertainty)
        percent = {
            "ISA_1932": np.where(ratio <= 0.6, 0.8, 2.0 * ratio - 0.4),
            "long_radius": np.full_like(ratio, 2.0),
            "Venturi_nozzle": 1.2 + 1.5 * ratio**4,
            "as_cast": np.full_like(ratio, 0.7),
            "machined": np.full_like(ratio, 1.0),
            "rough_welded": np.full_like(ratio, 1.5),
        }.get(self.form, np.where(ratio <= 0.6, 0.5, 1.667 * ratio - 0.5))
        return (percent + (0.5 if self.short_straight_lengths else 0.0)) / 200.0

    def expansibility_uncertainty(self, dp, pressure, exponent, ratio):
        """Return epsilon's relative standard uncertainty."""
        share = dp / pressure
        if self.is_orifice:
            return 3.5 * share / exponent / 200.0
        if self.form in {"ISA_1932", "long_radius"}:
            return 2.0 * share / 200.0
        return (4.0 + 100.0 * ratio**8) * share / 200.0


@dataclass(frozen=True)
class Gas:
    """What flows at one place, (sites, records) or (sites, 1)."""

    density: np.ndarray
    pressure: np.ndarray
    temperature: np.ndarray
    viscosity: np.ndarray
    exponent: np.ndarray


@dataclass(frozen=True)
class Strangeness:
    """How far a real device is from the standard, in standard uncertainties, (sites, 1)."""

    coefficient: np.ndarray
    expansibility: np.ndarray


def flow_behind(throat: Throat, gas: Gas, strange: Strangeness, dp):
    """Return the true mass flow behind a true differential pressure [kg/s]."""
    bore, pipe, ratio = throat.warm(gas.temperature)
    epsilon = throat.expansibility(dp, gas.pressure, gas.exponent, ratio) * (
        1.0
        + strange.expansibility
        * throat.expansibility_uncertainty(dp, gas.pressure, gas.exponent, ratio)
    )
    real = 1.0 + strange.coefficient * throat.coefficient_uncertainty(ratio)
    area = 0.25 * np.pi * bore**2 / np.sqrt(1.0 - ratio**4)
    whole = area * epsilon * np.sqrt(2.0 * dp * gas.density) * real
    flow = 0.8 * whole
    for _ in range(ROUNDS):
        reynolds = 4.0 * flow / (np.pi * gas.viscosity * pipe)
        flow = throat.coefficient(reynolds, ratio, pipe) * whole
    return flow


def pressure_across(throat: Throat, gas: Gas, strange: Strangeness, flow):
    """Return the true differential pressure of a true mass flow [Pa]."""
    bore, pipe, ratio = throat.warm(gas.temperature)
    reynolds = 4.0 * flow / (np.pi * gas.viscosity * pipe)
    C = throat.coefficient(reynolds, ratio, pipe) * (
        1.0 + strange.coefficient * throat.coefficient_uncertainty(ratio)
    )
    area = 0.25 * np.pi * bore**2 / np.sqrt(1.0 - ratio**4)
    incompressible = (flow / (C * area)) ** 2 / (2.0 * gas.density)
    dp = incompressible
    for _ in range(ROUNDS):
        epsilon = throat.expansibility(dp, gas.pressure, gas.exponent, ratio) * (
            1.0
            + strange.expansibility
            * throat.expansibility_uncertainty(dp, gas.pressure, gas.exponent, ratio)
        )
        dp = incompressible / epsilon**2
    return dp


def reynolds_number(throat: Throat, gas: Gas, flow):
    """Return Re_D."""
    return 4.0 * flow / (np.pi * gas.viscosity * throat.warm(gas.temperature)[1])


# --- gas -------------------------------------------------------------------------------------

PRESSURES, TEMPERATURES = (2e5, 1.3e6), (272.0, 298.0)
"""Between which the compression factor's polynomials hold [Pa], [K]."""
_DEGREES = 5, 4


def _scaled(values, limits):
    return (2.0 * values - limits[0] - limits[1]) / (limits[1] - limits[0])


def _nodes(count):
    return np.cos(np.pi * (np.arange(count) + 0.5) / count)


class TrueGas:
    """True gases of many sites: AGA8 DETAIL as polynomials in pressure and temperature.

    Parameters
    ----------
    compositions : list of dict
        True mole fractions, one a site.
    """

    def __init__(self, compositions):
        x, y = (_nodes(degree + 1) for degree in _DEGREES)
        p = 0.5 * (PRESSURES[0] + PRESSURES[1] + x * (PRESSURES[1] - PRESSURES[0]))
        T = 0.5 * (TEMPERATURES[0] + TEMPERATURES[1] + y * (TEMPERATURES[1] - TEMPERATURES[0]))
        p, T = (values.ravel() for values in np.meshgrid(p, T, indexing="ij"))
        into_x = np.linalg.inv(np.polynomial.polynomial.polyvander(x, _DEGREES[0]))
        into_y = np.linalg.inv(np.polynomial.polynomial.polyvander(y, _DEGREES[1]))
        factors, molar, base = [], [], []
        for composition in compositions:
            gas = DetailGas(composition)
            states = gas.molar_density(np.append(p, BASE_PRESSURE), np.append(T, BASE_TEMPERATURE))
            Z = p / (1000.0 * states[:-1] * GAS_CONSTANT * T)
            factors.append(into_x @ Z.reshape(len(x), len(y)) @ into_y.T)
            molar.append(gas.molar_mass)
            base.append(1000.0 * gas.molar_mass * states[-1])
        self._factors = np.array(factors)
        self.molar_mass = np.array(molar)[:, np.newaxis]
        self.base_density = np.array(base)[:, np.newaxis]

    def density(self, pressure, temperature):
        """Return the density [kg/m3], (sites, records)."""
        x, y = _scaled(pressure, PRESSURES), _scaled(temperature, TEMPERATURES)
        factor = np.zeros(np.broadcast_shapes(x.shape, y.shape))
        for i in reversed(range(_DEGREES[0] + 1)):
            inner = np.zeros_like(y)
            for j in reversed(range(_DEGREES[1] + 1)):
                inner = inner * y + self._factors[:, i, j, np.newaxis]
            factor = factor * x + inner
        return pressure * self.molar_mass / (factor * GAS_CONSTANT * temperature)


def gross_calorific_value(composition, heat=None, factor=None):
    """Return the gross calorific value of real gas, 15 degC/15 degC, 101.325 kPa [J/m3].

    Parameters
    ----------
    composition : dict
        Mole fractions.
    heat, factor : dict, optional
        True errors of the standard's tables, in their standard uncertainties, by component.

    References
    ----------
    .. [1] ISO 6976:2016, equations (1), (2) and (8) [gross, molar and volumetric, real gas].
    """
    heat, factor = heat or {}, factor or {}
    H = root = 0.0
    for name, x in composition.items():
        s, u_s, molar, u_molar = CALORIFIC[name]
        H += x * (molar + u_molar * heat.get(name, 0.0))
        root += x * (s + u_s * factor.get(name, 0.0))
    Z = 1.0 - root * root
    return 1000.0 * H * BASE_PRESSURE / (_ISO_6976_GAS_CONSTANT * BASE_TEMPERATURE * Z)
