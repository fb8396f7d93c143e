"""Stated accuracies in the trade's terms, to standard uncertainties in SI."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from meterfix import units
from meterfix.errors import UnitError
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.shapes import AccuracyTable, CoverageTable

SECONDS_OF_A_YEAR = 365.25 * 86_400.0
"""What 'per year' means: a Julian year."""

SPAN, READING = "span", "reading"
UPPER_RANGE_VALUE, UPPER_RANGE_LIMIT = "upper range value", "upper range limit"

_BASE = re.compile(rf"(.*\S)\s+of\s+({SPAN}|{READING}|{UPPER_RANGE_VALUE}|{UPPER_RANGE_LIMIT})")
_YEARS = re.compile(r"(\d+(?:\.\d+)?)?\s*years?")
_BARE_UNIT = re.compile(r"[A-Za-z].*")
_EXAMPLE = "write it like '0.04 % of span', '0.1 % of reading', '0.3 K' or '40 Pa'"


@dataclass(frozen=True, slots=True)
class Extent:
    """What a size is 'per': SI, and of which dimension."""

    dimension: units.Dimension
    value: float


@dataclass(frozen=True, slots=True)
class StatedSize:
    """A size as written: an amount, what it is a part of, and what it is per."""

    amount: float
    """A fraction [-] where `base` is given or `relative`, else SI."""
    base: str | None
    """Span, reading, upper range value, upper range limit; None: of the quantity itself."""
    relative: bool
    per: Extent | None


def divisor(place: Place, table: CoverageTable, findings: Findings) -> float | None:
    """Return how many standard deviations a stated size is.

    References
    ----------
    .. [1] JCGM 100:2008, 4.3.3 (normal, by its coverage factor), 4.3.7 (rectangular: root of 3)
       and 4.3.9 (triangular: root of 6).
    """
    if table.distribution in {"rectangular", "triangular"}:
        if table.k is not None:
            findings.add(
                place,
                f"k = {table.k:g} and a {table.distribution} distribution",
                "give one: the limits of such a distribution have no coverage factor",
            )
            return None
        return math.sqrt(3.0 if table.distribution == "rectangular" else 6.0)
    if table.k is None:
        if not table.model_fields_set & {"k", "distribution"} or table.distribution == "normal":
            findings.add(
                place,
                "its coverage is not stated",
                "give `k = 2` (or 3, 1, ...), or distribution = 'rectangular' for plain limits",
            )
        return None
    return table.k


def stated_size(
    place: Place, text: str | None, dimension: units.Dimension, findings: Findings
) -> StatedSize | None:
    """Return a size as it is written; `dimension` is that of an absolute one."""
    if text is None:
        return None
    words, divided, extent_text = text.partition(" per ")
    extent = _extent(place, text, extent_text, findings) if divided else None
    if divided and extent is None:
        return None
    match = _BASE.fullmatch(words.strip())
    if match is not None:
        amount = _parsed(place, text, match[1], "fraction", findings)
        return None if amount is None else StatedSize(amount, match[2], True, extent)
    if " of " in words:
        findings.add(
            place,
            f"'{text}'",
            f"a percentage is of {SPAN}, of {READING}, of {UPPER_RANGE_VALUE} or of "
            f"{UPPER_RANGE_LIMIT}",
        )
        return None
    # a plain number is an amount of what has no unit itself, such as a coefficient
    relative = _is_fraction(words) and not (dimension == "fraction" and _is_number(words))
    amount = _parsed(place, text, words, "fraction" if relative else dimension, findings)
    return None if amount is None else StatedSize(amount, None, relative, extent)


def _parsed(
    place: Place, text: str, words: str, dimension: units.Dimension, findings: Findings
) -> float | None:
    try:
        return units.parse(words, dimension)
    except UnitError as error:
        findings.add(place, str(error).partition("; ")[0] or f"'{text}'", _EXAMPLE)
        return None


def _is_fraction(words: str) -> bool:
    try:
        units.parse(words, "fraction")
    except UnitError:
        return False
    return True


def _is_number(words: str) -> bool:
    return not words.strip()[-1:].isalpha() and "%" not in words


def _extent(place: Place, text: str, words: str, findings: Findings) -> Extent | None:
    """Return what a size is per: years, a temperature difference, a pressure, another time."""
    words = words.strip()
    years = _YEARS.fullmatch(words)
    if years is not None:
        value = float(years[1] or 1.0) * SECONDS_OF_A_YEAR
        if value > 0.0:
            return Extent("time", value)
    full = f"1 {words}" if _BARE_UNIT.fullmatch(words) else words
    choices: tuple[units.Dimension, ...] = ("temperature_difference", "pressure", "time")
    for dimension in choices:
        try:
            value = units.parse(full, dimension)
        except UnitError:
            continue
        if value > 0.0:
            return Extent(dimension, value)
    findings.add(
        place,
        f"'{text}': per '{words}'",
        "a size is per time ('per year'), per ambient temperature ('per 10 K') or per static "
        "pressure ('per 70 bar')",
    )
    return None


def relative_accuracy(
    place: Place,
    table: AccuracyTable | None,
    value: float | None,
    dimension: units.Dimension,
    findings: Findings,
) -> float | None:
    """Return a relative standard uncertainty from a percentage or from an absolute size.

    Parameters
    ----------
    place, table
        Where it stands and what stands there.
    value
        What an absolute size is relative to, SI; None: only a percentage will do.
    dimension
        Of an absolute size.
    findings
        Mistakes are added.

    Returns
    -------
    float or None
        [-]; None where it cannot be read, which then is in `findings`.
    """
    if table is None:
        return None
    covered = divisor(place, table, findings)
    at = (*place, "size")
    size = stated_size(at, table.size, dimension, findings)
    if size is None:
        return None
    allowed = ""
    if size.base is not None or size.per is not None:
        allowed = "give a percentage of the value, or an amount"
    elif size.amount < 0.0 or (size.relative and size.amount > 1.0):
        allowed = "an uncertainty is at least 0, and below 100 %"
    elif not size.relative and value is None:
        allowed = "give a percentage: no value is stated beside it"
    if allowed:
        findings.add(at, f"'{table.size}'", allowed)
    if allowed or covered is None:
        return None
    return (size.amount if size.relative else size.amount / (value or 1.0)) / covered
