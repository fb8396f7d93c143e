"""From a stated composition to the mole fractions and molar mass of a model."""

from __future__ import annotations

import math

from meterfix.calc.gas.coefficient_tables import detail_tables
from meterfix.calc.gas.gerg_tables import gerg_tables
from meterfix.calc.gas.pure import REFERENCE_FLUIDS, PureGas
from meterfix.errors import GasError
from meterfix.model.gas import Composition, StateModel

AIR = "air"
"""Dry air as one substance: known to the reference equation, and to the ideal gas by it."""

MoleFractions = tuple[tuple[str, float], ...]


def known_components(model: StateModel) -> tuple[str, ...]:
    """Return the names of the components that a model can compute."""
    detail = tuple(component.name for component in detail_tables().components)
    if model is StateModel.AGA8_DETAIL:
        return detail
    if model is StateModel.GERG_2008:
        return tuple(component.name for component in gerg_tables().components)
    if model is StateModel.REFERENCE:
        return tuple(name for name, _ in REFERENCE_FLUIDS)
    return (*detail, AIR)


def single_component(composition: Composition) -> str | None:
    """Return the one component of a composition, or None where it has several."""
    present = [name for name, fraction in composition.fractions if fraction > 0.0]
    return present[0] if len(present) == 1 else None


def component_molar_mass(component: str, model: StateModel) -> float:
    """Return a component's molar mass by the model's own table [kg/mol].

    The ideal gas and the fixed compression factor take AGA8 DETAIL's table, and dry air's
    molar mass from its reference equation.

    Raises
    ------
    GasError
        If the model does not know the component.
    """
    if component not in known_components(model):
        raise GasError(
            f"{component!r} is no component of {model.value}; "
            f"its components are {sorted(known_components(model))}"
        )
    if model is StateModel.REFERENCE or component == AIR:
        return PureGas(component).molar_mass
    if model is StateModel.GERG_2008:
        masses = {c.name: c.molar_mass for c in gerg_tables().components}
    else:
        masses = {c.name: c.molar_mass for c in detail_tables().components}
    return 1e-3 * masses[component]


def mole_fractions(composition: Composition, model: StateModel) -> MoleFractions:
    """Return the mole fractions of a composition, in alphabetical order, zeros left out.

    A mass basis is converted with the model's own molar masses: x_i = (w_i/M_i) / sum(w/M).
    The result is normalised to a sum of 1 again, to the last bit that division allows.

    Raises
    ------
    GasError
        If a component is unknown to the model or named twice, a fraction is negative or not a
        number, all are zero, or the basis is neither 'mole' nor 'mass'.
    """
    if composition.basis not in {"mole", "mass"}:
        raise GasError(f"composition basis is {composition.basis!r}; it must be 'mole' or 'mass'")
    amounts: dict[str, float] = {}
    for name, fraction in composition.fractions:
        if name in amounts:
            raise GasError(f"component {name!r} is named twice in a composition")
        if not math.isfinite(fraction) or fraction < 0.0:
            raise GasError(f"fraction of {name!r} is {fraction!r}; it must be 0 or more")
        molar_mass = component_molar_mass(name, model)
        amounts[name] = fraction if composition.basis == "mole" else fraction / molar_mass
    total = math.fsum(amounts.values())
    if total <= 0.0:
        raise GasError("a composition has no component with a fraction above 0")
    return tuple((name, amounts[name] / total) for name in sorted(amounts) if amounts[name] > 0.0)


def molar_mass(composition: Composition, model: StateModel) -> float:
    """Return the molar mass of a composition by the model's own table [kg/mol].

    Raises
    ------
    GasError
        As `mole_fractions`.
    """
    return math.fsum(
        x * component_molar_mass(name, model) for name, x in mole_fractions(composition, model)
    )
