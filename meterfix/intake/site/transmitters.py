"""Transmitters' specifications: entries in percent of span or of reading, to sizes in SI."""

from __future__ import annotations

from dataclasses import dataclass

from meterfix import units
from meterfix.intake.site.accuracy import (
    READING,
    SPAN,
    UPPER_RANGE_LIMIT,
    UPPER_RANGE_VALUE,
    StatedSize,
    divisor,
    stated_size,
)
from meterfix.intake.site.accuracy_tables import SharedPartTable, SpecificationTable
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.shapes import AccuracyTable
from meterfix.model.source import Quantity, Signal, Transmitter
from meterfix.model.uncertainty import Part, Repeatability

_ZERO = {
    Quantity.DIFFERENTIAL_PRESSURE: "differential_pressure_zero",
    Quantity.STATIC_PRESSURE: "static_pressure_zero",
    Quantity.TEMPERATURE: "temperature_zero",
    Quantity.BAROMETRIC_PRESSURE: "atmospheric_pressure",
}
_SPAN = {
    Quantity.DIFFERENTIAL_PRESSURE: "differential_pressure_span",
    Quantity.STATIC_PRESSURE: "static_pressure_span",
}


@dataclass(frozen=True, slots=True)
class Effect:
    """One entry as written, read: its size, how much of it counts, and when."""

    size: StatedSize
    factor: float
    """Of the size: its extent over that of the entry; per second of a drift."""
    drifts: bool
    since: int | None
    until: int | None

    def part(
        self,
        parameter: str,
        subject: str,
        size: float,
        when: tuple[int | None, int | None] | None = None,
    ) -> Part:
        """Return how the effect acts on a parameter.

        `size` is one standard deviation where the effect is as large as the entry says; `when`
        is its time, cut to what it holds for, None: the whole of it.
        """
        start, end = (self.since, self.until) if when is None else when
        one = size * self.factor
        return Part(
            parameter,
            subject,
            size=0.0 if self.drifts else one,
            growth=one if self.drifts else 0.0,
            since=self.since if self.drifts else None,
            start=start,
            end=end,
        )


def read_effect(
    place: Place,
    table: SpecificationTable | SharedPartTable,
    dimension: units.Dimension,
    findings: Findings,
) -> Effect | None:
    """Return an entry's size, extent and time; `dimension` is that of an absolute size."""
    before = len(findings.mistakes)
    size = stated_size((*place, "size"), table.size, dimension, findings)
    since = findings.instant((*place, "since"), table.since)
    until = findings.instant((*place, "until"), table.until)
    if since is not None and until is not None and since >= until:
        findings.add(
            place, f"from {table.since} to {table.until}", "`until` must be later than `since`"
        )
    if size is None:
        return None
    drifts = size.per is not None and size.per.dimension == "time"
    factor = 1.0
    if size.per is not None and drifts:
        factor = 1.0 / size.per.value
        if table.since is None:
            findings.add((*place, "since"), "missing", "a drift needs the instant it counts from")
    if size.per is not None and not drifts:
        over = findings.quantity(
            (*place, "over"),
            table.over,
            size.per.dimension,
            at_least=0.0,
            limit="it must be at least 0; the sign belongs to the size",
        )
        if table.over is None and "over" not in table.model_fields_set:
            findings.add(
                (*place, "over"),
                "missing",
                f"'{table.size}' needs how far it is from the calibration, such as over = "
                f"'{'15 K' if size.per.dimension == 'temperature_difference' else '20 bar'}'",
            )
        factor = 0.0 if over is None else over / size.per.value
    elif table.over is not None:
        findings.add(
            (*place, "over"), f"'{table.over}'", "leave it out, or write the size 'per' something"
        )
    if len(findings.mistakes) > before:
        return None
    return Effect(size, factor, drifts, since, until)


def absolute_dimension(quantity: Quantity) -> units.Dimension:
    """Return the dimension of an error of the quantity."""
    return "temperature_difference" if quantity is Quantity.TEMPERATURE else "pressure"


def signal_parts(
    place: Place,
    signal: Signal,
    range_limit: float | None,
    acts_on: str | None,
    effect: Effect,
    covered: float,
    findings: Findings,
) -> tuple[Part, ...] | None:
    """Return how an effect acts on a signal: a part for each of its transmitter's ranges.

    Parameters
    ----------
    place
        Of the entry.
    signal
        What it acts on.
    range_limit
        The transmitter's upper range limit, SI.
    acts_on
        'zero': the same error at every reading. 'span': in proportion to the distance from the
        lower range value, and the size is the error at the upper range value; a size of reading
        is in proportion to the reading itself.
    effect
        What was stated.
    covered
        How many standard deviations its size is.
    findings
        Mistakes are added.
    """
    problem = _problem(signal, range_limit, acts_on, effect.size)
    if problem is not None:
        findings.add((*place, problem[0]), problem[1], problem[2])
        return None
    parts: list[Part] = []
    for start, end, transmitter in _windows(signal, effect):
        for parameter, size in _sizes(signal, transmitter, range_limit, acts_on, effect.size):
            if size != 0.0 and effect.factor != 0.0:
                one = effect.part(parameter, _subject(signal), size / covered, (start, end))
                parts.append(one)
    return tuple(parts)


def _subject(signal: Signal) -> str:
    barometer = signal.quantity is Quantity.BAROMETRIC_PRESSURE
    return f"barometer {signal.name}" if barometer else signal.name


def _problem(
    signal: Signal, range_limit: float | None, acts_on: str | None, size: StatedSize
) -> tuple[str, str, str] | None:
    """Return key, what was given and what is allowed where an entry does not fit its signal."""
    measured = signal.quantity.value.replace("_", " ")
    ranged = size.base in {SPAN, UPPER_RANGE_VALUE} or (acts_on == "span" and size.base != READING)
    of_something = f"'of {SPAN}', 'of {READING}', 'of {UPPER_RANGE_VALUE}'"
    checks = (
        (
            acts_on not in {"zero", "span"},
            ("acts_on", f"'{acts_on}' of a signal", "use 'zero' or 'span'"),
        ),
        (
            acts_on == "span" and signal.quantity not in _SPAN,
            ("acts_on", f"'span' of a {measured}", "use 'zero', the error at every reading"),
        ),
        (
            size.relative and size.base is None,
            (
                "size",
                "a percentage of nothing",
                f"say {of_something} or 'of {UPPER_RANGE_LIMIT}'",
            ),
        ),
        (
            acts_on == "zero" and size.base == READING,
            ("size", "'of reading' on the zero", "what grows with the reading acts on the span"),
        ),
        (
            signal.quantity is Quantity.TEMPERATURE
            and size.base in {UPPER_RANGE_VALUE, UPPER_RANGE_LIMIT},
            ("size", f"'of {size.base}' of a temperature", f"say 'of {SPAN}', or an amount in K"),
        ),
        (
            size.base == UPPER_RANGE_LIMIT and range_limit is None,
            (
                "size",
                f"'of {UPPER_RANGE_LIMIT}', which signal '{signal.name}' does not state",
                f"give [signal.{signal.name}] upper_range_limit",
            ),
        ),
        (
            ranged and not signal.transmitter.entries,
            (
                "size",
                f"signal '{signal.name}' states no range",
                f"give [signal.{signal.name}] range, or a size that needs none",
            ),
        ),
    )
    return next((problem for bad, problem in checks if bad), None)


def _windows(
    signal: Signal, effect: Effect
) -> list[tuple[int | None, int | None, Transmitter | None]]:
    """Return the times of an effect, cut where the transmitter's range changes."""
    versions = signal.transmitter.entries
    if effect.size.base == READING or len(versions) < 2:
        only = versions[0].value if versions else None
        return [(effect.since, effect.until, only)]
    found: list[tuple[int | None, int | None, Transmitter | None]] = []
    for n, version in enumerate(versions):
        following = versions[n + 1].since if n + 1 < len(versions) else None
        # the first range also serves what may come before it
        start = _later(effect.since, version.since if n > 0 else None)
        end = _earlier(effect.until, following)
        if start is None or end is None or start < end:
            found.append((start, end, version.value))
    return found


def _later(a: int | None, b: int | None) -> int | None:
    return max((x for x in (a, b) if x is not None), default=None)


def _earlier(a: int | None, b: int | None) -> int | None:
    return min((x for x in (a, b) if x is not None), default=None)


def _sizes(
    signal: Signal,
    transmitter: Transmitter | None,
    range_limit: float | None,
    acts_on: str | None,
    size: StatedSize,
) -> list[tuple[str, float]]:
    """Return parameters and sizes, as stated, of an effect under one range."""
    if size.base == READING:
        return [(_SPAN[signal.quantity], size.amount)]
    amount = size.amount
    lower = upper = 0.0
    if transmitter is not None:
        lower, upper = transmitter.lower_range_value, transmitter.upper_range_value
    if size.base == SPAN:
        amount = size.amount * (upper - lower)
    elif size.base == UPPER_RANGE_VALUE:
        amount = size.amount * abs(upper)
    elif size.base == UPPER_RANGE_LIMIT:
        amount = size.amount * (range_limit or 0.0)
    if acts_on == "zero":
        return [(_ZERO[signal.quantity], amount)]
    share = size.amount if size.base == SPAN else amount / (upper - lower)
    # zero error at the lower range value: x - lower is x and a constant
    parts = [(_SPAN[signal.quantity], share)]
    if lower != 0.0:
        parts.append((_ZERO[signal.quantity], -share * lower))
    return parts


def build_repeatability(
    place: Place,
    table: AccuracyTable | None,
    signal: Signal,
    range_limit: float | None,
    findings: Findings,
) -> Repeatability | None:
    """Return what does not repeat from one reading to the next, as stated.

    A percentage of span is one of the largest span where the range changes.
    """
    if table is None:
        return None
    covered = divisor(place, table, findings)
    at = (*place, "size")
    size = stated_size(at, table.size, absolute_dimension(signal.quantity), findings)
    if size is None:
        return None
    problem = _problem(signal, range_limit, "zero", size)
    if size.per is not None:
        problem = "size", f"'{table.size}'", "what does not repeat grows with nothing"
    if problem is not None:
        findings.add((*place, problem[0]), problem[1], problem[2])
        return None
    amount = max(
        _sizes(signal, transmitter, range_limit, "zero", size)[0][1]
        for _, _, transmitter in _windows(signal, Effect(size, 1.0, False, None, None))
    )
    if amount < 0.0:
        findings.add(at, f"'{table.size}' is negative", "a standard deviation is at least 0")
        return None
    return None if covered is None else Repeatability(signal.name, amount / covered)
