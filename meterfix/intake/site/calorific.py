"""Calorific values: stated, or by ISO 6976:2016 from the composition."""

from __future__ import annotations

from meterfix import units
from meterfix.errors import UnitError
from meterfix.intake.site.findings import Findings, Place
from meterfix.intake.site.gas_tables import CalorificTable
from meterfix.intake.site.shapes import BaseTable
from meterfix.intake.site.terms import base_conditions
from meterfix.model.gas import BaseConditions, CalorificBasis, CalorificKind, CalorificValue
from meterfix.model.site import EnergyTerms

COMBUSTION_TEMPERATURES = {
    "0 degC": 273.15,
    "15 degC": 288.15,
    "60 degF": 288.7055555555556,
    "20 degC": 293.15,
    "25 degC": 298.15,
}
"""For which ISO 6976:2016, table 3, has calorific values; 60 degF is its 15.55 degC."""
METERING_TEMPERATURES = {
    name: value for name, value in COMBUSTION_TEMPERATURES.items() if name != "25 degC"
}
"""For which ISO 6976:2016, table 2, has summation factors."""
METERING_PRESSURES = (90e3, 110e3)
"""Between which its summation factors hold [Pa]."""
_SAME_TEMPERATURE = 0.01
"""K; between 15.55 degC and 60 degF there are 0.006 K."""


def build_calorific(
    place: Place, table: CalorificTable, energy: EnergyTerms | None, findings: Findings
) -> CalorificValue | None:
    """Return a calorific value; it must be of the kind that the contract reckons with."""
    before = len(findings.mistakes)
    by_method = table.method is not None
    _check_way(place, table, findings)
    value, basis = _value_and_basis((*place, "value"), table.value, findings)
    if by_method and table.basis is not None:
        basis = CalorificBasis(table.basis)
    reference = findings.quantity(
        (*place, "combustion_reference_temperature"),
        table.combustion_reference_temperature,
        "temperature",
        above=250.0,
        below=320.0,
        limit="a temperature such as '15 degC' or '25 degC' is needed",
    )
    at = (*place, "volume_base")
    given: str | BaseTable | None = table.volume_base
    volume_base = base_conditions(at, given, findings)
    stated = "volume_base" in table.model_fields_set
    if basis is CalorificBasis.VOLUME and not stated:
        findings.add(at, "missing", "a value per m3 needs the pressure and temperature of the m3")
    if basis is CalorificBasis.MASS and stated:
        findings.add(at, "given with a value per mass", "leave it out")
    if by_method:
        _check_tabulated(place, reference, volume_base, findings)
    if len(findings.mistakes) > before or table.kind is None:
        return None
    if basis is None or reference is None or (value is None and not by_method):
        return None
    kind = CalorificKind(table.kind)
    if energy is not None:
        _check_energy(
            place,
            basis=basis,
            kind=kind,
            reference=reference,
            energy=energy,
            by_method=by_method,
            findings=findings,
        )
    if basis is CalorificBasis.VOLUME and volume_base is None:
        return None
    return CalorificValue(value, basis, kind, reference, volume_base)


def _check_way(place: Place, table: CalorificTable, findings: Findings) -> None:
    """Record what is missing or too much: a value, or a method and its basis."""
    given = table.model_fields_set
    if "method" in given and "value" in given:
        findings.add(place, "a value and a method", "give one of the two")
    elif "method" not in given and "value" not in given:
        findings.add((*place, "value"), "missing", "give a value, or method = 'ISO 6976:2016'")
    if "method" in given and "basis" not in given:
        findings.add((*place, "basis"), "missing", "say 'volume' or 'mass'")
    if "method" not in given and "basis" in given:
        findings.add(
            (*place, "basis"), f"'{table.basis}'", "leave it out: the value's unit says it"
        )


def _check_tabulated(
    place: Place, reference: float | None, base: BaseConditions | None, findings: Findings
) -> None:
    """Record conditions for which the standard has no figures."""
    for key, kelvin, table in (
        ("combustion_reference_temperature", reference, COMBUSTION_TEMPERATURES),
        (
            "volume_base",
            None if base is None else base.base_temperature,
            METERING_TEMPERATURES,
        ),
    ):
        if kelvin is None or any(abs(kelvin - t) <= _SAME_TEMPERATURE for t in table.values()):
            continue
        findings.add(
            (*place, key),
            f"{units.render(kelvin, 'degC'):g} degC",
            f"ISO 6976:2016 has figures for {', '.join(table)}",
        )
    low, high = METERING_PRESSURES
    if base is not None and not low <= base.base_pressure <= high:
        findings.add(
            (*place, "volume_base"),
            f"{units.render(base.base_pressure, 'kPa'):g} kPa",
            "the figures of ISO 6976:2016 hold from 90 kPa to 110 kPa",
        )


def _value_and_basis(
    place: Place, text: str | None, findings: Findings
) -> tuple[float | None, CalorificBasis | None]:
    if text is None:
        return None, None
    choices: tuple[tuple[units.Dimension, CalorificBasis], ...] = (
        ("energy_per_volume", CalorificBasis.VOLUME),
        ("energy_per_mass", CalorificBasis.MASS),
    )
    given = ""
    for dimension, basis in choices:
        try:
            value = units.parse(text, dimension)
        except UnitError as error:
            given = str(error).partition("; ")[0]
            continue
        if value <= 0.0:
            findings.add(
                place, f"'{text}'", "a calorific value is above 0; leave it out for no fuel"
            )
            return None, basis
        return value, basis
    findings.add(place, given, "give energy per volume or mass: '38.9 MJ/m3', '50.1 MJ/kg'")
    return None, None


def _check_energy(
    place: Place,
    *,
    basis: CalorificBasis,
    kind: CalorificKind,
    reference: float,
    energy: EnergyTerms,
    by_method: bool,
    findings: Findings,
) -> None:
    """Refuse a value of another kind than the contract's: confusing them costs up to 10 %."""
    if basis is not energy.way:
        findings.add(
            (*place, "basis" if by_method else "value"),
            f"a value per {basis.value}",
            f"[contract.energy] reckons by {energy.way.value}: give a value per {energy.way.value}",
        )
    if kind is not energy.kind:
        findings.add(
            (*place, "kind"),
            f"'{kind.value}'",
            f"[contract.energy] reckons with '{energy.kind.value}' values: give one",
        )
    if reference != energy.combustion_reference_temperature:
        wanted = units.render(energy.combustion_reference_temperature, "degC")
        findings.add(
            (*place, "combustion_reference_temperature"),
            f"{units.render(reference, 'degC'):g} degC",
            f"[contract.energy] has {wanted:g} degC: give the value for that temperature",
        )
