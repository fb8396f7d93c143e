"""AGA8 DETAIL as an equation of state of line and base states."""

from __future__ import annotations

from meterfix.calc.elementary import contiguous
from meterfix.calc.gas.detail import DetailMixture, detail_mixture
from meterfix.calc.gas.mixture_gas import MixtureGas
from meterfix.calc.gas.state import not_known
from meterfix.frames import Floats, Truths

RANGE_PRESSURE = 30e6
"""Highest absolute pressure [Pa]; ISO 20765-1:2005, pipeline-quality gas (from memory)."""
RANGE_TEMPERATURE = (250.0, 350.0)
"""K; ISO 20765-1:2005, pipeline-quality gas (from memory)."""
RANGE_LEAST_METHANE = 0.7
RANGE_COMPOSITION: tuple[tuple[tuple[str, ...], float], ...] = (
    (("nitrogen",), 0.20),
    (("carbon_dioxide",), 0.20),
    (("ethane",), 0.10),
    (("propane",), 0.035),
    (("isobutane", "n_butane"), 0.015),
    (("isopentane", "n_pentane"), 0.005),
    (("n_hexane",), 0.001),
    (("n_heptane",), 0.0005),
    (("n_octane", "n_nonane", "n_decane"), 0.0005),
    (("hydrogen",), 0.10),
    (("carbon_monoxide",), 0.03),
    (("helium",), 0.005),
    (("water",), 0.00015),
    (("oxygen",), 0.0002),
    (("hydrogen_sulfide",), 0.0002),
    (("argon",), 0.0002),
)
"""Components and the largest mole fraction of their sum; ISO 20765-1:2005 and ISO 12213-2:2006,
pipeline-quality gas (from memory)."""


def composition_outside_range(mole_fractions: tuple[tuple[str, float], ...]) -> bool:
    """Return whether a composition is outside the pipeline-quality range of ISO 20765-1:2005."""
    given = dict(mole_fractions)
    if given.get("methane", 0.0) < RANGE_LEAST_METHANE:
        return True
    for names, limit in RANGE_COMPOSITION:
        total = 0.0
        for name in names:
            total += given.get(name, 0.0)
        if total > limit:
            return True
    return False


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
        self._outside = composition_outside_range(mixture.mole_fractions)

    def outside_range(self, pressure: Floats, temperature: Floats) -> Truths:
        """Return where composition, pressure or temperature is outside the normal range.

        The range is that of pipeline-quality gas, ISO 20765-1:2005: up to 30 MPa, 250 K to
        350 K and the compositions of `RANGE_COMPOSITION`. NaN is not outside.
        """
        low, high = RANGE_TEMPERATURE
        p, T = contiguous(pressure), contiguous(temperature)
        result: Truths = (p > RANGE_PRESSURE) | (low > T) | (high < T)
        if self._outside:
            result = result | ~not_known(p, T)
        return result
