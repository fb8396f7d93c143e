"""Sources of uncertainty of gases: composition, models, methods and calorific value."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from meterfix import units
from meterfix.intake.site.accuracy import divisor, relative_accuracy
from meterfix.intake.site.collected import Collected, joined
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.gas_tables import (
    COMPONENTS,
    CalorificTable,
    CompositionTable,
    FractionUncertaintyTable,
    GasTable,
)
from meterfix.intake.site.shapes import AccuracyTable
from meterfix.model.gas import CalorificValue, DensityModel, Gas, StateModel
from meterfix.model.uncertainty import Part

MODEL_NAMES = {
    StateModel.AGA8_DETAIL: "AGA8 DETAIL",
    StateModel.GERG_2008: "GERG-2008",
    StateModel.REFERENCE: "reference equation",
    StateModel.IDEAL: "ideal gas",
    StateModel.FIXED: "fixed compression factor",
}
_UNSTATED_MODELS = (StateModel.IDEAL, StateModel.FIXED)
"""Models whose sources state no uncertainty."""
_SINGULAR = 1e-9
"""Of a component's variance: less is rounding of a matrix without full rank."""
_ROUNDED = 0.03
"""What may be left where coefficients are given to two or three digits and contradict each other
by their rounding alone."""


@dataclass(frozen=True, slots=True)
class _Stretch:
    """Something in force from an instant until the next one; None: without limit."""

    start: int | None
    end: int | None


def collect_gas(
    name: str, table: GasTable, gas: Gas | None, collected: Collected, findings: Findings
) -> None:
    """Add a gas's sources, and what it leaves unstated; mistakes go to `findings`."""
    place: Place = ("gas", name)
    _collect_composition(place, name, table, collected, findings)
    _collect_properties(place, name, table, gas, collected, findings)
    _collect_calorific(place, name, table, gas, collected, findings)
    if gas is not None:
        _collect_models(name, gas, collected)


# --- composition -----------------------------------------------------------------------------


def _collect_composition(
    place: Place, name: str, table: GasTable, collected: Collected, findings: Findings
) -> None:
    """Add a source for each component, shared over time by all compositions of the gas.

    Where errors are correlated, a source moves its component and, beside it, those correlated
    with it: the columns of a root of the covariance, which are independent of each other.
    """
    given = table.composition
    if given is None:
        return
    dated = [given] if isinstance(given, CompositionTable) else given
    found: list[tuple[int | None, dict[str, dict[str, float]]]] = []
    current: dict[str, dict[str, float]] = {}
    stated = False
    for n, entry in enumerate(dated):
        at: Place = (*place, "composition") if given is entry else (*place, "composition", n)
        since = None if entry.since is None else Findings("").instant((), entry.since)
        if entry.uncertainty is not None:
            stated = True
            read = _fraction_parts((*at, "uncertainty"), entry, entry.uncertainty, findings)
            if read is None:
                return
            current = read
        found.append((since, current))
    if not stated and any(_components(entry) > 1 for entry in dated):
        collected.unstated(f"composition of gas {name}")
    if not stated:
        return
    stretches = _stretches([since for since, _ in found])
    for component in COMPONENTS:
        parts = [
            Part(f"fraction:{moved}", name, size, start=stretch.start, end=stretch.end)
            for stretch, (_, columns) in zip(stretches, found, strict=True)
            for moved, size in columns.get(component, {}).items()
        ]
        if parts:
            collected.add(
                (*place, "composition"),
                f"{name} composition: {component}",
                "composition",
                joined(parts),
            )


def _components(table: CompositionTable) -> int:
    """Return how many components a composition has; a single one is exact."""
    return sum(1 for component in COMPONENTS if getattr(table, component))


def _fraction_parts(
    place: Place,
    composition: CompositionTable,
    table: FractionUncertaintyTable,
    findings: Findings,
) -> dict[str, dict[str, float]] | None:
    """Return the root of the covariance: by source's component, sizes by component moved [-]."""
    before = len(findings.mistakes)
    covered = divisor(place, table, findings)
    sizes: dict[str, float] = {}
    for component in COMPONENTS:
        value = getattr(table, component)
        if value is None:
            continue
        if not (math.isfinite(value) and value >= 0.0):
            findings.add((*place, component), f"{value}", "an uncertainty is at least 0")
        elif value > 0.0:
            sizes[component] = value * (0.01 if composition.unit == "%" else 1.0)
    if not table.model_fields_set & set(COMPONENTS):
        findings.add(place, "no component", "give the uncertainty of at least one fraction")
    correlation = _correlation(place, table, findings)
    if covered is None or len(findings.mistakes) > before:
        return None
    names = list(sizes)
    root = root_of(
        [[correlation.get((a, b), 1.0 if a == b else 0.0) for b in names] for a in names]
    )
    if root is None:
        findings.add(
            (*place, "correlation"),
            "coefficients that cannot all hold at once",
            "their matrix must be positive semidefinite",
        )
        return None
    return {
        source: {
            moved: sizes[moved] / covered * root[i][k]
            for i, moved in enumerate(names)
            if root[i][k] != 0.0
        }
        for k, source in enumerate(names)
    }


def _correlation(
    place: Place,
    table: FractionUncertaintyTable,
    findings: Findings,
) -> dict[tuple[str, str], float]:
    found: dict[tuple[str, str], float] = {}
    uncertain = [c for c in COMPONENTS if c in table.model_fields_set]
    for n, entry in enumerate(table.correlation or []):
        at: Place = (*place, "correlation", n)
        if entry.between is None or entry.coefficient is None:
            continue
        a, b = entry.between
        for component in (a, b):
            findings.reference(
                (*at, "between"), component, "component with an uncertainty", uncertain
            )
        if a == b or (a, b) in found:
            findings.add(
                (*at, "between"),
                f"'{a}' and '{b}'",
                "name two different components, and each pair once",
            )
        found[a, b] = found[b, a] = entry.coefficient
    return found


def root_of(matrix: Sequence[Sequence[float]]) -> list[list[float]] | None:
    """Return L with L L^T the matrix; None if it has none.

    Plain arithmetic in a fixed order, so that it has the same bits everywhere. Column k belongs
    to row k: what it moves, after those that moved more of it have been taken out.

    Parameters
    ----------
    matrix : (n, n) nested sequence
        Of correlation: symmetric, 1 on the diagonal, positive semidefinite.

    References
    ----------
    .. [1] Cholesky decomposition, the largest remaining pivot first: a matrix without full rank
       leaves columns of zeros (sources without effect).
    """
    size = len(matrix)
    rest = [list(row) for row in matrix]
    root = [[0.0] * size for _ in range(size)]
    left = list(range(size))
    while left:
        k = max(left, key=lambda i: rest[i][i])  # the first of equals
        pivot = rest[k][k]
        beside = max((abs(rest[i][j]) for i in left for j in left if i != j), default=0.0)
        if pivot <= _SINGULAR or beside > pivot + _SINGULAR:
            break
        for i in left:
            root[i][k] = rest[i][k] / math.sqrt(pivot)
        left.remove(k)
        for i in left:
            for j in left:
                rest[i][j] -= root[i][k] * root[j][k]
    # what has no variance left can share none
    contradiction = any(abs(rest[i][j]) > _ROUNDED for i in left for j in left)
    return None if contradiction else root


# --- methods and models ----------------------------------------------------------------------


def _collect_properties(
    place: Place,
    name: str,
    table: GasTable,
    gas: Gas | None,
    collected: Collected,
    findings: Findings,
) -> None:
    terms = gas.terms.entries[0].value if gas is not None and gas.terms.entries else None
    viscosity = None if terms is None else terms.dynamic_viscosity.value
    exponent = None if terms is None else terms.isentropic_exponent.value
    rows: tuple[tuple[str, str, AccuracyTable | None, float | None, units.Dimension], ...] = (
        (
            "dynamic_viscosity",
            "dynamic viscosity",
            table.dynamic_viscosity_uncertainty,
            viscosity,
            "dynamic_viscosity",
        ),
        (
            "isentropic_exponent",
            "isentropic exponent",
            table.isentropic_exponent_uncertainty,
            exponent,
            "fraction",
        ),
    )
    for parameter, words, accuracy, value, dimension in rows:
        at: Place = (*place, f"{parameter}_uncertainty")
        if accuracy is None:
            collected.unstated(f"{words} of gas {name}")
            continue
        # without the gas (a mistake elsewhere) an amount cannot be judged
        known = 1.0 if terms is None else value
        size = relative_accuracy(at, accuracy, known, dimension, findings)
        if size:
            collected.add(at, f"{name} {words}", words, (Part(parameter, name, size),))


def _collect_models(name: str, gas: Gas, collected: Collected) -> None:
    """Add the stated uncertainty of the densities, one source for each model and use."""
    for parameter, words in (("line_density", "line density"), ("base_density", "base density")):
        stretches = _stretches([version.since for version in gas.terms.entries])
        parts: dict[DensityModel, list[Part]] = {}
        for stretch, version in zip(stretches, gas.terms.entries, strict=True):
            line = parameter == "line_density"
            model = version.value.line_model if line else version.value.base_model
            unstated = model.model in _UNSTATED_MODELS
            if unstated and model.relative_standard_uncertainty is None:
                collected.unstated(f"{words} of gas {name} ({MODEL_NAMES[model.model]})")
                continue
            parts.setdefault(model, []).append(
                Part(parameter, name, 1.0, start=stretch.start, end=stretch.end)
            )
        for model, own in parts.items():
            collected.add(
                ("gas", name, "line_model" if parameter == "line_density" else "base_model"),
                f"{name} {words}, {MODEL_NAMES[model.model]}",
                "gas model",
                joined(own),
                numbered=True,
            )


# --- calorific value -------------------------------------------------------------------------


def _collect_calorific(
    place: Place,
    name: str,
    table: GasTable,
    gas: Gas | None,
    collected: Collected,
    findings: Findings,
) -> None:
    given = table.calorific_value
    if given is None:
        return
    dated = [given] if isinstance(given, CalorificTable) else given
    values: list[CalorificValue | None] = []
    if gas is not None:
        values = [_value_at(gas, entry) for entry in dated]
    stretches = _stretches(
        [None if e.since is None else Findings("").instant((), e.since) for e in dated]
    )
    stated: list[Part] = []
    by_method: list[Part] = []
    for n, (entry, stretch) in enumerate(zip(dated, stretches, strict=True)):
        at: Place = (
            (*place, "calorific_value") if given is entry else (*place, "calorific_value", n)
        )
        value = values[n] if values else None
        number = None if value is None else value.value
        mass = value is not None and value.basis.value == "mass"
        accuracy = relative_accuracy(
            (*at, "uncertainty"),
            entry.uncertainty,
            1.0 if gas is None else number,
            "energy_per_mass" if mass else "energy_per_volume",
            findings,
        )
        start, end = stretch.start, stretch.end
        if accuracy:
            stated.append(Part("calorific_value", name, accuracy, start=start, end=end))
        elif accuracy is None and entry.method is not None and entry.uncertainty is None:
            by_method.append(Part("calorific_method", name, 1.0, start=start, end=end))
        elif accuracy is None and entry.uncertainty is None:
            collected.unstated(f"calorific value of gas {name}")
    at = (*place, "calorific_value")
    if stated:
        collected.add(at, f"{name} calorific value", "calorific value", joined(stated))
    if by_method:
        collected.add(
            at, f"{name} calorific value, ISO 6976:2016", "calorific value", joined(by_method)
        )


def _value_at(gas: Gas, entry: CalorificTable) -> CalorificValue | None:
    since = None if entry.since is None else Findings("").instant((), entry.since)
    if since is None:
        return gas.terms.entries[0].value.calorific_value if gas.terms.entries else None
    terms = gas.terms.in_force(since)
    return None if terms is None else terms.calorific_value


# --- time ------------------------------------------------------------------------------------


def _stretches(starts: Sequence[int | None]) -> list[_Stretch]:
    """Return from when until when each version holds; the first one's own start is no limit."""
    return [
        _Stretch(start if n > 0 else None, starts[n + 1] if n + 1 < len(starts) else None)
        for n, start in enumerate(starts)
    ]
