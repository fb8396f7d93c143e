"""Whose a parameter of an era is: the signal, device, gas or atmosphere that it belongs to."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields

from meterfix.calc.disturbance import Disturbance
from meterfix.frames import PARAMETERS, Era, Floats

Disturbances = Mapping[tuple[str, str], float | Floats]
"""By field of `Disturbance` and subject: what is changed."""

_DISTURBED = tuple(
    (field.name, field.name.removesuffix("_relative")) for field in fields(Disturbance)
)
"""Fields of a disturbance, and the parameter whose subject each one acts on."""


def subjects(meter: str, era: Era) -> dict[str, str]:
    """Return the subject of each of `frames.PARAMETERS` that acts on the era.

    Parameters
    ----------
    meter : str
        The meter's name.
    era : Era

    Returns
    -------
    dict
        By name of the parameter. An era whose static pressure is absolute has no atmospheric
        pressure; one without a calorific value has none of its parameters, and one whose
        calorific value is stated has no method.
    """
    of_signal = {
        "differential_pressure": era.meter.differential_pressure,
        "static_pressure": era.meter.static_pressure,
        "temperature": era.meter.temperature,
    }
    barometer = f"barometer {era.barometer or ''}".strip()
    of_kind = {
        "atmosphere": "site" if era.atmospheric_pressure is not None else barometer,
        "device": f"{meter} {era.meter.device.label}".strip(),
        "gas": era.meter.gas,
    }
    found: dict[str, str] = {}
    for name, kind, _ in PARAMETERS:
        if kind == "signal":
            found[name] = of_signal[name.rpartition("_")[0]]
        elif name == "atmospheric_pressure" and not era.static_pressure_gauge:
            continue
        elif name.startswith("calorific_"):
            value = era.gas.calorific_value
            if era.energy is None or value is None:
                continue
            if name == "calorific_method" and value.value is not None:
                continue
            found[name] = of_kind[kind]
        else:
            found[name] = of_kind[kind]
    return found


def disturbance_of(meter: str, era: Era, disturbances: Disturbances) -> Disturbance | None:
    """Return what is changed for the era's records; None if nothing is."""
    of_parameter = subjects(meter, era)
    changed = {
        name: disturbances[name, of_parameter[parameter]]
        for name, parameter in _DISTURBED
        if parameter in of_parameter and (name, of_parameter[parameter]) in disturbances
    }
    return Disturbance(**changed) if changed else None
