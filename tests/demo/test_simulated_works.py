"""The simulated works: closed, seeded, whole, and right where it is written out by hand."""

import math
from datetime import date

import numpy as np
import pytest

from meterfix.demo.logs import files_of
from meterfix.demo.rates import periods
from meterfix.demo.simulator import simulate
from meterfix.demo.transmitters import STATED_ACCURACY, draw_calibration, texts
from meterfix.demo.truth import carried, integrate
from meterfix.demo.works import (
    BALANCES,
    DP,
    NATURAL_GAS,
    PRESSURE,
    RUN_BY_NAME,
    RUNS,
    TAG_DEAD_BAND_K,
    TEMPERATURE,
)

HOUR = 3_600_000_000


def test_balances_close_at_every_instant(clean_month):
    """What a main carries is what its consumers take, at every logged instant and gas day.

    (Daily totals to 1e-7: where the composition changes, the last interval of the old gas day
    is computed with the old composition at both ends.)
    """
    for balance in BALANCES:
        carried_in = sum(clean_month.run_logs[m].mass_flow for m in balance.inflow)
        taken = sum(clean_month.run_logs[m].mass_flow for m in balance.outflow)
        np.testing.assert_allclose(carried_in, taken, rtol=1e-12, atol=1e-13)
    hall = clean_month.truth("FT-202")["mass_kg"]
    below = sum(clean_month.truth(m)["mass_kg"] for m in ("FT-301", "FT-302", "FT-303"))
    np.testing.assert_allclose(hall, below, rtol=1e-7)


def test_rates_give_back_what_flowed(clean_month):
    """From the signals, the simulator's rates are its true flows to 1e-10."""
    for meter in ("FT-102", "FT-301", "FT-302", "FA-401", "FA-412"):
        flow = clean_month.run_logs[meter].mass_flow
        rates = clean_month.rates[meter]["mass_flow_kg_per_s"].to_numpy()
        np.testing.assert_allclose(rates, flow, rtol=1e-10, atol=0.0)


def test_carried_values_cost_little(clean_month):
    """What the historian does not log: up to 1 % of a rate, and under 0.03 % of a gas day."""
    log = clean_month.run_logs["FT-203"]
    rates = clean_month.rates["FT-203"]["mass_flow_kg_per_s"].to_numpy()
    off = np.abs(rates / log.mass_flow - 1.0)
    assert 1e-3 < off.max() < 0.01
    for day in clean_month.days:
        start, end = (getattr(clean_month.month.calendar, e)(day) for e in ("start", "end"))
        inside = (log.knots >= start) & (log.knots <= end)
        flowed = np.trapezoid(log.mass_flow[inside], log.knots[inside] / 1e6)
        found = np.trapezoid(rates[inside], log.knots[inside] / 1e6)
        assert found == pytest.approx(flowed, rel=3e-4)


def test_days_without_flow_are_exactly_zero(clean_month):
    """The works has gas days whose total is exactly 0, on meters of both gases."""
    for meter in ("FT-102", "FT-201", "FT-302", "FT-303", "FA-412"):
        truth = clean_month.truth(meter)
        assert (truth["mass_kg"] == 0.0).any()
        assert (truth.loc[truth["mass_kg"] == 0.0, "base_volume_m3"] == 0.0).all()


def _scalar_coefficient(device, reynolds, b, pipe):
    """ISO 5167-2, -3 and -4:2003 written out with Python's floats."""
    if device.certificate is not None:
        return device.certificate.discharge_coefficient
    if device.form == "machined":
        return 0.995
    if device.form == "long_radius":
        return 0.9965 - 0.00653 * (1e6 * b / reynolds) ** 0.5
    if device.form == "ISA_1932":
        return (
            0.99 - 0.2262 * b**4.1
            - (0.00175 * b**2 - 0.0033 * b**4.15) * (1e6 / reynolds) ** 1.15
        )  # fmt: skip
    l1, l2 = {
        "corner": (0.0, 0.0),
        "D_and_D/2": (1.0, 0.47),
        "flange": (0.0254 / pipe, 0.0254 / pipe),
    }[device.form]
    m2 = 2.0 * l2 / (1.0 - b)
    a = (19_000.0 * b / reynolds) ** 0.8
    c = 0.5961 + 0.0261 * b**2 - 0.216 * b**8 + 0.000521 * (1e6 * b / reynolds) ** 0.7
    c += (0.0188 + 0.0063 * a) * b**3.5 * (1e6 / reynolds) ** 0.3
    c += (
        (0.043 + 0.080 * math.exp(-10.0 * l1) - 0.123 * math.exp(-7.0 * l1))
        * (1.0 - 0.11 * a) * b**4 / (1.0 - b**4)
    )  # fmt: skip
    c -= 0.031 * (m2 - 0.8 * m2**1.1) * b**1.3
    if pipe < 0.07112:
        c += 0.011 * (0.75 - b) * (2.8 - pipe / 0.0254)
    return c


def _scalar_flow(run, device, density, p1, temperature, dp):
    """Return the flow through a device by bisection, its C and its diameter ratio."""
    rise = temperature - 293.15
    d, pipe = device.bore * (1.0 + 16e-6 * rise), device.pipe_diameter * (1.0 + 11e-6 * rise)
    b = d / pipe
    kappa = run.medium.isentropic_exponent
    tau = 1.0 - dp / p1
    if device.family == "orifice":
        epsilon = 1.0 - (0.351 + 0.256 * b**4 + 0.93 * b**8) * (1.0 - tau ** (1.0 / kappa))
    else:
        epsilon = math.sqrt(
            (kappa * tau ** (2.0 / kappa) / (kappa - 1.0))
            * ((1.0 - b**4) / (1.0 - b**4 * tau ** (2.0 / kappa)))
            * ((1.0 - tau ** ((kappa - 1.0) / kappa)) / (1.0 - tau))
        )

    def coefficient(flow):
        reynolds = 4.0 * flow / (math.pi * run.medium.dynamic_viscosity * pipe)
        return _scalar_coefficient(device, reynolds, b, pipe)

    def excess(flow):
        root = math.sqrt(2.0 * dp * density)
        area = math.pi / 4.0 * d * d / math.sqrt(1.0 - b**4)
        return flow - coefficient(flow) * epsilon * area * root

    low, high = 1e-3, 10.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) < 0.0 else (low, middle)
    return 0.5 * (low + high), coefficient(high), b


@pytest.mark.parametrize("meter", [run.name for run in RUNS])
def test_a_sample_agrees_with_scalar_code_and_outside_densities(clean_month, meter):
    """Flows of 25 logged instants, from the signals alone, in plain Python to 1e-9.

    Density and Joule-Thomson coefficient of the gas come from pyaga8, density of the air from
    CoolProp (1e-8 there, as close as the packaged series is).
    """
    pyaga8 = pytest.importorskip("pyaga8", reason="no wheel for this platform")
    from CoolProp.CoolProp import PropsSI

    log, run = clean_month.run_logs[meter], RUN_BY_NAME[meter]
    whole = periods(run, clean_month.month, clean_month.start, clean_month.end + 1)
    flowing = np.flatnonzero(log.mass_flow > 0.0)
    if meter == "FT-101":  # its zero check shows no dp while gas flows
        flowing = flowing[log.true[DP][flowing] > 0.0]
    for n in np.random.default_rng(31).choice(flowing, 25, replace=False).tolist():
        period = next(p for p in whole if p.start <= log.instants[n] < p.end)
        dp, gauge, felt = (float(log.true[kind][n]) for kind in (DP, PRESSURE, TEMPERATURE))
        p1 = gauge + float(log.atmosphere[n]) + (dp if run.pressure_downstream else 0.0)
        t1 = felt
        flow = 0.0
        for _ in range(4 if run.thermometer_downstream else 1):
            if run.medium is NATURAL_GAS:
                oracle = pyaga8.Detail()
                composition = pyaga8.Composition()
                for name, x in period.gas.fractions.items():
                    setattr(composition, name, x)
                oracle.set_composition(composition)
                oracle.pressure, oracle.temperature = p1 / 1000.0, t1
                oracle.calc_density()
                oracle.calc_properties()
                density, throttling = oracle.d * oracle.mm, oracle.jt / 1000.0
            else:
                density, throttling = PropsSI("D", "P", p1, "T", t1, "Air"), 0.0
            flow, c, b = _scalar_flow(run, period.device, density, p1, t1, dp)
            root = math.sqrt(1.0 - b**4 * (1.0 - c * c))
            loss = dp * (root - c * b * b) / (root + c * b * b)
            if period.device.form == "machined":
                loss = 0.125 * dp
            if run.thermometer_downstream:
                t1 = felt + throttling * loss
        assert flow == pytest.approx(float(log.mass_flow[n]), rel=1e-9 if throttling else 1e-8)


def test_the_seed_decides_everything():
    """The same seed gives the same bytes, another seed other bytes."""
    spans = [simulate(seed=seed, days=1) for seed in (5, 5, 6)]
    first, again, other = (dict(files_of(span)) for span in spans)
    assert first == again
    assert first.keys() == other.keys()
    assert all(first[name] != other[name] for name in first)


def test_part_of_a_month_is_that_part_of_the_whole(example_month):
    """Three days simulated alone are the same days of the month, signals and totals."""
    first = date(2026, 10, 15)
    part = simulate(first_day=first, days=3)
    for meter in ("FT-102", "FT-302", "FA-401"):
        whole_log, part_log = example_month.run_logs[meter], part.run_logs[meter]
        inside = np.isin(whole_log.knots, part_log.knots)
        for kind in (DP, PRESSURE, TEMPERATURE):
            np.testing.assert_array_equal(part_log.logged[kind], whole_log.logged[kind][inside])
        whole = example_month.truth(meter, calibrated=True).loc[list(part.days)]
        np.testing.assert_allclose(part.truth(meter, calibrated=True), whole, rtol=1e-12, atol=0.0)


def test_days_outside_the_month_are_refused():
    """A span that the month does not hold, or a month that begins late, is named."""
    with pytest.raises(ValueError, match="2026-11-01"):
        simulate(first_day=date(2026, 11, 1), days=1)
    with pytest.raises(ValueError, match="days 40"):
        simulate(days=40)
    with pytest.raises(ValueError, match="first day of a month"):
        simulate(month=date(2026, 10, 2))


def test_the_clock_change_day_has_25_hours(example_month):
    """Gas day 2026-10-24 holds the hour that comes twice: 25 h of rows and of measured time."""
    day = date(2026, 10, 24)
    start, end = (getattr(example_month.month.calendar, edge)(day) for edge in ("start", "end"))
    assert end - start == 25 * HOUR
    for meter, rows in (("FT-101", 25 * 30), ("FA-401", 25 * 60)):
        instants = example_month.run_logs[meter].instants
        assert np.count_nonzero((instants >= start) & (instants < end)) == rows
        assert example_month.truth(meter).loc[day, "measured_time_s"] == 25 * 3600.0


def test_lost_time_is_exactly_what_the_events_take(example_month):
    """Measured time falls short of the day by the outage, the restart and the exclusions only."""
    short = {
        ("FT-101", date(2026, 10, 14)): 42 * 60.0,  # 08:00 last row before, 08:42 first after
        ("FT-201", date(2026, 10, 20)): 62 * 60.0,
        ("FT-203", date(2026, 10, 22)): 34 * 60.0,
        ("FT-301", date(2026, 10, 7)): 34 * 60.0 + 20.0,
    }
    for meter in example_month.meters:
        for day, row in example_month.truth(meter).iterrows():
            length = 90_000.0 if day == date(2026, 10, 24) else 86_400.0
            expected = length - short.get((meter, day), 0.0)
            assert row["measured_time_s"] == pytest.approx(expected, abs=1e-6)


def test_calibration_errors_are_small_and_there(example_month):
    """Every meter is off by its transmitters, by less than 1.5 % over the month."""
    for meter in example_month.meters:
        true = example_month.truth(meter)["mass_kg"].sum()
        shown = example_month.truth(meter, calibrated=True)["mass_kg"].sum()
        assert 1e-6 < abs(shown / true - 1.0) < 0.015


def test_calibration_errors_are_drawn_from_what_is_stated():
    """Over 400 seeds, zero and span errors over their stated standard uncertainty: deviation 1.

    (To 4 standard errors of it, 0.14.) The calibrator moves the spans of all together: of the
    variance of a difference of two spans it is no part, of their sum it is.
    """
    zeros, spans = {}, {}
    for number in ("101", "102"):
        drawn = [draw_calibration(seed, PRESSURE, number, 1.0) for seed in range(400)]
        zeros[number] = np.array([one.zero for one in drawn])
        spans[number] = np.array([one.span for one in drawn])
    zero, span = (stated / 2.0 for stated in STATED_ACCURACY[PRESSURE])
    assert np.std(zeros["101"]) / zero == pytest.approx(1.0, abs=0.14)
    assert np.std(spans["101"] - spans["102"]) / (span * 2**0.5) == pytest.approx(1.0, abs=0.14)
    shared = (span**2 + 0.00015**2) ** 0.5
    assert np.std(spans["101"]) / shared == pytest.approx(1.0, abs=0.14)


def test_tags_come_at_their_own_rates(example_month):
    """Pressure every 10 min; temperature as soon as 0.1 K off, and at least every half hour."""
    for meter in ("FT-201", "FT-203"):
        log = example_month.run_logs[meter]
        shown = log.flaws.shown(log.knots)
        assert log.written[DP].all()
        pressures = log.knots[log.written[PRESSURE] & shown]
        assert (np.diff(pressures) <= 10 * 60_000_000).mean() > 0.999
        written = log.written[TEMPERATURE] & shown
        at = np.flatnonzero(written)
        assert (np.diff(log.knots[at]) <= HOUR // 2).mean() > 0.999
        before = at[np.searchsorted(at, np.arange(log.knots.size), side="right") - 1]
        off = np.abs(log.true[TEMPERATURE] - log.true[TEMPERATURE][before])[shown]
        assert off.max() <= TAG_DEAD_BAND_K
        assert 0.05 < written.mean() < 0.5


def test_noise_averages_out_as_predicted(example_month):
    """Totals from the noisy signals differ from the quiet ones by the predicted standard error.

    Over all meter-days with flow the normalised differences have a mean square near 1, and none
    exceeds 5; a wrong standard error by a factor of 1.5 would fail.
    """
    from dataclasses import replace

    scores = []
    for meter in ("FT-102", "FT-201", "FT-302", "FA-412"):
        log = example_month.run_logs[meter]
        noisy = replace(example_month, run_logs={meter: replace(log, shown=log.logged)})
        quiet = example_month.truth(meter, calibrated=True)["mass_kg"]
        error = example_month.noise_error(meter)
        flowing = error["mass_kg"] > 0.0
        off = noisy.truth(meter, calibrated=True)["mass_kg"] - quiet - error["mass_root_bias_kg"]
        scores += (off / error["mass_kg"])[flowing].tolist()
    assert len(scores) >= 90
    assert 0.7 < np.mean(np.square(scores)) < 1.4
    assert np.max(np.abs(scores)) < 5.0


def test_carried_values_follow_their_rule():
    """Linear between near neighbours and nothing across a wide gap; held values age."""
    at = np.array([0, 100, 400], dtype=np.int64)
    values = np.array([1.0, 2.0, 8.0])
    wanted = np.array([-5, 0, 50, 100, 250, 400, 450], dtype=np.int64)
    linear = carried(at, values, wanted, linear=True, reach=200)
    np.testing.assert_array_equal(linear, [np.nan, 1.0, 1.5, 2.0, np.nan, 8.0, np.nan])
    held = carried(at, values, wanted, linear=False, reach=100)
    np.testing.assert_array_equal(held, [np.nan, 1.0, 1.0, 2.0, np.nan, 8.0, 8.0])


def test_the_rule_between_instants_is_exact_on_a_ramp():
    """A rate that runs linearly is integrated exactly, split at edges, not across gaps."""
    second = 1_000_000
    at = np.array([0, 60, 120, 600, 660], dtype=np.int64) * second
    rates = np.array([0.0, 6.0, 12.0, 60.0, 66.0])
    whole, time = integrate(at, rates, 0, 660 * second, linear=True, maximum_gap=300 * second)
    assert whole == pytest.approx(0.05 * (120**2 + 660**2 - 600**2), rel=1e-14)
    assert time == 180.0
    part, time = integrate(
        at, rates, 30 * second, 90 * second, linear=True, maximum_gap=300 * second
    )
    assert part == pytest.approx(0.05 * (90**2 - 30**2), rel=1e-14)
    assert time == 60.0
    held, time = integrate(
        at, rates, 30 * second, 90 * second, linear=False, maximum_gap=300 * second
    )
    assert (held, time) == (6.0 * 30.0, 60.0)


def test_logged_texts_have_no_exponent_and_no_minus_zero():
    """Significant digits stay digits: 12 of a millionth, and zero is '0'."""
    values = np.array([0.0, -0.0, 1.23456789012e-7, -0.001, 12345.678])
    assert texts(values, 2, 9) == ["0", "0", "0.000000123456789", "-0.001", "12345.678"]
    assert texts(values, 2, None, ",") == ["0,00", "0,00", "0,00", "0,00", "12345,68"]


def test_the_spring_clock_change_makes_a_day_of_23_hours():
    """Another month can be simulated: gas day 2026-03-28 has 23 h of rows and measured time."""
    day = date(2026, 3, 28)
    span = simulate(seed=3, month=date(2026, 3, 1), first_day=day, days=1)
    assert span.end - span.start == 23 * HOUR
    assert span.run_logs["FT-202"].instants.size == 23 * 30 + 1
    assert span.truth("FT-202").loc[day, "measured_time_s"] == 23 * 3600.0
