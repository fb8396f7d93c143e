"""The simulator's orifice plate against `fluids` and against equations written out here."""

import math

import numpy as np
import pytest

from meterfix.demo.plate import (
    Plate,
    Stream,
    differential_pressure_of,
    discharge_coefficient,
    mass_flow_of,
    pressure_loss,
)
from meterfix.errors import GasError

TAPS = {"corner": "corner", "D_and_D/2": "D and D/2", "flange": "flange"}


def _cases(count, seed):
    """Random plates, streams and dps within the limits of use of ISO 5167-2:2003, 5.3.1."""
    rng = np.random.default_rng(seed)
    for n in range(count):
        pipe = rng.uniform(0.055, 0.4)
        plate = Plate(pipe * rng.uniform(0.25, 0.7), pipe, list(TAPS)[n % 3], 0.0, 0.0)
        p = rng.uniform(2e5, 20e5)
        stream = Stream(
            np.array([p * 0.02 / (8.314 * 285.0)]), np.array([p]), np.array([293.15]), 1.1e-5, 1.3
        )
        yield plate, stream, np.array([p * rng.uniform(0.001, 0.1)])


def test_the_flow_agrees_with_fluids():
    """Mass flow from dp on 150 plates equals fluids' solver to 1e-9 (Re_D above 10,000)."""
    from fluids.flow_meter import differential_pressure_meter_solver

    checked = 0
    for plate, stream, dp in _cases(150, 21):
        flow = mass_flow_of(plate, stream, dp)[0]
        if 4.0 * flow / (math.pi * 1.1e-5 * plate.pipe_diameter) < 10_000.0:
            continue
        expected = differential_pressure_meter_solver(
            D=plate.pipe_diameter,
            D2=plate.bore,
            P1=stream.static_pressure[0],
            P2=stream.static_pressure[0] - dp[0],
            rho=stream.density[0],
            mu=1.1e-5,
            k=1.3,
            meter_type="ISO 5167 orifice",
            taps=TAPS[plate.tappings],
        )
        assert flow == pytest.approx(expected, rel=1e-9)
        checked += 1
    assert checked > 100


def test_the_pressure_loss_agrees_with_fluids():
    """The pressure that stays lost equals fluids' dP_orifice to 1e-12 for the same C."""
    from fluids.flow_meter import dP_orifice

    for plate, stream, dp in _cases(30, 22):
        flow = mass_flow_of(plate, stream, dp)
        reynolds = 4.0 * flow / (math.pi * 1.1e-5 * plate.pipe_diameter)
        ratio = np.array([plate.bore / plate.pipe_diameter])
        c = discharge_coefficient(plate, reynolds, ratio, np.array([plate.pipe_diameter]))[0]
        p = stream.static_pressure[0]
        expected = dP_orifice(D=plate.pipe_diameter, Do=plate.bore, P1=p, P2=p - dp[0], C=c)
        assert pressure_loss(plate, stream, dp, flow)[0] == pytest.approx(expected, rel=1e-12)


def test_flow_and_dp_are_each_others_answer():
    """The dp that a flow shows gives that flow back, to 1e-11."""
    for plate, stream, dp in _cases(60, 23):
        flow = mass_flow_of(plate, stream, dp)
        back = differential_pressure_of(plate, stream, flow)
        np.testing.assert_allclose(back, dp, rtol=1e-11)


def test_no_flow_is_exactly_none():
    """Zero dp is zero flow, zero flow zero dp, to the bit."""
    plate, stream, _ = next(_cases(1, 24))
    assert mass_flow_of(plate, stream, np.zeros(1))[0] == 0.0
    assert differential_pressure_of(plate, stream, np.zeros(1))[0] == 0.0


def test_a_flow_beyond_the_plate_is_refused():
    """A flow for which no dp can be found raises; no number is made up."""
    plate, stream, dp = next(_cases(1, 25))
    much = 30.0 * mass_flow_of(plate, stream, dp)
    with np.errstate(all="ignore"), pytest.raises(GasError, match="did not settle"):
        differential_pressure_of(plate, stream, much)
