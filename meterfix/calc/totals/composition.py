"""How the mass of each cell changes with the stated fractions of its gas's components.

The gradients of the gas's properties by composition vary little over an hour. They are not
evaluated per record but at four states that stand for the records of a cell: with the same
mean, variances and covariance of pressure and temperature, each record weighted by what its
density weighs in the cell. What is left out is of third order in the changes of pressure and
temperature within the hour: for a natural gas up to 6 MPa below 1e-6 of the result while the
pressure stays within 5 % and the temperature within 5 K of its mean. The paths through isentropic
exponent and Joule-Thomson coefficient, a hundred times smaller, take one state each: their
weighted mean.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.gas.gradients import CompositionGradients
from meterfix.calc.sensitivity.rates import MassSensitivities
from meterfix.calc.totals.visits import Visits
from meterfix.frames import Floats, Integers

_ROOT_2 = 1.4142135623730951


@dataclass(frozen=True, slots=True)
class _Mean:
    """A cell's integral of a derivative, and the state at which it counts, (cells,) arrays."""

    integral: Floats
    pressure: Floats
    temperature: Floats


@dataclass(frozen=True, slots=True)
class CompositionPaths:
    """What a cell's derivatives by composition are made of, (cells,) arrays."""

    density: Floats
    """Integral of the mass rate's derivative by the logarithm of the density [kg]."""
    states: tuple[tuple[Floats, Floats], ...]
    """The four pressures and temperatures that stand for the cell's records [Pa], [K]."""
    isentropic_exponent: _Mean
    joule_thomson_coefficient: _Mean | None
    """None where no thermometer is downstream."""

    def mass(self, gradients: CompositionGradients, cells: Integers) -> Floats:
        """Return the derivatives of some cells' mass by each component's fraction.

        Parameters
        ----------
        gradients : CompositionGradients
            Of the gas of these cells.
        cells : (n,) array

        Returns
        -------
        (components, n) array
            kg per unit of the stated fraction; 0 where nothing flows.
        """
        flowing = cells[self.density[cells] != 0.0]
        found = np.zeros((gradients.count, len(cells)))
        if len(flowing) == 0:
            return found
        total = np.zeros((gradients.count, len(flowing)))
        for p, T in self.states:
            total += gradients.log_density(p[flowing], T[flowing])
        total *= 0.25 * self.density[flowing]
        at = self.isentropic_exponent
        total += at.integral[flowing] * gradients.isentropic_exponent(
            at.pressure[flowing], at.temperature[flowing]
        )
        if self.joule_thomson_coefficient is not None:
            at = self.joule_thomson_coefficient
            total += at.integral[flowing] * gradients.joule_thomson_coefficient(
                at.pressure[flowing], at.temperature[flowing]
            )
        found[:, self.density[cells] != 0.0] = total
        return found


def composition_paths(
    by: MassSensitivities, pressure: Floats, temperature: Floats, visits: Visits
) -> CompositionPaths:
    """Return what the cells' derivatives by composition are made of.

    Parameters
    ----------
    by : MassSensitivities
        Of all records.
    pressure, temperature : (records,) arrays
        At the upstream tapping [Pa], [K]; any finite value where nothing flows.
    visits : Visits
    """
    density = by.log_density
    mean = _mean(density, pressure, temperature, visits)
    m0 = np.where(mean.integral == 0.0, 1.0, mean.integral)
    by_p, by_T = density * pressure, density * temperature
    with np.errstate(invalid="ignore", divide="ignore"):
        pp = visits.integral(by_p * pressure) / m0 - mean.pressure * mean.pressure
        pT = visits.integral(by_p * temperature) / m0 - mean.pressure * mean.temperature
        TT = visits.integral(by_T * temperature) / m0 - mean.temperature * mean.temperature
        spread_p = np.sqrt(np.maximum(pp, 0.0))
        joint = np.where(spread_p > 0.0, pT / spread_p, 0.0)
        spread_T = np.sqrt(np.maximum(TT - joint * joint, 0.0))
    p, T = mean.pressure, mean.temperature
    throttled = by.joule_thomson_coefficient
    return CompositionPaths(
        density=mean.integral,
        states=(
            (p + _ROOT_2 * spread_p, T + _ROOT_2 * joint),
            (p - _ROOT_2 * spread_p, T - _ROOT_2 * joint),
            (p, T + _ROOT_2 * spread_T),
            (p, T - _ROOT_2 * spread_T),
        ),
        isentropic_exponent=_mean(by.isentropic_exponent, pressure, temperature, visits),
        joule_thomson_coefficient=(
            _mean(throttled, pressure, temperature, visits) if throttled.any() else None
        ),
    )


def _mean(by: Floats, pressure: Floats, temperature: Floats, visits: Visits) -> _Mean:
    """Return the integral of a derivative and its weighted mean state; some state where it is 0."""
    integral = visits.integral(by)
    weight = np.where(integral == 0.0, 1.0, integral)
    flowing = integral != 0.0
    return _Mean(
        integral,
        np.where(flowing, visits.integral(by * pressure) / weight, 1e5),
        np.where(flowing, visits.integral(by * temperature) / weight, 300.0),
    )
