"""The invented works: its pipes, devices, transmitters and gases, and what happens in its month.

Everything here is made up. Instants are given by day of the month and local clock, so that the
same works can be simulated in any month.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from datetime import date, datetime
from zoneinfo import ZoneInfo

from meterfix.demo.device import Certificate, Device
from meterfix.model.calendar import GasDayCalendar, to_microseconds
from meterfix.model.versions import always

SITE_NAME = "Kestrelbach Tile Works (invented)"
TIME_ZONE = "Europe/Berlin"
ZONE = ZoneInfo(TIME_ZONE)
GAS_DAY_START_S = 6 * 3600
EXAMPLE_MONTH = date(2026, 10, 1)
EXAMPLE_SEED = 2026
BASE_PRESSURE = 101_325.0
BASE_TEMPERATURE = 288.15
BAROMETER_INTERVAL_S = 3600
ZERO_CELSIUS = 273.15

BEFORE: dict[str, float] = {
    "methane": 0.9304,
    "nitrogen": 0.0112,
    "carbon_dioxide": 0.0103,
    "ethane": 0.0372,
    "propane": 0.0081,
    "isobutane": 0.0011,
    "n_butane": 0.0012,
    "n_pentane": 0.0005,
}
"""Mole fractions of the natural gas until the supplier's change."""

AFTER: dict[str, float] = {
    "methane": 0.9246,
    "nitrogen": 0.0098,
    "carbon_dioxide": 0.0117,
    "ethane": 0.0419,
    "propane": 0.0088,
    "isobutane": 0.0013,
    "n_butane": 0.0013,
    "n_pentane": 0.0006,
}
"""Mole fractions from the start of gas day 16 on."""

COMPOSITION_CHANGE_DAY = 16


@dataclass(frozen=True, slots=True)
class Medium:
    """A gas with the properties that the contract states as numbers."""

    name: str
    dynamic_viscosity: float
    isentropic_exponent: float


NATURAL_GAS = Medium("natural_gas", 0.0111e-3, 1.29)
AIR = Medium("compressed_air", 0.0184e-3, 1.402)


DP, PRESSURE, TEMPERATURE = "PDT", "PT", "TT"
"""The kinds of a run's signals."""


@dataclass(frozen=True, slots=True)
class Carry:
    """How a signal's readings reach the instants of dp."""

    linear: bool
    """Between neighbours no further apart than `reach_s`; else held for at most that long."""
    reach_s: int


@dataclass(frozen=True, slots=True)
class Feed:
    """A source of logs: how often it writes, in what units, and how values run between rows."""

    name: str
    interval_s: int
    pressure_unit: str
    """Of the static pressure; the differential pressure's is `dp_unit`."""
    dp_unit: str
    between: str
    maximum_gap_s: int
    tags: bool = False
    """True: a row per tag and time, the tags at rates of their own; else a row per time."""

    def carry(self, kind: str) -> Carry:
        """Return how a pressure or temperature reaches the instants of dp."""
        if not self.tags:
            return Carry(self.between == "linear", self.maximum_gap_s)
        if kind == PRESSURE:
            return Carry(linear=True, reach_s=TAG_PRESSURE_GAP_S)
        return Carry(linear=False, reach_s=TAG_SILENCE_S)


TAG_PRESSURE_INTERVAL_S = 600
TAG_PRESSURE_GAP_S = 1500
"""One lost reading is bridged."""
TAG_SNAPSHOT_S = 1800
"""How often a temperature is written that has not left its dead band."""
TAG_DEAD_BAND_K = 0.1
TAG_SILENCE_S = 3600

SUPPLY = Feed("supply", 120, "bar", "mbar", "linear", 300)
WORKS = Feed("works", 120, "kPa", "kPa", "linear", 300)
KILN_CONTROL = Feed("kiln_control", 120, "bar", "%", "linear", 300)
HISTORIAN = Feed("historian", 120, "bar", "mbar", "linear", 300, tags=True)
COMPRESSED_AIR = Feed("compressed_air", 60, "bar", "mbar", "hold", 300)
FEEDS = (SUPPLY, WORKS, KILN_CONTROL, HISTORIAN, COMPRESSED_AIR)

STRAY_TAG = "TT-204.PV"
"""A tag that somebody has added to the historian's export, and nobody to the site file."""


@dataclass(frozen=True, slots=True)
class Run:
    """A metering run: device, transmitters. Ranges [Pa], gauge for pressure; [K]."""

    name: str
    number: str
    description: str
    feed: Feed
    medium: Medium
    device: Device
    dp_range: float
    pressure_range: float
    cut_off: float
    pressure_downstream: bool = False
    thermometer_downstream: bool = False
    temperature_range: tuple[float, float] = field(default=(253.15, 333.15))
    spare: Device | None = None
    """The device after the exchange, if this run has one."""


_TUBE = Device(48.470e-3, 102.26e-3, "machined", serial="VT-1")

RUNS: tuple[Run, ...] = (
    Run(
        "FT-101", "101", "gas supply, run A", SUPPLY, NATURAL_GAS,
        Device(54.118e-3, 154.08e-3, "flange"), 16e3, 25e5, 100.0, thermometer_downstream=True,
    ),
    Run(
        "FT-102", "102", "gas supply, run B (shut at weekends)", SUPPLY, NATURAL_GAS,
        Device(53.904e-3, 154.11e-3, "flange"), 16e3, 25e5, 100.0, thermometer_downstream=True,
    ),
    Run(
        "FT-201", "201", "spray dryer", HISTORIAN, NATURAL_GAS,
        _TUBE, 16e3, 6e5, 80.0,
        thermometer_downstream=True, spare=replace(_TUBE, bore=48.520e-3, serial="VT-2"),
    ),
    Run(
        "FT-202", "202", "kiln hall, main", WORKS, NATURAL_GAS,
        Device(70.06e-3, 128.20e-3, "corner"), 10e3, 6e5, 100.0,
    ),
    Run(
        "FT-203", "203", "boiler house", HISTORIAN, NATURAL_GAS,
        Device(35.60e-3, 77.93e-3, "ISA_1932"), 10e3, 6e5, 60.0,
        pressure_downstream=True, thermometer_downstream=True,
    ),
    Run(
        "FT-301", "301", "roller kiln", WORKS, NATURAL_GAS,
        Device(42.60e-3, 102.26e-3, "long_radius"), 6e3, 4e5, 50.0, thermometer_downstream=True,
    ),
    Run(
        "FT-302", "302", "shuttle kiln (batches)", KILN_CONTROL, NATURAL_GAS,
        Device(46.03e-3, 77.93e-3, "D_and_D/2"), 12.5e3, 4e5, 60.0,
    ),
    Run(
        "FT-303", "303", "tile dryers", WORKS, NATURAL_GAS,
        Device(
            38.01e-3, 77.93e-3, "flange",
            certificate=Certificate("C-303/26", 0.6043, "0.25 %", (4e4, 2.5e5)),
        ), 10e3, 4e5, 50.0,
    ),
    Run(
        "FA-401", "401", "compressed air, main", COMPRESSED_AIR, AIR,
        Device(38.00e-3, 82.80e-3, "flange"), 16e3, 10e5, 100.0,
    ),
    Run(
        "FA-411", "411", "compressed air, press shop", COMPRESSED_AIR, AIR,
        Device(30.02e-3, 54.50e-3, "corner"), 16e3, 10e5, 100.0,
    ),
    Run(
        "FA-412", "412", "compressed air, glaze line", COMPRESSED_AIR, AIR,
        Device(24.50e-3, 54.50e-3, "ISA_1932"), 10e3, 10e5, 100.0,
    ),
)  # fmt: skip

RUN_BY_NAME: dict[str, Run] = {run.name: run for run in RUNS}


@dataclass(frozen=True, slots=True)
class Balance:
    """An envelope of the works; meters by name."""

    name: str
    description: str
    inflow: tuple[str, ...]
    outflow: tuple[str, ...]
    quantities: tuple[str, ...]


BALANCES: tuple[Balance, ...] = (
    Balance(
        "works", "all gas bought against its first-level consumers",
        ("FT-101", "FT-102"), ("FT-201", "FT-202", "FT-203"), ("mass", "base_volume", "energy"),
    ),
    Balance(
        "hall", "kiln hall main against the hall's consumers",
        ("FT-202",), ("FT-301", "FT-302", "FT-303"), ("mass", "base_volume", "energy"),
    ),
    Balance(
        "air", "compressed-air main against its consumers",
        ("FA-401",), ("FA-411", "FA-412"), ("mass", "base_volume"),
    ),
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class OutOfService:
    """An interval that the site file excludes from a run's differential pressure; [UTC us]."""

    run: str
    start: int
    end: int
    reason: str


@dataclass(frozen=True)
class Month:
    """The works' month: its edges and its dated events, all in UTC microseconds."""

    first_day: date

    @property
    def calendar(self) -> GasDayCalendar:
        """The gas-day calendar of the works."""
        return GasDayCalendar(TIME_ZONE, always(GAS_DAY_START_S))

    @property
    def days(self) -> tuple[date, ...]:
        """Every gas day of the month."""
        return self.calendar.month_days(self.first_day)

    @property
    def start(self) -> int:
        """The first gas day's start."""
        return self.calendar.start(self.days[0])

    @property
    def end(self) -> int:
        """The last gas day's end."""
        return self.calendar.end(self.days[-1])

    def at(self, day: int, hour: int, minute: int = 0) -> int:
        """Return the instant of a local clock time on a day of the month."""
        local = datetime(self.first_day.year, self.first_day.month, day, hour, minute, tzinfo=ZONE)
        return to_microseconds(local)

    @property
    def composition_change(self) -> int:
        """When the supplier's gas changes: at a gas day's start, as the contract has it."""
        return self.calendar.start(self.first_day.replace(day=COMPOSITION_CHANGE_DAY))

    @property
    def tube_exchange(self) -> int:
        """When FT-201's spare Venturi tube counts, inside the isolation for it."""
        return self.at(20, 9, 30)

    @property
    def standstill(self) -> tuple[int, int]:
        """While the spray dryer stands for the exchange of its Venturi tube."""
        return self.at(20, 8, 30), self.at(20, 10, 30)

    @property
    def out_of_service(self) -> tuple[OutOfService, ...]:
        """The excluded intervals, off the loggers' two-minute grid as clocks on walls are."""
        return (
            OutOfService("FT-101", self.at(14, 8, 1), self.at(14, 8, 41), "zero check"),
            OutOfService("FT-201", self.at(20, 9, 1), self.at(20, 10, 1), "Venturi tube exchanged"),
        )

    @property
    def restart(self) -> tuple[int, int, int]:
        """FT-301's logger: last row before it stopped, first row after, clock set again.

        In between it wrote at 20 s past the minute.
        """
        return self.at(7, 14, 10), self.at(7, 14, 44), self.at(12, 2, 0)

    @property
    def outage(self) -> tuple[int, int]:
        """FT-203 cut off from the historian: last rows before, first rows after."""
        return self.at(22, 11, 0), self.at(22, 11, 34)

    @property
    def stray_lines(self) -> tuple[int, ...]:
        """When the historian's export holds `STRAY_TAG`."""
        return tuple(self.at(9, 10, minute) for minute in range(0, 60, 10))
