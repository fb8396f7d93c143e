"""The balance of an envelope over a month: its gas days with complete input, added up.

A month is rarely measured without a gap. What went in and out on a gas day with a gap cannot be
compared, so such a day is left out on both sides and named; the figures cover the same time.
Volumes at different base conditions are not added up at all.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import fsum

from meterfix.calc.balance.envelopes import NO_STORAGE, Answer, Verdict, significance

BASE_CHANGES = "the base conditions change within the period"


@dataclass(frozen=True, slots=True)
class DayFigures:
    """A gas day's balance of one envelope and quantity, as it stands; SI."""

    gas_day: str
    duration: float
    """s."""
    inflow: float | None
    outflow: float | None
    vented: float | None
    imbalance: float | None
    """None where a meter's input is incomplete."""
    tolerance: float | None
    base: tuple[float, float] | None = None
    """Base pressure [Pa] and temperature [K] of base volumes; None for mass and energy."""


@dataclass(frozen=True, slots=True)
class MonthBalance:
    """The balance of one envelope and quantity over the complete gas days of a month; SI."""

    inflow: float | None
    outflow: float | None
    vented: float | None
    imbalance: float | None
    expanded_uncertainty: float | None
    tolerance: float | None
    beyond_tolerance: Verdict
    significant: Verdict
    storage_reason: str
    measured_fraction: float
    """Time of the gas days that count, divided by the month's."""
    reason: str
    """The gas days that are left out, and a change of base conditions; '' if there is neither."""


def month_balance(
    days: Sequence[DayFigures],
    month_days: Sequence[str],
    duration: float,
    expanded_uncertainty: float | None = None,
    unstated: Sequence[str] = (),
) -> MonthBalance:
    """Return an envelope's balance over a month.

    Parameters
    ----------
    days : sequence of DayFigures
        The month's gas days that have a balance.
    month_days : sequence of str
        Every gas day of the month, ISO dates in order.
    duration : float
        The month's length. [s]
    expanded_uncertainty : float or None
        Of the imbalance over the gas days that count, k = 2.
    unstated : sequence of str
        Sources of uncertainty for which nothing is stated: why there is no uncertainty.

    Returns
    -------
    MonthBalance
        fsum over the gas days with an imbalance; None where there is none, and where the gas
        days' base conditions differ. A verdict on a part of the gas days says on how many.
    """
    counted = [day for day in days if day.imbalance is not None]
    names = {day.gas_day for day in counted}
    left_out = [day for day in month_days if day not in names]
    reasons = []
    if left_out:
        reasons.append(f"gas days without complete input left out: {_ranges(left_out, month_days)}")
    why_not = ""
    if len({day.base for day in days}) > 1:
        why_not = BASE_CHANGES
        reasons.append(why_not)
    elif not counted:
        why_not = "no gas day has complete input"
    summed = [] if why_not else counted
    imbalance = _sum([day.imbalance for day in summed])
    tolerance = _sum([day.tolerance for day in summed])
    part = f"on {len(counted)} of {len(month_days)} gas days" if left_out else ""
    return MonthBalance(
        inflow=_sum([day.inflow for day in summed]),
        outflow=_sum([day.outflow for day in summed]),
        vented=_sum([day.vented for day in summed]),
        imbalance=imbalance,
        expanded_uncertainty=None if imbalance is None else expanded_uncertainty,
        tolerance=tolerance,
        beyond_tolerance=_beyond(imbalance, tolerance, why_not, part),
        significant=_on(part, significance(imbalance, expanded_uncertainty, why_not, unstated)),
        storage_reason=NO_STORAGE,
        measured_fraction=fsum(day.duration for day in counted) / duration,
        reason="; ".join(reasons),
    )


def _beyond(imbalance: float | None, tolerance: float | None, why_not: str, part: str) -> Verdict:
    """Return whether the imbalance is beyond the tolerance, and on what part of the month."""
    if why_not or imbalance is None:
        return Verdict(Answer.CANNOT_BE_JUDGED, why_not)
    if tolerance is None:
        return Verdict(Answer.CANNOT_BE_JUDGED, "no tolerance is stated")
    return Verdict(Answer.YES if abs(imbalance) > tolerance else Answer.NO, part)


def _on(part: str, verdict: Verdict) -> Verdict:
    """Return a verdict that says on what part of the month it rests."""
    if verdict.answer is Answer.CANNOT_BE_JUDGED:
        return verdict
    return Verdict(verdict.answer, part)


def _sum(values: Sequence[float | None]) -> float | None:
    """Return the exactly rounded sum; None if a value is not known, or there is no value."""
    known = [value for value in values if value is not None]
    return fsum(known) + 0.0 if known and len(known) == len(values) else None


def _ranges(days: Sequence[str], month_days: Sequence[str]) -> str:
    """Return all the days, those that follow each other in the month as 'first to last'."""
    place = {day: number for number, day in enumerate(month_days)}
    runs: list[list[str]] = []
    for day in days:
        if runs and place[day] == place[runs[-1][-1]] + 1:
            runs[-1].append(day)
        else:
            runs.append([day])
    return ", ".join(run[0] if len(run) == 1 else f"{run[0]} to {run[-1]}" for run in runs)
