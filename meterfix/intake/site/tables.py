"""What a site file may hold: its tables and keys, strictly typed, nothing unknown.

Only the shape is judged here: which keys, text or number, one of which words. What the texts
mean (units, instants, names of other tables) is judged by the builders, so that a file's every
mistake can be told at once.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import Discriminator, Field, Tag

from meterfix.intake.site.shapes import (
    DATED,
    NUMBER,
    SINGLE,
    TABLE,
    TEXT,
    Base,
    DatableAtmosphere,
    DatableBase,
    DatableRange,
    DatableText,
    Duration,
    Expansion,
    Instant,
    Length,
    Name,
    Pair,
    Percent,
    Pressure,
    Table,
    Temperature,
    single_or_dated,
    text_or_number,
    text_or_table,
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


class ColumnTable(Table):
    """One column of a wide log."""

    quantity: Literal[
        "differential_pressure", "static_pressure", "temperature", "barometric_pressure"
    ]
    unit: str = Field(description="a unit, '1' or '%' where the root is taken")
    reference: Literal["gauge", "absolute"] | None = Field(
        None, description="needed for a static pressure"
    )
    holds: Literal["sample", "mean"] = "sample"
    root: Literal["not_taken", "taken"] = "not_taken"
    required: bool = True
    plausible: Pair | None = None
    between: Literal["linear", "hold"] | None = None
    maximum_gap: Duration | None = None
    maximum_age: Duration | None = None


class SourceTable(Table):
    """A folder of logs of one kind."""

    folder: str
    files: str = Field(description="shell pattern; {binding} tells whose file it is")
    delivery: Literal["whole", "appended"]
    stamp: Literal["instant", "interval_start", "interval_end"]
    interval: Duration | None = None
    between: Literal["linear", "hold"] | None = None
    maximum_gap: Duration
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
    column: dict[str, ColumnTable] = Field(min_length=1)


class OriginTable(Table):
    """Where a signal's readings come from."""

    source: str
    binding: str = ""
    column: str


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


class FixedFactorTable(Table):
    """A compression factor that is itself the model."""

    fixed_compression_factor: float = Field(gt=0, le=5, allow_inf_nan=False)


Model = Annotated[
    Annotated[Literal["aga8_detail", "gerg_2008", "reference_equation", "ideal"], Tag(TEXT)]
    | Annotated[FixedFactorTable, Tag(TABLE)],
    Discriminator(text_or_table),
]
Viscosity = Annotated[
    str,
    Field(
        description="a dynamic viscosity, or 'reference_equation'",
        examples=["0.0111 mPa s", "reference_equation"],
    ),
]
Exponent = Annotated[
    Annotated[Literal["equation_of_state", "ideal_gas"], Tag(TEXT)]
    | Annotated[float, Field(gt=1, le=10, allow_inf_nan=False), Tag(NUMBER)],
    Discriminator(text_or_number),
]


class CalorificTable(Table):
    """A fixed calorific value, with everything that gives it its meaning."""

    since: Instant | None = None
    value: str = Field(examples=["38.9 MJ/m3", "50.1 MJ/kg"])
    kind: Literal["gross", "net"]
    combustion_reference_temperature: Temperature
    volume_base: Base | None = Field(None, description="needed where it is per m3")


DatableCalorific = Annotated[
    Annotated[CalorificTable, Tag(SINGLE)] | Annotated[list[CalorificTable], Tag(DATED)],
    Discriminator(single_or_dated),
]


class CompositionTable(Table):
    """Fractions of the components, from an instant on."""

    since: Instant | None = None
    basis: Literal["mole", "mass"]
    unit: Literal["%", "1"]
    sum_tolerance: Percent = "0.1 %"
    methane: float | None = None
    nitrogen: float | None = None
    carbon_dioxide: float | None = None
    ethane: float | None = None
    propane: float | None = None
    isobutane: float | None = None
    n_butane: float | None = None
    isopentane: float | None = None
    n_pentane: float | None = None
    n_hexane: float | None = None
    n_heptane: float | None = None
    n_octane: float | None = None
    n_nonane: float | None = None
    n_decane: float | None = None
    hydrogen: float | None = None
    oxygen: float | None = None
    carbon_monoxide: float | None = None
    water: float | None = None
    hydrogen_sulfide: float | None = None
    helium: float | None = None
    argon: float | None = None
    air: float | None = Field(None, description="dry air as a whole, alone")


COMPONENTS: tuple[str, ...] = tuple(CompositionTable.model_fields)[4:]
"""Names of components: the 21 of AGA8 DETAIL in that report's order, and air."""

DatableComposition = Annotated[
    Annotated[CompositionTable, Tag(SINGLE)] | Annotated[list[CompositionTable], Tag(DATED)],
    Discriminator(single_or_dated),
]


class GasChangeTable(Table):
    """What changed in a gas's methods, from an instant on; the rest stays."""

    since: Instant
    line_model: Model | None = None
    base_model: Model | None = None
    dynamic_viscosity: Viscosity | None = None
    isentropic_exponent: Exponent | None = None


class GasTable(Table):
    """A gas as the contract states it."""

    line_model: Model
    base_model: Model
    dynamic_viscosity: Viscosity
    isentropic_exponent: Exponent
    composition: DatableComposition
    calorific_value: DatableCalorific | None = None
    change: list[GasChangeTable] = Field(default_factory=list)


class OrificeTable(Table):
    """An orifice plate in its pipe."""

    tappings: Literal["corner", "D_and_D/2", "flange"]
    bore: Length
    pipe_diameter: Length
    bore_expansion: Expansion
    pipe_expansion: Expansion
    reference_temperature: Temperature | None = None
    bore_reference_temperature: Temperature | None = None
    pipe_reference_temperature: Temperature | None = None


class OrificeChangeTable(Table):
    """What changed on an orifice plate; the rest stays."""

    tappings: Literal["corner", "D_and_D/2", "flange"] | None = None
    bore: Length | None = None
    pipe_diameter: Length | None = None
    bore_expansion: Expansion | None = None
    pipe_expansion: Expansion | None = None
    reference_temperature: Temperature | None = None
    bore_reference_temperature: Temperature | None = None
    pipe_reference_temperature: Temperature | None = None


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
    orifice: OrificeTable
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
    source: dict[Name, SourceTable] = Field(min_length=1)
    signal: dict[Name, SignalTable] = Field(min_length=1)
    gas: dict[Name, GasTable] = Field(min_length=1)
    meter: dict[Name, MeterTable] = Field(min_length=1)
    envelope: dict[Name, EnvelopeTable] = Field(default_factory=dict)


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
