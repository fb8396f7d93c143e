"""Sensitivities of hourly totals against differences of the whole calculation."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from meterfix.frames import PARAMETERS
from meterfix.model.gas import (
    BaseConditions,
    CalorificBasis,
    CalorificKind,
    CalorificValue,
    StateModel,
)
from meterfix.model.site import Tapping, Thermometer

STEPS = {
    "differential_pressure_zero": 3.0,
    "differential_pressure_span": 1e-3,
    "static_pressure_zero": 500.0,
    "static_pressure_span": 2e-4,
    "temperature_zero": 0.05,
    "atmospheric_pressure": 500.0,
    "bore": 3e-5,
    "pipe_diameter": 3e-5,
    "discharge_coefficient": 0.1,
    "expansibility": 1.0,
    "dynamic_viscosity": 0.03,
    "isentropic_exponent": 1e-3,
    "line_density": 1.0,
    "base_density": 0.1,
    "calorific_value": 1e-3,
    "calorific_method": 1.0,
}
"""Wide enough that rounding does not show, narrow enough that the fourth-order difference holds."""
COMPONENT_STEP = 4e-5
TOLERANCE = 1e-6
VOLUME, MASS, GROSS = CalorificBasis.VOLUME, CalorificBasis.MASS, CalorificKind.GROSS
NORMAL = BaseConditions(101_325.0, 273.15)


def fourth_order(function, step):
    """Return the derivative at 0 by a difference of fourth order."""
    near = function(step) - function(-step)
    far = function(2.0 * step) - function(-2.0 * step)
    return (8.0 * near - far) / (12.0 * step)


def worst(lab, day, components=()):
    """Return per parameter the largest relative difference, of those that can be judged."""
    asked = {"gas": tuple(components)} if components else {}
    record = lab.compute([day], components=asked)[0]
    plain = np.abs(lab.totals(record))
    found = {}
    for n, (name, subject) in enumerate(record.parameters):
        ours = record.sensitivities[:, n]
        if np.isnan(ours).any():
            found[name] = np.nan
            continue
        if name.startswith("fraction:"):
            step = COMPONENT_STEP
            theirs = fourth_order(
                lambda x, name=name: lab.recomposed(day, name.removeprefix("fraction:"), x), step
            )
        else:
            step = STEPS[name]
            theirs = fourth_order(lambda x, key=(name, subject): lab.disturbed(day, {key: x}), step)
        # an exact 0 is met by the rounding of the totals only
        rounding = 1e-14 * plain / step
        error = np.abs(ours - theirs) / (np.abs(ours) + 1e6 * rounding)
        found[name] = error[np.isfinite(plain)].max()  # no energy: nothing to compare
    return found


def all_within(found, unknown=()):
    assert {name for name, error in found.items() if np.isnan(error)} == set(unknown)
    wrong = {name: error for name, error in found.items() if error > TOLERANCE}
    assert not wrong


PLACES = [
    pytest.param(
        {"thermometer": thermometer, "tapping": tapping},
        id=f"{thermometer.value} thermometer, {tapping.value} tapping",
    )
    for thermometer in Thermometer
    for tapping in Tapping
]


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("device", range(11))
def test_every_parameter_of_every_device_agrees_with_differences(lab, device, place):
    """Analytic sensitivities of mass, base volume and energy agree to 1e-6 of themselves."""
    name = list(lab.devices)[device]
    # Venturis are limited to Re_D of 1e6 or 2e6
    levels = {"dp": 4_000.0, "p": 0.05e6} if "Venturi" in name else {"dp": 6_000.0}
    found = worst(lab, lab.minute_day(lab.era(lab.devices[name], **place), **levels))
    assert set(found) == {name for name, _, _ in PARAMETERS} - {"calorific_method"}
    all_within(found)


def test_there_are_eleven_devices(lab):
    """The devices above are all of them."""
    assert len(lab.devices) == 11


@pytest.mark.parametrize(
    "arrangement",
    [
        {"barometer": "PB-1"},
        {"gauge": False},
        {"rooted": True},
        {
            "rooted": True,
            "barometer": "PB-1",
            "tapping": Tapping.DOWNSTREAM,
            "thermometer": Thermometer.DOWNSTREAM,
        },
    ],
    ids=["barometer", "absolute", "rooted", "all at once"],
)
def test_readings_of_every_kind_agree_with_differences(lab, arrangement):
    """Gauge and absolute pressure, a barometer and rooted dp are differentiated as computed."""
    found = worst(lab, lab.minute_day(lab.era(**arrangement)))
    assert ("atmospheric_pressure" in found) == arrangement.get("gauge", True)
    all_within(found)


@pytest.mark.parametrize(
    ("value", "way"),
    [
        (CalorificValue(38.9e6, VOLUME, GROSS, 288.15, NORMAL), VOLUME),
        (CalorificValue(38.9e6, VOLUME, GROSS, 288.15, NORMAL), MASS),
        (CalorificValue(52e6, MASS, GROSS, 288.15, None), VOLUME),
        (CalorificValue(52e6, MASS, GROSS, 288.15, None), MASS),
        (CalorificValue(None, VOLUME, GROSS, 288.15, NORMAL), VOLUME),
        (CalorificValue(None, VOLUME, GROSS, 288.15, NORMAL), MASS),
        (CalorificValue(None, MASS, GROSS, 288.15, None), VOLUME),
    ],
)
def test_every_way_to_energy_agrees_with_differences(lab, value, way):
    """Energy by volume or mass, stated or by ISO 6976, composition's paths included."""
    day = lab.minute_day(lab.era(terms=lab.gas(value=value), way=way))
    all_within(worst(lab, day, ("methane", "nitrogen", "propane")))


GASES = {
    "AGA8 DETAIL": ({}, ()),
    "GERG-2008": ({"model": StateModel.GERG_2008}, ()),
    "GERG-2008 in the line, DETAIL at base": (
        {"model": StateModel.GERG_2008, "base_model": StateModel.AGA8_DETAIL},
        (),
    ),
    "ideal": ({"model": StateModel.IDEAL, "kappa": "ideal_gas"}, ("line_density", "base_density")),
    "fixed": (
        {"model": StateModel.FIXED, "fixed": 0.93, "kappa": 1.29},
        ("line_density", "base_density"),
    ),
    "mass fractions": ({"basis": "mass", "sum_as_given": 1.003}, ()),
}


@pytest.mark.parametrize("place", PLACES[::3])
@pytest.mark.parametrize("name", GASES)
def test_every_component_of_every_model_agrees_with_differences(lab, name, place):
    """Stated fractions act through density, kappa, Joule-Thomson and base density, with sign."""
    terms, unknown = GASES[name]
    day = lab.minute_day(lab.era(terms=lab.gas(**terms), **place))
    found = worst(lab, day, lab.components)
    assert {f"fraction:{component}" for component in lab.components} < set(found)
    all_within(found, unknown)


@pytest.mark.parametrize("component", ["air", "nitrogen"])
def test_reference_gases_agree_with_differences(lab, component):
    """A gas by its reference equation, its viscosity included."""
    terms = lab.gas(
        StateModel.REFERENCE,
        fractions=((component, 1.0),),
        viscosity="reference_equation",
        value=None,
    )
    one = lab.era(terms=terms, thermometer=Thermometer.DOWNSTREAM)
    day = lab.minute_day(replace(one, energy=None), p=0.9e6, t=291.0)
    found = worst(lab, day, (component,))
    assert found.pop(f"fraction:{component}") == 0.0  # one component alone stays alone
    all_within(found)


def test_a_component_that_is_absent_has_a_sensitivity(lab):
    """A trace that the analysis gives as 0 can be doubted too: a one-sided difference."""
    day = lab.minute_day(lab.era())
    record = lab.compute([day], components={"gas": ("hydrogen",)})[0]
    ours = record.sensitivities[
        :, [name for name, _ in record.parameters].index("fraction:hydrogen")
    ]
    at = [lab.recomposed(day, "hydrogen", x) for x in (0.0, 3e-5, 6e-5)]
    theirs = (-3.0 * at[0] + 4.0 * at[1] - at[2]) / 6e-5
    assert np.allclose(ours, theirs, rtol=TOLERANCE, atol=0.0)


def test_composition_paths_are_summed_with_sign(lab):
    """Base volume is much less sensitive to composition than its paths apart would have it.

    Line density pulls base volume by half of what base density pushes it, the other way.
    """
    record = lab.compute([lab.minute_day(lab.era())], components={"gas": ("propane",)})[0]
    at = [name for name, _ in record.parameters].index("fraction:propane")
    mass, volume, _ = (record.sensitivities[0, at] / lab.totals(record)[0]).tolist()
    by_base_density = volume - mass
    assert mass > 0.7
    assert by_base_density < -1.4
    assert abs(volume) < 0.5 * abs(by_base_density)


def test_large_swings_within_an_hour_keep_the_composition_right(lab):
    """States that stand for an hour's records serve pressure changes of 10 % to 1e-5."""
    seconds = np.arange(-60, 3720, 60)
    dp, _, _ = lab.curves(seconds)
    p = 3.0e6 * (1.0 + 0.1 * np.sin(seconds / 600.0))
    t = 277.0 + 5.0 * np.sin(seconds / 900.0)
    day = lab.meter_day(
        [lab.era(hours=1.0)],
        lab.series(seconds, dp),
        lab.series(seconds, p),
        lab.series(seconds, t),
    )
    record = lab.compute([day], components={"gas": lab.components})[0]
    for n, (name, _) in enumerate(record.parameters):
        if name.startswith("fraction:"):
            theirs = fourth_order(
                lambda x, name=name: lab.recomposed(day, name.removeprefix("fraction:"), x), 4e-5
            )
            assert np.allclose(record.sensitivities[:, n], theirs, rtol=1e-5, atol=0.0)
