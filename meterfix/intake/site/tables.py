"""What a site file may hold: its tables and keys, strictly typed, nothing unknown.

Only the shape is judged here: which keys, text or number, one of which words. What the texts
mean (units, instants, names of other tables) is judged by the builders, so that a file's every
mistake can be told at once.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import Discriminator, Field, Tag, WithJsonSchema

from meterfix.intake.site.accuracy_tables import SharedTable, SpecificationTable
from meterfix.intake.site.device_tables import (
    NozzleChangeTable,
    NozzleTable,
    OrificeChangeTable,
    OrificeTable,
    VenturiChangeTable,
    VenturiTable,
)
from meterfix.intake.site.gas_tables import GasTable
from meterfix.intake.site.shapes import (
    TAGS,
    WIDE,
    AccuracyTable,
    DatableAtmosphere,
    DatableBase,
    DatableRange,
    DatableText,
    Duration,
    Instant,
    Name,
    Pair,
    Pressure,
    Table,
    Temperature,
    wide_or_tags,
)


class SiteTable(Table):
    """The site as a whole."""

    name: str
    time_zone: str = Field(description="IANA name", examples=["Europe/Berlin"])
    gas_day_start: DatableText = Field(description="local clock time, '06:00'; or versions")
    database: str = Field(
        description="SQLAlchemy URL; SQLite files relative to the site file; passwords only as "
        "${env:NAME} or ${file:PATH}"
    )
    archive: str = Field(description="folder of raw bytes, relative to the site file")
    base_conditions: DatableBase
    atmospheric_pressure: DatableAtmosphere


class EnergyTable(Table):
    """How the contract reckons energy."""

    way: Literal["volume", "mass"]
    kind: Literal["gross", "net"]
    combustion_reference_temperature: Temperature


class ContractTable(Table):
    """Commercial terms."""

    currency: str = Field("", pattern=r"^([A-Z]{3})?$", description="three letters")
    price: DatableText | None = Field(None, description="money per unit of energy")
    provisional_after: Duration = "12 h"
    energy: EnergyTable | None = None


class CellTable(Table):
    """What the values of a column or tag mean."""

    quantity: Literal[
        "differential_pressure", "static_pressure", "temperature", "barometric_pressure"
    ]
    unit: str = Field(description="a unit, '1' or '%' where the root is taken")
    reference: Literal["gauge", "absolute"] | None = Field(
        None, description="needed for a static pressure"
    )
    holds: Literal["sample", "mean"] = "sample"
    root: Literal["not_taken", "taken"] = "not_taken"
    plausible: Pair | None = None
    between: Literal["linear", "hold"] | None = None
    maximum_gap: Duration | None = None
    maximum_age: Duration | None = None


class ColumnTable(CellTable):
    """One column of a wide log."""

    required: bool = True


Report = Literal["periodic", "by_exception"]


class TagTable(CellTable):
    """One tag of a tag log."""

    report: Report | None = Field(None, description="the source's, if left out")
    maximum_silence: Duration | None = Field(
        None, description="of a tag that reports by exception: how long it may be silent"
    )


class QualityTable(Table):
    """What every code of the quality column says of the value beside it."""

    good: list[str] = Field(default_factory=list)
    doubtful: dict[str, str] = Field(
        default_factory=dict, description="used with a flag; code = meaning"
    )
    bad: dict[str, str] = Field(default_factory=dict, description="set aside; code = meaning")


class SourceTable(Table):
    """A folder of logs of one kind: what both layouts have."""

    folder: str
    files: str = Field(description="shell pattern; {binding} tells whose file it is")
    delivery: Literal["whole", "appended"]
    stamp: Literal["instant", "interval_start", "interval_end"]
    interval: Duration | None = None
    report: Report = Field(
        "periodic",
        description="'by_exception': a value is written only when it has changed by more than a "
        "band, and holds until the next one",
    )
    maximum_silence: Duration | None = Field(
        None, description="needed with report 'by_exception': what is silent longer is missing"
    )
    between: Literal["linear", "hold"] | None = None
    maximum_gap: Duration | None = Field(None, description="needed unless report 'by_exception'")
    maximum_age: Duration | None = None
    precedence: int = Field(1, ge=0)
    settle_time: Duration = "5 s"
    unfinished_wait: Duration = "1 h"
    encoding: Literal["utf-8", "utf-16"] = "utf-8"
    delimiter: str = Field(min_length=1, max_length=1)
    decimal_mark: Literal[".", ","]
    thousands_mark: str = Field("", max_length=1)
    time_columns: list[str] = Field(min_length=1, max_length=2)
    time_format: str = Field(description="%Y %m %d %H %M %S %f %z and literals")
    time_zone: str | None = Field(None, description="needed where the times hold no offset")
    repeated_hour: Literal["set_aside", "file_order"] = "set_aside"
    hour_24: bool = False
    final_line_end: Literal["required", "optional"] = "required"
    bad_values: dict[str, str] = Field(default_factory=dict)
    ignored_columns: list[str] = Field(default_factory=list)
    earliest: Instant = "1990-01-01T00:00:00+00:00"
    size_limit_bytes: int = Field(268_435_456, gt=0, description="after decompression")


class WideTable(SourceTable):
    """A source of logs with a row per time and a column per quantity."""

    layout: Annotated[
        Literal["wide", "tags"], WithJsonSchema({"const": "wide", "type": "string"})
    ] = "wide"
    column: dict[str, ColumnTable] = Field(min_length=1)


class TagsTable(SourceTable):
    """A source of logs with a row per tag and time."""

    layout: Literal["tags"]
    tag_column: str = Field(description="header of the column that names the tag")
    value_column: str = Field(description="header of the column that holds the value")
    quality_column: str | None = Field(None, description="header of the column of quality codes")
    quality: QualityTable | None = Field(None, description="needed with a quality column")
    ignored_tags: list[str] = Field(default_factory=list)
    tag: dict[str, TagTable] = Field(min_length=1)


AnySource = Annotated[
    Annotated[WideTable, Tag(WIDE)] | Annotated[TagsTable, Tag(TAGS)],
    Discriminator(wide_or_tags),
]


class OriginTable(Table):
    """Where a signal's readings come from: a column of a wide log, a tag of a tag log."""

    source: str
    binding: str = ""
    column: str | None = Field(None, description="of a wide log: the header's text")
    tag: str | None = Field(None, description="of a tag log")


class ExcludedTable(Table):
    """An interval whose readings do not count."""

    from_: Instant = Field(alias="from")
    to: Instant
    reason: str = Field(min_length=1)


class SignalTable(Table):
    """A measuring point."""

    from_: list[OriginTable] = Field(alias="from", min_length=1)
    range: DatableRange | None = Field(None, description="needed for a differential pressure")
    excluded: list[ExcludedTable] = Field(default_factory=list)
    upper_range_limit: str | None = Field(
        None, description="the most that the transmitter could be set to"
    )
    uncertainty: list[SpecificationTable] = Field(default_factory=list)
    repeatability: AccuracyTable | None = Field(
        None, description="left out: estimated from successive readings"
    )


class MeterChangeTable(Table):
    """What changed on a meter, from an instant on; the rest stays."""

    since: Instant
    gas: str | None = None
    differential_pressure: str | None = None
    static_pressure: str | None = None
    temperature: str | None = None
    static_pressure_tapping: Literal["upstream", "downstream"] | None = None
    thermometer: Literal["upstream", "downstream"] | None = None
    low_flow_cut_off: Pressure | None = None
    orifice: OrificeChangeTable | None = None
    nozzle: NozzleChangeTable | None = None
    venturi_tube: VenturiChangeTable | None = None


class MeterTable(Table):
    """A meter: its device, gas and signals."""

    description: str = ""
    since: Instant | None = Field(None, description="in service from then on")
    gas: str
    differential_pressure: str = Field(description="name of a signal")
    static_pressure: str = Field(description="name of a signal")
    temperature: str = Field(description="name of a signal")
    static_pressure_tapping: Literal["upstream", "downstream"]
    thermometer: Literal["upstream", "downstream"]
    low_flow_cut_off: Pressure
    orifice: OrificeTable | None = Field(None, description="one of the three devices is needed")
    nozzle: NozzleTable | None = None
    venturi_tube: VenturiTable | None = None
    change: list[MeterChangeTable] = Field(default_factory=list)


class EnvelopeTable(Table):
    """A part of the site into and out of which gas is metered."""

    description: str = ""
    in_: list[str] = Field(alias="in", min_length=1)
    out: list[str] = Field(min_length=1)
    vented: list[str] = Field(default_factory=list)
    quantities: list[Literal["mass", "base_volume", "energy"]] = Field(default_factory=list)
    tolerance: DatableText = Field(description="of what went in")


class SiteFile(Table):
    """A whole site file."""

    site: SiteTable
    contract: ContractTable = Field(default_factory=lambda: ContractTable.model_validate({}))
    source: dict[Name, AnySource] = Field(min_length=1)
    signal: dict[Name, SignalTable] = Field(min_length=1)
    gas: dict[Name, GasTable] = Field(min_length=1)
    meter: dict[Name, MeterTable] = Field(min_length=1)
    envelope: dict[Name, EnvelopeTable] = Field(default_factory=dict)
    uncertainty: dict[Name, SharedTable] = Field(
        default_factory=dict, description="causes that several of the others share"
    )


def schema() -> dict[str, Any]:
    """Return the JSON Schema (2020-12) of a site file read as TOML."""
    described = SiteFile.model_json_schema(by_alias=True)
    for named in described["properties"].values():
        if "patternProperties" in named:
            named["additionalProperties"] = False
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        **described,
        "title": "meterfix site file",
    }
