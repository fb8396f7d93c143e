"""GERG-2008 as an equation of state of line and base states."""

from __future__ import annotations

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.composition_range import INTERMEDIATE_QUALITY
from meterfix.calc.gas.gerg import GergMixture, gerg_mixture
from meterfix.calc.gas.mixture_gas import MixtureGas
from meterfix.calc.gas.state import not_known
from meterfix.frames import Floats, Truths

RANGE_PRESSURE = 35e6
"""Highest absolute pressure [Pa] of the normal range; Kunz and Wagner 2012, as the documentation
of an open library quotes it; ISO 20765-2:2015 (from memory)."""
RANGE_TEMPERATURE = (90.0, 450.0)
"""K; normal range, sources as for the pressure."""
EXTENDED_PRESSURE = 70e6
"""Highest absolute pressure [Pa] of the extended range; sources as above."""
EXTENDED_TEMPERATURE = (60.0, 700.0)
"""K; extended range, sources as above."""


class GergGas(MixtureGas[GergMixture]):
    """GERG-2008 with one composition put in.

    Parameters
    ----------
    mole_fractions
        Components of the equation and their mole fractions, normalised to a sum of 1.

    Raises
    ------
    GasError
        If a component is unknown.

    References
    ----------
    .. [1] AGA Report No. 8 Part 2:2017, GERG-2008; ISO 20765-2:2015; Kunz and Wagner, J. Chem.
       Eng. Data 57 (2012) 3032.
    """

    def __init__(self, mole_fractions: tuple[tuple[str, float], ...]) -> None:
        mixture = gerg_mixture(mole_fractions)
        super().__init__(mixture)
        self._outside = INTERMEDIATE_QUALITY.excludes(mixture.mole_fractions)

    def outside_range(self, pressure: Floats, temperature: Floats) -> Truths:
        """Return where composition, pressure or temperature is outside the normal range.

        The normal range is up to 35 MPa, 90 K to 450 K and, because the standard's statements
        are for natural gases, the compositions of `INTERMEDIATE_QUALITY`. NaN is not outside.
        """
        low, high = RANGE_TEMPERATURE
        p, T = contiguous(pressure), contiguous(temperature)
        result: Truths = (p > RANGE_PRESSURE) | (low > T) | (high < T)
        if self._outside:
            result = result | ~not_known(p, T)
        return result
