"""How pressure, temperature and barometer reach the records, and what is flagged on the way."""

from __future__ import annotations

import numpy as np
import pytest

from meterfix.calc.totals.carried import carried_to, without_excluded

TIMES = list(range(0, 3601, 10))


def test_a_slow_pressure_is_interpolated(lab):
    """With dp each 10 s, p each 300 s rising by 1 Pa/s: line volume follows p at every record."""
    slow = range(0, 3601, 300)
    record = lab.one(
        lab.series(TIMES, [1.0] * 361),
        p=lab.series(slow, [900_000.0 + t for t in slow]),
        end=3600,
    )
    # absolute pressure in MPa is the plain line volume per mass; its mean is that at 1,800 s
    np.testing.assert_allclose(
        lab.column(record, "line_volume"), 3600 * (1_000_000 + 1800) / 1e6, rtol=1e-14
    )
    assert lab.column(record, "share_carried_value").tolist() == [1.0]


def test_a_slow_pressure_is_held_to_its_maximum_age(lab):
    """With p each 300 s, held for 100 s at most: records older than that have no pressure."""
    slow = range(0, 3601, 300)
    record = lab.one(
        lab.series(TIMES, [1.0] * 361, linear=False),
        p=lab.series(slow, [900_000.0] * 13, linear=False, maximum_age=100),
        end=3600,
    )
    # each 300 s: records at 0 ... 100 s are good (110 s), the 19 after them are not
    assert lab.column(record, "measured_time").tolist() == [12 * 110.0]
    assert lab.column(record, "lost_missing_static_pressure").tolist() == [12 * 190.0]
    np.testing.assert_allclose(lab.column(record, "share_carried_value"), 100 / 110, rtol=1e-15)


def test_an_interval_stamped_temperature_serves_its_interval(lab):
    """T rows of 60 s, one missing: the records inside the missing minute have no temperature."""
    rows = [t for t in range(0, 3601, 60) if t != 1200]
    record = lab.one(
        lab.series(TIMES, [1.0] * 361, linear=False),
        t=lab.series(rows, [290.0] * 60, interval=60),
        end=3600,
    )
    assert lab.column(record, "lost_missing_temperature").tolist() == [60.0]


def test_an_interpolation_longer_than_the_gap_is_missing(lab):
    """With p each 300 s and a maximum gap of 299 s: only records at p's own instants have it."""
    carried = carried_to(
        np.array([lab.at(t) for t in (0, 10, 300, 310)]),
        lab.series([0, 300, 599], [1.0, 2.0, 3.0], maximum_gap=299),
    )
    np.testing.assert_array_equal(carried.values, [1.0, np.nan, 2.0, 2.0 + 10 / 299])
    assert carried.first.tolist() == [0, -1, 1, 1]
    assert carried.second.tolist() == [0, -1, 1, 2]
    assert carried.exact.tolist() == [True, False, True, False]


def test_excluded_pressures_are_not_values(lab):
    """With p excluded from 600 to 1,200 s: no value inside, and no interpolation across it."""
    record = lab.one(
        lab.series(TIMES, [1.0] * 361, linear=False),
        p=lab.series(TIMES, [9e5] * 361, excluded=[(600, 1200)]),
        end=3600,
    )
    # linear p with a maximum gap of 300 s cannot reach from 590 s to 1,200 s
    assert lab.column(record, "lost_missing_static_pressure").tolist() == [600.0]
    assert lab.column(record, "lost_excluded").tolist() == [0.0]
    assert lab.column(record, "static_pressure_count").tolist() == [300.0]


def test_an_excluded_interval_is_half_open(lab):
    """A reading at the start of an excluded interval is dropped, one at its end is kept."""
    kept = without_excluded(lab.series([0, 10, 20, 30], [0, 1, 2, 3], excluded=[(10, 30)]))
    assert kept.values.tolist() == [0.0, 3.0]


def test_the_barometer_reaches_the_record(lab):
    """An era without a fixed atmospheric pressure takes the barometer's, held here."""
    record = lab.one(
        lab.series(TIMES, [1.0] * 361),
        end=3600,
        eras=[lab.era(0, 3600, atmosphere=None)],
        barometer=lab.series(
            [-100, 1795], [100_000.0, 200_000.0], linear=False, maximum_age=100_000
        ),
    )
    # linear rates: the step between 1,790 s and 1,800 s counts half
    np.testing.assert_allclose(
        lab.column(record, "line_volume"), 1795 * 1.0 + 1805 * 1.1, rtol=1e-14
    )


def test_a_missing_barometer_has_its_own_reason(lab):
    """Without a barometer's series, an era that needs one is lost to it."""
    record = lab.one(
        lab.series(TIMES, [1.0] * 361), end=3600, eras=[lab.era(0, 3600, atmosphere=None)]
    )
    assert lab.column(record, "lost_missing_barometric_pressure").tolist() == [3600.0]


def test_a_replaced_pressure_transmitter_serves_its_part(lab):
    """Pressure is 900 kPa by A up to 1,800 s and 1,900 kPa by B from then on."""
    record = lab.one(
        lab.series(TIMES, [1.0] * 361),
        p=[
            (0, 1800, lab.series(TIMES, [900_000.0] * 361)),
            (1800, 3600, lab.series(TIMES, [1_900_000.0] * 361)),
        ],
        end=3600,
    )
    np.testing.assert_allclose(lab.column(record, "line_volume"), 1800 * 1.0 + 1800 * 2.0)
    assert lab.column(record, "static_pressure_changes").tolist() == [0.0]
    assert lab.column(record, "static_pressure_mean").tolist() == [1_400_000.0]


def test_disputed_readings_are_counted_once_and_shared_by_time(lab):
    """One disputed dp at 600 s touches two intervals of 10 s; one disputed p those it reaches."""
    record = lab.one(lab.series(TIMES, [1.0] * 361, disputed={600}), end=3600)
    assert lab.column(record, "disputed_readings").tolist() == [1.0]
    np.testing.assert_allclose(lab.column(record, "share_disputed_reading"), 20 / 3600, rtol=1e-15)
    slow = range(0, 3601, 100)
    record = lab.one(
        lab.series(TIMES, [1.0] * 361),
        p=lab.series(slow, [9e5] * 37, disputed={600}),
        end=3600,
    )
    assert lab.column(record, "disputed_readings").tolist() == [1.0]
    # interpolated from 500 s (exclusive) to 700 s (exclusive), and one interval on either side
    np.testing.assert_allclose(lab.column(record, "share_disputed_reading"), 200 / 3600, rtol=1e-15)


def test_a_disputed_reading_serves_every_hour_that_uses_it(lab):
    """A disputed dp at 3,600 s ends hour 0 and begins hour 1; an unused one is not counted."""
    times = range(0, 7201, 60)
    dp = lab.series(times, [1.0] * 121, disputed={3600})
    record = lab.one(dp, end=7200)
    assert lab.column(record, "disputed_readings").tolist() == [1.0, 1.0]
    held = lab.one(lab.series(times, [1.0] * 121, disputed={3600}, linear=False), end=7200)
    assert lab.column(held, "disputed_readings").tolist() == [0.0, 1.0]
    unused = lab.one(
        lab.series(times, [1.0] * 121, disputed={600}, excluded=[(590, 610)]), end=7200
    )
    assert lab.column(unused, "disputed_readings").tolist() == [0.0, 0.0]


def test_a_disputed_neighbour_in_the_next_hour_counts_in_this_one(lab):
    """A disputed p at 3,650 s shapes the p interpolated from 3,450 s on, so hour 0 has it too."""
    slow = range(50, 7500, 200)
    record = lab.one(
        lab.series(range(0, 7201, 10), [1.0] * 721),
        p=lab.series(slow, [9e5] * len(slow), disputed={3650}),
        end=7200,
    )
    assert lab.column(record, "disputed_readings").tolist() == [1.0, 1.0]
    np.testing.assert_allclose(
        lab.column(record, "share_disputed_reading") * lab.column(record, "flow_time"),
        [150.0, 250.0],
    )


def test_a_disputed_reading_beside_an_era_edge_is_counted_once(lab):
    """The record at 600 s is computed for both eras around 605 s and is still one reading."""
    record = lab.one(
        lab.series(TIMES, [1.0] * 361, disputed={600}),
        end=3600,
        eras=[lab.era(0, 605), lab.era(605, 3600)],
    )
    assert lab.column(record, "disputed_readings").tolist() == [1.0]


@pytest.mark.parametrize("role", ["p", "t"])
def test_disputes_of_other_signals_count(lab, role):
    """A disputed p and a disputed T at an instant of dp are one reading each."""
    value = {"p": 9e5, "t": 290.0}[role]
    record = lab.one(
        lab.series(TIMES, [1.0] * 361, disputed={900}),
        end=3600,
        **{role: lab.series(TIMES, [value] * 361, disputed={900, 910})},
    )
    assert lab.column(record, "disputed_readings").tolist() == [3.0]
    np.testing.assert_allclose(lab.column(record, "share_disputed_reading"), 30 / 3600, rtol=1e-15)


def test_implausible_values_are_flagged(lab):
    """An implausible T at 900 s flags the two intervals that it ends and begins."""
    record = lab.one(
        lab.series(TIMES, [1.0] * 361),
        t=lab.series(TIMES, [290.0] * 361, implausible={900}),
        end=3600,
    )
    np.testing.assert_allclose(lab.column(record, "share_implausible_value"), 20 / 3600, rtol=1e-15)


def test_means_of_dp_are_flagged_unless_rooted(lab):
    """A mean of dp has a root that is biased high; a mean of its root has not."""
    dp = lab.series(range(0, 3600, 60), [0.5] * 60, interval=60, mean_values=True)
    record = lab.one(dp, end=3600)
    assert lab.column(record, "share_mean_of_differential_pressure").tolist() == [1.0]
    rooted = lab.one(dp, end=3600, eras=[lab.era(0, 3600, rooted=True)])
    assert lab.column(rooted, "share_mean_of_differential_pressure").tolist() == [0.0]


def test_a_flag_of_the_record_keeps_its_share_of_flow_time(lab):
    """hold: dp over range for 10 of 60 minutes, no flow for 30: a share of 10/30."""
    times = range(0, 3601, 60)
    values = [0.0 if t < 1800 else 1000.0 if t < 2400 else 5.0 for t in times]
    record = lab.one(lab.series(times, values, linear=False), end=3600)
    assert lab.column(record, "flow_time").tolist() == [1800.0]
    np.testing.assert_allclose(lab.column(record, "share_over_range"), 1 / 3, rtol=1e-15)
    assert lab.column(record, "share_carried_value").tolist() == [0.0]
