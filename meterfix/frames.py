"""The contract of each table that passes between stations: columns, units, order."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date

import numpy as np
from numpy.typing import NDArray

from meterfix.model.gas import BaseConditions, GasTerms
from meterfix.model.site import EnergyTerms, MeterTerms
from meterfix.model.source import Excluded, Transmitter

CALCULATION_VERSION = "1"
"""Changes only together with a `Figures changed` entry in the changelog."""

Floats = NDArray[np.float64]
Instants = NDArray[np.int64]
"""UTC microseconds since 1970."""
Truths = NDArray[np.bool_]
Integers = NDArray[np.int64]


# --- intake -> run ---------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Problem:
    """Something in a file that could not be used: where, what, and why."""

    line: int
    """1-based line in the file; 0 for the whole file."""
    cell: str
    """Column header or tag; '' for the whole line."""
    reason: str
    """A sentence that names what was given and what was expected."""
    text: bytes
    """The cell's or line's bytes, at most 1,000 of them."""


@dataclass(frozen=True, slots=True)
class Cells:
    """The good cells of one column, or of one tag, of one file, in file order.

    Instants are canonical: an interval's start for interval-stamped sources. Values are SI
    (gauge pressures stay gauge, rooted cells stay fractions of full scale).
    """

    column: str
    """Header of the column, or the tag."""
    instants: Instants
    values: Floats
    lines: Integers
    implausible: Truths
    """Accepted, but outside the column's plausible range."""
    doubtful: Truths
    """Accepted, but the log itself calls its quality doubtful."""


@dataclass(frozen=True, slots=True)
class ParsedFile:
    """What a file's bytes hold. lines_read = candidate lines + lines_set_aside + lines_skipped."""

    rejected: str
    """Why the whole file cannot be read; '' if it can."""
    warning: str
    """'' or a sentence (empty file, header only, unknown columns)."""
    header: tuple[str, ...]
    lines_read: int
    lines_skipped: int
    """Headers and blank lines."""
    lines_set_aside: int
    """Lines none of whose cells can be used."""
    cells_set_aside: int
    """Bad or missing cells on lines that are otherwise candidates, plus all cells of lines
    set aside for a cell's sake; a malformed line counts no cells."""
    cells: tuple[Cells, ...]
    problems: tuple[Problem, ...]
    end_instant_is_later: bool = False
    """State of the repeated-hour rule at the file's end, for a tail that follows."""
    end_local: int | None = None
    """Last local time [us, as if the clock showed UTC] in a repeated hour; the same rule's."""


# --- run -> calc -----------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Carry:
    """How a signal's values reach the instants of dp, and how long gaps may be [us]."""

    linear: bool
    """True: values (or rates) run linearly between instants; False: they hold."""
    maximum_gap: int
    maximum_age: int
    interval: int | None
    """Not None: each value holds over its own interval of this length, and only there."""


@dataclass(frozen=True, slots=True)
class Series:
    """The chosen readings of one signal over a window, in strict order of time."""

    instants: Instants
    values: Floats
    disputed: Truths
    implausible: Truths
    carry: Carry
    excluded: tuple[Excluded, ...] = ()
    mean_values: bool = False
    """Cells hold means over their interval."""
    doubtful: Truths | None = None
    """Readings whose quality the log calls doubtful; None: none of them."""


@dataclass(frozen=True, slots=True)
class Era:
    """An interval over which every constant of a meter stands still; [start, end) in UTC us."""

    start: int
    end: int
    meter: MeterTerms
    gas: GasTerms
    base: BaseConditions
    energy: EnergyTerms | None
    atmospheric_pressure: float | None
    """Pa; None where the barometer's series gives it."""
    static_pressure_gauge: bool
    differential_pressure_rooted: bool
    differential_pressure_range: Transmitter
    static_pressure_range: Transmitter | None
    temperature_range: Transmitter | None
    barometer: str | None = None
    """Name of the barometer's signal; None where there is none."""


@dataclass(frozen=True, slots=True)
class MeterDay:
    """One meter and gas day to be computed: constants and readings, nothing else.

    Series reach beyond the day's edges as far as their rules can. Eras follow each other
    without a gap; together they cover [start, end), or the part in which the meter exists.
    """

    meter: str
    gas_day: date
    start: int
    end: int
    eras: tuple[Era, ...]
    differential_pressure: tuple[tuple[int, int, Series], ...]
    """(start, end, series) of the signal that serves over that part of the day; a replaced
    transmitter gives two. Same for the others."""
    static_pressure: tuple[tuple[int, int, Series], ...]
    temperature: tuple[tuple[int, int, Series], ...]
    barometer: tuple[tuple[int, int, Series], ...]
    """Empty where no era needs a barometer."""


# --- calc -> run -> store --------------------------------------------------------------------

FLAGS: tuple[tuple[str, str], ...] = (
    ("pressure_ratio_outside_limits", "p2/p1 below the expansibility equation's limit"),
    ("reynolds_number_outside_limits", "Re_D outside the device's limits of use"),
    ("geometry_outside_limits", "bore, pipe diameter or diameter ratio outside the limits of use"),
    ("gas_model_outside_range", "composition, p or T outside the gas model's stated range"),
    ("gas_model_simplified", "density from the ideal gas or a fixed compression factor"),
    ("over_range", "dp at or above the transmitter's upper range value"),
    ("signal_outside_range", "static pressure or temperature outside its transmitter's range"),
    ("implausible_value", "a value outside the column's plausible range was used"),
    ("disputed_reading", "two sources disagree on a reading that was used"),
    ("carried_value", "static pressure or temperature was carried or interpolated to the dp"),
    ("mean_of_differential_pressure", "dp is a mean over an interval: its root is biased high"),
    ("doubtful_quality", "a value was used that its log calls doubtful by a quality code"),
    ("calorific_value_outside_limits", "composition outside the limits of ISO 6976:2016"),
)
"""Flags: condition on a record's flow; the hourly record holds each one's share of flow time."""

MISSING: tuple[tuple[str, str], ...] = (
    ("missing_differential_pressure", "no dp reading within the maximum gap"),
    ("missing_static_pressure", "no static pressure within the maximum gap or age"),
    ("missing_temperature", "no temperature within the maximum gap or age"),
    ("missing_barometric_pressure", "no barometric pressure within the maximum gap or age"),
    ("excluded", "an excluded interval of the site file"),
    ("reverse_flow", "dp below minus the cut-off: flow against the device's direction"),
    ("no_gas_state", "no gas phase at this pressure and temperature"),
    ("not_converged", "the flow equation has no solution here: Re_D below 500, or no convergence"),
    ("meter_not_in_service", "before the meter's first terms"),
    (
        "impossible_state",
        "an absolute pressure or temperature that is not positive, or a dp above the pressure",
    ),
)
"""Why time is not measured; the hourly record holds the seconds lost to each."""

SIGNAL_ROLES = ("differential_pressure", "static_pressure", "temperature")
SIGNAL_STATISTICS = (
    "count",
    "time",
    "mean",
    "standard_deviation",
    "mean_squared_successive_difference",
    "minimum",
    "maximum",
    "first",
    "last",
    "changes",
    "longest_unchanged_time",
    "count_at_maximum",
)
"""Over a signal's own readings in the hour; SI, as logged (gauge stays gauge); times in s.
`time` is from the first to the last reading; `standard_deviation` has n - 1 below it."""

TOTALS = ("mass", "line_volume", "base_volume", "energy")
"""kg, m3, m3, J; NaN where nothing was measured or the quantity does not exist."""

HOURLY_COLUMNS: tuple[str, ...] = (
    "duration",
    "measured_time",
    "flow_time",
    *TOTALS,
    "flowing_records",
    "mean_root_differential_pressure",
    "mean_inverse_root_differential_pressure",
    "covariance_root_differential_pressure_static_pressure",
    *(f"{role}_{statistic}" for role in SIGNAL_ROLES for statistic in SIGNAL_STATISTICS),
    *(f"share_{name}" for name, _ in FLAGS),
    *(f"lost_{name}" for name, _ in MISSING),
    "disputed_readings",
)
"""Columns of an hourly record, float64, one row per hour of the gas day in elapsed time from
its start (the last may be short). Times in s. NaN: not known, or no reading to take it from."""

HOURLY_INDEX: dict[str, int] = {name: n for n, name in enumerate(HOURLY_COLUMNS)}


SENSITIVE = ("mass", "base_volume", "energy")
"""Totals that sensitivities and variances are given for; kg, m3, J."""

PARAMETERS: tuple[tuple[str, str, str], ...] = (
    ("differential_pressure_zero", "signal", "Pa added to every dp (after unrooting)"),
    ("differential_pressure_span", "signal", "relative change of every dp"),
    ("static_pressure_zero", "signal", "Pa added to every static pressure"),
    ("static_pressure_span", "signal", "relative change of the reading as logged"),
    ("temperature_zero", "signal", "K added to every temperature"),
    ("atmospheric_pressure", "atmosphere", "Pa added to the atmospheric pressure"),
    ("bore", "device", "relative change of the bore"),
    ("pipe_diameter", "device", "relative change of the pipe diameter"),
    ("discharge_coefficient", "device", "stated standard uncertainties of C"),
    ("expansibility", "device", "stated standard uncertainties of the expansibility"),
    ("dynamic_viscosity", "gas", "relative change"),
    ("isentropic_exponent", "gas", "relative change"),
    ("line_density", "gas", "stated standard uncertainties of the line model's density"),
    ("base_density", "gas", "stated standard uncertainties of the base model's density"),
    ("calorific_value", "gas", "relative change of the energy per base volume or mass"),
    ("calorific_method", "gas", "stated standard uncertainties of ISO 6976's calorific value"),
)
"""Parameters of a meter: name, kind of subject (a signal's name; 'barometer SIGNAL' or 'site' for
the atmosphere; 'METER LABEL' for a device; a gas's name), and what one unit of it is. Beside them
'fraction:COMPONENT' of a gas: that component's fraction before normalising, as stated."""


@dataclass(frozen=True, slots=True)
class HourlyRecord:
    """The result for one meter and gas day; totals of the day are fsum over its rows."""

    meter: str
    gas_day: date
    start: int
    statistics: Floats
    """(hours, len(HOURLY_COLUMNS))."""
    unsolved: tuple[int, ...] = ()
    """Instants [UTC us] of records for which the flow equation did not converge."""
    parameters: tuple[tuple[str, str], ...] = ()
    """What `sensitivities` are with respect to: name of `PARAMETERS` (or 'fraction:COMPONENT')
    and subject, sorted. A parameter of another transmitter, plate or gas is another one."""
    sensitivities: Floats | None = None
    """(hours, len(parameters), len(SENSITIVE)): signed derivatives of the hour's totals; 0 where
    nothing was measured, NaN where a parameter counts in stated uncertainties and the hour has a
    flow for which none is stated."""
    random_variance: Floats | None = None
    """(hours, len(SENSITIVE)): variance of the hour's totals from what does not repeat."""
