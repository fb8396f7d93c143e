"""Laws of integration, over random meter-days, against exact scalar arithmetic."""

from __future__ import annotations

from fractions import Fraction
from itertools import pairwise
from math import fsum

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meterfix.calc.totals import day_total, hourly
from meterfix.frames import FLAGS, HOURLY_INDEX, MISSING, TOTALS
from meterfix.model.calendar import HOUR

REASONS = [name for name, _ in MISSING]
quick = settings(max_examples=60, deadline=None)

# --- Random meter-days -----------------------------------------------------------------------

seconds = st.integers(-200, 9200)
carries = st.fixed_dictionaries(
    {
        "linear": st.booleans(),
        "maximum_gap": st.integers(1, 3000),
        "maximum_age": st.integers(0, 3000),
        "interval": st.one_of(st.none(), st.none(), st.integers(1, 900)),
    }
)
pairs = st.tuples(seconds, seconds).map(sorted).filter(lambda pair: pair[0] < pair[1])


@st.composite
def signals(draw, values):
    times = sorted(draw(st.sets(seconds, max_size=12)))
    if draw(st.booleans()):
        times = sorted({*times, *range(-200, 9200, draw(st.sampled_from([197, 300, 600])))})
    chosen = draw(st.lists(values, min_size=1, max_size=6))
    step = draw(st.integers(1, 5))
    excluded = sorted(draw(st.lists(pairs, max_size=2)))
    return {
        "times": times,
        "values": [chosen[n * step % len(chosen)] for n in range(len(times))],
        "excluded": [pair for pair in excluded[:1] if pair]
        + [pair for pair in excluded[1:] if pair[0] >= excluded[0][1]],
        **draw(carries),
    }


@st.composite
def meter_days(draw):
    """Describe a day of 2 to 2.5 hours with eras, a replaced transmitter, gaps, isolations."""
    end = draw(st.sampled_from([7200, 9000]))
    edges = sorted(draw(st.sets(st.integers(1, end - 1), max_size=2)))
    first = draw(st.sampled_from([0, 0, 0, 500]))
    starts = [first, *(edge for edge in edges if edge > first)]
    replaced = draw(st.one_of(st.none(), st.integers(1, end - 1)))
    dp = signals(st.sampled_from([-1.0, 0.0, 0.0, 1.0, 2.5, 7.125, 0.1, 666.0]))
    parts = [(0, end)] if replaced is None else [(0, replaced), (replaced, end)]
    return {
        "end": end,
        "eras": [
            (a, b, factor)
            for a, b, factor in zip(starts, [*starts[1:], end], (1.0, 1.7, 0.3), strict=False)
        ],
        "dp": [(a, b, draw(dp)) for a, b in parts],
        "p": draw(signals(st.floats(1e5, 5e6, allow_nan=False))),
        "t": draw(signals(st.just(290.0))),
    }


def built(lab, described):
    """Make the meter-day that is described."""

    def series(one):
        rest = {key: value for key, value in one.items() if key not in ("times", "values")}
        return lab.series(one["times"], one["values"], **rest)

    return lab.day(
        [(a, b, series(one)) for a, b, one in described["dp"]],
        p=series(described["p"]),
        t=series(described["t"]),
        end=described["end"],
        eras=[lab.era(a, b, factor=factor) for a, b, factor in described["eras"]],
    )


# --- The rules again, one record at a time, in exact arithmetic ---------------------------------


def inside(one, t):
    return any(a <= t < b for a, b in one["excluded"])


def kept(one):
    return [
        (t, Fraction(v))
        for t, v in zip(one["times"], one["values"], strict=True)
        if not inside(one, t)
    ]


def value_at(one, t):
    readings = kept(one)
    before = [reading for reading in readings if reading[0] <= t]
    after = [reading for reading in readings if reading[0] > t]
    if not before:
        return None
    (a, value) = before[-1]
    if a == t:
        # a row's interval is at least one second long, so it holds its own instant
        return value
    if one["interval"] is not None:
        return value if t < a + one["interval"] else None
    if not one["linear"]:
        return value if t - a <= one["maximum_age"] else None
    if not after or after[0][0] - a > one["maximum_gap"]:
        return None
    (b, other) = after[0]
    return value + (other - value) * Fraction(t - a, b - a)


def rates_at(described, t, dp, factor):
    """Return the rates of a record, or the reason why there are none."""
    p, temperature = value_at(described["p"], t), value_at(described["t"], t)
    if dp < 0:
        return "reverse_flow"
    if p is None:
        return "missing_static_pressure"
    if temperature is None:
        return "missing_temperature"
    if dp == 666:
        return "not_converged"
    return {
        "mass": dp,
        "line_volume": dp * (p + 100_000) / 1_000_000,
        "base_volume": dp * Fraction(factor),
        "energy": 3 * dp,
    }


def exact_hours(described):
    """Return per hour the totals and times of a described day."""
    hours = [
        {"measured": 0, "flow": 0, "lost": dict.fromkeys(REASONS, 0)}
        | dict.fromkeys(TOTALS, Fraction(0))
        for _ in range(-(-described["end"] // 3600))
    ]

    def add(u, v, reason, rates=None):
        """Account for [u, v), which lies inside one hour."""
        hour = hours[u // 3600]
        if reason is not None:
            hour["lost"][reason] += v - u
            return
        (t0, r0), (t1, r1) = rates
        hour["measured"] += v - u
        for name in TOTALS:
            at = [
                r0[name] + (r1[name] - r0[name]) * (Fraction(x - t0, t1 - t0) if t1 > t0 else 0)
                for x in (u, v)
            ]
            hour[name] += (v - u) * sum(at) / 2
            if name == "mass" and (at[0] > 0 or at[1] > 0):
                hour["flow"] += v - u

    in_service = described["eras"][0][0]
    for u in range(0, in_service, 100):
        add(u, min(u + 100, in_service), "meter_not_in_service")
    for era_start, era_end, factor in described["eras"]:
        for part_start, part_end, one in described["dp"]:
            start, end = max(era_start, part_start), min(era_end, part_end)
            readings = kept(one)
            cuts = {start, end, *range(0, 9001, 3600), *(t for t, _ in readings)}
            cuts |= {x for pair in one["excluded"] for x in pair}
            if one["interval"] is not None:
                cuts |= {t + one["interval"] for t, _ in readings}
            cuts = sorted(x for x in cuts if start <= x <= end)
            for u, v in pairwise(cuts):
                if inside(one, u):
                    add(u, v, "excluded")
                    continue
                before = [reading for reading in readings if reading[0] <= u]
                after = [reading for reading in readings if reading[0] > u]
                gone = "missing_differential_pressure"
                if one["interval"] is not None:
                    if not before or u >= before[-1][0] + one["interval"]:
                        add(u, v, gone)
                        continue
                elif not before or not after or after[0][0] - before[-1][0] > one["maximum_gap"]:
                    add(u, v, gone)
                    continue
                first = (before[-1][0], rates_at(described, *before[-1], factor))
                second = first
                if one["interval"] is None and one["linear"]:
                    second = (after[0][0], rates_at(described, *after[0], factor))
                reason = next((r for _, r in (first, second) if isinstance(r, str)), None)
                add(u, v, reason, (first, second))
    return hours


@settings(max_examples=150, deadline=None)
@given(described=meter_days())
def test_totals_agree_with_exact_scalar_arithmetic(lab, described):
    """Totals to 1e-12, times to the microsecond, whatever the day: eras, gaps, isolations."""
    record = lab.run(built(lab, described))[0]
    for row, expected in zip(record.statistics, exact_hours(described), strict=True):

        def found(name, row=row):
            return row[HOURLY_INDEX[name]]

        assert found("measured_time") == expected["measured"]
        assert found("flow_time") == expected["flow"]
        for reason in REASONS:
            assert found(f"lost_{reason}") == expected["lost"][reason], reason
        for name in TOTALS:
            if expected["measured"]:
                assert found(name) == pytest.approx(float(expected[name]), rel=1e-12, abs=1e-12)
            else:
                assert np.isnan(found(name))


# --- Laws --------------------------------------------------------------------------------------


def microseconds(record, name):
    return np.rint(record.statistics[:, HOURLY_INDEX[name]] * 1e6).astype(np.int64)


@quick
@given(described=meter_days(), offset=st.integers(0, 999_999))
def test_measured_and_lost_time_are_the_duration(lab, described, offset):
    """To the microsecond, also where the readings stand at odd microseconds."""
    day = built(lab, described)
    for _, _, series in day.differential_pressure:
        series.instants[:] += offset
    record = lab.run(day)[0]
    lost = sum(microseconds(record, f"lost_{reason}") for reason in REASONS)
    duration = microseconds(record, "duration")
    np.testing.assert_array_equal(microseconds(record, "measured_time") + lost, duration)
    assert duration.sum() == day.end - day.start
    assert (microseconds(record, "flow_time") <= microseconds(record, "measured_time")).all()
    shares = record.statistics[:, [HOURLY_INDEX[f"share_{name}"] for name, _ in FLAGS]]
    assert ((shares >= 0.0) & (shares <= 1.0) | np.isnan(shares)).all()
    assert not np.signbit(record.statistics[record.statistics == 0.0]).any()


def windows(whole, edge):
    """Cut a meter-day in two at an instant; both keep all readings."""
    given_fields = {name: getattr(whole, name) for name in whole.__slots__}
    return [
        type(whole)(**given_fields | {"start": start, "end": end})
        for start, end in ((whole.start, edge), (edge, whole.end))
    ]


@quick
@given(described=meter_days())
def test_windows_that_meet_at_an_hour_hold_the_hours_of_the_whole(lab, described):
    """A window cut in two at an hour edge gives the very same hours, bit for bit."""
    whole = built(lab, described)
    parts = lab.run(*windows(whole, whole.start + HOUR))
    together = np.concatenate([part.statistics for part in parts])
    assert together.tobytes() == lab.run(whole)[0].statistics.tobytes()


@quick
@given(described=meter_days(), cut=st.integers(1, 7199))
def test_totals_are_additive_when_a_window_is_cut(lab, described, cut):
    """Cut anywhere: times add up to the microsecond, totals to rounding."""
    whole = built(lab, described)
    parts = lab.run(*windows(whole, lab.at(cut)))
    expected = lab.run(whole)[0]
    for name in ("measured_time", "flow_time", *(f"lost_{reason}" for reason in REASONS)):
        assert sum(lab.column(part, name).sum() for part in parts) == (
            lab.column(expected, name).sum()
        )
    for name in TOTALS:
        added = fsum(np.nansum(lab.column(part, name)) for part in parts)
        assert added == pytest.approx(
            fsum(np.nan_to_num(lab.column(expected, name))), rel=1e-12, abs=1e-12
        )


@quick
@given(described=meter_days(), cut=st.integers(1, 7199))
def test_an_era_edge_that_changes_nothing_changes_no_total(lab, described, cut):
    """The same constants on either side of an edge: totals to 1e-12, times to the last bit."""
    described = described | {"eras": [(0, described["end"], 1.0)]}
    split = described | {"eras": [(0, cut, 1.0), (cut, described["end"], 1.0)]}
    one, two = lab.run(built(lab, described), built(lab, split))
    exact = [HOURLY_INDEX[name] for name in ("measured_time", "flow_time", "disputed_readings")]
    exact += [HOURLY_INDEX[f"lost_{reason}"] for reason in REASONS]
    np.testing.assert_array_equal(one.statistics[:, exact], two.statistics[:, exact])
    np.testing.assert_allclose(one.statistics, two.statistics, rtol=1e-12, atol=1e-12)


@quick
@given(
    rates=st.lists(st.floats(0.0, 1e6), min_size=2, max_size=30),
    where=st.data(),
)
def test_a_redundant_point_on_a_straight_line_changes_nothing(lab, rates, where):
    """A point put on the line between two records changes a total by rounding only."""
    times = [120 * n for n in range(len(rates))]
    n = where.draw(st.integers(0, len(rates) - 2))
    more = where.draw(st.integers(1, 119))
    on_line = rates[n] + (rates[n + 1] - rates[n]) * more / 120
    without = lab.one(lab.series(times, rates), end=7200)
    with_it = lab.one(
        lab.series(
            [*times[: n + 1], times[n] + more, *times[n + 1 :]],
            [*rates[: n + 1], on_line, *rates[n + 1 :]],
        ),
        end=7200,
    )
    np.testing.assert_allclose(
        lab.column(without, "mass"), lab.column(with_it, "mass"), rtol=1e-12, atol=1e-12
    )


@quick
@given(described=meter_days())
def test_hours_sum_to_the_day(lab, described):
    """The day's totals are fsum over its hours, to the last bit; None where no hour has one."""
    record = lab.run(built(lab, described))[0]
    total = day_total(record)
    for name in TOTALS:
        hours = lab.column(record, name)
        known = hours[~np.isnan(hours)].tolist()
        assert getattr(total, name) == (fsum(known) if known else None)
    assert fsum([total.measured_time, *total.lost.values()]) == pytest.approx(total.duration)


@pytest.mark.parametrize("size", [1, 7, 1000])
def test_a_batch_changes_no_bit(lab, monkeypatch, size):
    """A meter-day alone, among 7 and among 1,000 others, in any place: identical bits."""
    monkeypatch.setattr(hourly, "BATCH_READINGS", 10_000)
    draw = np.random.default_rng(3)

    def some(count):
        times = np.cumsum(draw.integers(1, 200, count)).tolist()
        dp = draw.choice([0.0, 1.0, 2.0], count) * draw.uniform(0, 9, count)
        return lab.day(
            lab.series(times, dp, linear=bool(draw.integers(2)), disputed={times[3]}),
            p=lab.series(times[::3], draw.uniform(1e5, 1e6, len(times[::3]))),
            end=7200,
            eras=[lab.era(0, 3333, factor=1.1), lab.era(3333, 7200, factor=0.9)],
        )

    subject = some(100)
    alone = lab.run(subject)[0].statistics.tobytes()
    others = [some(int(draw.integers(5, 120))) for _ in range(size)]
    for place in {0, size // 2, size}:
        batch = lab.run(*others[:place], subject, *others[place:])
        assert batch[place].statistics.tobytes() == alone
    apart = [lab.run(other)[0].statistics.tobytes() for other in others[:20]]
    assert [record.statistics.tobytes() for record in lab.run(*others)[:20]] == apart


def test_memory_layout_changes_no_bit(lab):
    """Series that are views of other arrays, with strides, give the bits of contiguous ones."""
    draw = np.random.default_rng(4)
    times = list(range(0, 7201, 60))
    plain = lab.series(times, draw.uniform(0, 9, len(times)))
    wide = np.empty((len(times), 3))
    wide[:, 1] = plain.values
    strided = type(plain)(
        plain.instants, wide[:, 1], plain.disputed, plain.implausible, plain.carry
    )
    one, two = lab.run(lab.day(plain, end=7200), lab.day(strided, end=7200))
    assert one.statistics.tobytes() == two.statistics.tobytes()
