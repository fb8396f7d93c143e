"""What a site file may say of transmitters' accuracy, and of causes that several things share."""

from __future__ import annotations

from typing import Literal

from pydantic import Field

from meterfix.intake.site.shapes import AccuracyTable, CoverageTable, Instant, Size, Table


class SpecificationTable(AccuracyTable):
    """One entry of a transmitter's specification: one independent cause."""

    name: str | None = Field(None, min_length=1, max_length=100)
    acts_on: Literal["zero", "span"]
    over: str | None = Field(
        None,
        description="how far the ambient temperature or the static pressure is from that of the "
        "calibration, where the size is per temperature or pressure",
        examples=["15 K", "20 bar"],
    )
    since: Instant | None = Field(
        None, description="from then on; a size per time grows from then on"
    )
    until: Instant | None = None


class SharedPartTable(Table):
    """What a shared source acts on, and how strongly; a negative size acts the other way."""

    signal: str | None = None
    meter: str | None = None
    gas: str | None = None
    component: str | None = Field(None, description="of the gas, where it acts on a fraction")
    acts_on: Literal[
        "zero",
        "span",
        "bore",
        "pipe_diameter",
        "fraction",
        "dynamic_viscosity",
        "isentropic_exponent",
        "calorific_value",
        "atmospheric_pressure",
    ]
    size: Size
    over: str | None = None
    since: Instant | None = None
    until: Instant | None = None


SharedKind = Literal[
    "calibration device", "certificate", "barometer", "chromatograph", "other common cause"
]


class SharedTable(CoverageTable):
    """A cause that several signals, devices or gases share: all its parts move together."""

    kind: SharedKind
    part: list[SharedPartTable] = Field(min_length=1)
