"""Totals of gas days and months from hours."""

from __future__ import annotations

from datetime import date
from math import fsum

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.calc.totals import PeriodTotal, day_total, month_total
from meterfix.frames import FLAGS, HOURLY_COLUMNS, HOURLY_INDEX, HourlyRecord


def record(**columns):
    """Make a gas day's record with the given columns; NaN totals and zero times elsewhere."""
    hours = len(next(iter(columns.values())))
    statistics = np.full((hours, len(HOURLY_COLUMNS)), np.nan)
    for name in HOURLY_COLUMNS:
        if name.startswith("lost_") or name in ("measured_time", "flow_time", "disputed_readings"):
            statistics[:, HOURLY_INDEX[name]] = 0.0
    statistics[:, HOURLY_INDEX["duration"]] = 3600.0
    for name, values in columns.items():
        statistics[:, HOURLY_INDEX[name]] = values
    return HourlyRecord("FT-1", date(2026, 1, 15), 0, statistics)


def test_hours_without_a_number_are_left_out():
    """One NaN hour of three: the day is the sum of the other two, its fraction two thirds."""
    total = day_total(record(mass=[1.0, np.nan, 2.0], measured_time=[3600.0, 0.0, 3600.0]))
    assert total.mass == 3.0
    assert total.measured_fraction == pytest.approx(2 / 3)
    assert total.duration == 10_800.0


def test_a_total_that_no_hour_has_is_none():
    """Without energy in any hour, the day and the month have none; never 0."""
    total = day_total(record(mass=[1.0, 2.0]))
    assert total.energy is None
    assert month_total([total, total]).energy is None
    assert month_total([total, total]).mass == 6.0


def test_a_part_of_the_energy_is_no_energy():
    """Energy of one measured hour of two is not the day's: None, and the other hour's seconds."""
    total = day_total(
        record(
            mass=[1.0, 2.0, np.nan],
            energy=[np.nan, 8.0, np.nan],
            measured_time=[3600.0, 1800.0, 0.0],
        )
    )
    assert (total.mass, total.energy) == (3.0, None)
    assert (total.without["mass"], total.without["energy"]) == (0.0, 3600.0)


def test_a_month_without_a_day_s_energy_has_none():
    """A day measured without energy takes the month's; a day not measured at all does not."""
    known = day_total(record(mass=[1.0], energy=[4.0], measured_time=[3600.0]))
    lacking = day_total(record(mass=[1.0], measured_time=[1800.0]))
    silent = day_total(record(mass=[np.nan]))
    assert month_total([known, silent]).energy == 4.0
    assert month_total([known, silent]).without["energy"] == 0.0
    month = month_total([known, lacking, silent, lacking])
    assert (month.mass, month.energy) == (3.0, None)
    assert month.without["energy"] == 3600.0


def test_shares_are_weighted_with_flow_time():
    """Flagged throughout 1,200 s and for half of 600 s of flow: 1,500 s of 1,800 s."""
    total = day_total(record(flow_time=[1200.0, 600.0, 0.0], share_over_range=[1.0, 0.5, np.nan]))
    assert total.flag_shares["over_range"] == pytest.approx(1500 / 1800)
    assert set(total.flag_shares) == {name for name, _ in FLAGS}
    still = day_total(record(flow_time=[0.0]))
    assert still.flag_shares["over_range"] is None
    month = month_total([total, still])
    assert month.flag_shares["over_range"] == pytest.approx(1500 / 1800)
    assert month.flow_time == 1800.0


def test_losses_and_disputes_add_up():
    """Seconds lost per reason and disputed readings are sums."""
    total = day_total(record(lost_excluded=[100.0, 20.5], disputed_readings=[1.0, 2.0]))
    assert total.lost["excluded"] == 120.5
    assert total.disputed_readings == 3
    assert month_total([total, total]).lost["excluded"] == 241.0
    assert month_total([total, total]).disputed_readings == 6


def test_a_negative_zero_does_not_leave():
    """A sum of negative zeros is 0.0."""
    assert str(day_total(record(mass=[-0.0, -0.0])).mass) == "0.0"


@given(st.lists(st.lists(st.floats(-1e12, 1e12), min_size=1, max_size=25), min_size=1, max_size=5))
def test_days_sum_to_the_month_to_the_last_bit(days):
    """A month is fsum(days), a day is fsum(hours), in any order of the days."""
    totals = [day_total(record(mass=hours)) for hours in days]
    assert [total.mass for total in totals] == [fsum(hours) for hours in days]
    assert month_total(totals).mass == fsum(fsum(hours) for hours in days)
    assert month_total(totals[::-1]) == month_total(totals)


def test_a_month_without_days_is_empty():
    """No gas days: no totals, no duration, and no division by zero."""
    empty = month_total([])
    assert isinstance(empty, PeriodTotal)
    assert (empty.mass, empty.duration, empty.measured_fraction) == (None, 0.0, 0.0)
