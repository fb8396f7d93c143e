"""Calorific value of the simulated works' natural gas, from its composition."""

from __future__ import annotations

import math

from meterfix.demo.tables import coefficient_rows

_GAS_CONSTANT = 8.3144621
"""J/(mol K); ISO 6976:2016, Annex A."""
_PRESSURE, _TEMPERATURE = 101_325.0, 288.15


def gross_calorific_value(fractions: dict[str, float]) -> float:
    """Return the gross calorific value of a real gas at 15 degC / 15 degC, 101.325 kPa.

    Parameters
    ----------
    fractions : dict of str to float
        Mole fractions, which add up to 1.

    Returns
    -------
    float
        J/m3.

    References
    ----------
    .. [1] ISO 6976:2016, real-gas volumetric basis: sum(x H) p2 / (R T2 Z) with
       Z = 1 - (sum(x s))^2.
    """
    rows = {row["component"]: row for row in coefficient_rows("calorific_values")}
    molar = math.fsum(x * float(rows[name]["H"]) * 1e3 for name, x in fractions.items())
    summed = math.fsum(x * float(rows[name]["s"]) for name, x in fractions.items())
    return molar * _PRESSURE / (_GAS_CONSTANT * _TEMPERATURE * (1.0 - summed * summed))
