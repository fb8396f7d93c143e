"""AGA8 DETAIL as an equation of state of line and base states."""

from __future__ import annotations

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.composition_range import PIPELINE_QUALITY
from meterfix.calc.gas.detail import DetailMixture, detail_mixture
from meterfix.calc.gas.mixture_gas import MixtureGas
from meterfix.calc.gas.state import not_known
from meterfix.frames import Floats, Truths

RANGE_PRESSURE = 30e6
"""Highest absolute pressure [Pa]; ISO 20765-1:2005, pipeline-quality gas (from memory)."""
RANGE_TEMPERATURE = (250.0, 350.0)
"""K; ISO 20765-1:2005, pipeline-quality gas (from memory)."""


class DetailGas(MixtureGas[DetailMixture]):
    """AGA8 DETAIL with one composition put in.

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
    .. [1] AGA Report No. 8 Part 1:2017, DETAIL; ISO 20765-1:2005.
    """

    def __init__(self, mole_fractions: tuple[tuple[str, float], ...]) -> None:
        mixture = detail_mixture(mole_fractions)
        super().__init__(mixture)
        self._outside = PIPELINE_QUALITY.excludes(mixture.mole_fractions)

    def outside_range(self, pressure: Floats, temperature: Floats) -> Truths:
        """Return where composition, pressure or temperature is outside the normal range.

        The range is that of pipeline-quality gas, ISO 20765-1:2005: up to 30 MPa, 250 K to
        350 K and the compositions of `PIPELINE_QUALITY`. NaN is not outside.
        """
        low, high = RANGE_TEMPERATURE
        p, T = contiguous(pressure), contiguous(temperature)
        result: Truths = (p > RANGE_PRESSURE) | (low > T) | (high < T)
        if self._outside:
            result = result | ~not_known(p, T)
        return result
