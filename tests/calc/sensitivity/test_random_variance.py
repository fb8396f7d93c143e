"""The random variance against Monte Carlo: noise drawn, the whole calculation repeated."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from meterfix.frames import SENSITIVE
from meterfix.model.site import Tapping, Thermometer

DRAWS = 2_000
HOURS = 3
NOISE = {"PDT-1": 60.0, "PT-1": 6_000.0, "TT-1": 0.3, "PB-1": 500.0}
"""One standard deviation [Pa, K]; large enough for each to matter."""
INTERVAL = 3.0 * np.sqrt(2.0 / (DRAWS - 1))
"""Three relative standard deviations of a variance found from so many draws."""


def noisy(day, draw, *, correlation=0.0):
    """Return the day with noise on every reading of every signal, in the signal's own terms."""
    changed = {}
    for role, signal in (
        ("differential_pressure", "PDT-1"),
        ("static_pressure", "PT-1"),
        ("temperature", "TT-1"),
        ("barometer", "PB-1"),
    ):
        parts = []
        for start, end, series in getattr(day, role):
            noise = draw.normal(0.0, NOISE[signal], len(series.values))
            for n in range(1, len(noise) if correlation else 0):
                noise[n] = correlation * noise[n - 1] + np.sqrt(1 - correlation**2) * noise[n]
            values = series.values + noise
            if role == "differential_pressure" and day.eras[0].differential_pressure_rooted:
                span = day.eras[0].differential_pressure_range.upper_range_value
                values = np.sqrt((series.values**2 * span + noise) / span)
            parts.append((start, end, replace(series, values=values)))
        changed[role] = tuple(parts)
    return replace(day, **changed)


def compared(lab, day, *, seed, correlation=0.0, **asked):
    """Return the stated variances over those of the draws: (hours, 3), and (3,) of the day."""
    draw = np.random.default_rng(seed)
    days = [noisy(day, draw, correlation=correlation) for _ in range(DRAWS)]
    drawn = np.array([lab.totals(record) for record in lab.compute(days, sensitive=False)])
    stated = np.mean(
        [record.random_variance for record in lab.compute(days[:: DRAWS // 20], **asked)], axis=0
    )
    return stated / drawn.var(axis=0, ddof=1), stated.sum(axis=0) / drawn.sum(axis=1).var(
        axis=0, ddof=1
    )


def steady_day(lab, one, *, every=60, p_every=None, t_every=None, p_linear=True, t_linear=True):
    """Return a day of constant readings; slow signals at their own rates."""

    def constant(seconds, value, **how):
        return lab.series(np.arange(-seconds, HOURS * 3600 + 2 * seconds, seconds), value, **how)

    dp = 9_000.0
    if one.differential_pressure_rooted:
        dp = np.sqrt(dp / one.differential_pressure_range.upper_range_value)
    return lab.meter_day(
        [one],
        constant(every, dp),
        constant(p_every or every, 0.5e6, linear=p_linear, age=900),
        constant(t_every or every, 279.0, linear=t_linear, age=900),
        barometer=constant(600, 1.005e5) if one.barometer else None,
    )


@pytest.mark.parametrize(
    ("arrangement", "rates"),
    [
        ({}, {}),
        ({"rooted": True}, {}),
        ({"tapping": Tapping.DOWNSTREAM, "thermometer": Thermometer.DOWNSTREAM}, {}),
        ({"barometer": "PB-1"}, {"p_every": 600, "p_linear": False, "t_every": 420}),
        ({"barometer": "PB-1"}, {"p_every": 300, "t_every": 600, "t_linear": False}),
    ],
    ids=["one rate", "rooted", "downstream", "pressure held", "temperature held"],
)
def test_stated_repeatability_gives_the_variance_of_hour_and_day(lab, arrangement, rates):
    """Hours and day agree with 2,000 drawn days within three standard deviations.

    An hour's share of a reading on its edge is counted as part of the day: at one reading a
    minute the hour's variance is up to 1 % larger for it, at one in ten minutes 10 %.
    """
    day = steady_day(lab, lab.era(hours=HOURS, **arrangement), **rates)
    hours, whole = compared(lab, day, seed=len(str(arrangement)) + len(rates), repeatability=NOISE)
    assert np.all(np.abs(whole - 1.0) < INTERVAL)
    assert np.all(hours > 1.0 - INTERVAL)
    assert np.all(hours < 1.0 + INTERVAL + (0.1 if rates else 0.01))


def test_a_carried_pressure_counts_once(lab):
    """A pressure held for ten minutes of readings is one error, not ten that average out."""
    one = lab.era(hours=HOURS)
    quiet = {"PDT-1": 0.0, "PT-1": 6_000.0, "TT-1": 0.0}
    often = steady_day(lab, one)
    seldom = steady_day(lab, one, p_every=600, p_linear=False)
    variances = [
        record.random_variance.sum(axis=0)
        for record in lab.compute([often, seldom], repeatability=quiet)
    ]
    assert np.allclose(variances[1] / variances[0], 10.0, rtol=0.01)


def test_unstated_repeatability_is_estimated_from_successive_differences(lab):
    """Independent noise: between the truth and a fifth more, for the effective number's sake."""
    day = steady_day(lab, lab.era(hours=HOURS, tapping=Tapping.DOWNSTREAM))
    _, whole = compared(lab, day, seed=5)
    assert np.all(whole > 1.0 - INTERVAL)
    assert np.all(whole < 1.2 + INTERVAL)


def test_correlated_noise_is_seen_in_the_effective_number_of_readings(lab):
    """Noise with a lag-1 correlation of 0.5 has three times the variance of independent noise.

    Successive differences show half of its variance; together: not less than 0.4 of the truth,
    where taking the readings for independent would give a sixth.
    """
    day = steady_day(lab, lab.era(hours=HOURS))
    _, whole = compared(lab, day, seed=6, correlation=0.5)
    assert np.all(whole > 0.4)
    assert np.all(whole < 1.2)


@pytest.mark.parametrize("linear", [True, False])
def test_a_wandering_rate_costs_what_the_readings_in_between_would_show(lab, linear):
    """Every tenth reading of a random walk: the error against all of them, hour and day."""
    draw = np.random.default_rng(7)
    fine = np.arange(0, HOURS * 3600 + 100, 10)
    one = lab.era(hours=HOURS)
    p, t = (lab.series(fine[::10], value) for value in (0.5e6, 279.0))
    errors, stated = [], []
    for _ in range(DRAWS // 4):
        dp = 12_000.0 + np.cumsum(draw.normal(0.0, 15.0, len(fine)))
        full = lab.meter_day([one], lab.series(fine, dp, linear=linear), p, t)
        part = lab.meter_day([one], lab.series(fine[::10], dp[::10], linear=linear), p, t)
        whole, sampled = lab.compute([full, part], repeatability=dict.fromkeys(NOISE, 0.0))
        errors.append((lab.totals(sampled) - lab.totals(whole)).sum(axis=0))
        stated.append(sampled.random_variance.sum(axis=0))
    ratio = np.mean(stated, axis=0) / np.var(errors, axis=0)
    # ten steps within an interval instead of a continuous walk: 1 % less, held 5 %
    assert np.all(np.abs(ratio - 1.0) < 2.0 * INTERVAL + 0.05)


def test_means_over_their_interval_do_not_wander(lab):
    """A cell that is the mean over its interval leaves nothing between readings."""
    seconds = np.arange(0, HOURS * 3600, 60)
    one = lab.era(hours=HOURS)
    dp = 9_000.0 + 3_000.0 * (np.arange(len(seconds)) % 2)
    p, t = (lab.series(seconds, value) for value in (0.5e6, 279.0))
    for mean_values in (True, False):
        how = {"linear": False, "interval": 60, "mean_values": mean_values}
        day = lab.meter_day([one], lab.series(seconds, dp, **how), p, t)
        variance = lab.compute([day], repeatability=dict.fromkeys(NOISE, 0.0))[0].random_variance
        assert np.all((variance == 0.0) == mean_values)


def test_variance_follows_the_quantities(lab):
    """Mass, base volume and energy are proportional, and so are their standard deviations."""
    record = lab.compute([lab.minute_day(lab.era())], repeatability=NOISE)[0]
    relative = np.sqrt(record.random_variance) / lab.totals(record)
    assert record.random_variance.shape == (2, len(SENSITIVE))
    assert np.all(relative > 0.0)
    assert np.allclose(relative, relative[:, :1], rtol=1e-12)
