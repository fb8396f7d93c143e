"""Signals sampled at their own rates: how far the totals may move, and that they move no more.

Mass flow goes with the root of dp x density, density nearly with p / T. Where a signal's value
at an instant is off by d, the flow is off by the fraction d / (2 dp), d / (2 p) or -d / (2 T);
what is left out (compressibility, expansibility, the discharge coefficient) is less than a tenth
of it at these pressures. The sum of these over a day, weighted by flow, says how far its mass
moves; of their absolute values, how far it may move at most. Both are computed here from the
rows of the two logs alone.
"""

from __future__ import annotations

import numpy as np
import pytest

MINUTE = 60 * 1_000_000
REST = 0.1
"""Share of compressibility, expansibility and discharge coefficient."""
CARRIED = 'between = "hold"\nmaximum_gap = "25 min"\nmaximum_age = "25 min"\n'
LINES = 'between = "linear"\nmaximum_gap = "25 min"\n'


def slowed(hall, steps):
    """Return the tag rows with only every n-th one of some kinds of signal."""
    kinds = {hall.tag_of(s): s.split("-")[0] for s in hall.signals_of(hall.METERS)}
    seen = dict.fromkeys(kinds, -1)
    kept = []
    for row in hall.tag_rows():
        seen[row.tag] += 1
        if seen[row.tag] % steps.get(kinds[row.tag], 1) == 0:
            kept.append(row)
    return kept


def series(hall, rows, signal):
    """Return a signal's instants, and its values in SI, absolute where they are pressures.

    The atmosphere is taken as 100 kPa: a bound needs no more.
    """
    own = [row for row in rows if row.tag == hall.tag_of(signal)]
    values = np.array([float(row.value) for row in own])
    kind, number = signal.split("-")
    if kind == "TT":
        values = values + 273.15
    elif kind == "PT":
        values = values * (1e5 if number == "302" else 1e3) + 1e5
    elif number == "302":
        values = 12.5e3 * (values / 100.0) ** 2
    else:
        values = values * 1e3
    return np.array([row.instant for row in own]), values


def at_dp(hall, rows, meter, *, linear):
    """Return what the rows leave a reader to carry to every dp of the whole log, by kind."""
    instants, _ = series(hall, hall.tag_rows(), f"PDT-{meter[3:]}")
    found = {}
    for kind in ("PDT", "PT", "TT"):
        at, sampled = series(hall, rows, f"{kind}-{meter[3:]}")
        if linear:
            found[kind] = np.interp(instants, at, sampled)
        else:
            found[kind] = sampled[np.searchsorted(at, instants, side="right") - 1]
    return found


def foreseen(hall, carried, meter):
    """Return by what fraction a day's mass should move, and by how much it may at most."""
    instants, _ = series(hall, hall.tag_rows(), f"PDT-{meter[3:]}")
    rates = hall.simulated().rates[meter]
    flow = np.interp(instants, rates.index, rates["mass_flow_kg_per_s"])
    flowing = flow > 0.0
    net, most = np.zeros(len(instants)), np.zeros(len(instants))
    for kind, sign in (("PDT", 0.5), ("PT", 0.5), ("TT", -0.5)):
        _, values = series(hall, hall.tag_rows(), f"{kind}-{meter[3:]}")
        part = np.zeros(len(instants))
        part[flowing] = sign * (carried[kind][flowing] / values[flowing] - 1.0)
        net, most = net + part, most + np.abs(part)
    weight = flow / flow.sum()
    return float((net * weight).sum()), float((most * weight).sum())


def moved(hall, site, reference, meter):
    """Return by what fraction a day's mass differs from the reference's."""
    return hall.day(site, meter)["mass_kg"] / hall.day(reference, meter)["mass_kg"] - 1.0


@pytest.mark.parametrize(
    ("rule", "linear"), [(CARRIED, False), (LINES, True)], ids=["held", "lines"]
)
def test_slow_pressures_and_temperatures(rule, linear, hall, wide, tmp_path):
    """Pressure every 10 minutes, temperature every 20: mass moves as foreseen, below 0.02 %."""
    rows = slowed(hall, {"PT": 5, "TT": 10})
    rules = {s: rule for s in hall.signals_of(hall.METERS) if not s.startswith("PDT")}
    site = hall.processed(
        tmp_path / "site", hall.tag_text(rules=rules), hall.mixed_files(hall.METERS, rows)
    )
    for meter in hall.METERS:
        net, most = foreseen(hall, at_dp(hall, rows, meter, linear=linear), meter)
        difference = moved(hall, site, wide, meter)
        assert abs(difference - net) <= REST * most
        assert 0.0 < abs(difference) <= (1.0 + REST) * most
        assert abs(difference) < 2e-4
        lost = hall.day(wide, meter)["measured_time_s"] - hall.day(site, meter)["measured_time_s"]
        assert lost == 0.0
        assert hall.shares(site, meter)["carried_value"] > 0.85


BANDS = {"PDT": 0.03, "PT": 0.8, "TT": 0.2}
"""Dead bands of FT-301's tags: kPa, kPa, K; about 1 %, 0.3 % and 0.07 % of their values."""
SILENCE = 'report = "by_exception"\nmaximum_silence = "1 h"\n'


def reported(hall, signal, band):
    """Return a tag's rows as a logger with a dead band writes them, at least every half hour.

    The last one is always written, so that the day is whole.
    """
    own = hall.some(hall.tag_rows(), lambda row: row.tag == hall.tag_of(signal))
    kept = []
    for row in own:
        if (
            not kept
            or row is own[-1]
            or abs(float(row.value) - float(kept[-1].value)) > band
            or row.instant - kept[-1].instant >= 30 * MINUTE
        ):
            kept.append(row)
    return kept


def held_text(hall):
    """Return the site file with wide logs whose values hold from row to row."""
    text = hall.wide_text()
    assert text.count('between = "linear"\nmaximum_gap = "5 min"') == 2
    return text.replace(
        'between = "linear"\nmaximum_gap = "5 min"', 'between = "hold"\nmaximum_gap = "5 min"'
    )


def test_logs_with_a_dead_band(hall, tmp_path):
    """Each value within its band of what is used: mass moves as foreseen, below 0.05 %.

    What is used from one dp to the next is what stood at the first: pressure and temperature
    count at the instants of dp.
    """
    meter = "FT-301"
    signals = hall.signals_of([meter])
    rows = [row for s in signals for row in reported(hall, s, BANDS[s.split("-")[0]])]
    whole = hall.some(hall.tag_rows(), lambda row: row.tag in hall.tags_of([meter]))
    assert len(rows) < len(whole) / 3
    held = hall.processed(tmp_path / "held", held_text(hall), hall.wide_files())
    site = hall.processed(
        tmp_path / "site",
        hall.tag_text([meter], rules=dict.fromkeys(signals, SILENCE)),
        hall.mixed_files([meter], rows),
    )
    carried = at_dp(hall, rows, meter, linear=False)
    instants, _ = series(hall, hall.tag_rows(), "PDT-301")
    reports, _ = series(hall, rows, "PDT-301")
    last_dp = np.searchsorted(instants, reports)[
        np.searchsorted(reports, instants, side="right") - 1
    ]
    used = {kind: values[last_dp] for kind, values in carried.items()}
    net, most = foreseen(hall, used, meter)
    difference = moved(hall, site, held, meter)
    assert abs(difference - net) <= REST * most
    assert 0.0 < abs(difference) <= (1.0 + REST) * most
    assert abs(difference) < 5e-4
    assert hall.day(held, meter)["measured_time_s"] == hall.day(site, meter)["measured_time_s"]


def test_silence_longer_than_stated_is_missing(hall, wide, tmp_path):
    """A temperature is carried for the stated hour and no longer; a dp is not bridged at all."""
    meter = "FT-301"
    signals = {"TT-301": SILENCE, "PDT-301": SILENCE}
    whole = hall.some(hall.tag_rows(), lambda row: row.tag in hall.tags_of([meter]))
    times = {
        # the last report before the silence and the first one after it
        "TT-301": ("2026-10-01T12:00:00Z", "2026-10-01T14:00:00Z", 3600.0),
        "PDT-301": ("2026-10-01T12:00:00Z", "2026-10-01T13:30:00Z", 5400.0),
    }
    for signal, (last, first, lost) in times.items():
        rows = hall.some(
            whole,
            lambda row, s=signal, a=last, b=first: (
                not (row.tag == hall.tag_of(s) and a < row.time < b)
            ),
        )
        site = hall.processed(
            tmp_path / signal,
            hall.tag_text([meter], rules={signal: signals[signal]}),
            hall.mixed_files([meter], rows),
        )
        before, after = hall.day(wide, meter), hall.day(site, meter)
        assert before["measured_time_s"] - after["measured_time_s"] == lost
        assert after["mass_kg"] < before["mass_kg"]
    assert "missing" in hall.day(site, meter)["missing"]


def test_silence_within_what_is_stated_is_held(hall, wide, tmp_path):
    """An hour of silence, the stated one, loses no time."""
    meter = "FT-301"
    rows = hall.some(
        hall.tag_rows(),
        lambda row: (
            row.tag in hall.tags_of([meter])
            and not (
                row.tag == hall.tag_of("PDT-301")
                and "2026-10-01T12:00:00Z" < row.time < "2026-10-01T13:00:00Z"
            )
        ),
    )
    site = hall.processed(
        tmp_path / "site",
        hall.tag_text([meter], rules={"PDT-301": SILENCE}),
        hall.mixed_files([meter], rows),
    )
    assert hall.day(site, meter)["measured_time_s"] == hall.day(wide, meter)["measured_time_s"]
