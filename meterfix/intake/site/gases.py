"""Gases: composition, methods and calorific value, each effective-dated."""

from __future__ import annotations

import math
from fractions import Fraction
from typing import Any, TypeVar

from meterfix.intake.site.accuracy import relative_accuracy
from meterfix.intake.site.calorific import build_calorific
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.gas_tables import (
    COMPONENTS,
    CalorificTable,
    CompositionTable,
    GasTable,
    ModelTable,
)
from meterfix.model.gas import (
    CalorificValue,
    Composition,
    DensityModel,
    Gas,
    GasTerms,
    PropertyChoice,
    StateModel,
)
from meterfix.model.site import EnergyTerms
from meterfix.model.versions import Version, Versions

Value = TypeVar("Value")
Methods = dict[str, tuple[Place, Any]]
"""Each method's key, where it was written and what was written."""

_METHODS = ("line_model", "base_model", "dynamic_viscosity", "isentropic_exponent")


def build_gas(
    name: str, table: GasTable, energy: EnergyTerms | None, findings: Findings
) -> Gas | None:
    """Return one gas; its calorific value must be of the kind that the contract reckons with."""
    place: Place = ("gas", name)
    before = len(findings.mistakes)
    compositions = _compositions(name, table, findings)
    calorific = _calorific_values(place, table, energy, findings)
    methods = _methods(place, table, findings)
    if compositions is None or calorific is None or methods is None:
        return None
    histories = (compositions, calorific, methods)
    later = {v.since for h in histories for v in h.entries if v.since is not None}
    terms: list[Version[GasTerms]] = []
    for since in (None, *sorted(later)):
        composition = _at(compositions, since)
        chosen = _at(methods, since)
        if composition is None or chosen is None:
            continue
        built = _terms(
            composition, chosen, _at(calorific, since), (*place, "calorific_value"), findings
        )
        if built is not None:
            terms.append(Version(since, built))
    if len(findings.mistakes) > before:
        return None
    return Gas(name, Versions(tuple(terms)))


def _at(history: Versions[Value], since: int | None) -> Value | None:
    """Return what is in force at an instant, or from the beginning."""
    if since is not None:
        return history.in_force(since)
    first = history.entries[0] if history.entries else None
    return first.value if first is not None and first.since is None else None


# --- composition -----------------------------------------------------------------------------


def _compositions(name: str, table: GasTable, findings: Findings) -> Versions[Composition] | None:
    place: Place = ("gas", name, "composition")
    given = table.composition
    if given is None:
        return None
    dated = [given] if isinstance(given, CompositionTable) else given
    entries = [
        (at, entry.since, _composition(at, name, entry, findings))
        for at, entry in _with_places(place, given, dated)
    ]
    return findings.versions(place, entries, what="composition")


def _with_places(place: Place, given: Any, dated: list[Value]) -> list[tuple[Place, Value]]:
    single = not isinstance(given, list)
    return [(place if single else (*place, n), entry) for n, entry in enumerate(dated)]


def _composition(
    place: Place, name: str, table: CompositionTable, findings: Findings
) -> Composition | None:
    """Return fractions normalised to a sum of 1; the arithmetic is exact until the last step."""
    before = len(findings.mistakes)
    written = {c: value for c in COMPONENTS if (value := getattr(table, c)) is not None}
    for component in COMPONENTS:
        value = written.get(component)
        if value is None:
            continue
        if not math.isfinite(value):
            findings.add((*place, component), f"{value}", "a finite number is needed")
        elif value < 0.0:
            findings.add((*place, component), f"{value}", "no fraction can be negative")
    if not written:
        if not table.model_fields_set & set(COMPONENTS):
            findings.add(place, "no component", f"name at least one of {', '.join(COMPONENTS)}")
        return None
    if "air" in written and len(written) > 1:
        findings.add(
            (*place, "air"),
            f"air beside {', '.join(c for c in written if c != 'air')}",
            "'air' stands alone; in a mixture give nitrogen, oxygen, argon",
        )
    tolerance = findings.quantity(
        (*place, "sum_tolerance"),
        table.sum_tolerance,
        "fraction",
        at_least=0.0,
        below=0.1,
        limit="a tolerance from 0 % to below 10 % is needed",
    )
    unreadable = any(c in table.model_fields_set and getattr(table, c) is None for c in COMPONENTS)
    if len(findings.mistakes) > before or tolerance is None or unreadable:
        return None
    if table.unit is None or table.basis is None:
        return None
    # the shortest decimal of a float is the number that was written
    parts = {c: Fraction(repr(value)) for c, value in written.items() if value > 0.0}
    whole = Fraction(100) if table.unit == "%" else Fraction(1)
    total = sum(parts.values(), Fraction(0)) / whole
    if abs(total - 1) > Fraction(repr(tolerance)):
        findings.add(
            place,
            f"the fractions sum to {float(total):.10g}",
            f"they must sum to 1 within {tolerance:.3g} (sum_tolerance '{table.sum_tolerance}')",
        )
        return None
    if total != 1:
        since = "the beginning" if table.since is None else table.since
        findings.notes.append(
            f"gas {name} from {since}: {table.basis} fractions sum to {float(total):.10g}; "
            "normalised"
        )
    fractions = tuple((c, float(part / whole / total)) for c, part in parts.items())
    return Composition(table.basis, fractions, float(total))


# --- methods ---------------------------------------------------------------------------------


def _methods(place: Place, table: GasTable, findings: Findings) -> Versions[Methods] | None:
    current: Methods = {key: ((*place, key), getattr(table, key)) for key in _METHODS}
    entries: list[tuple[Place, str | None, Methods | None]] = [(place, None, current)]
    for n, change in enumerate(table.change or []):
        at: Place = (*place, "change", n)
        overrides = [key for key in _METHODS if key in change.model_fields_set]
        if not overrides:
            findings.add(at, "changes nothing", f"give one of {', '.join(_METHODS)}")
        current = {**current, **{key: ((*at, key), getattr(change, key)) for key in overrides}}
        if change.since is not None:
            entries.append((at, change.since, current))
    return findings.versions((*place, "change"), entries)


def _terms(
    composition: Composition,
    methods: Methods,
    calorific: CalorificValue | None,
    calorific_place: Place,
    findings: Findings,
) -> GasTerms | None:
    mixture = len(composition.fractions) > 1
    air = composition.fractions[0][0] == "air"
    models = {key: _model(*methods[key], findings) for key in ("line_model", "base_model")}
    for key, model in models.items():
        at = methods[key][0]
        if model is None:
            continue
        if model.model is StateModel.REFERENCE and mixture:
            findings.add(
                at,
                f"'reference_equation' for a mixture of {len(composition.fractions)} components",
                "it is for one pure gas or for air; use 'aga8_detail' or 'gerg_2008' for a mixture",
            )
        if model.model in {StateModel.AGA8_DETAIL, StateModel.GERG_2008} and air:
            findings.add(
                at,
                f"'{model.model.value}' for air",
                "use 'reference_equation', or give nitrogen, oxygen and argon",
            )
    if air and calorific is not None and calorific.value is None:
        findings.add(
            calorific_place,
            "a calorific value of air by ISO 6976:2016",
            "leave [...calorific_value] out: air is no fuel",
        )
    viscosity = _viscosity(*methods["dynamic_viscosity"], mixture=mixture, findings=findings)
    exponent = _exponent(*methods["isentropic_exponent"], models["line_model"], findings)
    line, base = models["line_model"], models["base_model"]
    if line is None or base is None or viscosity is None or exponent is None:
        return None
    return GasTerms(composition, line, base, viscosity, exponent, calorific)


def _model(place: Place, given: object, findings: Findings) -> DensityModel | None:
    if isinstance(given, ModelTable):
        return _model_of_table(place, given, findings)
    if not isinstance(given, str):
        return None
    try:
        return DensityModel(StateModel(given))
    except ValueError:
        findings.add(place, f"'{given}'", f"use one of {', '.join(StateModel)}")
        return None


def _model_of_table(place: Place, table: ModelTable, findings: Findings) -> DensityModel | None:
    stated = table.model_fields_set & {"model", "fixed_compression_factor"}
    if len(stated) != 1:
        findings.add(
            place,
            " and ".join(sorted(stated)) or "neither a model nor a factor",
            "give one of 'model' and 'fixed_compression_factor'",
        )
        return None
    uncertainty = relative_accuracy(
        (*place, "uncertainty"), table.uncertainty, None, "fraction", findings
    )
    if table.uncertainty is None and "uncertainty" in table.model_fields_set:
        return None
    if table.fixed_compression_factor is not None:
        return DensityModel(StateModel.FIXED, table.fixed_compression_factor, uncertainty)
    if table.model is None:
        return None
    return DensityModel(StateModel(table.model), None, uncertainty)


def _viscosity(
    place: Place, given: str | None, *, mixture: bool, findings: Findings
) -> PropertyChoice | None:
    if given is None:
        return None
    if given == "reference_equation":
        if mixture:
            findings.add(
                place,
                "'reference_equation' for a mixture",
                "it is for one pure gas or for air; give a value such as '0.0111 mPa s'",
            )
        return PropertyChoice(method=given)
    value = findings.quantity(
        place,
        given,
        "dynamic_viscosity",
        above=1e-6,
        below=1e-3,
        limit="a gas has between 0.001 mPa s and 1 mPa s",
    )
    return None if value is None else PropertyChoice(value=value)


def _exponent(
    place: Place, given: float | str | None, line: DensityModel | None, findings: Findings
) -> PropertyChoice | None:
    if given is None:
        return None
    if isinstance(given, str):
        if given == "equation_of_state" and line is not None and line.model is StateModel.FIXED:
            findings.add(
                place,
                "'equation_of_state' with a fixed compression factor",
                "a fixed factor is no equation of state; give a number, or 'ideal_gas'",
            )
        return PropertyChoice(method=given)
    return PropertyChoice(value=float(given))


# --- calorific value -------------------------------------------------------------------------


def _calorific_values(
    place: Place, table: GasTable, energy: EnergyTerms | None, findings: Findings
) -> Versions[CalorificValue] | None:
    given = table.calorific_value
    at: Place = (*place, "calorific_value")
    if given is None:
        return None if "calorific_value" in table.model_fields_set else Versions(())
    dated = [given] if isinstance(given, CalorificTable) else given
    entries = [
        (where, entry.since, build_calorific(where, entry, energy, findings))
        for where, entry in _with_places(at, given, dated)
    ]
    return findings.versions(at, entries, what="calorific value")
