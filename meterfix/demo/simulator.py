"""The seeded simulator of the example works: logs with known truth.

`simulate` draws a month, or some of its days, and returns it as a `Simulated`: what each run's
signals were, what is logged of them, and the totals that follow from the simulator's own rates.
"""

from __future__ import annotations

from datetime import date

import numpy as np
from numpy.typing import NDArray

from meterfix.demo.flaws import Flaws, draw_flaws
from meterfix.demo.loads import Truth, month_truth, stream_of
from meterfix.demo.rates import periods, signals_of
from meterfix.demo.simulated import KINDS, RunLog, Simulated
from meterfix.demo.transmitters import (
    BAROMETER,
    REPEATABILITY,
    draw_calibration,
    noise_deviation,
    writing_of,
)
from meterfix.demo.works import (
    BAROMETER_INTERVAL_S,
    COMPRESSED_AIR,
    DP,
    EXAMPLE_MONTH,
    EXAMPLE_SEED,
    PRESSURE,
    RUNS,
    TAG_DEAD_BAND_K,
    TAG_PRESSURE_INTERVAL_S,
    TAG_SNAPSHOT_S,
    TEMPERATURE,
    Month,
    Run,
)
from meterfix.model.calendar import SECOND

Floats = NDArray[np.float64]
Instants = NDArray[np.int64]
Truths = NDArray[np.bool_]


def simulate(
    *,
    seed: int = EXAMPLE_SEED,
    month: date = EXAMPLE_MONTH,
    first_day: date | None = None,
    days: int | None = None,
    noise: bool = True,
    calibration: bool = True,
    flaws: bool = True,
    digits: int | None = None,
) -> Simulated:
    """Simulate the works for a month, or for some of its gas days.

    Parameters
    ----------
    seed : int
        The same seed gives the same logs; a part of a month equals that part of the whole.
    month : date
        The first day of a month of at least 22 days from its first gas day.
    first_day : date, optional
        The first gas day wanted; the month's first if left out.
    days : int, optional
        How many gas days; to the month's end if left out.
    noise, calibration, flaws : bool
        Whether transmitters are noisy; whether they are off; whether rows and cells are lost.
    digits : int, optional
        Significant digits of the logs; left out: the decimals that such loggers write.

    Returns
    -------
    Simulated
        Logs and truth.

    Raises
    ------
    ValueError
        If the month does not begin on the 1st, or the days are not in it.
    """
    if month.day != 1:
        raise ValueError(f"month is {month}; it must be the first day of a month")
    of = Month(month)
    first = of.days.index(first_day) if first_day in of.days else None
    if first_day is None:
        first = 0
    last = len(of.days) if days is None or first is None else first + days
    if first is None or last > len(of.days) or last <= first:
        raise ValueError(f"first_day {first_day} and days {days} do not lie in {month:%Y-%m}")
    chosen = of.days[first:last]
    start, end = of.calendar.start(chosen[0]), of.calendar.end(chosen[-1])
    what_was = month_truth(seed, of)
    barometer, at_barometer = _barometer(
        seed, what_was, calibration=calibration, noise=noise, start=start, end=end
    )
    air_flaws = Flaws()
    if flaws:
        air_flaws = draw_flaws(seed, of, what_was.air_knots, COMPRESSED_AIR.name, rows=4, cells=0)
    run_logs = {
        run.name: _run_log(
            run,
            seed,
            of,
            what_was,
            at_barometer,
            air_flaws,
            span=(start, end),
            noise=noise,
            calibration=calibration,
            flawed=flaws,
            digits=digits,
        )
        for run in RUNS
    }
    stray = tuple(at for at in of.stray_lines if flaws and start <= at < end)
    return Simulated(seed, of, chosen, digits, run_logs, barometer, air_flaws, stray)


def _barometer(
    seed: int, what_was: Truth, *, calibration: bool, noise: bool, start: int, end: int
) -> tuple[tuple[Instants, Floats, Floats], tuple[Instants, Floats, Floats]]:
    """Return the barometer's log over the span, and its month true and shown."""
    knots, true = what_was.barometer_knots, what_was.barometric_pressure
    shown = true
    if calibration:
        shown = draw_calibration(seed, BAROMETER, "001", 1.0).of(true)
    deviates = stream_of(seed, "noise BT-001").standard_normal(knots.size)
    logged = shown + (REPEATABILITY[BAROMETER] * deviates if noise else 0.0)
    step = BAROMETER_INTERVAL_S * SECOND
    inside = (knots > start - step) & (knots < end + step)
    return (knots[inside], true[inside], logged[inside]), (knots, true, shown)


def _run_log(
    run: Run,
    seed: int,
    month: Month,
    what_was: Truth,
    barometer: tuple[Instants, Floats, Floats],
    air_flaws: Flaws,
    *,
    span: tuple[int, int],
    noise: bool,
    calibration: bool,
    flawed: bool,
    digits: int | None,
) -> RunLog:
    """Return one run's log over the span."""
    all_knots = what_was.knots_of(run.name)
    inside = (all_knots >= span[0]) & (all_knots <= span[1])
    knots = all_knots[inside]
    flaws = Flaws()
    if flawed:
        air = run.feed is COMPRESSED_AIR
        flaws = draw_flaws(
            seed,
            month,
            all_knots,
            run.name,
            rows=0 if air else 3,
            cells=2,
            tags=run.feed.tags,
        )
        flaws = flaws.merged(air_flaws) if air else flaws
    instants = flaws.instants(knots)
    state = what_was.runs[run.name]
    flow, upstream, temperature = (
        np.interp(instants, all_knots, values)
        for values in (state.mass_flow, state.static_pressure, state.temperature)
    )
    atmosphere, shown_atmosphere = (
        np.interp(instants, barometer[0], values) for values in barometer[1:]
    )
    true = {kind: np.empty(knots.size) for kind in KINDS}
    for period in periods(run, month, span[0], span[1] + 1):
        here = (instants >= period.start) & (instants < period.end)
        here |= (instants >= span[1]) & (period.end > span[1])
        if not here.any():
            continue
        felt = signals_of(
            run, period, flow[here], upstream[here], temperature[here], atmosphere[here]
        )
        true[DP][here] = felt.differential_pressure
        true[PRESSURE][here] = felt.static_pressure
        true[TEMPERATURE][here] = felt.temperature
    for out in month.out_of_service:
        if out.run == run.name:
            equalised = (instants >= out.start) & (instants < out.end)
            true[DP][equalised] = 0.0
    shown, logged, deviation = {}, {}, {}
    full_scale = {DP: run.dp_range, PRESSURE: run.pressure_range, TEMPERATURE: 1.0}
    for kind in KINDS:
        shown[kind] = true[kind]
        if calibration:
            drawn = draw_calibration(seed, kind, run.number, full_scale[kind])
            shown[kind] = drawn.of(true[kind])
        deviation[kind] = np.zeros(knots.size)
        logged[kind] = shown[kind]
        if noise:
            deviates = stream_of(seed, f"noise {kind}-{run.number}").standard_normal(all_knots.size)
            spread = noise_deviation(run, kind)
            logged[kind] = shown[kind] + spread * deviates[inside]
            step = np.zeros(knots.size)
            if digits is None:
                step = writing_of(run, kind).step(shown[kind], run.dp_range)
            deviation[kind] = np.sqrt(spread**2 + step**2 / 12.0)
    return RunLog(
        run,
        knots,
        instants,
        flaws,
        _written(run, flaws, knots, true[TEMPERATURE]),
        flow,
        true,
        shown,
        logged,
        deviation,
        atmosphere,
        shown_atmosphere,
    )


def _written(run: Run, flaws: Flaws, knots: Instants, temperature: Floats) -> dict[str, Truths]:
    """Return at which knots each kind of signal is logged.

    A historian writes the dp at every knot, the pressure every ten minutes, and the temperature
    when it has left its dead band (which acts before the noise) and every half hour; and all of
    them when it sees them again after a gap.
    """
    always = np.ones(knots.size, dtype=np.bool_)
    if not run.feed.tags:
        return dict.fromkeys(KINDS, always)
    shown = flaws.shown(knots)
    again = np.zeros(knots.size, dtype=np.bool_)
    again[1:] = shown[1:] & ~shown[:-1]
    snapshot = again | (knots % (TAG_SNAPSHOT_S * SECOND) == 0)
    written = snapshot.copy()
    last = float(temperature[0])
    for n in np.flatnonzero(shown).tolist():
        value = float(temperature[n])
        if snapshot[n] or abs(value - last) > TAG_DEAD_BAND_K:
            written[n] = True
            last = value
    return {
        DP: always,
        PRESSURE: again | (knots % (TAG_PRESSURE_INTERVAL_S * SECOND) == 0),
        TEMPERATURE: written,
    }
