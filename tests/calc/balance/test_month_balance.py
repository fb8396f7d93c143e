"""A month's balance adds up the gas days that can be compared, and names the others."""

from dataclasses import replace
from math import fsum

import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.calc.balance.months import DayFigures, month_balance

MONTH = [f"2026-04-{n:02d}" for n in range(1, 31)]
DURATION = 30 * 86400.0


def day(number, inflow=100.0, outflow=99.0, tolerance=1.5, *, complete=True):
    return DayFigures(
        gas_day=MONTH[number - 1],
        duration=86400.0,
        inflow=inflow,
        outflow=outflow,
        vented=0.0,
        imbalance=inflow - outflow if complete else None,
        tolerance=tolerance,
    )


def test_complete_month_is_the_exact_sum_of_its_days():
    """Thirty complete days: fsum of each figure, fraction 1, no reason."""
    days = [day(n, inflow=0.1 * n, outflow=0.1 * n) for n in range(1, 31)]
    balance = month_balance(days, MONTH, DURATION)
    assert balance.inflow == fsum(0.1 * n for n in range(1, 31))
    assert balance.imbalance == 0.0
    assert balance.measured_fraction == 1.0
    assert balance.reason == ""
    assert balance.beyond_tolerance.answer == "no"


def test_incomplete_day_is_left_out_on_both_sides_and_named():
    """A day with a gap counts neither in nor out; figures cover the same 29 days."""
    days = [day(n, complete=n != 7) for n in range(1, 31)]
    balance = month_balance(days, MONTH, DURATION)
    assert balance.inflow == 2900.0
    assert balance.outflow == 29 * 99.0
    assert balance.tolerance == fsum([1.5] * 29)
    assert balance.measured_fraction == 29 / 30
    assert balance.reason == "gas days without complete input left out: 2026-04-07"


def test_missing_days_lower_the_measured_fraction():
    """A month of which only ten days exist says so, and names all the others as a range."""
    balance = month_balance([day(n) for n in range(1, 11)], MONTH, DURATION)
    assert balance.measured_fraction == 10 / 30
    assert balance.reason == ("gas days without complete input left out: 2026-04-11 to 2026-04-30")


def test_every_day_that_is_left_out_is_named():
    """Twelve days in seven stretches: none is hidden behind a count."""
    gaps = {1, 3, 5, 7, 8, 9, 12, 13, 20, 22, 29, 30}
    balance = month_balance([day(n, complete=n not in gaps) for n in range(1, 31)], MONTH, DURATION)
    assert balance.reason.partition("out: ")[2] == (
        "2026-04-01, 2026-04-03, 2026-04-05, 2026-04-07 to 2026-04-09, 2026-04-12 to 2026-04-13, "
        "2026-04-20, 2026-04-22, 2026-04-29 to 2026-04-30"
    )


def test_a_verdict_on_a_part_of_the_month_says_so():
    """Within tolerance on ten days of thirty is not within tolerance: the verdict says on what."""
    part = month_balance([day(n) for n in range(1, 11)], MONTH, DURATION)
    assert str(part.beyond_tolerance) == "no: on 10 of 30 gas days"
    whole = month_balance([day(n) for n in range(1, 31)], MONTH, DURATION)
    assert str(whole.beyond_tolerance) == "no"
    beyond = month_balance([day(n, outflow=90.0) for n in range(1, 30)], MONTH, DURATION)
    assert str(beyond.beyond_tolerance) == "yes: on 29 of 30 gas days"
    doubtful = month_balance([day(1)], MONTH, DURATION, None, ("A C",))
    assert str(doubtful.significant).startswith(
        "cannot be judged: no uncertainty is stated for A C"
    )
    unstated = month_balance([day(1, tolerance=None)], MONTH, DURATION)
    assert str(unstated.beyond_tolerance) == "cannot be judged: no tolerance is stated"


def test_volumes_at_different_base_conditions_are_not_added_up():
    """Half a month at 0 degC and half at 15 degC: no figure, no verdict, and why."""
    normal, standard = (101325.0, 273.15), (101325.0, 288.15)
    days = [replace(day(n), base=normal if n < 16 else standard) for n in range(1, 31)]
    balance = month_balance(days, MONTH, DURATION)
    assert (balance.inflow, balance.outflow, balance.vented) == (None, None, None)
    assert (balance.imbalance, balance.tolerance) == (None, None)
    why = "the base conditions change within the period"
    assert str(balance.beyond_tolerance) == f"cannot be judged: {why}"
    assert balance.reason == why
    same = month_balance([replace(one, base=standard) for one in days], MONTH, DURATION)
    assert same.inflow == 3000.0
    assert str(same.beyond_tolerance) == "no"


def test_imbalance_beyond_the_summed_tolerance_is_told():
    """2 % a day against a tolerance of 1.5 % a day: beyond."""
    balance = month_balance([day(n, outflow=98.0) for n in range(1, 31)], MONTH, DURATION)
    assert balance.beyond_tolerance.answer == "yes"


@pytest.mark.parametrize("complete", [False])
def test_nothing_comparable_gives_no_figure(complete):
    """Without a complete day there is no number, only a reason."""
    balance = month_balance([day(1, complete=complete)], MONTH, DURATION)
    assert balance.inflow is None
    assert balance.imbalance is None
    assert str(balance.beyond_tolerance) == "cannot be judged: no gas day has complete input"


@given(st.permutations(range(1, 31)))
def test_order_of_days_does_not_matter(order):
    """The sum is exactly rounded, so the order of the days cannot change a bit."""
    days = [day(n, inflow=100.0 + 0.1 * n) for n in order]
    one = month_balance(days, MONTH, DURATION)
    other = month_balance(sorted(days, key=lambda d: d.gas_day), MONTH, DURATION)
    assert (one.inflow, one.imbalance) == (other.inflow, other.imbalance)
