"""Meter-days for sensitivities: every device, gas and arrangement from plain figures."""

from __future__ import annotations

from dataclasses import replace
from datetime import date
from types import SimpleNamespace

import numpy as np
import pytest

from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.totals import hourly_records
from meterfix.frames import HOURLY_INDEX, SENSITIVE, Carry, Era, MeterDay, Series
from meterfix.model.calendar import HOUR, SECOND
from meterfix.model.device import (
    Calibration,
    Nozzle,
    NozzleForm,
    OrificePlate,
    Tappings,
    VenturiForm,
    VenturiTube,
)
from meterfix.model.gas import (
    BaseConditions,
    CalorificBasis,
    CalorificKind,
    CalorificValue,
    Composition,
    DensityModel,
    GasTerms,
    PropertyChoice,
    StateModel,
)
from meterfix.model.site import EnergyTerms, MeterTerms, Tapping, Thermometer
from meterfix.model.source import Transmitter

START = 1_768_453_200_000_000
"""2026-01-15 05:00 UTC."""
BASE = BaseConditions(101_325.0, 288.15)
NATURAL_GAS = (
    ("methane", 0.923),
    ("nitrogen", 0.011),
    ("carbon_dioxide", 0.012),
    ("ethane", 0.04),
    ("propane", 0.01),
    ("n_butane", 0.003),
    ("n_hexane", 0.001),
)
COMPONENTS = tuple(name for name, _ in NATURAL_GAS)
STATED = CalorificValue(38.9e6, CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15, BASE)
_STEEL = {
    "bore_expansion": 16e-6,
    "pipe_expansion": 11e-6,
    "bore_reference_temperature": 293.15,
    "pipe_reference_temperature": 293.15,
}
DEVICES = {
    **{
        f"orifice, {tappings.value}": OrificePlate(
            bore=0.1, pipe_diameter=0.2, tappings=tappings, **_STEEL
        )
        for tappings in Tappings
    },
    "orifice, small pipe": OrificePlate(
        bore=0.03, pipe_diameter=0.06, tappings=Tappings.FLANGE, **_STEEL
    ),
    "orifice, calibrated": OrificePlate(
        bore=0.12,
        pipe_diameter=0.2,
        tappings=Tappings.CORNER,
        calibration=Calibration(0.607, 0.0015, "certificate 12"),
        **_STEEL,
    ),
    **{
        form.value: Nozzle(bore=0.12, pipe_diameter=0.2, form=form, **_STEEL)
        for form in (NozzleForm.ISA_1932, NozzleForm.LONG_RADIUS)
    },
    "Venturi nozzle": Nozzle(
        bore=0.12,
        pipe_diameter=0.2,
        form=NozzleForm.VENTURI_NOZZLE,
        pressure_loss_ratio=0.15,
        **_STEEL,
    ),
    **{
        f"Venturi tube, {form.value}": VenturiTube(
            bore=0.12, pipe_diameter=0.22, form=form, pressure_loss_ratio=0.1, **_STEEL
        )
        for form in VenturiForm
    },
}


def gas(
    model=StateModel.AGA8_DETAIL,
    *,
    base_model=None,
    fractions=NATURAL_GAS,
    basis="mole",
    sum_as_given=1.0,
    kappa="equation_of_state",
    viscosity=1.1e-5,
    value=STATED,
    fixed=None,
):
    choice = PropertyChoice(method=kappa) if isinstance(kappa, str) else PropertyChoice(kappa)
    viscous = (
        PropertyChoice(method=viscosity)
        if isinstance(viscosity, str)
        else PropertyChoice(viscosity)
    )
    return GasTerms(
        composition=Composition(basis, fractions, sum_as_given),
        line_model=DensityModel(model, fixed),
        base_model=DensityModel(base_model or model, None if base_model else fixed),
        dynamic_viscosity=viscous,
        isentropic_exponent=choice,
        calorific_value=value,
    )


def era(
    device=None,
    terms=None,
    *,
    start=0.0,
    hours=2.0,
    thermometer=Thermometer.UPSTREAM,
    tapping=Tapping.UPSTREAM,
    gauge=True,
    barometer=None,
    rooted=False,
    way=CalorificBasis.VOLUME,
    base=BASE,
    signals=("PDT-1", "PT-1", "TT-1"),
    cut_off=20.0,
):
    return Era(
        start=START + round(start * HOUR),
        end=START + round(hours * HOUR),
        meter=MeterTerms(
            DEVICES["orifice, flange"] if device is None else device,
            "gas",
            *signals,
            tapping,
            thermometer,
            cut_off,
        ),
        gas=gas() if terms is None else terms,
        base=base,
        energy=EnergyTerms(way, CalorificKind.GROSS, 288.15),
        atmospheric_pressure=None if barometer else 100_800.0,
        static_pressure_gauge=gauge,
        differential_pressure_rooted=rooted,
        differential_pressure_range=Transmitter(0.0, 50_000.0),
        static_pressure_range=None,
        temperature_range=None,
        barometer=barometer,
    )


def series(seconds, values, *, linear=True, gap=600, age=600, interval=None, mean_values=False):
    count = len(seconds)
    return Series(
        instants=START + np.round(np.asarray(seconds) * SECOND).astype(np.int64),
        values=np.ascontiguousarray(np.broadcast_to(values, count), dtype=np.float64),
        disputed=np.zeros(count, dtype=np.bool_),
        implausible=np.zeros(count, dtype=np.bool_),
        carry=Carry(
            linear, gap * SECOND, age * SECOND, None if interval is None else interval * SECOND
        ),
        mean_values=mean_values,
    )


def curves(seconds, *, dp=9_000.0, p=3.03e6, t=277.0):
    """Return dp, static pressure and temperature that move as a plant's do, within one tile."""
    s = np.asarray(seconds)
    return (
        dp * (1.0 + 0.3 * np.sin(s / 700.0)),
        p * (1.0 + 0.02 * np.sin(s / 2100.0)),
        t + 1.5 * np.cos(s / 3000.0),
    )


def meter_day(eras, dp, p, t, *, barometer=None, meter="FT-1"):
    start, end = START, eras[-1].end

    def part(one):
        if isinstance(one, Series):
            return ((start, end, one),)
        return tuple((era.start, era.end, each) for era, each in zip(eras, one, strict=True))

    return MeterDay(
        meter=meter,
        gas_day=date(2026, 1, 15),
        start=start,
        end=end,
        eras=tuple(eras),
        differential_pressure=part(dp),
        static_pressure=part(p),
        temperature=part(t),
        barometer=() if barometer is None else part(barometer),
    )


def minute_day(one, *, hours=2, every=60, **levels):
    """Return a meter-day of one era with a reading of each signal at every instant."""
    seconds = np.arange(-every, hours * 3600 + 2 * every, every)
    dp, p, t = curves(seconds, **levels)
    if not one.static_pressure_gauge:
        p = p + 1e5
    if one.differential_pressure_rooted:
        dp = np.sqrt(dp / one.differential_pressure_range.upper_range_value)
    air = None
    if one.barometer is not None:
        air = series(seconds, 100_500.0 + 200.0 * np.sin(seconds / 900.0))
    return meter_day(
        [one], series(seconds, dp), series(seconds, p), series(seconds, t), barometer=air
    )


def totals(record):
    """Return mass, base volume and energy, (hours, 3)."""
    return record.statistics[:, [HOURLY_INDEX[name] for name in SENSITIVE]]


@pytest.fixture(scope="session")
def gases():
    return GasLibrary()


@pytest.fixture(scope="session")
def lab(gases):
    """Builders, and the whole calculation of a day."""

    def compute(days, **asked):
        return hourly_records(days, gases, **asked)

    def disturbed(day, changes):
        return totals(compute([day], disturbances=changes)[0])

    def recomposed(day, component, step):
        """Return the totals with a component's stated fraction changed."""
        eras = []
        for one in day.eras:
            given = one.gas.composition
            stated = {name: x * given.sum_as_given for name, x in given.fractions}
            stated[component] = stated.get(component, 0.0) + step
            total = sum(stated.values())
            moved = Composition(
                given.basis, tuple((name, x / total) for name, x in stated.items()), total
            )
            eras.append(replace(one, gas=replace(one.gas, composition=moved)))
        return totals(compute([replace(day, eras=tuple(eras))], sensitive=False)[0])

    return SimpleNamespace(
        devices=DEVICES,
        components=COMPONENTS,
        start=START,
        base=BASE,
        gas=gas,
        era=era,
        series=series,
        curves=curves,
        meter_day=meter_day,
        minute_day=minute_day,
        compute=compute,
        disturbed=disturbed,
        recomposed=recomposed,
        totals=totals,
    )
