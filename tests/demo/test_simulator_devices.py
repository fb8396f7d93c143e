"""The simulator's primary devices against `fluids`."""

import math

import numpy as np
import pytest

from meterfix.demo.device import (
    Certificate,
    Device,
    Stream,
    discharge_coefficient,
    expansibility,
)
from meterfix.demo.flow import differential_pressure_of, mass_flow_of, pressure_loss
from meterfix.errors import GasError

TAPS = {"corner": "corner", "D_and_D/2": "D and D/2", "flange": "flange"}
FORMS = {
    "corner": "ISO 5167 orifice",
    "D_and_D/2": "ISO 5167 orifice",
    "flange": "ISO 5167 orifice",
    "ISA_1932": "ISA 1932 nozzle",
    "long_radius": "long radius nozzle",
    "machined": "machined convergent venturi tube",
}
"""Each form of the works, and what fluids calls it."""


def _cases(count, seed):
    """Random devices, streams and dps within the limits of use of ISO 5167:2003."""
    rng = np.random.default_rng(seed)
    for n in range(count):
        pipe = rng.uniform(0.055, 0.24)
        form = list(FORMS)[n % len(FORMS)]
        least = 0.25 if form in TAPS else 0.45
        device = Device(pipe * rng.uniform(least, 0.7), pipe, form, 0.0, 0.0)
        p = rng.uniform(2e5, 20e5)
        stream = Stream(
            np.array([p * 0.02 / (8.314 * 285.0)]), np.array([p]), np.array([293.15]), 1.1e-5, 1.3
        )
        yield device, stream, np.array([p * rng.uniform(0.001, 0.1)])


def test_the_flow_agrees_with_fluids():
    """Mass flow from dp on 300 devices equals fluids' solver to 1e-9 (Re_D above 20,000)."""
    from fluids.flow_meter import differential_pressure_meter_solver

    checked = dict.fromkeys(FORMS, 0)
    for device, stream, dp in _cases(300, 21):
        flow = mass_flow_of(device, stream, dp)[0]
        if 4.0 * flow / (math.pi * 1.1e-5 * device.pipe_diameter) < 20_000.0:
            continue
        expected = differential_pressure_meter_solver(
            D=device.pipe_diameter,
            D2=device.bore,
            P1=stream.static_pressure[0],
            P2=stream.static_pressure[0] - dp[0],
            rho=stream.density[0],
            mu=1.1e-5,
            k=1.3,
            meter_type=FORMS[device.form],
            taps=TAPS.get(device.form),
        )
        assert flow == pytest.approx(expected, rel=1e-9), device.form
        checked[device.form] += 1
    assert min(checked.values()) > 25


def test_expansibility_keeps_its_digits_at_small_dp():
    """Nozzles and Venturi tubes: fluids' value to 1e-9 at 5 %, a smooth slope down to no dp.

    (The slope at dp -> 0 is -(3/(4 kappa) + beta^4/(2 kappa (1 - beta^4)) ...) dp/p1: a
    difference of 1e-9 dp is seen against the one at 1e-4 dp to 1e-3.)
    """
    from fluids.flow_meter import nozzle_expansibility

    for form in ("ISA_1932", "long_radius", "machined"):
        device = Device(0.05, 0.1, form)
        ratio = np.array([0.5])
        stream = Stream(np.array([4.0]), np.array([5e5]), np.array([293.15]), 1.1e-5, 1.3)
        dp = np.array([0.25e5])
        expected = nozzle_expansibility(D=0.1, Do=0.05, P1=5e5, P2=4.75e5, k=1.3, beta=0.5)
        assert expansibility(device, stream, dp, ratio)[0] == pytest.approx(expected, rel=1e-9)
        coarse, fine = (
            (1.0 - expansibility(device, stream, np.array([share * 5e5]), ratio)[0]) / share
            for share in (1e-4, 1e-9)
        )
        assert fine == pytest.approx(coarse, rel=1e-3)
        assert expansibility(device, stream, np.zeros(1), ratio)[0] == 1.0


def test_a_certificate_replaces_the_standards_coefficient():
    """With a certificate C is its constant, and the flow is in proportion to it."""
    device, stream, dp = next(_cases(1, 26))
    for constant in (0.60, 0.66):
        certificate = Certificate("C-1", constant, "0.25 %", (1e4, 1e6))
        calibrated = Device(
            device.bore, device.pipe_diameter, device.form, 0.0, 0.0, certificate=certificate
        )
        flow = mass_flow_of(calibrated, stream, dp)[0]
        reynolds = 4.0 * flow / (math.pi * 1.1e-5 * device.pipe_diameter)
        ratio = np.array([device.bore / device.pipe_diameter])
        own = discharge_coefficient(
            device, np.array([reynolds]), ratio, np.array([device.pipe_diameter])
        )[0]
        before = mass_flow_of(device, stream, dp)[0]
        assert flow / before == pytest.approx(constant / own, rel=1e-3)


def test_the_pressure_loss_agrees_with_fluids():
    """The pressure that stays lost equals fluids' dP_orifice to 1e-12 for the same C.

    Nozzles have the same equation; of a Venturi tube 12.5 % of dp is stated to be lost.
    """
    from fluids.flow_meter import dP_orifice

    for device, stream, dp in _cases(30, 22):
        flow = mass_flow_of(device, stream, dp)
        if device.form == "machined":
            assert pressure_loss(device, stream, dp, flow)[0] == 0.125 * dp[0]
            continue
        reynolds = 4.0 * flow / (math.pi * 1.1e-5 * device.pipe_diameter)
        ratio = np.array([device.bore / device.pipe_diameter])
        c = discharge_coefficient(device, reynolds, ratio, np.array([device.pipe_diameter]))[0]
        p = stream.static_pressure[0]
        expected = dP_orifice(D=device.pipe_diameter, Do=device.bore, P1=p, P2=p - dp[0], C=c)
        assert pressure_loss(device, stream, dp, flow)[0] == pytest.approx(expected, rel=1e-12)


def test_flow_and_dp_are_each_others_answer():
    """The dp that a flow shows gives that flow back, to 1e-11."""
    for device, stream, dp in _cases(60, 23):
        flow = mass_flow_of(device, stream, dp)
        back = differential_pressure_of(device, stream, flow)
        np.testing.assert_allclose(back, dp, rtol=1e-11)


def test_no_flow_is_exactly_none():
    """Zero dp is zero flow, zero flow zero dp, to the bit."""
    device, stream, _ = next(_cases(1, 24))
    assert mass_flow_of(device, stream, np.zeros(1))[0] == 0.0
    assert differential_pressure_of(device, stream, np.zeros(1))[0] == 0.0


def test_a_flow_beyond_the_device_is_refused():
    """A flow for which no dp can be found raises; no number is made up."""
    device, stream, dp = next(_cases(1, 25))
    much = 30.0 * mass_flow_of(device, stream, dp)
    with np.errstate(all="ignore"), pytest.raises(GasError, match="did not settle"):
        differential_pressure_of(device, stream, much)
