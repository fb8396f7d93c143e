"""Gas days of 23 and 25 hours, and sums to the last bit, from the stored rows alone."""

from __future__ import annotations

import json
import math
from datetime import date, timedelta

import pytest

from meterfix.demo.rates import periods
from meterfix.demo.simulator import simulate
from meterfix.demo.truth import integrate, totals
from meterfix.demo.works import RUN_BY_NAME, TIME_ZONE
from meterfix.model.calendar import HOUR, SECOND, GasDayCalendar
from meterfix.model.versions import always

FIGURES = {
    "mass_kg": "mass",
    "line_volume_m3": "line_volume",
    "base_volume_m3": "base_volume",
    "energy_J": "energy",
}
TIMES = {"duration_s": "duration", "measured_time_s": "measured_time", "flow_time_s": "flow_time"}
AUTUMN, SPRING = date(2026, 10, 24), date(2026, 3, 28)
"""Gas days begin at 06:00: the clock changes in the night that ends these two."""


def _bits(value):
    return None if value is None else value.hex()


def _sum(values):
    """Return fsum of the values that are known; None where none is."""
    known = [value for value in values if value is not None and not math.isnan(value)]
    return math.fsum(known) if known else None


def _check_day(span, meter, day, hours_wanted):
    """Check one stored gas day against its stored hours."""
    stored, hours = span.day(meter, day), span.hours(meter, day)
    assert len(hours["duration"]) == hours_wanted
    assert set(hours["duration"]) == {3600.0}
    assert stored["duration_s"] == hours_wanted * 3600.0
    assert stored["period_end_us"] - stored["period_start_us"] == hours_wanted * HOUR
    for column, name in (*FIGURES.items(), *TIMES.items()):
        assert _bits(stored[column]) == _bits(_sum(hours[name])), (meter, day, column)
    lost = [values for name, values in hours.items() if name.startswith("lost_")]
    for n in range(hours_wanted):
        assert hours["measured_time"][n] + math.fsum(each[n] for each in lost) == 3600.0
        assert 0.0 <= hours["flow_time"][n] <= hours["measured_time"][n]
    missing = json.loads(stored["missing"])
    assert stored["measured_time_s"] + math.fsum(missing.values()) == stored["duration_s"]
    assert stored["measured_fraction"] == stored["measured_time_s"] / stored["duration_s"]


def _check_month(span, meter):
    """Check the stored month against its stored gas days."""
    month = span.month(meter)
    days = [span.day(meter, day) for day in span.simulated.days]
    for column in FIGURES:
        assert _bits(month[column]) == _bits(_sum(day[column] for day in days)), (meter, column)
    for column in ("measured_time_s", "flow_time_s"):
        assert _bits(month[column]) == _bits(math.fsum(day[column] for day in days))
    return month, days


@pytest.mark.parametrize("name", ["exact", "example"])
def test_october_sums_to_the_last_bit(request, name, meter):
    """Every gas day is the fsum of its hours, the month of its gas days: all totals and times.

    October 24, which ends at 06:00 after the clocks went back, has 25 hours; the month 745.
    """
    span = request.getfixturevalue(name)
    assert len(span.simulated.days) == 31
    for day in span.simulated.days:
        _check_day(span, meter, day, 25 if day == AUTUMN else 24)
    month, days = _check_month(span, meter)
    assert month["duration_s"] == 745 * 3600.0 == math.fsum(day["duration_s"] for day in days)
    if meter.startswith("FA"):
        assert month["energy_J"] is None  # air has no calorific value
    else:
        assert month["energy_J"] > 0.0
    assert min(month[column] for column in FIGURES if month[column] is not None) > 0.0


def test_spring_day_has_23_hours(spring, meter):
    """March 28 ends an hour early; its hours sum to it, and the days to the open month."""
    assert spring.simulated.days[0] == SPRING
    for day in spring.simulated.days:
        _check_day(spring, meter, day, 23 if day == SPRING else 24)
    month, _ = _check_month(spring, meter)
    assert month["duration_s"] == (31 * 24 - 1) * 3600.0


def test_spring_days_agree_with_the_truth(spring, meter):
    """Mass and base volume of the gas days around the spring change: within 1e-6, 0 where 0."""
    truth = spring.truth(meter)
    for day in spring.simulated.days:
        stored = spring.day(meter, day)
        assert stored["measured_time_s"] == truth.loc[day, "measured_time_s"]
        for quantity in ("mass_kg", "base_volume_m3"):
            assert stored[quantity] == pytest.approx(truth.loc[day, quantity], rel=1e-6, abs=0.0)


@pytest.mark.parametrize(("name", "day"), [("exact", AUTUMN), ("spring", SPRING)])
def test_every_hour_of_a_clock_change_agrees_with_the_truth(request, name, day, meter):
    """Hour by hour, the repeated and the missing one too: mass and base volume within 1e-6.

    The air meters' logs are in local time and hold the repeated hour twice: none of its rows is
    lost or doubled, so every hour is measured whole.
    """
    span = request.getfixturevalue(name)
    hours = span.hours(meter, day)
    run = RUN_BY_NAME[meter]
    rates = span.simulated.rates[meter]
    at = rates.index.to_numpy()
    start = span.simulated.month.calendar.start(day)
    for n in range(len(hours["duration"])):
        for column, rate in (
            ("mass", "mass_flow_kg_per_s"),
            ("base_volume", "base_volume_flow_m3_per_s"),
        ):
            true, measured = integrate(
                at,
                rates[rate].to_numpy(),
                start + n * HOUR,
                start + (n + 1) * HOUR,
                linear=run.feed.between == "linear",
                maximum_gap=run.feed.maximum_gap_s * SECOND,
            )
            assert measured == 3600.0 == hours["measured_time"][n]
            assert hours[column][n] == pytest.approx(true, rel=1e-6, abs=0.0), (n, column)


@pytest.mark.parametrize(
    ("first", "day", "hours"),
    [(AUTUMN, date(2026, 10, 25), 25), (SPRING, date(2026, 3, 29), 23)],
)
def test_gas_days_from_midnight(through, tmp_path, first, day, hours):
    """With gas days from 00:00, October 25 has 25 hours and March 29 has 23; all as the truth.

    The same logs under another contract: the truth is integrated over the other days.
    """
    simulated = simulate(
        seed=4,
        month=first.replace(day=1),
        first_day=first,
        days=3,
        noise=False,
        calibration=False,
        digits=9,
    )
    span = through(
        simulated,
        tmp_path,
        lambda text: text.replace('gas_day_start = "06:00"', 'gas_day_start = "00:00"'),
    )
    calendar = GasDayCalendar(TIME_ZONE, always(0))
    days = (day, day + timedelta(days=1))
    for meter in simulated.meters:
        run = RUN_BY_NAME[meter]
        records = simulated.records(meter, calibrated=False)
        whole = periods(run, simulated.month, simulated.start, simulated.end)
        truth = totals(run, records, whole, calendar, days)
        for gas_day in days:
            _check_day(span, meter, gas_day, hours if gas_day == day else 24)
            stored = span.day(meter, gas_day)
            assert stored["measured_fraction"] == 1.0
            for quantity in ("mass_kg", "base_volume_m3"):
                true = truth.loc[gas_day, quantity]
                assert stored[quantity] == pytest.approx(true, rel=1e-6, abs=0.0)
