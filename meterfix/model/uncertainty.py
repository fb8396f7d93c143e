"""Sources of uncertainty: what is not known, how large it is, and who shares it."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Part:
    """How a source acts on one parameter."""

    parameter: str
    """Name of `frames.PARAMETERS`, or 'fraction:COMPONENT'."""
    subject: str
    """See `frames.PARAMETERS`."""
    size: float
    """One standard deviation of the source, in the parameter's unit (Pa, K, or relative); signed,
    so that two parts can move against each other."""
    growth: float = 0.0
    """Added per second since `since` (drift), in the parameter's unit per second."""
    since: int | None = None
    """UTC us from which the drift counts."""
    start: int | None = None
    end: int | None = None
    """UTC us; the part counts in [start, end), None: without limit. A range that changes gives a
    part for each of its times."""


@dataclass(frozen=True, slots=True)
class UncertaintySource:
    """One independent cause: all its parts move together, at all times."""

    name: str
    """'PDT-101 zero', 'pressure calibrator PC-3', 'natural_gas composition: methane', ...; each
    has its own."""
    kind: str
    """'transmitter', 'barometer', 'plate', 'pipe', 'discharge coefficient', 'expansibility',
    'certificate', 'composition', 'dynamic viscosity', 'isentropic exponent', 'gas model',
    'calorific value', 'atmosphere'; of shared causes also 'calibration device', 'chromatograph',
    'other common cause'."""
    parts: tuple[Part, ...]


@dataclass(frozen=True, slots=True)
class Repeatability:
    """What does not repeat from one reading of a signal to the next, one standard deviation."""

    signal: str
    size: float
    """Pa or K."""
