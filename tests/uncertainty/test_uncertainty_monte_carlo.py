"""Stated uncertainties against Monte Carlo over the whole calculation (JCGM 101:2008).

The whole of it, which prints its tables (about five minutes on two cores)::

    pytest tests/uncertainty/test_uncertainty_monte_carlo.py -m slow -s
"""

from __future__ import annotations

import os
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context

import numpy as np
import pytest
from works_campaign import ROWS
from works_draws import HIGH, LOW, PERIODS, VERY_LOW, monte_carlo
from works_simulated import QUANTITIES

DRAWS = 60_000
SEED = 101
WITHIN = 0.01
"""Where dp is at least ten times its own standard uncertainty."""
DESIGNS = (0, 1)
"""One with a stated calorific value, one with that of ISO 6976."""


def agrees(compared, intervals=1.0):
    """Return where the stated uncertainty is within 1 % of what the draws allow."""
    known = compared.stated > 1e-12 * compared.total
    reach = WITHIN + intervals * compared.half_interval
    with np.errstate(invalid="ignore"):
        return ~known | (np.abs(compared.ratio - 1.0) <= reach)


@pytest.mark.parametrize("number", DESIGNS)
def test_few_draws(number):
    """1,000 draws at high dp: every row within 1 % and twice the draws' own interval."""
    assert agrees(monte_carlo(number, HIGH, 1_000, SEED), 2.0).all()


@pytest.mark.slow
def test_stated_uncertainties_are_those_of_a_monte_carlo():
    """Within 1 % and the draws' own interval: hour, gas day and month, every device, three totals.

    At a high dp and at one of ten times its standard uncertainty. At four times, where the root
    bends visibly, the draws' own 95 % interval of the total is shown beside the stated one.
    """
    settings = [(number, level) for level in (HIGH, LOW, VERY_LOW) for number in DESIGNS]
    wrong = []
    with ProcessPoolExecutor(os.cpu_count(), mp_context=get_context("spawn")) as pool:
        tasks = [pool.submit(monte_carlo, *setting, DRAWS, SEED) for setting in settings]
        for (number, level), task in zip(settings, tasks, strict=True):
            found = task.result()
            shown(number, level, found)
            if level != VERY_LOW and not agrees(found).all():
                wrong.append((number, level.words, found.ratio))
    assert not wrong


def shown(number, level, found):
    """Print one setting's table, figures in % of the total."""
    value = "a stated calorific value" if number == 0 else "the calorific value of ISO 6976"
    print(f"\n{level.words}, {value}, {DRAWS} draws: standard uncertainty [%]")
    heads = "".join(f"{quantity:>12}: stated    drawn [95 % interval] " for quantity in QUANTITIES)
    print(f"{'':<18}{heads}")
    percent = 100.0 / found.total
    for n, row in enumerate(ROWS):
        for m, period in enumerate(PERIODS):
            line = f"{row:<11}{period:<7}"
            for q in range(len(QUANTITIES)):
                at = n, m, q
                drawn, half = found.drawn[at] * percent[at], found.half_interval[at]
                line += (
                    f"{found.stated[at] * percent[at]:20.4f}{drawn:9.4f}"
                    f" [{drawn * (1.0 - half):.4f}, {drawn * (1.0 + half):.4f}]"
                )
            print(line)
    if level == VERY_LOW:
        print(f"\n{level.words}, {value}: 95 % of the drawn totals, and the stated one, k = 2 [%]")
        for n, row in enumerate(ROWS):
            for m, period in enumerate(PERIODS):
                low, high = found.coverage[:, n, m, 0] * percent[n, m, 0]
                stated = 2.0 * found.stated[n, m, 0] * percent[n, m, 0]
                print(
                    f"{row:<11}{period:<7}mass: {low:+8.2f} to {high:+7.2f}   "
                    f"stated {-stated:+8.2f} to {stated:+7.2f}"
                )
    else:
        known = found.stated > 1e-12 * found.total
        ratio = found.ratio[known]
        print(f"stated over drawn: {ratio.min():.4f} to {ratio.max():.4f}")
