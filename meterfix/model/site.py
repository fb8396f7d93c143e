"""A site: its calendar, sources, signals, gases, meters, envelopes and contract."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from meterfix.model.calendar import GasDayCalendar
from meterfix.model.device import Device
from meterfix.model.gas import BaseConditions, CalorificBasis, CalorificKind, Gas
from meterfix.model.source import Signal, Source
from meterfix.model.uncertainty import Repeatability, UncertaintySource
from meterfix.model.versions import Versions


class Tapping(StrEnum):
    """Which pressure tapping the static-pressure transmitter is on."""

    UPSTREAM = "upstream"
    DOWNSTREAM = "downstream"


class Thermometer(StrEnum):
    """Where the thermometer sits; downstream readings are brought back to the upstream tapping."""

    UPSTREAM = "upstream"
    DOWNSTREAM = "downstream"


@dataclass(frozen=True, slots=True)
class Atmosphere:
    """The atmospheric pressure: a value [Pa], or the signal of a barometer; exactly one.

    A pressure computed from the elevation is a value; `elevation` [m] then says so.
    """

    value: float | None = None
    elevation: float | None = None
    signal: str | None = None


@dataclass(frozen=True, slots=True)
class MeterTerms:
    """What a meter is over one interval of time; signals and gas by name."""

    device: Device
    gas: str
    differential_pressure: str
    static_pressure: str
    temperature: str
    static_pressure_tapping: Tapping
    thermometer: Thermometer
    low_flow_cut_off: float
    """|dp| below this is no flow [Pa]."""


@dataclass(frozen=True, slots=True)
class Meter:
    """A named meter and its effective-dated terms."""

    name: str
    description: str
    terms: Versions[MeterTerms]


@dataclass(frozen=True, slots=True)
class Tolerance:
    """What the contract accepts as an imbalance: a fraction of what went in [-]."""

    fraction_of_in: float


@dataclass(frozen=True, slots=True)
class Envelope:
    """A part of the site into and out of which gas is metered; meters by name."""

    name: str
    description: str
    inflow: tuple[str, ...]
    outflow: tuple[str, ...]
    vented: tuple[str, ...]
    quantities: tuple[str, ...]
    """'mass' always; 'base_volume' and 'energy' where asked."""
    tolerance: Versions[Tolerance]


@dataclass(frozen=True, slots=True)
class EnergyTerms:
    """How the contract reckons energy; values of another kind are refused."""

    way: CalorificBasis
    kind: CalorificKind
    combustion_reference_temperature: float


@dataclass(frozen=True, slots=True)
class Contract:
    """Commercial terms."""

    energy: EnergyTerms | None
    price: Versions[float]
    """Money per J; empty if none is stated."""
    currency: str
    provisional_after: int
    """us after a gas day's end at which it closes provisionally."""


@dataclass(frozen=True)
class Site:
    """Everything that a site file says, validated, in SI."""

    name: str
    calendar: GasDayCalendar
    base_conditions: Versions[BaseConditions]
    atmosphere: Versions[Atmosphere]
    sources: tuple[Source, ...]
    signals: tuple[Signal, ...]
    gases: tuple[Gas, ...]
    meters: tuple[Meter, ...]
    envelopes: tuple[Envelope, ...]
    contract: Contract
    uncertainty: tuple[UncertaintySource, ...]
    """Every source, those that follow from standards included; independent of each other."""
    repeatability: tuple[Repeatability, ...]
    """Signals without one: estimated from successive differences."""
    database_url: str
    """SQLAlchemy URL; relative SQLite paths are already made absolute beside the site file."""
    archive_folder: str
    notes: tuple[str, ...]
    """What was done to what was given: 'gas natural_gas: mole fractions summed to 1.0001, ...'."""
    digest: str
    """SHA-256 of the site file's bytes."""
    text: str
    """The site file itself, kept with every version."""
