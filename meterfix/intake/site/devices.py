"""Primary devices: orifice plates, nozzles and Venturi tubes, as the site file states them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from meterfix.intake.site.accuracy import relative_accuracy
from meterfix.intake.site.device_tables import FAMILIES, CalibrationTable
from meterfix.intake.site.findings import Findings, Place
from meterfix.model.device import (
    Calibration,
    Device,
    Nozzle,
    NozzleForm,
    OrificePlate,
    Tappings,
    VenturiForm,
    VenturiTube,
)
from meterfix.units import render

Fields = dict[str, tuple[Place, Any]]
"""Each key in force, where it was written and what was written."""

DEFAULT_PRESSURE_LOSS = 0.125
"""Of dp, of Venturi tubes and Venturi nozzles: the middle of the 5 % to 20 % that ISO 5167-4:2003,
5.9, calls usual. It matters only behind a downstream thermometer, and there for hundredths of a
kelvin."""

_IDENTITY = ("serial", "bore", "pipe_diameter", "tappings", "form")
"""What makes a device another one when it changes."""


def family_of(fields: Fields) -> str | None:
    """Return the family whose keys are in force; None where no device was given."""
    return next((f for f in FAMILIES if any(key.startswith(f"{f}.") for key in fields)), None)


def device_fields(place: Place, table: Any, findings: Findings) -> Fields:
    """Return the keys that a meter's table, or a change of it, gives for its device."""
    given = [family for family in FAMILIES if getattr(table, family) is not None]
    if len(given) > 1:
        findings.add((*place, given[1]), f"beside '{given[0]}'", "a meter has one device at a time")
    unreadable = [f for f in FAMILIES if f in table.model_fields_set and f not in given]
    # what cannot be read is told already; the key keeps it from being told again as missing
    found: Fields = {"device": ((*place, unreadable[0]), None)} if unreadable else {}
    for family in given[:1]:
        device = getattr(table, family)
        for key in device.model_fields_set:
            found[f"{family}.{key}"] = ((*place, family, key), getattr(device, key))
    return found


def with_device(current: Fields, changed: Fields) -> Fields:
    """Return the keys in force after a change; a device of another family replaces it whole."""
    family = family_of(changed)
    if family is not None and family_of(current) != family:
        prefixes = tuple(f"{known}." for known in FAMILIES)
        current = {key: value for key, value in current.items() if not key.startswith(prefixes)}
    return {**current, **changed}


def label_of(current: Fields, changed: Fields, label: str, since: str) -> str:
    """Return what tells the device apart after a change: its serial, or when it came.

    A change of what the device is made of, or of its coefficient alone, leaves it the same.
    """
    before, family = family_of(current), family_of(changed)
    if family is None:
        return label
    serial = changed.get(f"{family}.serial")
    if serial is not None:
        return str(serial[1])
    another = before != family or any(
        (given := changed.get(f"{family}.{key}")) is not None
        and given[1] != current.get(f"{family}.{key}", (None, None))[1]
        for key in _IDENTITY
    )
    return f"from {since}" if another else label


def build_device(place: Place, fields: Fields, label: str, findings: Findings) -> Device | None:
    """Return the device of the keys in force."""
    family = family_of(fields)
    if family is None:
        if "device" not in fields:
            findings.add(place, "no device", f"give one of {', '.join(FAMILIES)}")
        return None
    # where the device was given: with the meter, or by a change to another family
    first = min((at for name, (at, _) in fields.items() if name.startswith(f"{family}.")), key=len)
    table: Place = first[:-1]
    given = {
        key: fields.get(f"{family}.{key}", ((*table, key), None))
        for key in FAMILIES[family].model_fields
    }
    _check_complete(family, fields, given, findings)
    lengths = {
        key: findings.quantity(*given[key], "length", above=0.0, limit="it must be above 0")
        for key in ("bore", "pipe_diameter")
    }
    expansions = {
        key: findings.quantity(
            *given[key],
            "per_temperature",
            at_least=0.0,
            below=1e-3,
            limit="a metal has between 0 and 1e-3 / K",
        )
        for key in ("bore_expansion", "pipe_expansion")
    }
    temperatures = {
        part: _reference_temperature(family, part, given, table, fields, findings)
        for part in ("bore", "pipe")
    }
    bore, pipe = lengths["bore"], lengths["pipe_diameter"]
    if bore is not None and pipe is not None and bore >= pipe:
        findings.add(
            given["bore"][0],
            f"bore is {render(bore, 'mm'):g} mm in a pipe of {render(pipe, 'mm'):g} mm",
            "it must be smaller than the pipe",
        )
        return None
    before = len(findings.mistakes)
    calibration = _calibration(*given["discharge_coefficient"], findings)
    form = given["tappings" if family == "orifice" else "form"][1]
    loss = None if family == "orifice" else _pressure_loss(family, form, given, findings)
    values = [bore, pipe, *expansions.values(), *temperatures.values()]
    numbers = [value for value in values if value is not None]
    if len(numbers) < len(values) or form is None or len(findings.mistakes) > before:
        return None
    common: dict[str, Any] = {
        "bore": numbers[0],
        "pipe_diameter": numbers[1],
        "bore_expansion": numbers[2],
        "pipe_expansion": numbers[3],
        "bore_reference_temperature": numbers[4],
        "pipe_reference_temperature": numbers[5],
        "calibration": calibration,
        "pressure_loss_ratio": loss,
        "short_straight_lengths": bool(given["short_straight_lengths"][1]),
        "label": label,
    }
    if family == "orifice":
        return OrificePlate(**common, tappings=Tappings(form))
    if family == "nozzle":
        return Nozzle(**common, form=NozzleForm(form))
    return VenturiTube(**common, form=VenturiForm(form))


def diameter_uncertainties(
    place: Place, fields: Fields, device: Device, findings: Findings
) -> tuple[float | None, float | None]:
    """Return the stated relative standard uncertainties of bore and pipe diameter [-]."""
    family = family_of(fields) or ""
    found: list[float | None] = []
    for key, diameter in (("bore", device.bore), ("pipe_diameter", device.pipe_diameter)):
        name = f"{key}_uncertainty"
        at, table = fields.get(f"{family}.{name}", ((*place, family, name), None))
        found.append(relative_accuracy(at, table, diameter, "length", findings))
    return found[0], found[1]


def _check_complete(
    family: str, fields: Fields, given: Mapping[str, tuple[Place, Any]], findings: Findings
) -> None:
    """Record what a device of another family, given by a change, lacks.

    Of a meter's first device the table's own shape tells it.
    """
    for key, field in FAMILIES[family].model_fields.items():
        at = given[key][0]
        if field.is_required() and f"{family}.{key}" not in fields and "change" in at[2:3]:
            findings.add(at, "missing", "this key is needed")


def _pressure_loss(
    family: str, form: object, given: Mapping[str, tuple[Place, Any]], findings: Findings
) -> float | None:
    """Return the stated part of dp that is lost, or the default where there is no equation."""
    place, text = given["pressure_loss"]
    if text is None:
        without = family == "venturi_tube" or form == NozzleForm.VENTURI_NOZZLE.value
        return DEFAULT_PRESSURE_LOSS if without else None
    return findings.quantity(
        place,
        text,
        "fraction",
        at_least=0.0,
        below=1.0,
        limit="a part of the differential pressure is needed, from 0 % to below 100 %",
    )


def _calibration(
    place: Place, table: CalibrationTable | None, findings: Findings
) -> Calibration | None:
    if table is None:
        return None
    uncertainty = relative_accuracy(
        (*place, "uncertainty"), table.uncertainty, table.value, "fraction", findings
    )
    span: tuple[float, float] | None = None
    if table.reynolds_number is not None:
        low, high = table.reynolds_number
        span = (low, high)
        if low >= high:
            findings.add(
                (*place, "reynolds_number"),
                f"from {low:g} to {high:g} runs downwards",
                "the first value must be the lower one",
            )
    if uncertainty is None or table.value is None or table.certificate is None:
        return None
    return Calibration(table.value, uncertainty, table.certificate, span)


def _reference_temperature(
    family: str,
    part: str,
    given: Mapping[str, tuple[Place, Any]],
    table: Place,
    fields: Fields,
    findings: Findings,
) -> float | None:
    """Return the part's own reference temperature, else the common one."""
    own, common = f"{part}_reference_temperature", "reference_temperature"
    key = own if f"{family}.{own}" in fields else common
    if f"{family}.{key}" not in fields:
        findings.add(
            (*table, common), "missing", "give one for both, or one for bore and pipe each"
        )
        return None
    return findings.quantity(
        *given[key],
        "temperature",
        above=200.0,
        below=400.0,
        limit="a temperature between 200 K and 400 K is needed",
    )
