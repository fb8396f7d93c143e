"""Stated uncertainties against simulated works whose truth is known, two-sided.

The whole campaign, which prints its tables as it goes (about 20 minutes on two cores)::

    pytest tests/uncertainty/test_uncertainty_on_truth.py -m slow -s
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from works_campaign import NOMINAL, ROWS, compare, enlarged, only
from works_physics import PRESSURES, TEMPERATURES, TrueGas
from works_processes import outcomes
from works_simulated import DAY, MONTH, Campaign
from works_site import GROUPS, METERS, NOISE_GROUP, RECTANGULAR, design

from meterfix.demo.detail import DetailGas

SITES = range(1, 1001)
"""Seeds of the campaign, fixed beforehand."""
TIMES = 5.0
LOWEST, HIGHEST = 0.93, 1.07
"""Of the standard deviation of the error in stated standard uncertainties."""
WITHIN_K_2 = 0.9545
"""Of a normal distribution."""
DEVIATIONS = 3.3
"""How far chance may take a figure, in its own standard deviations: once in a thousand."""
NEGLIGIBLE = 2e-5
"""Of the total: a lone source's part of an imbalance that is smaller is rounding of several."""
HOURLY_DAY = replace(DAY, interval=3600)
FEW = (range(2, 244, 2), range(1, 243, 2))
"""Seeds of balanced draws: sites with a stated calorific value, and with that of ISO 6976."""
ROUNDING = 1e-12


def spread(outcome, *, balanced=False):
    """Return the standard deviation of the ratio, (rows, 3); NaN where nothing is stated."""
    known = outcome.stated.min(axis=0) > ROUNDING * outcome.total.max(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(known, outcome.ratio.std(axis=0, ddof=0 if balanced else 1), np.nan)


def covered(outcome):
    """Return the share of errors within the expanded uncertainty, (rows, 3)."""
    return (np.abs(outcome.error) <= 2.0 * outcome.stated).mean(axis=0)


def coverage_interval(sites):
    half = DEVIATIONS * (WITHIN_K_2 * (1.0 - WITHIN_K_2) / sites) ** 0.5
    return WITHIN_K_2 - half, WITHIN_K_2 + half


# --- the short form --------------------------------------------------------------------------


def test_errors_of_few_sites_are_as_large_as_stated():
    """100 sites, one gas day: two-sided limits from the number of sites, mean and coverage too."""
    outcome = compare(Campaign(SITES[:100], DAY), NOMINAL)
    half = DEVIATIONS / (2.0 * 99) ** 0.5
    low, high = coverage_interval(100)
    assert np.all(np.abs(spread(outcome) - 1.0) < half)
    assert np.all(np.abs(outcome.ratio.mean(axis=0)) < DEVIATIONS / 10.0)
    assert np.all((covered(outcome) >= low) & (covered(outcome) <= high))


@pytest.mark.parametrize(
    ("without", "sites"),
    [((), FEW[0]), (("discharge coefficient",), FEW[1])],
    ids=["all", "all but C"],
)
def test_balanced_draws_leave_little_to_chance(without, sites):
    """The same with draws that are exactly uncorrelated over the sites: within 5 %.

    The discharge coefficient hides the other causes; without it they show.
    """
    factors = {**NOMINAL, **dict.fromkeys(without, 0.0)}
    campaign = Campaign(sites, HOURLY_DAY, balanced=True)
    found = spread(compare(campaign, factors), balanced=True)
    assert np.all(np.abs(found - 1.0) < 0.05)


def test_a_month_in_one_piece_is_the_sum_of_its_gas_days():
    """Errors and stated uncertainties agree, so that the campaign may take the short way.

    A reading at a gas day's edge counts in both days; with one reading an hour that takes 1 %
    off the random part, which is a thousandth of the whole variance.
    """
    campaign = Campaign(range(1, 5), MONTH)
    whole, days = (compare(campaign, NOMINAL, whole=way) for way in (True, False))
    assert np.allclose(whole.error, days.error, rtol=0.0, atol=1e-11 * days.total.max())
    assert np.allclose(whole.stated, days.stated, rtol=1e-3)


def test_the_true_gas_is_the_equation_of_state():
    """The polynomials stray from AGA8 DETAIL by less than 1e-7, far below what is compared."""
    draw = np.random.default_rng(1)
    p, T = draw.uniform(*PRESSURES, 60), draw.uniform(*TEMPERATURES, 60)
    compositions = [design(n).composition for n in range(3)]
    gas = TrueGas(compositions).density(np.tile(p, (3, 1)), np.tile(T, (3, 1)))
    for n, composition in enumerate(compositions):
        assert np.allclose(gas[n], DetailGas(composition).density(p, T), rtol=1e-7)


# --- the campaign ----------------------------------------------------------------------------

HEADS = ("all", *(f"{group} x 5" for group in [*GROUPS, NOISE_GROUP]))


@pytest.mark.slow
@pytest.mark.parametrize("period", [DAY, MONTH], ids=["gas day", "month"])
def test_errors_of_a_thousand_sites_are_as_large_as_stated(period):
    """0.93 to 1.07 for each device and the imbalance, in mass, base volume and energy.

    First with every error as stated, then with each group of sources five times as large, in
    truth and in the statement. Coverage at k = 2 where the enlarged source is normal.
    """
    settings = [NOMINAL, *(enlarged(group, TIMES) for group in [*GROUPS, NOISE_GROUP])]
    low, high = coverage_interval(len(SITES))
    print(f"\n{len(SITES)} sites, {period.days} gas days: standard deviation of error / stated")
    print(" " * 34, *(f"{row[:9]:>9}" for row in ROWS), " of all three   covered", sep="")
    print(" " * 34, *(f"{form(row):>9}" for row in ROWS), sep="")
    wrong = []
    for head, outcome in zip(HEADS, outcomes(SITES, period, settings), strict=True):
        found, share = spread(outcome), covered(outcome)
        print(
            f"{head:<34}",
            *(f"{value:9.3f}" for value in found[:, 0]),
            f"  {found.min():.3f}-{found.max():.3f}",
            f"  {100.0 * share.min():.1f}-{100.0 * share.max():.1f} %",
            sep="",
            flush=True,
        )
        if head == "all":
            figures = 100.0 * (outcome.stated / outcome.total).mean(axis=0)
            for n, quantity in enumerate(("mass", "base volume", "energy")):
                print(
                    f"{'  stated u of ' + quantity + ' [%]':<34}",
                    *(f"{value:9.3f}" for value in figures[:, n]),
                    sep="",
                )
                print(f"{'  ' + quantity:<34}", *(f"{v:9.3f}" for v in found[:, n]), sep="")
                print(
                    f"{'  ' + quantity + ', covered [%]':<34}",
                    *(f"{100.0 * value:9.1f}" for value in share[:, n]),
                    sep="",
                )
            assert np.all(np.abs(outcome.ratio.mean(axis=0)) < DEVIATIONS / len(SITES) ** 0.5)
        if not np.all((found > LOWEST) & (found < HIGHEST)):
            wrong.append((head, "standard deviation", found))
        normal = head.removesuffix(" x 5") not in RECTANGULAR
        if normal and not np.all((share >= low) & (share <= high)):
            wrong.append((head, "coverage", share))
    print(f"limits: {LOWEST}-{HIGHEST}; covered {100.0 * low:.1f}-{100.0 * high:.1f} %")
    assert not wrong


def form(row):
    """Return what is printed over a row's figures."""
    if row not in METERS:
        return ""
    words = {
        "flange": "flange",
        "corner": "corner",
        "D_and_D/2": "D-D/2",
        "ISA_1932": "ISA 1932",
        "long_radius": "long r.",
        "Venturi_nozzle": "V nozzle",
        "as_cast": "as cast",
        "machined": "machined",
        "rough_welded": "rough w.",
    }[METERS[row][1]]
    return "calibr." if row == "FT-10" else words


@pytest.mark.slow
@pytest.mark.parametrize("sites", FEW, ids=["stated value", "ISO 6976"])
@pytest.mark.parametrize("group", GROUPS)
def test_each_source_alone_errs_as_stated(group, sites):
    """Balanced draws of one group of sources, nothing else: within 1 %, the imbalance 3 %.

    Alone, no larger source hides a small one, and the sign of every path counts. What several
    sources of a group do to an imbalance differs from site to site, which costs some balance.
    """
    campaign = Campaign(sites, HOURLY_DAY, balanced=True)
    outcome = compare(campaign, only(group))
    found = spread(outcome, balanced=True)
    large = (outcome.stated / outcome.total).mean(axis=0) > NEGLIGIBLE
    print(
        f"\n{group:<32}",
        *(f"{value:7.3f}" for value in found[:, 2]),
        f"  {np.nanmin(found[large]):.4f}-{np.nanmax(found[large]):.4f}",
    )
    assert large.any()
    limit = np.where(np.array(ROWS) == "imbalance", 0.03, 0.01)[:, np.newaxis]
    assert np.all(~large | (np.abs(found - 1.0) < limit))


@pytest.mark.slow
@pytest.mark.parametrize("stated", [True, False], ids=["stated", "estimated"])
def test_noise_alone_errs_as_stated(stated):
    """Nothing but noise of readings, 400 sites, one gas day: limits from the number of sites.

    What is estimated from successive readings, which move by themselves as well, may be more
    than there is, never less.
    """
    campaign = Campaign(SITES[:400], DAY)
    outcome = compare(campaign, only(NOISE_GROUP), repeatability_stated=stated)
    found, half = spread(outcome), DEVIATIONS / (2.0 * 399) ** 0.5
    words = f"{NOISE_GROUP}, {'stated' if stated else 'estimated'}"
    print(f"\n{words:<32}", *(f"{value:7.3f}" for value in found[:, 0]))
    # the interpolation between readings is stated too, and does not err here
    assert np.all(found > (0.97 if stated else 0.5) - half)
    assert np.all(found < 1.0 + half)
