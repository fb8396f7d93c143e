"""Dry air in the simulator: a packaged series for its compression factor."""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from meterfix.demo.tables import coefficient_rows
from meterfix.errors import GasError

Floats = NDArray[np.float64]

MOLAR_MASS = 0.02896546
"""kg/mol, of the reference equation behind the packaged series."""
_GAS_CONSTANT = 8.31451
_PRESSURE_WINDOW = (80e3, 1.2e6)
_TEMPERATURE_WINDOW = (262.0, 332.0)


@cache
def _series() -> Floats:
    rows = coefficient_rows("air_compression_factor")
    shape = (max(int(r["i"]) for r in rows) + 1, max(int(r["j"]) for r in rows) + 1)
    series = np.zeros(shape)
    for row in rows:
        series[int(row["i"]), int(row["j"])] = float(row["c"])
    return series


def air_density(static_pressure: Floats, temperature: Floats) -> Floats:
    """Return the density of dry air.

    Parameters
    ----------
    static_pressure : (n,) array
        Absolute, 80 to 1200 kPa. [Pa]
    temperature : (n,) array
        262 to 332 K. [K]

    Returns
    -------
    (n,) array
        Within 1e-8 of the reference equation named in the packaged table. [kg/m3]

    Raises
    ------
    GasError
        If a state lies outside that window: the series means nothing there.
    """
    low, high = _PRESSURE_WINDOW
    x = (2.0 * static_pressure - (low + high)) / (high - low)
    cold, warm = _TEMPERATURE_WINDOW
    y = (2.0 * temperature - (cold + warm)) / (warm - cold)
    if not (np.all(np.abs(x) <= 1.0) and np.all(np.abs(y) <= 1.0)):
        raise GasError(f"air is described between {low} and {high} Pa, {cold} and {warm} K only")
    factor = np.asarray(chebyshev.chebval2d(x, y, _series()), dtype=np.float64)
    return static_pressure * MOLAR_MASS / (factor * _GAS_CONSTANT * temperature)
