"""Transmitters of the simulated works: calibration errors, noise, and what is written.

A signal exists three times: as it was (`true`), as its transmitter would show it without noise
(`shown`: with its zero and span error), and as it is logged (with noise, in the logger's unit,
rounded).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from meterfix.demo.loads import stream_of
from meterfix.demo.works import DP, PRESSURE, TEMPERATURE, ZERO_CELSIUS, Run

Floats = NDArray[np.float64]

BAROMETER = "BT"

STATED_ACCURACY = {
    # (zero [fraction of the range; Pa for BT, K for TT], span [-]), both at k = 2
    DP: (0.0006, 0.0008),
    PRESSURE: (0.0008, 0.0008),
    TEMPERATURE: (0.25, 0.0),
    BAROMETER: (40.0, 0.0),
}
CALIBRATOR = "pressure calibrator PC-1"
CALIBRATOR_SPAN = {DP: 0.0002, PRESSURE: 0.0003}
"""What the one calibrator that all were set with may be off, of the reading at k = 2."""

REPEATABILITY = {DP: 8e-4, PRESSURE: 2e-4, TEMPERATURE: 0.03, BAROMETER: 6.0}
"""Standard deviation of the noise: of the span for DP and PT; K for TT, Pa for BT."""


@dataclass(frozen=True, slots=True)
class Calibration:
    """How far a transmitter is off: shown = true (1 + span) + zero."""

    zero: float
    """SI."""
    span: float

    def of(self, values: Floats) -> Floats:
        """Return what is shown for true values."""
        return values * (1.0 + self.span) + self.zero


def draw_calibration(seed: int, kind: str, number: str, full_scale: float) -> Calibration:
    """Draw one transmitter's calibration errors from its stated accuracy.

    Parameters
    ----------
    seed : int
        Of the simulation.
    kind, number : str
        Such as 'PDT' and '101'.
    full_scale : float
        Upper range value [Pa]; 1 where the zero is stated absolutely.

    Returns
    -------
    Calibration
        Normal deviates of its own with half the stated figures as standard deviation, and on
        the span the calibrator's, which is the same for all.
    """
    zero_stated, span_stated = STATED_ACCURACY[kind]
    own = stream_of(seed, f"calibration {kind}-{number}")
    zero, span = (own.standard_normal(2) / 2.0).tolist()
    shared = float(stream_of(seed, CALIBRATOR).standard_normal()) / 2.0
    return Calibration(
        zero * zero_stated * full_scale,
        span * span_stated + shared * CALIBRATOR_SPAN.get(kind, 0.0),
    )


def noise_deviation(run: Run, kind: str) -> float:
    """Return the standard deviation of the noise on each value, SI."""
    full_scale = {DP: run.dp_range, PRESSURE: run.pressure_range, TEMPERATURE: 1.0}
    return REPEATABILITY[kind] * full_scale[kind]


@dataclass(frozen=True, slots=True)
class Writing:
    """How a logger writes a signal: its unit and how many decimals it has."""

    divisor: float
    """SI units per unit of the log; 0 stands for the root in % of full scale."""
    offset: float
    """Taken off the SI value first."""
    decimals: int

    def unit_values(self, values: Floats, full_scale: float) -> Floats:
        """Return SI values in the log's unit."""
        if self.divisor == 0.0:
            return 100.0 * np.sqrt(np.maximum(values, 0.0) / full_scale)
        return (values - self.offset) / self.divisor

    def step(self, values: Floats, full_scale: float) -> Floats:
        """Return the SI size of the last decimal at each value, for the rounding's variance."""
        last = 10.0**-self.decimals
        if self.divisor == 0.0:
            return 2.0 * np.sqrt(np.maximum(values, 0.0) * full_scale) * last / 100.0
        return np.full_like(values, last * self.divisor)


_WRITINGS = {
    ("dp", "mbar"): Writing(100.0, 0.0, 2),
    ("dp", "kPa"): Writing(1000.0, 0.0, 3),
    ("dp", "%"): Writing(0.0, 0.0, 2),
    ("p", "bar"): Writing(1e5, 0.0, 3),
    ("p", "kPa"): Writing(1000.0, 0.0, 1),
}

BAROMETER_WRITING = Writing(100.0, 0.0, 1)
"""hPa."""


def writing_of(run: Run, kind: str) -> Writing:
    """Return how a run's logger writes one of its signals."""
    if kind == DP:
        return _WRITINGS["dp", run.feed.dp_unit]
    if kind == PRESSURE:
        return _WRITINGS["p", run.feed.pressure_unit]
    return Writing(1.0, ZERO_CELSIUS, 2)


def texts(values: Floats, decimals: int, digits: int | None, decimal_mark: str = ".") -> list[str]:
    """Return values as a logger writes them.

    Parameters
    ----------
    values : (n,) array
        In the log's unit; finite.
    decimals : int
        Places after the decimal mark, where `digits` is None.
    digits : int or None
        Significant digits instead, never with an exponent.
    decimal_mark : str
        '.' or ','.

    Returns
    -------
    list of str
        One text per value; zero is never '-0'.
    """
    clean = (values + 0.0).tolist()
    if digits is None:
        written = [f"{value:.{decimals}f}" for value in clean]
        minus_zero = f"{-0.0:.{decimals}f}"
        written = [minus_zero[1:] if text == minus_zero else text for text in written]
    else:
        written = [_significant(value, digits) for value in clean]
    if decimal_mark != ".":
        written = [text.replace(".", decimal_mark) for text in written]
    return written


def _significant(value: float, digits: int) -> str:
    text = f"{value:.{digits}g}"
    if "e" not in text:
        return text
    return np.format_float_positional(
        float(text), precision=digits, unique=False, fractional=False, trim="-"
    )
