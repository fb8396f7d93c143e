"""Totals with the real correction: an orifice plate on natural gas."""

from __future__ import annotations

from dataclasses import replace
from datetime import date

import numpy as np
import pytest

from meterfix.calc.correct import EraRecords, correct
from meterfix.calc.gas.properties import GasLibrary
from meterfix.calc.totals import day_total, hourly_records
from meterfix.frames import HOURLY_INDEX, Carry, Era, MeterDay, Series
from meterfix.model.calendar import HOUR, SECOND
from meterfix.model.device import OrificePlate, Tappings
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
BASE = BaseConditions(101_325.0, 288.15)
GAS = GasTerms(
    composition=Composition("mole", (("methane", 0.95), ("ethane", 0.04), ("nitrogen", 0.01)), 1.0),
    line_model=DensityModel(StateModel.AGA8_DETAIL),
    base_model=DensityModel(StateModel.AGA8_DETAIL),
    dynamic_viscosity=PropertyChoice(value=1.11e-5),
    isentropic_exponent=PropertyChoice(method="equation_of_state"),
    calorific_value=CalorificValue(
        38.9e6, CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15, BASE
    ),
)
PLATE = OrificePlate(
    bore=0.0924,
    pipe_diameter=0.15408,
    tappings=Tappings.FLANGE,
    bore_expansion=16e-6,
    pipe_expansion=11e-6,
    bore_reference_temperature=293.15,
    pipe_reference_temperature=293.15,
)
TERMS = MeterTerms(PLATE, "gas", "PDT", "PT", "TT", Tapping.UPSTREAM, Thermometer.DOWNSTREAM, 100.0)


@pytest.fixture(scope="module")
def gases():
    return GasLibrary()


def era(start, end, terms=TERMS):
    return Era(
        start=start,
        end=end,
        meter=terms,
        gas=GAS,
        base=BASE,
        energy=EnergyTerms(CalorificBasis.VOLUME, CalorificKind.GROSS, 288.15),
        atmospheric_pressure=100_000.0,
        static_pressure_gauge=True,
        differential_pressure_rooted=False,
        differential_pressure_range=Transmitter(0.0, 25_000.0),
        static_pressure_range=None,
        temperature_range=None,
    )


def series(times, values):
    count = len(times)
    return Series(
        instants=START + np.asarray(times, dtype=np.int64) * SECOND,
        values=np.asarray(values, dtype=np.float64),
        disputed=np.zeros(count, dtype=np.bool_),
        implausible=np.zeros(count, dtype=np.bool_),
        carry=Carry(True, 300 * SECOND, 300 * SECOND, None),
    )


def meter_day(dp, p, t, *, eras=None, hours=2):
    end = START + hours * HOUR
    return MeterDay(
        meter="FT-1",
        gas_day=date(2026, 1, 15),
        start=START,
        end=end,
        eras=eras or (era(START, end),),
        differential_pressure=((START, end, dp),),
        static_pressure=((START, end, p),),
        temperature=((START, end, t),),
        barometer=(),
    )


def column(record, name):
    return record.statistics[:, HOURLY_INDEX[name]]


MINUTES = np.arange(0, 7201, 60)


def some(seed):
    draw = np.random.default_rng(seed)
    return meter_day(
        series(MINUTES, np.maximum(draw.uniform(-3000, 20_000, len(MINUTES)), 0.0)),
        series(MINUTES[::3], draw.uniform(8e5, 12e5, len(MINUTES[::3]))),
        series(MINUTES[::5], draw.uniform(280, 300, len(MINUTES[::5]))),
    )


def test_constant_readings_give_the_rate_times_the_hour(gases):
    """An hour of constant readings is 3,600 times the corrected rate, in every quantity."""
    constant = [np.full(len(MINUTES), value) for value in (10_000.0, 1e6, 290.0)]
    record = hourly_records([meter_day(*(series(MINUTES, v) for v in constant))], gases)[0]
    rates = correct([EraRecords(era(START, START + HOUR), *(v[:1] for v in constant), None)], gases)
    for name, rate in (
        ("mass", rates.mass_flow),
        ("line_volume", rates.line_volume_flow),
        ("base_volume", rates.base_volume_flow),
        ("energy", rates.energy_flow),
    ):
        assert rate[0] > 0.0
        np.testing.assert_allclose(column(record, name), 3600.0 * rate[0], rtol=1e-14)
    np.testing.assert_allclose(
        column(record, "energy"), 38.9e6 * column(record, "base_volume"), rtol=1e-14
    )
    assert column(record, "measured_time").tolist() == [3600.0, 3600.0]


def test_no_flow_is_exactly_zero(gases):
    """With dp within the cut-off the whole day: measured, and exactly 0 in every quantity."""
    record = hourly_records(
        [
            meter_day(
                series(MINUTES, np.where(MINUTES % 120, 50.0, -50.0)),
                series(MINUTES, np.full(len(MINUTES), 1e6)),
                series(MINUTES, np.full(len(MINUTES), 290.0)),
            )
        ],
        gases,
    )[0]
    total = day_total(record)
    assert (total.mass, total.line_volume, total.base_volume, total.energy) == (0.0,) * 4
    assert total.measured_fraction == 1.0
    assert total.flow_time == 0.0


def test_a_larger_bore_from_an_instant_on(gases):
    """The bore changes at 30 minutes of constant readings: the hour is half of either rate."""
    constant = [np.full(len(MINUTES), value) for value in (10_000.0, 1e6, 290.0)]
    wide = replace(TERMS, device=replace(PLATE, bore=0.1))
    change = START + HOUR // 2 + 7 * SECOND
    eras = (era(START, change), era(change, START + 2 * HOUR, wide))
    record = hourly_records([meter_day(*(series(MINUTES, v) for v in constant), eras=eras)], gases)[
        0
    ]
    first, second = (
        correct([EraRecords(one, *(v[:1] for v in constant), None)], gases).mass_flow[0]
        for one in eras
    )
    assert second > 1.1 * first
    np.testing.assert_allclose(
        column(record, "mass"), [1807 * first + 1793 * second, 3600 * second], rtol=1e-14
    )


@pytest.mark.parametrize("size", [1, 7, 1000])
def test_a_batch_changes_no_bit_of_a_real_total(size):
    """A real meter-day alone, and among others that warmed another library: identical bits."""
    alone = hourly_records([some(0)], GasLibrary())[0]
    assert np.isfinite(column(alone, "energy")).all()
    batch = hourly_records([*(some(n % 50) for n in range(1, size)), some(0)], GasLibrary())
    assert batch[-1].statistics.tobytes() == alone.statistics.tobytes()
