"""Sources of logs and the signals in them: what a row means, declared and never guessed."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from meterfix.model.versions import Versions


class Quantity(StrEnum):
    """What a signal measures."""

    DIFFERENTIAL_PRESSURE = "differential_pressure"
    STATIC_PRESSURE = "static_pressure"
    TEMPERATURE = "temperature"
    BAROMETRIC_PRESSURE = "barometric_pressure"


class Stamp(StrEnum):
    """What a row's time is: an instant, or one end of an interval."""

    INSTANT = "instant"
    INTERVAL_START = "interval_start"
    INTERVAL_END = "interval_end"


class Holds(StrEnum):
    """What a cell holds: a sample, or the mean over the row's interval."""

    SAMPLE = "sample"
    MEAN = "mean"


class Between(StrEnum):
    """How values run between instants."""

    HOLD = "hold"
    LINEAR = "linear"


class Delivery(StrEnum):
    """Whether a file appears once and complete, or grows."""

    WHOLE = "whole"
    APPENDED = "appended"


class RepeatedHour(StrEnum):
    """What settles a local time in the hour that a clock change repeats."""

    SET_ASIDE = "set_aside"
    FILE_ORDER = "file_order"
    """The first run of such times in file order is the earlier hour; a step back begins the
    later one."""


class LayoutKind(StrEnum):
    """What a row of a log is."""

    WIDE = "wide"
    """A row per time, with a column per quantity."""
    TAGS = "tags"
    """A row per tag and time; tags come at their own rates."""


class Use(StrEnum):
    """What becomes of a value, by the quality code beside it."""

    GOOD = "good"
    DOUBTFUL = "doubtful"
    """Used, with a flag."""
    BAD = "bad"
    """Set aside."""


@dataclass(frozen=True, slots=True)
class Quality:
    """One quality code of a tag log, verbatim, and what the site file says it means."""

    code: str
    use: Use
    meaning: str
    """'' for a good one."""


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a wide log, or one tag of a tag log, and what its cells mean."""

    header: str
    """The column's header text, or the tag, verbatim."""
    quantity: Quantity
    holds: Holds
    scale: float
    """SI value = cell x scale + offset."""
    offset: float
    gauge: bool
    """True: relative to the atmosphere; only pressures may be."""
    rooted: bool
    """True: the cell is the root of dp already, as a fraction of its full-scale value (after
    scale and offset); the transmitter's range turns it back into dp."""
    required: bool
    """Of a wide log: a file without it is rejected."""
    plausible_minimum: float
    """SI; a value outside the plausible range is accepted with a flag."""
    plausible_maximum: float


@dataclass(frozen=True, slots=True)
class Layout:
    """How the bytes of a source's files become cells."""

    encoding: str
    """'utf-8' or 'utf-16'."""
    delimiter: str
    decimal_mark: str
    thousands_mark: str
    """'' if none."""
    time_columns: tuple[str, ...]
    """One header, or two (date, time) that are joined by one blank."""
    time_format: str
    """strptime tokens %Y %m %d %H %M %S %f %z and literals; '%S' may be followed by '.%f'."""
    time_zone: str
    """Zone of times without an offset."""
    repeated_hour: RepeatedHour
    hour_24: bool
    """True: 24:00 is the next day's 00:00."""
    columns: tuple[Column, ...]
    """The declared columns of a wide log, the declared tags of a tag log."""
    ignored_columns: tuple[str, ...]
    bad_values: tuple[tuple[str, str], ...]
    """Texts that stand for a bad value, and their meaning."""
    final_line_end_required: bool
    earliest: int
    """UTC us; older instants are set aside."""
    size_limit: int
    """Bytes, after decompression."""
    kind: LayoutKind = LayoutKind.WIDE
    tag_column: str = ""
    """Header of the column that names the tag; '' in a wide log, as all that follow."""
    value_column: str = ""
    quality_column: str = ""
    """'' if the log has none."""
    qualities: tuple[Quality, ...] = ()
    """Every code that may stand in the quality column."""
    ignored_tags: tuple[str, ...] = ()
    """Tags whose lines are skipped."""


@dataclass(frozen=True, slots=True)
class Source:
    """A folder of logs of one kind."""

    name: str
    folder: str
    """As written in the site file; relative to it."""
    file_pattern: str
    """Shell pattern of file names; may hold '{binding}' once."""
    delivery: Delivery
    stamp: Stamp
    interval: int | None
    """Length of a row's interval [us]; None for instants."""
    between: Between
    maximum_gap: int
    """us."""
    maximum_age: int
    """us; how long a slow pressure or temperature may be carried to a dp."""
    settle_time: int
    """us."""
    unfinished_wait: int
    """us; how old a file without a final line end must be before that line is set aside."""
    precedence: int
    """The lower number wins where two sources give one signal and instant two values."""
    layout: Layout


@dataclass(frozen=True, slots=True)
class Origin:
    """Where a signal's readings come from: source, file binding ('' if none), column or tag."""

    source: str
    binding: str
    column: str


@dataclass(frozen=True, slots=True)
class Excluded:
    """An interval whose readings do not count, and why."""

    start: int
    end: int
    reason: str


@dataclass(frozen=True, slots=True)
class Transmitter:
    """The calibrated range of a signal's transmitter, SI, gauge where the signal is gauge."""

    lower_range_value: float
    upper_range_value: float


@dataclass(frozen=True, slots=True)
class Signal:
    """A measuring point: one series of readings."""

    name: str
    quantity: Quantity
    gauge: bool
    rooted: bool
    holds: Holds
    origins: tuple[Origin, ...]
    transmitter: Versions[Transmitter]
    """May be empty for pressures and temperatures: then no range flag is raised."""
    excluded: tuple[Excluded, ...]
    stamp: Stamp
    interval: int | None
    between: Between
    maximum_gap: int
    maximum_age: int
