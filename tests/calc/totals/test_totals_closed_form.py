"""Totals whose value can be written down by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest

MINUTES = range(0, 86_401, 60)


def test_constant_flow_fills_every_hour(lab):
    """2 kg/s over a day logged each minute is 7,200 kg an hour, measured throughout."""
    record = lab.one(lab.series(MINUTES, [2.0] * len(MINUTES)))
    assert record.statistics.shape[0] == 24
    np.testing.assert_array_equal(lab.column(record, "mass"), 7200.0)
    np.testing.assert_array_equal(lab.column(record, "energy"), 21600.0)
    np.testing.assert_allclose(lab.column(record, "line_volume"), 7200.0, rtol=1e-15)
    for name in ("duration", "measured_time", "flow_time"):
        np.testing.assert_array_equal(lab.column(record, name), 3600.0)
    for reason in lab.reasons:
        np.testing.assert_array_equal(lab.column(record, f"lost_{reason}"), 0.0)


@pytest.mark.parametrize("hours", [23, 24, 25, 24.5, 0.5])
def test_hours_count_in_elapsed_time(lab, hours):
    """A day of 23, 24 or 25 hours has so many rows; half an hour more is a short last row."""
    end = int(hours * 3600)
    times = range(0, end + 1, 60)
    record = lab.one(lab.series(times, [1.0] * len(times)), end=end)
    durations = [3600.0] * int(hours) + ([1800.0] if hours % 1 else [])
    assert lab.column(record, "duration").tolist() == durations
    assert lab.column(record, "mass").tolist() == durations


def test_hours_start_at_the_gas_day_whatever_the_clock_shows(lab):
    """In a zone with a half-hour offset the gas day starts at half past by UTC, so do its hours."""
    start = 1800
    record = lab.one(
        lab.series(range(0, 90_001, 60), [1.0] * 1501), start=start, end=start + 86_400
    )
    assert record.start == lab.at(1800)
    assert lab.column(record, "mass").tolist() == [3600.0] * 24
    assert lab.column(record, "differential_pressure_first").tolist() == [1.0] * 24


def test_a_ramp_is_cut_exactly_at_the_hour(lab):
    """Rate t/100 kg/s logged 100 s off the hour: hour 0 has 3600^2/200, hour 1 the difference."""
    times = [0, 250, 3500, 3700, 7200]
    record = lab.one(lab.series(times, [t / 100 for t in times], maximum_gap=4000), end=7200)
    np.testing.assert_allclose(
        lab.column(record, "mass"), [3600**2 / 200, (7200**2 - 3600**2) / 200], rtol=1e-15
    )


def test_a_held_step_is_cut_exactly_at_the_hour(lab):
    """hold: 1 kg/s up to the record at 3,700 s, then 5 kg/s: hour 1 has 100 + 5 x 3,500 kg."""
    record = lab.one(
        lab.series([0, 3500, 3700, 7200], [1, 1, 5, 9], linear=False, maximum_gap=4000), end=7200
    )
    assert lab.column(record, "mass").tolist() == [3600.0, 100.0 + 5 * 3500.0]


def test_nothing_is_bridged_beyond_the_maximum_gap(lab):
    """Readings at 0, 300, 601 and 900 s, maximum gap 300 s: 301 s are missing, for hold as well."""
    for linear in (True, False):
        record = lab.one(lab.series([0, 300, 601, 900], [2.0] * 4, linear=linear), end=3600)
        assert lab.column(record, "measured_time").tolist() == [599.0]
        assert lab.column(record, "mass").tolist() == [1198.0]
        assert lab.column(record, "lost_missing_differential_pressure").tolist() == [3001.0]


def test_the_last_record_contributes_nothing_until_a_next_one_exists(lab):
    """A single held reading measures nothing; an hour without measured time has no total."""
    record = lab.one(lab.series([1800], [2.0], linear=False, maximum_gap=10_000), end=7200)
    assert lab.column(record, "measured_time").tolist() == [0.0, 0.0]
    assert all(math.isnan(mass) for mass in lab.column(record, "mass"))
    assert lab.column(record, "differential_pressure_count").tolist() == [1.0, 0.0]


def test_neighbours_beyond_the_day_serve_its_edges(lab):
    """Readings 30 s before the start and after the end close the day's first and last minute."""
    times = range(-30, 3631, 60)
    record = lab.one(lab.series(times, [t + 30.0 for t in times]), end=3600)
    assert lab.column(record, "measured_time").tolist() == [3600.0]
    assert lab.column(record, "mass").tolist() == [3600.0 * 1830.0]
    assert lab.column(record, "differential_pressure_count").tolist() == [60.0]


def test_an_isolation_is_lost_not_flow(lab):
    """Excluded from 600 to 1,200 s with readings inside: those are dropped and 600 s are lost."""
    times = range(0, 3601, 60)
    values = [0.0 if 600 <= t < 1200 else 2.0 for t in times]
    record = lab.one(lab.series(times, values, excluded=[(600, 1200)]), end=3600)
    # the interval from the reading at 540 s to the one at 1,200 s is longer than the maximum
    # gap: its minute outside the isolation is missing, not excluded
    assert lab.column(record, "lost_excluded").tolist() == [600.0]
    assert lab.column(record, "lost_missing_differential_pressure").tolist() == [60.0]
    assert lab.column(record, "mass").tolist() == [2.0 * 2940.0]
    assert lab.column(record, "differential_pressure_minimum").tolist() == [2.0]
    assert lab.column(record, "differential_pressure_count").tolist() == [50.0]


def test_an_isolation_shorter_than_the_gap_takes_only_itself(lab):
    """Excluded from 630 to 650 s, between readings: 20 s are lost, the ramp around them counts."""
    times = range(0, 3601, 60)
    record = lab.one(lab.series(times, times, excluded=[(630, 650)]), end=3600)
    assert lab.column(record, "lost_excluded").tolist() == [20.0]
    np.testing.assert_allclose(
        lab.column(record, "mass"), 3600**2 / 2 - (650**2 - 630**2) / 2, rtol=1e-15
    )


def test_an_era_change_inside_an_hour_splits_at_its_instant(lab):
    """Base volume factor 1 up to 1,830 s, then 3: the interval across it is computed twice."""
    times = range(0, 3601, 60)
    record = lab.one(
        lab.series(times, times),
        end=3600,
        eras=[lab.era(0, 1830, factor=1.0), lab.era(1830, 3600, factor=3.0)],
    )
    np.testing.assert_allclose(
        lab.column(record, "base_volume"),
        1830**2 / 2 + 3 * (3600**2 - 1830**2) / 2,
        rtol=1e-15,
    )
    np.testing.assert_allclose(lab.column(record, "mass"), 3600**2 / 2, rtol=1e-15)
    assert lab.column(record, "flowing_records").tolist() == [59.0]


def test_time_before_the_first_terms_is_not_in_service(lab):
    """A meter in service from 1,000 s on loses 1,000 s, whatever its signals say."""
    times = range(0, 3601, 60)
    record = lab.one(lab.series(times, [2.0] * 61), end=3600, eras=[lab.era(1000, 3600)])
    assert lab.column(record, "lost_meter_not_in_service").tolist() == [1000.0]
    assert lab.column(record, "mass").tolist() == [5200.0]


def test_energy_may_be_unknown_alone(lab):
    """An era without energy terms has mass, and its hour no energy."""
    times = range(0, 7201, 60)
    record = lab.one(
        lab.series(times, [2.0] * len(times)),
        end=7200,
        eras=[lab.era(0, 1800, energy=False), lab.era(1800, 7200)],
    )
    assert lab.column(record, "mass").tolist() == [7200.0, 7200.0]
    assert lab.column(record, "measured_time").tolist() == [3600.0, 3600.0]
    assert math.isnan(lab.column(record, "energy")[0])
    assert lab.column(record, "energy")[1] == 21600.0


def test_no_interval_runs_between_two_transmitters(lab):
    """Transmitter A ends at 1,800 s with its last reading at 1,790 s, B begins at 1,820 s.

    Neither has a reading beyond the edge, so the 30 s between are missing, not bridged.
    """
    record = lab.one(
        [
            (0, 1800, lab.series(range(0, 1791, 10), [2.0] * 180)),
            (1800, 3600, lab.series(range(1820, 3601, 10), [4.0] * 179)),
        ],
        end=3600,
    )
    assert lab.column(record, "lost_missing_differential_pressure").tolist() == [30.0]
    assert lab.column(record, "mass").tolist() == [2.0 * 1790 + 4.0 * 1780]
    assert lab.column(record, "differential_pressure_count").tolist() == [358.0]


def test_a_transmitters_own_reading_beyond_the_edge_closes_its_interval(lab):
    """A reads on beyond 1,800 s and B before it: both serve up to the edge, nothing is lost."""
    record = lab.one(
        [
            (0, 1800, lab.series(range(0, 3601, 50), range(0, 3601, 50))),
            (1800, 3600, lab.series(range(30, 3631, 60), [5.0] * 61)),
        ],
        end=3600,
    )
    assert lab.column(record, "measured_time").tolist() == [3600.0]
    assert lab.column(record, "mass").tolist() == [1800**2 / 2 + 5.0 * 1800]


def test_interval_stamped_rows_serve_their_own_interval_only(lab):
    """Minute rows with one missing: each rate holds over its minute, the missing minute is lost."""
    times = [t for t in range(0, 3600, 60) if t != 1200]
    record = lab.one(lab.series(times, [2.0] * 59, interval=60), end=3600)
    assert lab.column(record, "measured_time").tolist() == [3540.0]
    assert lab.column(record, "lost_missing_differential_pressure").tolist() == [60.0]
    assert lab.column(record, "mass").tolist() == [2.0 * 3540.0]


def test_an_interval_ends_where_the_next_row_begins(lab):
    """Rows of 60 s at -20, 45 and 90 s: 40 s of the first are in the day, the second is cut."""
    record = lab.one(lab.series([-20, 45, 90], [8.0, 2.0, 4.0], interval=60), end=3600)
    assert lab.column(record, "mass").tolist() == [8.0 * 40 + 2.0 * 45 + 4.0 * 60]
    assert lab.column(record, "measured_time").tolist() == [145.0]


def test_reverse_flow_takes_the_intervals_at_both_its_ends(lab):
    """linear: one reading below zero loses the minute before and after it, under its own reason."""
    times = range(0, 3601, 60)
    values = [-5.0 if t == 600 else 2.0 for t in times]
    record = lab.one(lab.series(times, values), end=3600)
    assert lab.column(record, "lost_reverse_flow").tolist() == [120.0]
    held = lab.one(lab.series(times, values, linear=False), end=3600)
    assert lab.column(held, "lost_reverse_flow").tolist() == [60.0]


def test_the_first_records_reason_counts(lab):
    """Reverse flow followed by a missing pressure: their common minute is lost to reverse flow."""
    times = list(range(0, 3601, 60))
    values = [-5.0 if t == 600 else 2.0 for t in times]
    pressure = lab.series([t for t in times if t != 660], [9e5] * 60, linear=False, maximum_age=0)
    record = lab.one(lab.series(times, values), p=pressure, end=3600)
    assert lab.column(record, "lost_reverse_flow").tolist() == [120.0]
    assert lab.column(record, "lost_missing_static_pressure").tolist() == [60.0]


def test_flow_time_counts_pieces_that_flow_at_either_end(lab):
    """Rates 0, 0, 3, 0, 0 a minute apart: two minutes of flow; exact zero where nothing flows."""
    times = range(0, 3601, 60)
    record = lab.one(lab.series(times, [3.0 if t == 1800 else 0.0 for t in times]), end=3600)
    assert lab.column(record, "flow_time").tolist() == [120.0]
    assert lab.column(record, "mass").tolist() == [180.0]
    still = lab.one(lab.series(times, [-0.0] * 61), end=3600)
    assert lab.column(still, "flow_time").tolist() == [0.0]
    assert lab.column(still, "mass").tolist() == [0.0]
    assert math.copysign(1.0, lab.column(still, "mass")[0]) == 1.0
    assert math.copysign(1.0, lab.column(still, "differential_pressure_mean")[0]) == 1.0
    assert math.isnan(lab.column(still, "share_over_range")[0])


def test_a_day_without_any_reading_is_lost_whole(lab):
    """No readings at all: no totals, counts of zero, every hour lost."""
    record = lab.one(lab.series([], []))
    assert np.isnan(lab.column(record, "mass")).all()
    assert lab.column(record, "lost_missing_differential_pressure").tolist() == [3600.0] * 24
    assert lab.column(record, "differential_pressure_count").tolist() == [0.0] * 24
    assert lab.column(record, "flowing_records").tolist() == [0.0] * 24
    assert lab.column(record, "disputed_readings").tolist() == [0.0] * 24


def test_no_days_give_no_records(lab):
    """An empty batch is no error."""
    assert lab.run() == []


def test_a_gas_day_that_ends_before_it_starts_is_refused(lab):
    """The message names the meter and the gas day."""
    with pytest.raises(ValueError, match="meter FT-1, gas day 2026-01-15"):
        lab.one(lab.series([0], [1.0]), end=0)


def test_records_that_did_not_converge_are_named(lab):
    """666 Pa does not converge here: its instant is reported, once, inside the day only."""
    record = lab.one(
        lab.series([-60, 0, 60, 120, 180, 3600], [666, 1, 666, 1, 1, 666]),
        end=3600,
        eras=[lab.era(0, 90), lab.era(90, 3600)],
    )
    assert record.unsolved == (lab.at(60),)
    assert lab.column(record, "lost_not_converged").tolist() == [120.0]
