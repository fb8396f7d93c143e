"""Hourly statistics of signals and of flowing records, against the standard library."""

from __future__ import annotations

import math
import random
import statistics
from itertools import pairwise

import numpy as np
import pytest

START_MINUTES = range(0, 7200, 60)


def values(lab, record, role, hour):
    names = (
        "count", "time", "mean", "standard_deviation", "mean_squared_successive_difference",
        "minimum", "maximum", "first", "last", "changes", "longest_unchanged_time",
        "count_at_maximum",
    )  # fmt: skip
    return {name: lab.column(record, f"{role}_{name}")[hour] for name in names}


def test_statistics_agree_with_the_standard_library(lab):
    """Random readings, two hours: every statistic as `statistics` and plain loops give it."""
    draw = random.Random(1)  # noqa: S311 - a test's draw, no secret
    readings = [draw.choice([10.0, 20.0, 20.5, draw.uniform(5, 30)]) for _ in START_MINUTES]
    record = lab.one(lab.series(START_MINUTES, readings), end=7200)
    for hour in (0, 1):
        own = readings[60 * hour : 60 * hour + 60]
        found = values(lab, record, "differential_pressure", hour)
        steps = [b - a for a, b in pairwise(own)]
        longest = run = 0
        for step in steps:
            run = 0 if step else run + 60
            longest = max(longest, run)
        assert found == pytest.approx(
            {
                "count": 60,
                "time": 3540,
                "mean": statistics.fmean(own),
                "standard_deviation": statistics.stdev(own),
                "mean_squared_successive_difference": statistics.fmean(s * s for s in steps),
                "minimum": min(own),
                "maximum": max(own),
                "first": own[0],
                "last": own[-1],
                "changes": sum(step != 0 for step in steps),
                "longest_unchanged_time": longest,
                "count_at_maximum": 0,
            },
            rel=1e-13,
        )


def test_one_reading_has_no_spread(lab):
    """A single reading: no standard deviation, no successive difference, no time."""
    record = lab.one(lab.series([100], [7.0]), end=3600)
    found = values(lab, record, "differential_pressure", 0)
    assert math.isnan(found["standard_deviation"])
    assert math.isnan(found["mean_squared_successive_difference"])
    assert (found["count"], found["time"], found["changes"]) == (1, 0, 0)
    assert (found["mean"], found["longest_unchanged_time"]) == (7.0, 0.0)


def test_an_hour_without_readings_has_only_a_count(lab):
    """Hour 1 of three is empty: count 0, NaN elsewhere; its neighbours are untouched."""
    times = [*range(0, 3600, 60), *range(7200, 10_800, 60)]
    record = lab.one(lab.series(times, [1.0] * 60 + [2.0] * 60), end=10_800)
    empty = values(lab, record, "differential_pressure", 1)
    assert empty.pop("count") == 0
    assert all(math.isnan(value) for value in empty.values())
    assert values(lab, record, "differential_pressure", 0)["longest_unchanged_time"] == 3540
    assert values(lab, record, "differential_pressure", 2)["first"] == 2.0


def test_count_at_maximum_uses_the_range_that_is_known(lab):
    """A dp counts against the era's upper range value, a p without one against the hour's."""
    times = range(0, 3600, 60)
    record = lab.one(
        lab.series(times, [50.0] * 30 + [100.0] * 30),
        p=lab.series(times, [9e5] * 57 + [9.1e5] * 3),
        t=lab.series(times, [290.0] * 60),
        end=3600,
        eras=[
            lab.era(0, 1800, dp_range=50.0, t_range=300.0),
            lab.era(1800, 3600, dp_range=200.0, t_range=300.0),
        ],
    )
    assert values(lab, record, "differential_pressure", 0)["count_at_maximum"] == 30
    assert values(lab, record, "static_pressure", 0)["count_at_maximum"] == 3
    assert values(lab, record, "temperature", 0)["count_at_maximum"] == 0


def test_a_rooted_signal_is_at_its_maximum_at_one(lab):
    """A rooted signal is a fraction of full-scale flow: 1 and above is at the maximum."""
    times = range(0, 3600, 60)
    record = lab.one(
        lab.series(times, [0.5] * 50 + [1.0] * 6 + [1.04] * 4),
        end=3600,
        eras=[lab.era(0, 3600, rooted=True)],
    )
    assert values(lab, record, "differential_pressure", 0)["count_at_maximum"] == 10


def test_a_pair_does_not_run_from_one_transmitter_to_another(lab):
    """1.0 by A, then 3.0 by B: no change, no successive difference, two separate runs."""
    record = lab.one(
        [
            (0, 1800, lab.series(range(0, 1800, 60), [1.0] * 30)),
            (1800, 3600, lab.series(range(1800, 3601, 60), [3.0] * 31)),
        ],
        end=3600,
    )
    found = values(lab, record, "differential_pressure", 0)
    assert found["changes"] == 0
    assert found["mean_squared_successive_difference"] == 0
    assert found["longest_unchanged_time"] == 1740
    assert (found["first"], found["last"], found["count"]) == (1.0, 3.0, 60)


def test_flowing_records_agree_with_the_standard_library(lab):
    """Means of root and inverse root, covariance with absolute p, over records that flow."""
    draw = random.Random(2)  # noqa: S311 - a test's draw, no secret
    times = range(0, 3601, 60)
    dp = [draw.choice([0.0, draw.uniform(1, 100)]) for _ in times]
    p = [draw.uniform(8e5, 9e5) for _ in times]
    record = lab.one(lab.series(times, dp), p=lab.series(times, p), end=3600)
    flowing = [(math.sqrt(a), b + 1e5) for a, b in zip(dp[:-1], p[:-1], strict=True) if a > 0]
    roots, pressures = zip(*flowing, strict=True)
    assert lab.column(record, "flowing_records").tolist() == [len(flowing)]
    for name, expected in (
        ("mean_root_differential_pressure", statistics.fmean(roots)),
        ("mean_inverse_root_differential_pressure", statistics.fmean(1 / r for r in roots)),
        (
            "covariance_root_differential_pressure_static_pressure",
            statistics.covariance(roots, pressures),
        ),
    ):
        np.testing.assert_allclose(lab.column(record, name), expected, rtol=1e-11)


def test_no_flow_leaves_no_flowing_statistics(lab):
    """Without flow the means are not known; with one flowing record the covariance is not."""
    times = range(0, 3601, 60)
    record = lab.one(lab.series(times, [0.0] * 61), end=3600)
    assert np.isnan(lab.column(record, "mean_root_differential_pressure")).all()
    record = lab.one(lab.series(times, [4.0 if t == 60 else 0.0 for t in times]), end=3600)
    assert lab.column(record, "mean_root_differential_pressure").tolist() == [2.0]
    assert lab.column(record, "mean_inverse_root_differential_pressure").tolist() == [0.5]
    assert np.isnan(
        lab.column(record, "covariance_root_differential_pressure_static_pressure")
    ).all()
