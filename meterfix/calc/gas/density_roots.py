"""Amount density from pressure and temperature by a mixture equation: gas root or dense root.

What is detected as 'no gas', exactly:

1. Walking up from zero density in steps of at most 0.05 in reduced density, the isotherm stops
   rising, (dp/dD)_T <= 0 or less pressure after a step, before it reaches the pressure: there
   is no gas root. (Wider steps are taken only above the temperature of condition 2, where
   there is nothing to miss.)
2. Below the mixture's mechanical critical temperature (the highest at which an isotherm of this
   composition stops rising anywhere) a gas root exists, and a second, denser stable root too,
   whose Gibbs energy at the same pressure, temperature and composition is the lower one: the
   gas root is not unique and only metastable. For a pure component this is its saturation
   curve by the equation itself.
3. No root up to a reduced density of 4, or no convergence.

For a mixture condition 2 lies inside the two-phase region: between the dew point and this
boundary a wet gas is still given as gas. A dew point is not computed here.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import logarithm
from meterfix.calc.gas.helmholtz import Isotherms, Mixture
from meterfix.frames import Floats, Truths

_STEP = 0.05
"""Largest step of the walk in reduced density."""
_HIGHEST = 4.0
"""Reduced density beyond which no root is sought: denser than any liquid of the components."""
_SCANNED = 16
"""Isotherms scanned together; no bit depends on it."""
_ITERATIONS = 200
_CONVERGED = 1e-11
"""Relative Newton step after which the (quadratically convergent) result is frozen."""


@dataclass(frozen=True, slots=True)
class DensityRoots:
    """Amount densities [kmol/m3], NaN where there is no such root; all (n,)."""

    density: Floats
    found: Truths


def _walk(
    mixture: Mixture, isotherms: Isotherms, target: Floats, steps: Floats, *, upward: bool
) -> DensityRoots:
    """Follow each isotherm from zero (or from the highest) density to the target.

    The target is p/(R T) [kmol/m3]. Each record walks by Newton steps, limited to its own
    largest step in reduced density, until it has the root between two densities; then by
    Newton steps that fall back to halving. A record that has converged, or has met a falling
    isotherm first, is frozen.
    """
    n = len(target)
    density = np.full(n, np.nan)
    largest = steps / mixture.size_cubed
    highest = _HIGHEST / mixture.size_cubed
    # state of the active records; all of it is compressed together as records freeze
    active = np.arange(n)
    D = np.zeros(n) if upward else np.full(n, highest)
    lower, upper = np.zeros(n), np.full(n, highest)
    bracketed = np.zeros(n, dtype=np.bool_)
    before = np.full(n, -np.inf if upward else np.inf)
    for _ in range(_ITERATIONS):
        Z, slope = isotherms.pressure_terms(D)
        excess = D * Z - target
        below = excess < 0.0
        lower = np.where(below, D, lower)
        upper = np.where(below, upper, D)
        bracketed |= ~below if upward else below
        rising = slope > 0.0
        # a falling isotherm ends the search only before the target has been passed; where it
        # fell and rose again within one step, the pressure shows it
        fell = (excess <= before) if upward else (excess >= before)
        ended = ~bracketed & (~rising | fell)
        if not upward:
            # the highest density is already below the pressure: no root is sought beyond it
            ended |= below & (highest <= D)
        with np.errstate(divide="ignore", invalid="ignore"):
            newton = D - excess / slope
        limited = np.minimum(newton, D + largest) if upward else np.maximum(newton, D - largest)
        inside = rising & (newton >= lower) & (newton <= upper)
        following = np.where(bracketed, np.where(inside, newton, 0.5 * (lower + upper)), limited)
        converged = ~ended & rising & (np.abs(newton - D) <= _CONVERGED * D)
        outside = (
            ~bracketed & ~converged & ((following >= highest) if upward else (following <= 0.0))
        )
        density[active[converged]] = newton[converged]
        going = ~(ended | converged | outside)
        D, before = following, excess
        if not going.all():
            if not going.any():
                break
            active, D, target = active[going], D[going], target[going]
            lower, upper, bracketed = lower[going], upper[going], bracketed[going]
            before, largest = before[going], largest[going]
            isotherms = isotherms.part(going)
    return DensityRoots(density, ~np.isnan(density))


def mechanical_critical_temperature(mixture: Mixture) -> float:
    """Return a temperature above which every isotherm of the mixture rises all the way [K].

    Found by scanning reduced densities up to 3 over temperatures in steps of 1 %, from above;
    the step above the last falling isotherm is returned, so the result is safe, not exact.
    """
    reduced = np.arange(0.04, 3.0, 0.04)
    temperatures: list[float] = []
    temperature = 3.0 * mixture.temperature_scale
    while temperature > 0.4 * mixture.temperature_scale:
        temperatures.append(temperature)
        temperature /= 1.01
    for start in range(0, len(temperatures), _SCANNED):
        block = temperatures[start : start + _SCANNED]
        T = np.repeat(block, len(reduced))
        D = np.tile(reduced / mixture.size_cubed, len(block))
        _, slope = mixture.isotherms(T).pressure_terms(D)
        rises = (slope > 0.0).reshape(len(block), len(reduced)).all(axis=1)
        if not rises.all():
            return block[int(np.argmin(rises))] * 1.01
    return 0.0


def _gibbs_energy(isotherms: Isotherms, density: Floats) -> Floats:
    """Return the residual Gibbs energy over R T at equal pressure, temperature, composition."""
    Z, _ = isotherms.pressure_terms(density)
    return isotherms.residual_helmholtz_energy(density) + Z - logarithm(Z)


def gas_density(
    mixture: Mixture, pressure: Floats, temperature: Floats, *, two_roots_below: float
) -> DensityRoots:
    """Return the amount density of the gas; not found where there is none (see the module).

    Parameters
    ----------
    pressure, temperature : (n,) arrays
        Pa (absolute) and K; positive, not NaN.
    two_roots_below
        The mixture's `mechanical_critical_temperature` [K].

    Returns
    -------
    DensityRoots
        The result of a record depends on its own pressure and temperature only.
    """
    target = pressure / (1e3 * mixture.gas_constant * temperature)
    isotherms = mixture.isotherms(temperature)
    steps = np.where(temperature < two_roots_below, _STEP, mixture.free_step)
    gas = _walk(mixture, isotherms, target, steps, upward=True)
    doubtful = np.flatnonzero(gas.found & (temperature < two_roots_below))
    if len(doubtful) == 0:
        return gas
    part = isotherms.part(doubtful)
    dense = _walk(mixture, part, target[doubtful], steps[doubtful], upward=False)
    density = gas.density[doubtful]
    two = dense.found & (dense.density > density * (1.0 + 1e-6))
    metastable = np.zeros(len(doubtful), dtype=np.bool_)
    chosen = np.flatnonzero(two)
    if len(chosen):
        both = part.part(chosen)
        gas_energy = _gibbs_energy(both, density[chosen])
        dense_energy = _gibbs_energy(both, dense.density[chosen])
        metastable[chosen] = dense_energy <= gas_energy
    found = gas.found.copy()
    found[doubtful[metastable]] = False
    return DensityRoots(np.where(found, gas.density, np.nan), found)


def dense_density(mixture: Mixture, pressure: Floats, temperature: Floats) -> DensityRoots:
    """Return the densest stable root's amount density; the gas's where it is the only one.

    Parameters
    ----------
    pressure, temperature : (n,) arrays
        Pa (absolute) and K; positive, not NaN.
    """
    target = pressure / (1e3 * mixture.gas_constant * temperature)
    isotherms = mixture.isotherms(temperature)
    steps = np.full(len(target), _STEP)
    dense = _walk(mixture, isotherms, target, steps, upward=False)
    missing = np.flatnonzero(~dense.found)
    if len(missing):
        part = isotherms.part(missing)
        only = _walk(mixture, part, target[missing], steps[missing], upward=True)
        dense.density[missing] = only.density
    return DensityRoots(dense.density, ~np.isnan(dense.density))
