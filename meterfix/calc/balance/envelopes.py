"""The balance of an envelope over the hours of a gas day and over the gas day.

imbalance = in - out - vented - change of storage. No storage is configured yet, so gas kept in
pipes and vessels from one hour to the next is not known: the change of storage is None, hours
have no verdict, and a gas day is judged as if the storage were the same at both its ends.
Nothing is judged on missing input: one meter that is not measured throughout takes the imbalance
of the hour or gas day with it, and the reason names it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from enum import StrEnum
from math import floor, fsum, isnan

import numpy as np

from meterfix.calc.totals.periods import PeriodTotal, day_total
from meterfix.frames import HOURLY_INDEX, Floats, HourlyRecord
from meterfix.model.site import Envelope, Tolerance

BALANCE_COLUMNS: tuple[str, ...] = (
    "in",
    "out",
    "vented",
    "imbalance",
    "measured_fraction",
    "standard_uncertainty",
)
"""Columns of the hourly array; SI, NaN: not known; the uncertainty is the imbalance's."""

QUANTITIES: tuple[str, ...] = ("mass", "base_volume", "energy")
"""kg, m3, J."""

NO_STORAGE = "storage is not configured"
NO_UNCERTAINTY = "no source of uncertainty is stated"


class Answer(StrEnum):
    """What a verdict says."""

    YES = "yes"
    NO = "no"
    CANNOT_BE_JUDGED = "cannot be judged"


@dataclass(frozen=True, slots=True)
class Verdict:
    """An answer, and why there is none, or on what part of the period it rests."""

    answer: Answer
    reason: str = ""
    """'' for a yes or no about the whole period."""

    def __str__(self) -> str:
        return f"{self.answer}: {self.reason}" if self.reason else str(self.answer)


@dataclass(frozen=True, slots=True)
class DayBalance:
    """The balance of one envelope and quantity over one gas day."""

    envelope: str
    quantity: str
    gas_day: date | None
    """None where no meter has a record."""
    start: int | None
    """UTC us."""
    hourly: Floats
    """(hours, len(BALANCE_COLUMNS))."""
    hourly_reasons: tuple[str, ...]
    """Per hour, what its input lacks; '' where it is complete."""
    hourly_verdict: Verdict
    """Of every hour, for both questions."""
    inflow: float | None
    """kg, m3 or J over measured time; None if a meter has no total. So are the next two."""
    outflow: float | None
    vented: float | None
    storage_change: float | None
    storage_reason: str
    imbalance: float | None
    """None unless every input is complete."""
    expanded_uncertainty: float | None
    """Of the imbalance, k = 2; None where it is not known."""
    tolerance: float | None
    """In the quantity's unit; None if there is none or the input is not complete."""
    significant: Verdict
    beyond_tolerance: Verdict
    measured_fraction: float
    """The smallest of the meters'; 0 where one has no record."""
    reason: str
    """What the input lacks; '' where it is complete."""


@dataclass(frozen=True, slots=True)
class _Input:
    """What one meter brings to the day: its record if there is one, and the day's total."""

    meter: str
    record: HourlyRecord | None
    total: PeriodTotal | None

    def day(self, quantity: str) -> float | None:
        value: float | None = None if self.total is None else getattr(self.total, quantity)
        return value

    def hour(self, name: str, hour: int) -> float:
        if self.record is None:
            return float("nan")
        return float(self.record.statistics[hour, HOURLY_INDEX[name]])


def _lack(meter: str, *, fraction: float | None, without: float, quantity: str) -> str:
    """Return what a meter's input lacks, '' if nothing.

    `fraction` is the measured one, None without a record; `without` the measured time that has
    no such quantity [s].
    """
    if fraction is None:
        return f"{meter} (no record)"
    parts = []
    if fraction < 1.0:
        # cut to 0.0001 %, never rounded up to the whole
        parts.append(f"{min(floor(1e6 * fraction + 1e-6), 999_999) / 1e4!r} % measured")
    if without > 0.0:
        name = quantity.replace("_", " ")
        parts.append(f"no {name} for {without!r} s of the measured time")
    return f"{meter} ({', '.join(parts)})" if parts else ""


def _reason(lacks: list[str]) -> str:
    named = [lack for lack in dict.fromkeys(lacks) if lack]
    return f"missing input: {', '.join(named)}" if named else ""


def _sum(values: list[float | None]) -> float | None:
    """Return the exactly rounded sum, None if a value is not known."""
    known = [value for value in values if value is not None and not isnan(value)]
    return fsum(known) + 0.0 if len(known) == len(values) else None


def _imbalance(inflow: float | None, outflow: float | None, vented: float | None) -> float | None:
    """Return in - out - vented, from the very figures that are shown; None if one is missing."""
    if inflow is None or outflow is None or vented is None:
        return None
    return inflow - outflow - vented + 0.0  # -0.0 + 0.0 is 0.0


def day_balance(
    envelope: Envelope,
    quantity: str,
    records: Mapping[str, HourlyRecord | None],
    tolerance: Tolerance | None,
    expanded_uncertainty: float | None = None,
    hourly_uncertainty: Floats | None = None,
    unstated: Sequence[str] = (),
) -> DayBalance:
    """Return an envelope's balance over the hours of a gas day and over the gas day.

    Parameters
    ----------
    envelope : Envelope
    quantity : str
        'mass', 'base_volume' or 'energy'.
    records : mapping
        The gas day's hourly record per meter of the envelope; None, or no entry, where there is
        none.
    tolerance : Tolerance or None
        What is in force on the gas day; None: the contract states none.
    expanded_uncertainty : float or None
        Of the day's imbalance at k = 2; None: not known.
    hourly_uncertainty : (hours,) array or None
        Standard uncertainty of each hour's imbalance.
    unstated : sequence of str
        Sources of uncertainty for which nothing is stated: why there is no uncertainty.

    Returns
    -------
    DayBalance
        SI.

    Raises
    ------
    ValueError
        If the quantity is not balanced, or the records are not of one gas day.
    """
    if quantity not in QUANTITIES:
        message = f"envelope {envelope.name}: quantity is {quantity!r}; it must be one of " + (
            ", ".join(QUANTITIES)
        )
        raise ValueError(message)
    groups = [
        [
            _Input(meter, record, None if record is None else day_total(record))
            for meter in meters
            for record in (records.get(meter),)
        ]
        for meters in (envelope.inflow, envelope.outflow, envelope.vented)
    ]
    inputs = [entry for group in groups for entry in group]
    present = [entry.record for entry in inputs if entry.record is not None]
    spans = {(record.gas_day, record.start, len(record.statistics)) for record in present}
    if len(spans) > 1:
        message = f"envelope {envelope.name}: records of different gas days: {sorted(spans)}"
        raise ValueError(message)
    gas_day, start, hours = next(iter(spans), (None, None, 0))

    hourly = np.full((hours, len(BALANCE_COLUMNS)), np.nan)
    reasons = []
    for hour in range(hours):
        hourly[hour, :-1], reason = _hour(groups, quantity, hour)
        reasons.append(reason)
    if hourly_uncertainty is not None:
        complete = np.array([not reason for reason in reasons], dtype=np.bool_)
        hourly[:, -1] = np.where(complete, hourly_uncertainty, np.nan)

    lack = _reason(
        [
            _lack(
                entry.meter,
                fraction=None if entry.total is None else entry.total.measured_fraction,
                without=0.0 if entry.total is None else entry.total.without[quantity],
                quantity=quantity,
            )
            for entry in inputs
        ]
    )
    values = [[entry.day(quantity) for entry in group] for group in groups]
    inflow, outflow, vented = (_sum(group) for group in values)
    imbalance = None if lack or not inputs else _imbalance(inflow, outflow, vented)
    limit = None
    if tolerance is not None and inflow is not None and not lack:
        limit = tolerance.fraction_of_in * inflow
    return DayBalance(
        envelope=envelope.name,
        quantity=quantity,
        gas_day=gas_day,
        start=start,
        hourly=hourly,
        hourly_reasons=tuple(reasons),
        hourly_verdict=Verdict(Answer.CANNOT_BE_JUDGED, NO_STORAGE),
        inflow=inflow,
        outflow=outflow,
        vented=vented,
        storage_change=None,
        storage_reason=NO_STORAGE,
        imbalance=imbalance,
        expanded_uncertainty=None if imbalance is None else expanded_uncertainty,
        tolerance=limit,
        significant=significance(imbalance, expanded_uncertainty, lack, unstated),
        beyond_tolerance=_beyond(imbalance, limit, lack),
        measured_fraction=min(
            (0.0 if entry.total is None else entry.total.measured_fraction for entry in inputs),
            default=0.0,
        ),
        reason=lack,
    )


def _hour(groups: list[list[_Input]], quantity: str, hour: int) -> tuple[list[float], str]:
    """Return one hour's row of BALANCE_COLUMNS, and what its input lacks."""
    lacks: list[str] = []
    fractions: list[float] = []
    values: list[list[float | None]] = []
    for group in groups:
        values.append([])
        for entry in group:
            value = entry.hour(quantity, hour)
            fraction = None
            if entry.record is not None:
                fraction = entry.hour("measured_time", hour) / entry.hour("duration", hour)
            fractions.append(fraction or 0.0)
            lacks.append(
                _lack(
                    entry.meter,
                    fraction=fraction,
                    without=entry.hour("measured_time", hour) if isnan(value) else 0.0,
                    quantity=quantity,
                )
            )
            values[-1].append(value)
    reason = _reason(lacks)
    inflow, outflow, vented = (_sum(group) for group in values)
    imbalance = None if reason else _imbalance(inflow, outflow, vented)
    row = (inflow, outflow, vented, imbalance)
    known = [float("nan") if value is None else value for value in row]
    return [*known, min(fractions)], reason


def significance(
    imbalance: float | None, expanded: float | None, lack: str, unstated: Sequence[str] = ()
) -> Verdict:
    """Return whether an imbalance is beyond its own expanded uncertainty."""
    if lack:
        return Verdict(Answer.CANNOT_BE_JUDGED, lack)
    if imbalance is None:
        return Verdict(Answer.CANNOT_BE_JUDGED, "the envelope has no meter")
    if expanded is None:
        return Verdict(Answer.CANNOT_BE_JUDGED, why_no_uncertainty(unstated))
    return Verdict(Answer.YES if abs(imbalance) > expanded else Answer.NO)


def why_no_uncertainty(unstated: Sequence[str]) -> str:
    """Return why a figure has no uncertainty: sources for which nothing is stated, or no source."""
    if not unstated:
        return NO_UNCERTAINTY
    return (
        f"no uncertainty is stated for {', '.join(unstated)} "
        "(outside the limits of use or the stated range)"
    )


def _beyond(imbalance: float | None, limit: float | None, lack: str) -> Verdict:
    """Return whether the imbalance is beyond the contract's tolerance."""
    if lack:
        return Verdict(Answer.CANNOT_BE_JUDGED, lack)
    if imbalance is None:
        return Verdict(Answer.CANNOT_BE_JUDGED, "the envelope has no meter")
    if limit is None:
        return Verdict(Answer.CANNOT_BE_JUDGED, "no tolerance is stated")
    return Verdict(Answer.YES if abs(imbalance) > limit else Answer.NO)
