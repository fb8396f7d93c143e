"""Meters and envelopes: devices, the signals and gas they use, and what is balanced."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from meterfix.intake.site.device_tables import FAMILIES
from meterfix.intake.site.device_uncertainty import DeviceVersion
from meterfix.intake.site.devices import (
    Fields,
    build_device,
    device_fields,
    diameter_uncertainties,
    label_of,
    with_device,
)
from meterfix.intake.site.findings import Findings, Place, instant_text
from meterfix.intake.site.tables import EnvelopeTable, MeterTable, SiteFile
from meterfix.intake.site.terms import at_edges, texts_with_places, value_place
from meterfix.model.calendar import GasDayCalendar
from meterfix.model.gas import Gas
from meterfix.model.site import (
    Envelope,
    Meter,
    MeterTerms,
    Tapping,
    Thermometer,
    Tolerance,
)
from meterfix.model.source import Quantity, Signal
from meterfix.model.versions import Versions
from meterfix.units import render

_ROLES = {
    "differential_pressure": Quantity.DIFFERENTIAL_PRESSURE,
    "static_pressure": Quantity.STATIC_PRESSURE,
    "temperature": Quantity.TEMPERATURE,
}
_METER_KEYS = ("gas", *_ROLES, "static_pressure_tapping", "thermometer", "low_flow_cut_off")


def build_meter(
    name: str,
    table: MeterTable,
    file: SiteFile,
    quantities: Mapping[str, Quantity | None],
    devices: list[DeviceVersion],
    findings: Findings,
) -> Meter | None:
    """Return one meter with every change of its terms.

    What is stated of its devices' diameters is added to `devices`.
    """
    place: Place = ("meter", name)
    before = len(findings.mistakes)
    given = device_fields(place, table, findings)
    current: Fields = {key: ((*place, key), getattr(table, key)) for key in _METER_KEYS} | given
    label = label_of({}, given, "", "") if any(key.endswith(".serial") for key in given) else ""
    fields = [current]
    stages: list[tuple[Place, str | None, MeterTerms | None]] = [
        (place, table.since, _terms(place, current, label, file, quantities, findings))
    ]
    for n, change in enumerate(table.change or []):
        at: Place = (*place, "change", n)
        overrides: Fields = {
            key: ((*at, key), getattr(change, key))
            for key in _METER_KEYS
            if key in change.model_fields_set
        }
        overrides |= device_fields(at, change, findings)
        if not overrides and not change.model_fields_set & {*_METER_KEYS, *FAMILIES}:
            findings.add(
                at, "changes nothing", f"give one of {', '.join((*_METER_KEYS, *FAMILIES))}"
            )
        if change.since is not None:
            since = findings.instant((*at, "since"), change.since)
            label = label_of(current, overrides, label, instant_text(since))
        current = with_device(current, overrides)
        if change.since is not None:
            terms_then = _terms(place, current, label, file, quantities, findings)
            stages.append((at, change.since, terms_then))
            fields.append(current)
    terms = findings.versions(place, stages)
    devices += _device_versions(name, place, terms, fields, findings)
    if terms is None or len(findings.mistakes) > before:
        return None
    return Meter(name, table.description or "", terms)


def _device_versions(
    name: str,
    place: Place,
    terms: Versions[MeterTerms] | None,
    fields: Sequence[Fields],
    findings: Findings,
) -> list[DeviceVersion]:
    """Return the meter's devices in order of time; `fields` are the keys in force with each."""
    found: list[DeviceVersion] = []
    for version, then in zip(terms.entries if terms else (), fields, strict=False):
        device = version.value.device
        bore, pipe = diameter_uncertainties(place, then, device, findings)
        found.append(DeviceVersion(name, version.since, device, bore, pipe))
    return found


def _terms(
    place: Place,
    fields: Fields,
    label: str,
    file: SiteFile,
    quantities: Mapping[str, Quantity | None],
    findings: Findings,
) -> MeterTerms | None:
    at, gas = fields["gas"]
    findings.reference(at, gas, "gas", file.gas or {})
    for role, wanted in _ROLES.items():
        at, signal = fields[role]
        if findings.reference(at, signal, "signal", quantities) is None:
            continue
        measured = quantities[signal]
        if measured is not None and measured is not wanted:
            findings.add(
                at,
                f"signal '{signal}' measures a {measured.value.replace('_', ' ')}",
                f"a signal of a {wanted.value.replace('_', ' ')} is needed",
            )
    at, text = fields["low_flow_cut_off"]
    cut_off = findings.quantity(
        at, text, "pressure", at_least=0.0, limit="a differential pressure of at least 0 is needed"
    )
    device = build_device(place, fields, label, findings)
    named = [fields[key][1] for key in _METER_KEYS]
    if device is None or cut_off is None or None in named:
        return None
    return MeterTerms(
        device=device,
        gas=gas,
        differential_pressure=fields["differential_pressure"][1],
        static_pressure=fields["static_pressure"][1],
        temperature=fields["temperature"][1],
        static_pressure_tapping=Tapping(fields["static_pressure_tapping"][1]),
        thermometer=Thermometer(fields["thermometer"][1]),
        low_flow_cut_off=cut_off,
    )


def check_use(
    meters: Sequence[Meter], signals: Sequence[Signal], gases: Sequence[Gas], findings: Findings
) -> None:
    """Record what fits only once meters, signals and gases are known: cut-offs, gas terms."""
    by_name = {signal.name: signal for signal in signals}
    gas_terms = {gas.name: gas.terms for gas in gases}
    for meter in meters:
        for version in meter.terms.entries:
            terms = version.value
            signal = by_name.get(terms.differential_pressure)
            for span in signal.transmitter.entries if signal else ():
                upper = span.value.upper_range_value
                if terms.low_flow_cut_off >= upper:
                    findings.add(
                        ("meter", meter.name, "low_flow_cut_off"),
                        f"{render(terms.low_flow_cut_off, 'mbar'):g} mbar",
                        f"it must be below the upper range value of {terms.differential_pressure}, "
                        f"{render(upper, 'mbar'):g} mbar",
                    )
            history = gas_terms.get(terms.gas)
            first = history.entries[0] if history and history.entries else None
            if first and first.since is not None and (version.since or -(2**63)) < first.since:
                findings.add(
                    ("meter", meter.name, "gas"),
                    f"gas '{terms.gas}' has terms only from {instant_text(first.since)} on, "
                    f"the meter is in service from {instant_text(version.since)} on",
                    "leave out the first `since` of the composition, or begin the meter later",
                )


# --- envelopes -------------------------------------------------------------------------------


def build_envelope(
    name: str,
    table: EnvelopeTable,
    file: SiteFile,
    calendar: GasDayCalendar | None,
    findings: Findings,
) -> Envelope | None:
    """Return one envelope; its tolerance changes only at a gas-day edge, where days are judged."""
    place: Place = ("envelope", name)
    before = len(findings.mistakes)
    known = file.meter or {}
    used: dict[str, str] = {}
    for key, meters in (("in", table.in_), ("out", table.out), ("vented", table.vented)):
        for meter in meters or []:
            at = (*place, key)
            if findings.reference(at, meter, "meter", known) is None:
                continue
            if meter in used:
                findings.add(
                    at, f"meter '{meter}' counts as {used[meter]} already", "name a meter once"
                )
            used.setdefault(meter, key)
    if "energy" in (table.quantities or []):
        _check_energy(place, used, file, findings)
    entries: list[tuple[Place, str | None, Tolerance | None]] = []
    for at, since, text in texts_with_places((*place, "tolerance"), table.tolerance):
        fraction = findings.quantity(
            value_place(at),
            text,
            "fraction",
            at_least=0.0,
            below=1.0,
            limit="a part of what went in is needed, from 0 % to below 100 %",
        )
        entries.append((at, since, None if fraction is None else Tolerance(fraction)))
    tolerance: Versions[Tolerance] | None = None
    if table.tolerance is not None:
        tolerance = findings.versions((*place, "tolerance"), entries, what="tolerance")
    if tolerance is not None:
        at_edges((*place, "tolerance"), tolerance, calendar, "tolerance", findings)
    if tolerance is None or not table.in_ or not table.out or len(findings.mistakes) > before:
        return None
    asked = set(table.quantities or []) | {"mass"}
    return Envelope(
        name=name,
        description=table.description or "",
        inflow=tuple(table.in_),
        outflow=tuple(table.out),
        vented=tuple(table.vented or []),
        quantities=tuple(q for q in ("mass", "base_volume", "energy") if q in asked),
        tolerance=tolerance,
    )


def _check_energy(
    place: Place, meters: Mapping[str, str], file: SiteFile, findings: Findings
) -> None:
    """Record what keeps an envelope from having an energy."""
    at = (*place, "quantities")
    if file.contract is not None and "energy" not in file.contract.model_fields_set:
        findings.add(at, "'energy' without [contract.energy]", "say there how energy is reckoned")
    users: dict[str, dict[str, None]] = {}
    for meter in meters:
        table = (file.meter or {})[meter]
        for name in (table.gas, *(change.gas for change in table.change or [])):
            gas = (file.gas or {}).get(name or "")
            if name and gas is not None and "calorific_value" not in gas.model_fields_set:
                users.setdefault(name, {})[meter] = None
    for name, using in users.items():
        findings.add(
            at,
            f"'energy', but gas '{name}' of {', '.join(using)} has no calorific value",
            f"give [gas.{name}.calorific_value] or leave out 'energy'",
        )
