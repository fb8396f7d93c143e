"""Noisy logs: results against the simulator's totals for the same drawn calibration errors.

`python -m pytest tests/truth -m slow -s -k noise` prints how the noise's model holds over seeds;
`-k root` prints the table of the bias that the root of a noisy differential pressure has.
"""

from __future__ import annotations

import math
from dataclasses import replace
from datetime import date

import numpy as np
import pytest

from meterfix.demo.loads import stream_of
from meterfix.demo.rates import periods, rates_of
from meterfix.demo.simulator import simulate
from meterfix.demo.works import DP, PRESSURE, TEMPERATURE

STANDARD_ERRORS = 4.0
SEEDS = (1, 2, 3, 4, 5)
"""Of the campaign over seeds: the first five, whatever they give."""


def _share_outside(bar):
    """Return the share of a normal deviate's draws beyond `bar` standard errors, both sides."""
    return math.erfc(bar / math.sqrt(2.0))


def _spread_of_count(count, bar):
    """Return the binomial standard error of how many of `count` deviates are beyond `bar`."""
    share = _share_outside(bar)
    return math.sqrt(count * share * (1.0 - share))


def _deviates(span, meter, quantity="mass_kg"):
    """Return each gas day's stored minus expected total in standard errors of its noise.

    Gas days without flow are left out, once their result is seen to be exactly 0. The expected
    total holds the second-order bias of the root: at most 2e-5 here, 0.08 standard errors.
    """
    expected = span.truth(meter, of="shown")[quantity]
    noise = span.simulated.noise_error(meter)
    found = []
    for day in span.simulated.days:
        stored = span.day(meter, day)[quantity]
        if expected[day] == 0.0:
            assert stored == 0.0, f"{meter} {day}: {stored}"
            continue
        found.append((stored - expected[day]) / noise.loc[day, quantity])
    return found


def test_example_is_within_four_standard_errors(example, meter):
    """Every gas day of the example: mass and base volume within 4 standard errors of the noise.

    The truth here is of the same transmitters, off by the same drawn zero and span errors. Of
    300 meter-days 0.02 are due outside; 4 binomial standard errors above that is still none.
    """
    for quantity in ("mass_kg", "base_volume_m3"):
        deviates = _deviates(example, meter, quantity)
        print(
            f"\n{meter} {quantity}: {len(deviates)} gas days, "
            f"worst {max(map(abs, deviates)):.2f} standard errors",
            end="",
        )
        assert len(deviates) >= 20
        assert max(map(abs, deviates)) <= STANDARD_ERRORS


def test_noise_is_all_that_there_is_between_them(example, meter):
    """From the very values logged, noise and all, the simulator's rates give the stored totals.

    What is left, the rounding to the loggers' decimals and the barometer's noise, is under half
    a standard error of the noise, and most of it far less.
    """
    logged = example.truth(meter, of="logged")
    noise = example.simulated.noise_error(meter)
    left = []
    for day in example.simulated.days:
        for quantity in ("mass_kg", "base_volume_m3"):
            difference = abs(example.day(meter, day)[quantity] - logged.loc[day, quantity])
            assert difference <= 0.5 * noise.loc[day, quantity], day
            if difference > 0.0:
                left.append(difference / noise.loc[day, quantity])
    assert np.median(left) < 0.15


def test_standard_errors_are_neither_wide_nor_narrow(example):
    """The example's 300-odd deviates have mean 0 and standard deviation 1.

    Their standard error is 1/sqrt(n) and 1/sqrt(2n); both are held to 4 of these and to a tenth
    for what the noise's model leaves out (uneven rows, rounding of the barometer).
    """
    deviates = np.array(
        [z for meter in example.simulated.meters for z in _deviates(example, meter)]
    )
    count = deviates.size
    print(f"\n{count} meter-days: mean {deviates.mean():+.3f}, deviation {deviates.std():.3f}")
    assert count >= 280
    assert abs(deviates.mean()) <= 4.0 / math.sqrt(count)
    assert abs(deviates.std() - 1.0) <= 4.0 / math.sqrt(2.0 * count) + 0.1


def test_noise_is_far_below_the_calibration_errors(example):
    """The bar is a sharp one: for most meters the drawn calibration errors are far outside it."""
    outside = 0
    for meter in example.simulated.meters:
        truth, noise = example.truth(meter), example.simulated.noise_error(meter)
        flowing = truth["mass_kg"] > 0.0
        shift = example.truth(meter, of="shown")["mass_kg"] - truth["mass_kg"]
        outside += bool((shift[flowing].abs() > 4.0 * noise.loc[flowing, "mass_kg"]).mean() > 0.5)
    assert outside >= 6


# --- the bias of the root ----------------------------------------------------------------------


def _with_root_noise(simulated, relative, seed):
    """Return a noiseless span with a relative noise on every dp, and on nothing else."""
    noisy = {}
    for meter, log in simulated.run_logs.items():
        dp = log.shown[DP]
        deviates = stream_of(seed, f"root noise {meter}").standard_normal(dp.size)
        none = np.zeros(dp.size)
        noisy[meter] = replace(
            log,
            logged={**log.logged, DP: dp * (1.0 + relative * deviates)},
            noise={DP: relative * np.abs(dp), PRESSURE: none, TEMPERATURE: none},
        )
    return replace(simulated, run_logs=noisy)


def _root_bias(span, relative):
    """Return the bias seen, its standard error, and the formula's, over all meters; relative.

    Each meter-day is divided by its own truth first, so that no meter outweighs the others.
    """
    seen, weights, formula = [], [], []
    for meter in span.simulated.meters:
        truth = span.truth(meter, of="shown")["mass_kg"]
        noise = span.simulated.noise_error(meter)
        for day in truth.index[truth > 0.0]:
            error = noise.loc[day, "mass_kg"] / truth[day]
            seen.append(span.day(meter, day)["mass_kg"] / truth[day] - 1.0)
            formula.append(noise.loc[day, "mass_root_bias_kg"] / truth[day])
            weights.append(error**-2)
    weight = math.fsum(weights)
    mean, expected = (
        math.fsum(w * value for w, value in zip(weights, values, strict=True)) / weight
        for values in (seen, formula)
    )
    # the simulator's own bias is the textbook's, E sqrt(dp + e) = sqrt(dp) (1 - s^2/(8 dp^2))
    assert expected == pytest.approx(-(relative**2) / 8.0, rel=0.02)
    day_error = math.sqrt(len(weights) / weight)
    return mean, weight**-0.5, expected, day_error


def _allowance(relative, standard_error):
    """Return how far the bias seen may be from the second-order formula.

    4 standard errors; the next term of the series, 15 r^4/128, half as large again; and 6 % for
    what else bends with dp: the expansibility, and p1 where the tapping is downstream.
    """
    return 4.0 * standard_error + 1.5 * 15.0 / 128.0 * relative**4 + 0.06 * relative**2 / 8.0


def test_root_of_a_noisy_dp_is_biased_low_as_the_formula_says(through, tmp_path):
    """Noise of 20 % of the dp: three gas days are 0.5 % low, as -s^2/(8 dp^2) says."""
    relative = 0.2
    simulated = simulate(
        seed=8, noise=False, digits=9, first_day=date(2026, 10, 27), days=3, flaws=False
    )
    span = through(_with_root_noise(simulated, relative, 8), tmp_path)
    seen, standard_error, formula, _ = _root_bias(span, relative)
    assert seen < -4.0 * standard_error
    assert abs(seen - formula) <= _allowance(relative, standard_error)


@pytest.mark.slow
def test_table_of_the_bias_of_the_root(through, tmp_path):
    """A month at five sizes of noise: the bias is negative and of the second-order formula's size.

    In standard errors of one meter-day it stays below 1 up to 10 % of noise; it is a bias all
    the same, and months do not average it away.
    """
    simulated = simulate(seed=9, noise=False, digits=9, flaws=False)
    print("\nnoise of dp  bias seen    its error    -s2/(8 dp2)  bias in standard errors of a day")
    for number, relative in enumerate((0.01, 0.02, 0.05, 0.10, 0.20)):
        noisy = _with_root_noise(simulated, relative, 100 + number)
        span = through(noisy, tmp_path / f"noise-{number}")
        seen, standard_error, formula, day_error = _root_bias(span, relative)
        print(
            f"{relative:9.0%}   {seen:+.5%}    {standard_error:.5%}    {formula:+.5%}"
            f"    {seen / day_error:+.2f}"
        )
        assert abs(seen - formula) <= _allowance(relative, standard_error)
        if relative >= 0.05:
            assert seen < -4.0 * standard_error


@pytest.mark.slow
def test_noise_over_seeds(through, tmp_path):
    """Whole months of seeds 1 to 5: as many meter-days beyond 2, 3 and 4 standard errors as due.

    Of n faultless normal deviates n erfc(bar/sqrt(2)) are beyond a bar; how many are found may
    differ from that by 4 binomial standard errors. For some 1,500 meter-days that allows about
    36 to 101 beyond 2, 0 to 12 beyond 3, and 1 beyond 4.
    """
    everything = np.concatenate(
        [
            _month_of_seed(through(simulate(seed=seed), tmp_path / f"seed-{seed}"), seed)
            for seed in SEEDS
        ]
    )
    count = everything.size
    assert count >= 5 * 280
    for bar in (2.0, 3.0, 4.0):
        found = int((np.abs(everything) > bar).sum())
        due, spread = count * _share_outside(bar), _spread_of_count(count, bar)
        print(f"beyond {bar:.0f}: {found} of {count}, due {due:.2f} +- {spread:.2f}")
        assert abs(found - due) <= STANDARD_ERRORS * spread, bar


def _month_of_seed(span, seed):
    """Print how each meter's gas days deviate, in standard errors; return the deviates."""
    print(f"\nseed {seed}: meter, gas days, mean and deviation [standard errors], mean [%], worst")
    found = []
    for meter in span.simulated.meters:
        deviates = np.array(_deviates(span, meter))
        truth = span.truth(meter, of="shown")["mass_kg"]
        percent = [
            100.0 * (span.day(meter, day)["mass_kg"] / truth[day] - 1.0)
            for day in truth.index[truth > 0.0]
        ]
        print(
            f"  {meter} {deviates.size:3d}  {deviates.mean():+.2f}  {deviates.std():.2f}"
            f"  {np.mean(percent):+.5f}  {np.abs(deviates).max():.2f}"
        )
        found.append(deviates)
    return np.concatenate(found)


@pytest.mark.slow
def test_noise_error_is_what_repeated_draws_give():
    """The standard error of a meter-day: 400 draws of the noise give it within 15 % (4 s.e.).

    The draws go through the simulator's own rates; what they leave out is the rounding.
    """
    simulated = simulate(seed=15, first_day=date(2026, 10, 28), days=1, digits=9, flaws=False)
    (day,) = simulated.days
    draws = 400
    print("\nmeter, standard error by the model [kg], by 400 draws, bias by the model, by draws")
    for meter, log in simulated.run_logs.items():
        model = simulated.noise_error(meter).loc[day]
        records = simulated.records(meter, calibrated=True)
        (period,) = periods(log.run, simulated.month, simulated.start, simulated.end)
        rng = stream_of(15, f"draws {meter}")
        exact = rates_of(log.run, period, records.signals, records.atmosphere)
        totals = []
        for _ in range(draws):
            drawn = {
                kind: values + log.noise[kind] * rng.standard_normal(values.size)
                for kind, values in log.shown.items()
            }
            span = replace(simulated, run_logs={meter: replace(log, shown=drawn)})
            noisy = span.records(meter, calibrated=True).signals
            rates = rates_of(log.run, period, noisy, records.atmosphere)
            totals.append(log.run.feed.interval_s * math.fsum((rates - exact)[:-1].tolist()))
        mean, deviation = float(np.mean(totals)), float(np.std(totals, ddof=1))
        print(
            f"  {meter} {model['mass_kg']:.4f}  {deviation:.4f}"
            f"  {model['mass_root_bias_kg']:+.4f}  {mean:+.4f}"
        )
        if model["mass_kg"] == 0.0:
            assert deviation == 0.0
            continue
        assert deviation == pytest.approx(model["mass_kg"], rel=0.15)
        assert abs(mean - model["mass_root_bias_kg"]) <= 4.0 * deviation / math.sqrt(draws)
