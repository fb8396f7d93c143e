"""Laws of the propagation: what is shared adds with sign, what is random adds in quadrature."""

from __future__ import annotations

from dataclasses import replace
from datetime import date, timedelta

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meterfix.calc.uncertainty import (
    COVERAGE_FACTOR,
    add_up,
    day_doubt,
    hourly_contributions,
    hourly_standard_uncertainty,
    relevant_sources,
)
from meterfix.frames import HOURLY_COLUMNS, SENSITIVE, HourlyRecord
from meterfix.model.calendar import DAY, HOUR
from meterfix.model.uncertainty import Part, UncertaintySource

START = 1_768_453_200_000_000
"""2026-01-15 05:00 UTC."""
ZERO, SPAN, BORE = (
    ("differential_pressure_zero", "PDT-1"),
    ("differential_pressure_span", "PDT-1"),
    ("bore", "FT-1"),
)
DENSITY = ("base_density", "gas")
QUANTITY = st.sampled_from(SENSITIVE)
SIZE = st.floats(-5.0, 5.0).filter(lambda size: abs(size) > 1e-3)
HOURS = st.integers(1, 24)
quick = settings(max_examples=60, deadline=None)


def record(sensitivities, *, start=START, variance=0.0, meter="FT-1"):
    """Return a gas day; by parameter one derivative for all hours and totals, or an array."""
    keys = tuple(sorted(sensitivities))
    arrays = [np.asarray(sensitivities[key], dtype=np.float64) for key in keys]
    hours = max((len(array) for array in arrays if array.ndim), default=24)
    table = np.zeros((hours, len(keys), 3))
    for n, array in enumerate(arrays):
        table[:, n, :] = array if array.ndim != 1 else array[:, np.newaxis]
    return HourlyRecord(
        meter=meter,
        gas_day=date(2026, 1, 15) + timedelta(days=(start - START) // DAY),
        start=start,
        statistics=np.zeros((hours, len(HOURLY_COLUMNS))),
        parameters=keys,
        sensitivities=table,
        random_variance=np.broadcast_to(np.float64(variance), (hours, 3)).copy(),
    )


def source(name, *parts):
    return UncertaintySource(name, "transmitter", tuple(parts))


def part(key, size, **more):
    return Part(*key, size, **more)


def of_hours(count, value):
    return np.full(count, value)


# --- what is shared adds with sign -----------------------------------------------------------


@quick
@given(SIZE, SIZE, HOURS, QUANTITY)
def test_uncertainty_is_proportional_to_a_size(size, factor, hours, quantity):
    """A source so many times as large makes an uncertainty so many times as large."""
    day = record({ZERO: of_hours(hours, 3.0)})
    one = day_doubt(day, [source("zero", part(ZERO, size))]).standard_uncertainty(quantity)
    many = day_doubt(day, [source("zero", part(ZERO, factor * size))])
    assert many.standard_uncertainty(quantity) == pytest.approx(abs(factor) * one, rel=1e-12)


@quick
@given(SIZE, SIZE, SIZE, SIZE)
def test_parts_of_one_source_add_with_sign_and_sources_in_quadrature(a, b, by_zero, by_span):
    """|a x + b y| where one cause moves both, the root of the squares where there are two."""
    day = record({ZERO: of_hours(1, by_zero), SPAN: of_hours(1, by_span)})
    together = day_doubt(day, [source("both", part(ZERO, a), part(SPAN, b))])
    apart = day_doubt(day, [source("one", part(ZERO, a)), source("other", part(SPAN, b))])
    x, y = a * by_zero, b * by_span
    assert together.standard_uncertainty("mass") == pytest.approx(abs(x + y), rel=1e-9, abs=1e-9)
    assert apart.standard_uncertainty("mass") == pytest.approx(np.hypot(x, y), rel=1e-12)


@quick
@given(SIZE, st.integers(1, 24), st.integers(1, 40))
def test_averaging_never_shrinks_a_systematic_part(size, hours, days):
    """Of n equal hours or days: n times the uncertainty of one, so that the mean keeps it."""
    zero = [source("zero", part(ZERO, size))]
    one = day_doubt(record({ZERO: of_hours(1, 2.0)}), zero).standard_uncertainty("energy")
    day = day_doubt(record({ZERO: of_hours(hours, 2.0)}), zero)
    assert day.standard_uncertainty("energy") == pytest.approx(hours * one, rel=1e-12)
    month = add_up((1.0, day) for _ in range(days))
    assert month.standard_uncertainty("energy") == pytest.approx(days * hours * one, rel=1e-12)


@quick
@given(st.floats(1e-6, 1e6), st.integers(1, 24), st.integers(1, 40))
def test_random_parts_grow_with_the_root_of_their_number(variance, hours, days):
    """Of n hours: sqrt(n) times the uncertainty of one, that of the mean shrinks with sqrt(n)."""
    day = day_doubt(record({ZERO: of_hours(hours, 0.0)}, variance=variance), [])
    month = add_up((1.0, day) for _ in range(days))
    expected = (hours * days * variance) ** 0.5
    assert month.standard_uncertainty("mass") == pytest.approx(expected, rel=1e-12)
    assert month.expanded_uncertainty("mass") == pytest.approx(COVERAGE_FACTOR * expected)


@quick
@given(SIZE, SIZE, st.floats(0.0, 10.0))
def test_what_both_sides_of_an_envelope_share_cancels(shared, own, variance):
    """A calibrator of both meters takes nothing from their difference; own errors and noise do."""
    inflow = record({ZERO: of_hours(3, 5.0), BORE: of_hours(3, 1.0)}, variance=variance)
    other = {("differential_pressure_zero", "PDT-2"): of_hours(3, 5.0)}
    outflow = record({**other, ("bore", "FT-2"): of_hours(3, 1.0)}, variance=variance, meter="FT-2")
    sources = [
        source(
            "calibrator", part(ZERO, shared), part(("differential_pressure_zero", "PDT-2"), shared)
        ),
        source("bore 1", part(BORE, own)),
        source("bore 2", part(("bore", "FT-2"), own)),
    ]
    sides = [day_doubt(inflow, sources), day_doubt(outflow, sources)]
    imbalance = add_up([(1.0, sides[0]), (-1.0, sides[1])])
    sum_of_both = add_up([(1.0, side) for side in sides])
    assert imbalance.contributions["calibrator"] == (0.0, 0.0, 0.0)
    alone = 2.0 * (3.0 * own) ** 2 + 2.0 * 3.0 * variance
    assert imbalance.standard_uncertainty("mass") == pytest.approx(alone**0.5, rel=1e-12)
    both = (30.0 * shared) ** 2 + alone
    assert sum_of_both.standard_uncertainty("mass") == pytest.approx(both**0.5, rel=1e-12)
    by_hour = hourly_standard_uncertainty([(1.0, inflow), (-1.0, outflow)], sources)
    assert by_hour == pytest.approx(np.full((3, 3), (2.0 * own**2 + 2.0 * variance) ** 0.5))


def test_sharing_by_a_common_signal_needs_no_second_part():
    """Two meters on one pressure transmitter: one parameter, and its error adds up."""
    key = ("static_pressure_zero", "PT-1")
    meters = [record({key: of_hours(2, 4.0)}, meter=name) for name in ("FT-1", "FT-2")]
    sources = [source("PT-1 zero", part(key, 0.5))]
    total = add_up((1.0, day_doubt(meter, sources)) for meter in meters)
    assert total.contributions == {"PT-1 zero": (8.0, 8.0, 8.0)}


# --- time ------------------------------------------------------------------------------------


def test_a_drift_grows_from_its_date():
    """Nothing before it, then in proportion to the time since, taken at the hour's middle."""
    since = START + 6 * HOUR
    drift = source("drift", part(ZERO, 0.0, growth=1.0 / 3600.0, since=since))
    found = hourly_contributions(record({ZERO: of_hours(24, 1.0)}), [drift])["drift"][:, 0]
    assert found == pytest.approx([0.0] * 6 + [n + 0.5 for n in range(18)], rel=1e-12)


@quick
@given(st.integers(1, 60))
def test_a_drift_over_a_month_is_one_cause(days):
    """It is added up with sign over days that it grows through: n (n - 1) / 2 and a half each."""
    drift = [source("drift", part(ZERO, 2.0, growth=1.0 / 86_400.0, since=START))]
    month = add_up(
        (1.0, day_doubt(record({ZERO: of_hours(24, 1.0)}, start=START + n * DAY), drift))
        for n in range(days)
    )
    expected = 24.0 * sum(2.0 + n + 0.5 for n in range(days))
    assert month.standard_uncertainty("mass") == pytest.approx(expected, rel=1e-12)


@quick
@given(st.integers(0, 24), SIZE)
def test_parts_that_follow_each_other_are_as_one_without_limit(hour, size):
    """[start, end) of one range and of the next: no hour counts twice or not at all."""
    edge = START + hour * HOUR
    day = record({ZERO: np.arange(1.0, 25.0)})
    whole = hourly_contributions(day, [source("zero", part(ZERO, size))])["zero"]
    split = source("zero", part(ZERO, size, end=edge), part(ZERO, size, start=edge))
    assert np.array_equal(hourly_contributions(day, [split])["zero"], whole)
    before = source("zero", part(ZERO, size, end=edge))
    expected = np.where(np.arange(24) < hour, whole[:, 0], 0.0)
    assert np.array_equal(hourly_contributions(day, [before])["zero"][:, 0], expected)


# --- periods ---------------------------------------------------------------------------------

AMOUNT = st.floats(-1e3, 1e3)


@quick
@given(st.lists(st.tuples(AMOUNT, AMOUNT, st.floats(0.0, 1e3)), min_size=1, max_size=31))
def test_a_month_is_its_days_source_by_source(days):
    """Contributions add up by source, variances add, and the order of the days is irrelevant."""
    sources = [source("zero", part(ZERO, 2.0)), source("bore", part(BORE, -0.5))]
    doubts = [
        day_doubt(
            record(
                {ZERO: of_hours(24, zero), BORE: of_hours(24, bore)},
                start=START + n * DAY,
                variance=variance,
            ),
            sources,
        )
        for n, (zero, bore, variance) in enumerate(days)
    ]
    month = add_up((1.0, doubt) for doubt in doubts)
    by_zero = 48.0 * sum(zero for zero, _, _ in days)
    by_bore = -12.0 * sum(bore for _, bore, _ in days)
    noise = 24.0 * sum(variance for _, _, variance in days)
    expected = (by_zero**2 + by_bore**2 + noise) ** 0.5
    assert month.standard_uncertainty("mass") == pytest.approx(expected, rel=1e-9, abs=1e-6)
    backwards = add_up((1.0, doubt) for doubt in reversed(doubts))
    assert backwards == month


@quick
@given(SIZE, SIZE, st.floats(0.0, 9.0))
def test_an_hour_of_its_own_is_a_day_of_one_hour(zero, bore, variance):
    """The hour's standard uncertainty follows the same rule as the day's."""
    day = record({ZERO: of_hours(1, 3.0), BORE: of_hours(1, -2.0)}, variance=variance)
    sources = [source("a", part(ZERO, zero), part(BORE, bore)), source("b", part(BORE, bore))]
    (hour,) = hourly_standard_uncertainty([(1.0, day)], sources)
    doubt = day_doubt(day, sources)
    assert hour == pytest.approx([doubt.standard_uncertainty(name) for name in SENSITIVE])


# --- what is not known -----------------------------------------------------------------------


def test_what_is_not_stated_is_not_known_only_where_it_counts():
    """A base density without a stated uncertainty leaves the mass's uncertainty as it is."""
    table = np.zeros((2, 3))
    table[1] = (0.0, np.nan, np.nan)
    day = record({ZERO: of_hours(2, 1.0), DENSITY: table})
    doubt = day_doubt(day, [source("zero", part(ZERO, 3.0)), source("model", part(DENSITY, 1.0))])
    assert doubt.standard_uncertainty("mass") == 6.0
    assert doubt.standard_uncertainty("base_volume") is None
    assert doubt.expanded_uncertainty("base_volume") is None
    assert (doubt.unstated("mass"), doubt.unstated("base_volume")) == ((), ("model",))
    month = add_up([(1.0, doubt), (1.0, day_doubt(record({ZERO: of_hours(2, 1.0)}), []))])
    assert month.standard_uncertainty("base_volume") is None
    (first, second) = hourly_standard_uncertainty(
        [(1.0, day)], [source("zero", part(ZERO, 3.0)), source("model", part(DENSITY, 1.0))]
    )
    assert first.tolist() == [3.0, 3.0, 3.0]
    assert second[0] == 3.0
    assert np.isnan(second[1:]).all()


def test_a_part_takes_no_part_outside_its_time():
    """A model that was replaced by one whose uncertainty is not stated does not linger as NaN."""
    table = np.full((2, 3), np.nan)
    table[0] = 1.0
    day = record({DENSITY: table})
    model = source("model", part(DENSITY, 2.0, end=START + HOUR))
    assert day_doubt(day, [model]).standard_uncertainty("energy") == 2.0


def test_sources_that_act_on_nothing_are_left_out():
    """Neither another site's transmitter nor one whose effect is exactly 0 is carried along."""
    day = record({ZERO: of_hours(2, 0.0), SPAN: of_hours(2, 1.0)})
    others = [
        source("zero", part(ZERO, 1.0)),
        source("elsewhere", part(("bore", "FT-9"), 1.0)),
        source("span", part(SPAN, 1.0)),
    ]
    assert set(day_doubt(day, others).contributions) == {"span"}
    assert [one.name for one in relevant_sources(others, day.parameters)] == ["zero", "span"]
    assert set(hourly_contributions(day, others)) == {"zero", "span"}


def test_a_record_without_sensitivities_is_refused():
    """Nothing is stated of a calculation that was disturbed; the meter and day are named."""
    with pytest.raises(ValueError, match="meter FT-1, gas day 2026-01-15: no sensitivities"):
        day_doubt(replace(record({ZERO: 1.0}), sensitivities=None), [])
