"""From sensitivities and sources of uncertainty to a standard uncertainty beside every total.

A source is an independent random variable of standard deviation 1; all its parts move together at
all times and across all meters that share it. Its contribution to a total is the sum over its
parts, hours and meters of sensitivity times size, with sign. Contributions of different sources
add in quadrature, and so does the random variance of the hours (JCGM 100:2008, 5.1 and 5.2).
"""

from __future__ import annotations

from meterfix.calc.uncertainty.propagate import (
    COVERAGE_FACTOR,
    Doubt,
    add_up,
    day_doubt,
    hourly_contributions,
    hourly_standard_uncertainty,
    relevant_sources,
)

__all__ = [
    "COVERAGE_FACTOR",
    "Doubt",
    "add_up",
    "day_doubt",
    "hourly_contributions",
    "hourly_standard_uncertainty",
    "relevant_sources",
]
