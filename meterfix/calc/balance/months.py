"""The balance of an envelope over a month: its gas days with complete input, added up.

A month is rarely measured without a gap. What went in and out on a gas day with a gap cannot be
compared, so such a day is left out on both sides and named; the figures cover the same time.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import fsum

from meterfix.calc.balance.envelopes import NO_STORAGE, NO_UNCERTAINTY, Answer, Verdict


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


@dataclass(frozen=True, slots=True)
class MonthBalance:
    """The balance of one envelope and quantity over the complete gas days of a month; SI."""

    inflow: float | None
    outflow: float | None
    vented: float | None
    imbalance: float | None
    tolerance: float | None
    beyond_tolerance: Verdict
    significant: Verdict
    storage_reason: str
    measured_fraction: float
    """Time of the gas days that count, divided by the month's."""
    reason: str
    """The gas days that are left out; '' if none is."""


def month_balance(
    days: Sequence[DayFigures], month_days: Sequence[str], duration: float
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

    Returns
    -------
    MonthBalance
        fsum over the gas days with an imbalance; None where there is none.
    """
    counted = [day for day in days if day.imbalance is not None]
    names = {day.gas_day for day in counted}
    left_out = [day for day in month_days if day not in names]
    reason = f"gas days without complete input left out: {_ranges(left_out)}" if left_out else ""
    significant = Verdict(Answer.CANNOT_BE_JUDGED, NO_UNCERTAINTY)
    if not counted:
        return MonthBalance(
            inflow=None,
            outflow=None,
            vented=None,
            imbalance=None,
            tolerance=None,
            beyond_tolerance=Verdict(Answer.CANNOT_BE_JUDGED, "no gas day has complete input"),
            significant=significant,
            storage_reason=NO_STORAGE,
            measured_fraction=0.0,
            reason=reason,
        )
    imbalance = _sum([day.imbalance for day in counted])
    tolerance = _sum([day.tolerance for day in counted])
    if tolerance is None or imbalance is None:
        verdict = Verdict(Answer.CANNOT_BE_JUDGED, "no tolerance is stated")
    else:
        verdict = Verdict(Answer.YES if abs(imbalance) > tolerance else Answer.NO)
    return MonthBalance(
        inflow=_sum([day.inflow for day in counted]),
        outflow=_sum([day.outflow for day in counted]),
        vented=_sum([day.vented for day in counted]),
        imbalance=imbalance,
        tolerance=tolerance,
        beyond_tolerance=verdict,
        significant=significant,
        storage_reason=NO_STORAGE,
        measured_fraction=fsum(day.duration for day in counted) / duration,
        reason=reason,
    )


def _sum(values: Sequence[float | None]) -> float | None:
    """Return the exactly rounded sum; None if a value is not known."""
    known = [value for value in values if value is not None]
    return fsum(known) + 0.0 if len(known) == len(values) else None


def _ranges(days: Sequence[str]) -> str:
    """Return at most the first five days by name, and how many more there are."""
    named = ", ".join(days[:5])
    return named if len(days) <= 5 else f"{named} and {len(days) - 5} more"
