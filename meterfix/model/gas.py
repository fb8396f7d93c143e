"""A gas as the contract states it: composition, models, properties, calorific value."""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from meterfix.model.versions import Versions


class StateModel(StrEnum):
    """How density follows from pressure and temperature."""

    AGA8_DETAIL = "aga8_detail"
    """AGA Report No. 8 Part 1:2017, DETAIL; ISO 20765-1."""
    GERG_2008 = "gerg_2008"
    """AGA Report No. 8 Part 2:2017, GERG-2008; ISO 20765-2."""
    REFERENCE = "reference_equation"
    """The reference equation of state of a pure gas or of dry air, through CoolProp."""
    IDEAL = "ideal"
    FIXED = "fixed_compression_factor"


class CalorificBasis(StrEnum):
    """What a calorific value is per unit of."""

    VOLUME = "volume"
    MASS = "mass"


class CalorificKind(StrEnum):
    """Whether the water formed by combustion counts as condensed (gross) or not (net)."""

    GROSS = "gross"
    NET = "net"


@dataclass(frozen=True, slots=True)
class BaseConditions:
    """Absolute pressure [Pa] and temperature [K] to which volumes are brought."""

    base_pressure: float
    base_temperature: float


@dataclass(frozen=True, slots=True)
class Composition:
    """Fractions of named components, normalised to a sum of 1."""

    basis: str
    """'mole' or 'mass'."""
    fractions: tuple[tuple[str, float], ...]
    """Component (spelled as in the coefficient tables) and normalised fraction [-]."""
    sum_as_given: float
    """The sum before normalising [-]; 1.0 exactly if nothing had to be done."""


@dataclass(frozen=True, slots=True)
class DensityModel:
    """A named model, and the compression factor [-] where that is itself the model."""

    model: StateModel
    fixed_compression_factor: float | None = None
    relative_standard_uncertainty: float | None = None
    """Of the density, as the site file states it [-]; None: as the model's own source does."""


@dataclass(frozen=True, slots=True)
class PropertyChoice:
    """A property as a stated value, or by a named method; exactly one of the two."""

    value: float | None = None
    """SI: Pa s for viscosity, - for the isentropic exponent."""
    method: str | None = None
    """'equation_of_state' (isentropic exponent of the line model), 'ideal_gas' (kappa = cp0/cv0),
    'reference_equation' (viscosity of a pure gas through CoolProp)."""


@dataclass(frozen=True, slots=True)
class CalorificValue:
    """A calorific value, with everything that gives it its meaning.

    Fixed by the contract, or computed from the composition by ISO 6976:2016.
    """

    value: float | None
    """J/m3 (volume basis) or J/kg (mass basis); None: computed by ISO 6976:2016."""
    basis: CalorificBasis
    kind: CalorificKind
    combustion_reference_temperature: float
    """K."""
    volume_base: BaseConditions | None
    """Conditions of the m3 (volume basis only)."""


@dataclass(frozen=True, slots=True)
class GasTerms:
    """What the contract says of a gas over one interval of time."""

    composition: Composition
    line_model: DensityModel
    base_model: DensityModel
    dynamic_viscosity: PropertyChoice
    isentropic_exponent: PropertyChoice
    calorific_value: CalorificValue | None


@dataclass(frozen=True, slots=True)
class Gas:
    """A named gas and its effective-dated terms."""

    name: str
    terms: Versions[GasTerms]
