"""The forms of a site file's values: text with a unit, instants, single or dated values."""

from __future__ import annotations

from datetime import date, datetime
from typing import Annotated, Any, Literal

from pydantic import (
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Discriminator,
    Field,
    StringConstraints,
    Tag,
)

SINGLE, DATED, TEXT, TABLE, NUMBER = "=single", "=dated", "=text", "=table", "=number"
WIDE, TAGS = "=wide", "=tags"
ALTERNATIVES = frozenset({SINGLE, DATED, TEXT, TABLE, NUMBER, WIDE, TAGS})
"""Marks of alternatives, which are no keys of a site file."""


def _instant_as_text(given: object) -> object:
    """Let an instant be a TOML date-time as well as text."""
    return given.isoformat() if isinstance(given, datetime | date) else given


def single_or_dated(given: Any) -> str:
    """Tell one value from a list of versions."""
    if isinstance(given, list) and not (given and isinstance(given[0], str)):
        return DATED
    return SINGLE


def _text_table_or_dated(given: Any) -> str:
    """Tell the name of a preset from a table and from a list of versions."""
    if isinstance(given, str):
        return TEXT
    return DATED if isinstance(given, list) else TABLE


def wide_or_tags(given: Any) -> str:
    """Tell a source of tag logs from one of wide logs."""
    layout = given.get("layout") if isinstance(given, dict) else getattr(given, "layout", None)
    return TAGS if layout == "tags" else WIDE


def text_or_table(given: Any) -> str:
    """Tell a name from a table."""
    return TABLE if isinstance(given, dict) else TEXT


def text_or_number(given: Any) -> str:
    """Tell a name from a number."""
    return NUMBER if isinstance(given, int | float) else TEXT


Name = Annotated[
    str,
    StringConstraints(
        pattern=r"""^[^\s/\\*?\[\]{}"'=+@-][^/\\*?\[\]{}"'\t\r\n]{0,63}$""",
    ),
]
Instant = Annotated[
    str,
    BeforeValidator(_instant_as_text),
    Field(
        description="an instant with its offset from UTC",
        examples=["2026-10-20T09:30:00+02:00"],
    ),
]
Pressure = Annotated[str, Field(description="a pressure", examples=["101.325 kPa"])]
Temperature = Annotated[str, Field(description="a temperature", examples=["15 degC"])]
Length = Annotated[str, Field(description="a length", examples=["154.08 mm"])]
Duration = Annotated[str, Field(description="a length of time", examples=["5 min"])]
Expansion = Annotated[
    str, Field(description="a linear thermal expansion coefficient", examples=["16e-6 / K"])
]
Percent = Annotated[str, Field(description="a fraction", examples=["1.5 %"])]
Pair = Annotated[list[str], Field(min_length=2, max_length=2, description="[lower, upper]")]


class Table(BaseModel):
    """A table of the site file: known keys only, no silent conversion of types."""

    model_config = ConfigDict(
        strict=True, extra="forbid", frozen=True, validate_by_name=False, validate_by_alias=True
    )


class DatedText(Table):
    """A value from an instant on."""

    since: Instant | None = None
    value: str


DatableText = Annotated[
    Annotated[str, Tag(SINGLE)] | Annotated[list[DatedText], Tag(DATED)],
    Discriminator(single_or_dated),
]


class DatedRange(Table):
    """A transmitter's range from an instant on."""

    since: Instant | None = None
    value: Pair


DatableRange = Annotated[
    Annotated[Pair, Tag(SINGLE)] | Annotated[list[DatedRange], Tag(DATED)],
    Discriminator(single_or_dated),
]


class BaseTable(Table):
    """Base conditions: a preset, or an absolute pressure and a temperature."""

    preset: Literal["ISO 13443", "normal"] | None = None
    pressure: Pressure | None = None
    temperature: Temperature | None = None


class DatedBaseTable(BaseTable):
    """Base conditions from a gas-day edge on."""

    since: Instant | None = None


Base = Annotated[
    Annotated[Literal["ISO 13443", "normal"], Tag(TEXT)] | Annotated[BaseTable, Tag(TABLE)],
    Discriminator(text_or_table),
]
DatableBase = Annotated[
    Annotated[Literal["ISO 13443", "normal"], Tag(TEXT)]
    | Annotated[BaseTable, Tag(TABLE)]
    | Annotated[list[DatedBaseTable], Tag(DATED)],
    Discriminator(_text_table_or_dated),
]


Size = Annotated[
    str,
    Field(
        description="a quantity, or a percentage of something; "
        "'per' something where it grows with it",
        examples=["0.3 K", "0.04 % of span", "0.02 % of span per 10 K"],
    ),
]


class CoverageTable(Table):
    """How many standard deviations a stated size is: `k`, or the form of its distribution."""

    k: float | None = Field(None, gt=0, le=10, allow_inf_nan=False, description="coverage factor")
    distribution: Literal["normal", "rectangular", "triangular"] | None = Field(
        None, description="'rectangular': the size is a limit, divided by the root of 3"
    )


class AccuracyTable(CoverageTable):
    """A stated uncertainty: its size and what that size covers."""

    size: Size


class AtmosphereTable(Table):
    """The atmospheric pressure: exactly one of a value, an elevation, a barometer."""

    value: Pressure | None = None
    elevation: Length | None = None
    barometer: str | None = Field(None, description="name of a signal")
    uncertainty: AccuracyTable | None = Field(
        None, description="of a value or elevation; a barometer's stands with its signal"
    )


class DatedAtmosphereTable(AtmosphereTable):
    """The atmospheric pressure from an instant on."""

    since: Instant | None = None


DatableAtmosphere = Annotated[
    Annotated[AtmosphereTable, Tag(SINGLE)] | Annotated[list[DatedAtmosphereTable], Tag(DATED)],
    Discriminator(single_or_dated),
]
