"""What a site file may say of a gas: composition, methods, calorific value, their uncertainty."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag

from meterfix.intake.site.shapes import (
    DATED,
    NUMBER,
    SINGLE,
    TABLE,
    TEXT,
    AccuracyTable,
    Base,
    CoverageTable,
    Instant,
    Percent,
    Table,
    Temperature,
    single_or_dated,
    text_or_number,
    text_or_table,
)

AnyModel = Literal["aga8_detail", "gerg_2008", "reference_equation", "ideal"]


class ModelTable(Table):
    """A model with an uncertainty of its own, or a compression factor that is itself the model."""

    model: AnyModel | None = None
    fixed_compression_factor: float | None = Field(None, gt=0, le=5, allow_inf_nan=False)
    uncertainty: AccuracyTable | None = Field(
        None, description="of the density, in place of what the model's own source states"
    )


Model = Annotated[
    Annotated[AnyModel, Tag(TEXT)] | Annotated[ModelTable, Tag(TABLE)],
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
    """A calorific value, with everything that gives it its meaning: fixed, or by a method."""

    since: Instant | None = None
    value: str | None = Field(
        None, description="needed without a method", examples=["38.9 MJ/m3", "50.1 MJ/kg"]
    )
    method: Literal["ISO 6976:2016"] | None = Field(
        None, description="from the composition, in place of a value"
    )
    basis: Literal["volume", "mass"] | None = Field(None, description="needed with a method")
    kind: Literal["gross", "net"]
    combustion_reference_temperature: Temperature
    volume_base: Base | None = Field(None, description="needed where it is per m3")
    uncertainty: AccuracyTable | None = Field(
        None, description="of the value; of a method, in place of the method's own"
    )


DatableCalorific = Annotated[
    Annotated[CalorificTable, Tag(SINGLE)] | Annotated[list[CalorificTable], Tag(DATED)],
    Discriminator(single_or_dated),
]


class ComponentsTable(Table):
    """A number for each of some components."""

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


COMPONENTS: tuple[str, ...] = tuple(ComponentsTable.model_fields)
"""Names of components: the 21 of AGA8 DETAIL in that report's order, and air."""


class CorrelationTable(Table):
    """How the errors of two components' fractions move together."""

    between: Annotated[list[str], Field(min_length=2, max_length=2)]
    coefficient: float = Field(ge=-1, le=1, allow_inf_nan=False)


class FractionUncertaintyTable(ComponentsTable, CoverageTable):
    """Uncertainties of fractions, in the composition's unit."""

    correlation: list[CorrelationTable] = Field(default_factory=list)


class CompositionTable(ComponentsTable):
    """Fractions of the components, from an instant on."""

    since: Instant | None = None
    basis: Literal["mole", "mass"]
    unit: Literal["%", "1"]
    sum_tolerance: Percent = "0.1 %"
    uncertainty: FractionUncertaintyTable | None = Field(
        None, description="left out: that of the composition before it"
    )


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
    dynamic_viscosity_uncertainty: AccuracyTable | None = None
    isentropic_exponent_uncertainty: AccuracyTable | None = None
    change: list[GasChangeTable] = Field(default_factory=list)
