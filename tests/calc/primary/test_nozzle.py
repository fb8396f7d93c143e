"""Nozzle kernels: agreement with a reference library, laws, limits of use, solvability."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest

from meterfix.calc.primary import nozzle
from meterfix.calc.primary.adiabatic import adiabatic_expansibility
from meterfix.calc.primary.discharge_forms import (
    NozzleDischargeTerms,
    constant_discharge_terms,
)

Limits = Callable[..., np.ndarray]

# name of the library's function, our terms, lowest and highest beta and Re_D
DEVICES = {
    "ISA 1932": ("C_ISA_1932_nozzle", nozzle.isa_1932_discharge_terms, 0.3, 0.8, 2e4, 1e7),
    "long radius": ("C_long_radius_nozzle", nozzle.long_radius_discharge_terms, 0.2, 0.8, 1e4, 1e7),
    "Venturi nozzle": (
        "C_venturi_nozzle",
        nozzle.venturi_nozzle_discharge_terms,
        0.316,
        0.775,
        1.5e5,
        2e6,
    ),
}
LIMITS: dict[str, Limits] = {
    "ISA 1932": nozzle.isa_1932_outside_limits,
    "long radius": nozzle.long_radius_outside_limits,
    "Venturi nozzle": nozzle.venturi_nozzle_outside_limits,
}


@pytest.mark.parametrize("device", DEVICES)
def test_discharge_coefficient_of_a_reference_library(device: str) -> None:
    """C is that of the library fluids to 1e-9 at 10,000 random points inside the limits."""
    import fluids.flow_meter as oracle

    name, terms_of, low, high, lowest, highest = DEVICES[device]
    random, count = np.random.default_rng(5167), 10_000
    D = random.uniform(0.065, 0.5, count)
    smallest_bore = 0.05 if device == "Venturi nozzle" else 0.0
    lowest_beta = np.maximum(low + 1e-9, (smallest_bore + 1e-9) / D)
    beta = random.uniform(lowest_beta, high - 1e-9, count)
    if device == "ISA 1932":
        lowest = np.where(beta < 0.44, 7e4, lowest)
    reynolds = np.exp(random.uniform(np.log(lowest * 1.0001), np.log(highest * 0.9999), count))
    assert not LIMITS[device](reynolds, bore=beta * D, pipe_diameter=D).any()
    found = terms_of(diameter_ratio=beta).at(reynolds**-0.1)
    function = getattr(oracle, name)
    expected = []
    for k in range(count):
        d = float(beta[k] * D[k])
        if device == "Venturi nozzle":
            expected.append(function(float(D[k]), d))
        else:
            mass_flow = float(reynolds[k] * math.pi * 1e-5 * D[k] / 4.0)
            expected.append(function(float(D[k]), d, rho=10.0, mu=1e-5, m=mass_flow))
    assert found == pytest.approx(expected, rel=1e-9)


def test_expansibility_of_a_reference_library() -> None:
    """The expansibility is that of fluids to 1e-9 at 10,000 random states inside the limits."""
    from fluids.flow_meter import nozzle_expansibility

    random, count = np.random.default_rng(1932), 10_000
    p1 = 10.0 ** random.uniform(5.0, 7.0, count)
    dp = p1 * 10.0 ** random.uniform(-4.0, math.log10(0.25), count)
    beta, kappa = random.uniform(0.2, 0.8, count), random.uniform(1.05, 1.67, count)
    found = adiabatic_expansibility(dp, p1, kappa, diameter_ratio=beta)
    expected = [
        nozzle_expansibility(
            D=0.1,
            Do=0.1 * float(beta[k]),
            P1=float(p1[k]),
            P2=float(p1[k] - dp[k]),
            k=float(kappa[k]),
        )
        for k in range(count)
    ]
    assert found == pytest.approx(expected, rel=1e-9)


def test_expansibility_keeps_its_digits_where_the_quotients_are_nothing_over_nothing() -> None:
    """At small dp and at kappa = 1, the expansibility follows its own series.

    To first order in x = dp/p1, by expanding the standard's equation by hand:
    epsilon = 1 - x [3/(4 kappa) + beta^4/(kappa (1 - beta^4))].
    """
    x = np.array([1e-4, 1e-6, 1e-8, 1e-10, 1e-12])
    for beta, kappa in ((0.3, 1.3), (0.7, 1.3), (0.7, 1.0), (0.5, 1.0 + 1e-12), (0.5, 1.0 - 1e-9)):
        found = adiabatic_expansibility(
            x * 1e6, np.full(5, 1e6), np.full(5, kappa), diameter_ratio=np.full(5, beta)
        )
        first = 3.0 / (4.0 * kappa) + beta**4 / (kappa * (1.0 - beta**4))
        assert (np.abs((1.0 - found) - first * x) <= 3.0 * x * x + 4e-16).all()


def test_expansibility_is_continuous_through_kappa_one() -> None:
    """A kappa of 1 gives the value between its neighbours: the isothermal limit, by hand.

    For kappa = 1: epsilon^2 = tau^2 (1 - beta^4)/(1 - beta^4 tau^2) (-ln tau)/(1 - tau).
    """
    p1, dp, beta = np.full(3, 1e6), np.full(3, 2e5), np.full(3, 0.6)
    below, at, above = adiabatic_expansibility(
        dp, p1, np.array([1.0 - 1e-7, 1.0, 1.0 + 1e-7]), diameter_ratio=beta
    )
    tau, beta4 = 0.8, 0.6**4
    by_hand = math.sqrt(
        tau**2 * (1.0 - beta4) / (1.0 - beta4 * tau**2) * -math.log(tau) / (1.0 - tau)
    )
    assert at == pytest.approx(by_hand, rel=1e-14)
    assert below < at < above


def test_expansibility_at_rest_and_where_it_cannot_be() -> None:
    """Exactly 1 at zero dp; NaN where dp reaches p1 or an input is not known; falls with dp."""
    ones = np.ones(4)
    p1 = np.array([1e6, 1e6, 1e6, np.nan])
    dp = np.array([0.0, 1e6, 1.1e6, 1e4])
    found = adiabatic_expansibility(dp, p1, 1.3 * ones, diameter_ratio=0.5 * ones)
    assert found[0] == 1.0
    assert np.isnan(found[1:]).all()
    dp = np.linspace(0.0, 0.99e6, 500)
    falling = adiabatic_expansibility(
        dp, np.full(500, 1e6), np.full(500, 1.3), diameter_ratio=np.full(500, 0.5)
    )
    assert (np.diff(falling) < 0.0).all()


def test_slope_is_the_slope() -> None:
    """The slope u dC/du of the nozzle terms is the central difference quotient."""
    beta = np.linspace(0.3, 0.8, 50)
    u = np.linspace(1e7**-0.1, 1e4**-0.1, 50)
    for terms in (
        nozzle.isa_1932_discharge_terms(diameter_ratio=beta),
        nozzle.long_radius_discharge_terms(diameter_ratio=beta),
        NozzleDischargeTerms(np.ones(50), np.full(50, -0.2), np.full(50, 3.0)),
    ):
        step = 1e-6 * u
        quotient = u * (terms.at(u + step) - terms.at(u - step)) / (2.0 * step)
        assert terms.slope(u) == pytest.approx(quotient, rel=1e-6, abs=1e-9)


@pytest.mark.parametrize("device", ["ISA 1932", "long radius"])
def test_five_newton_steps_solve_a_nozzle(device: str) -> None:
    """The flow solver's own iteration, C(u) X u^10 = 1, is at 1e-10 after five steps from 0.6.

    100,000 nozzles inside their limits and on down to Re_D = 5 000, where C itself is 0.86.
    """
    _, terms_of, low, high, _, highest = DEVICES[device]
    random, count = np.random.default_rng(51673), 100_000
    terms = terms_of(diameter_ratio=random.uniform(low, high, count))
    reynolds = np.exp(random.uniform(np.log(5e3), np.log(highest), count))
    X = reynolds / terms.at(reynolds**-0.1)
    u = (0.6 * X) ** -0.1
    for _ in range(5):
        C = terms.at(u)
        u = u - u * (C - 1.0 / (X * u**10)) / (10.0 * C + terms.slope(u))
    assert np.abs(terms.at(u) * X * u**10 - 1.0).max() <= 1e-10
    assert np.abs(u**-10 / reynolds - 1.0).max() <= 1e-10


def test_coefficients_at_high_reynolds_numbers() -> None:
    """At Re_D = 10^7 the coefficients are the tables' last columns for round beta.

    Source: ISO 5167-3:2003, tables A.1 and A.2 (ISA 1932 at beta 0.5: 0.9767; long radius at
    0.5: 0.9951); the Venturi nozzle at its smallest beta is 0.9847 (table A.3).
    """
    u = np.array([1e7**-0.1])
    half = np.array([0.5])
    assert nozzle.isa_1932_discharge_terms(diameter_ratio=half).at(u) == pytest.approx(
        0.9767, abs=1e-4
    )
    assert nozzle.long_radius_discharge_terms(diameter_ratio=half).at(u) == pytest.approx(
        0.9951, abs=1e-4
    )
    smallest = nozzle.venturi_nozzle_discharge_terms(diameter_ratio=np.array([0.316]))
    assert smallest.at(u) == pytest.approx(0.9847, abs=1e-4)


@pytest.mark.parametrize(
    ("device", "edges"),
    [
        (
            "ISA 1932",
            [
                ((1e5, 0.025, 0.05), (1e5, 0.0249, 0.0499)),
                ((1e5, 0.25, 0.5), (1e5, 0.2501, 0.5002)),
                ((7e4, 0.043, 0.1), (6.99e4, 0.043, 0.1)),
                ((2e4, 0.045, 0.1), (1.99e4, 0.045, 0.1)),
                ((1e7, 0.05, 0.1), (1.001e7, 0.05, 0.1)),
                ((1e5, 0.0301, 0.1), (1e5, 0.0299, 0.1)),
                ((1e5, 0.0799, 0.1), (1e5, 0.0801, 0.1)),
            ],
        ),
        (
            "long radius",
            [
                ((1e5, 0.025, 0.05), (1e5, 0.0249, 0.0499)),
                ((1e5, 0.3, 0.63), (1e5, 0.3, 0.631)),
                ((1e4, 0.05, 0.1), (9.99e3, 0.05, 0.1)),
                ((1e7, 0.05, 0.1), (1.001e7, 0.05, 0.1)),
                ((1e5, 0.0201, 0.1), (1e5, 0.0199, 0.1)),
                ((1e5, 0.0799, 0.1), (1e5, 0.0801, 0.1)),
            ],
        ),
        (
            "Venturi nozzle",
            [
                ((2e5, 0.05, 0.065), (2e5, 0.05, 0.0649)),
                ((2e5, 0.05, 0.1), (2e5, 0.0499, 0.1)),
                ((2e5, 0.3, 0.5), (2e5, 0.3, 0.501)),
                ((1.5e5, 0.06, 0.1), (1.49e5, 0.06, 0.1)),
                ((2e6, 0.06, 0.1), (2.01e6, 0.06, 0.1)),
                ((2e5, 0.0635, 0.2), (2e5, 0.0630, 0.2)),
                ((2e5, 0.154, 0.2), (2e5, 0.156, 0.2)),
            ],
        ),
    ],
)
def test_limits_of_use(
    device: str, edges: list[tuple[tuple[float, float, float], tuple[float, float, float]]]
) -> None:
    """Each limit of use (Re_D, d, D) separates a point inside from one just outside.

    Source: ISO 5167-3:2003, 5.1.6.1, 5.2.6.1, 5.3.4.1 (from memory).
    """
    for inside, outside in edges:
        reynolds, bore, pipe = (np.array(pair) for pair in zip(inside, outside, strict=True))
        found = LIMITS[device](reynolds, bore=bore, pipe_diameter=pipe)
        assert found.tolist() == [False, True]
    unknown = LIMITS[device](
        np.array([np.nan]), bore=np.array([0.06]), pipe_diameter=np.array([0.1])
    )
    assert unknown.tolist() == [True]


def test_impossible_ratios_are_refused() -> None:
    """A diameter ratio of 0 or of 1 raises with its value; an unknown one passes as NaN."""
    for terms_of in (
        nozzle.isa_1932_discharge_terms,
        nozzle.long_radius_discharge_terms,
        nozzle.venturi_nozzle_discharge_terms,
    ):
        for ratio in (0.0, 1.0):
            with pytest.raises(ValueError, match=f"diameter ratio is {ratio:.6g}"):
                terms_of(diameter_ratio=np.array([0.5, ratio]))
        assert np.isnan(terms_of(diameter_ratio=np.array([np.nan])).at(np.array([0.3]))).all()


def test_batching_changes_no_bit() -> None:
    """A batch of nozzles has the bits of each alone: C, slope and expansibility."""
    random, count = np.random.default_rng(7), 2000
    beta, u = random.uniform(0.3, 0.8, count), random.uniform(0.2, 0.4, count)
    p1, dp = random.uniform(1e5, 1e7, count), random.uniform(10.0, 2e4, count)
    kappa = random.uniform(1.1, 1.5, count)

    def all_of(which: slice) -> list[np.ndarray]:
        isa = nozzle.isa_1932_discharge_terms(diameter_ratio=beta[which])
        long = nozzle.long_radius_discharge_terms(diameter_ratio=beta[which])
        return [
            isa.at(u[which]),
            isa.slope(u[which]),
            long.at(u[which]),
            adiabatic_expansibility(dp[which], p1[which], kappa[which], diameter_ratio=beta[which]),
        ]

    together = all_of(slice(None))
    for at in range(0, count, 13):
        for whole, part in zip(together, all_of(slice(at, at + 1)), strict=True):
            assert whole[at] == part[0]


def test_calibrated_constant() -> None:
    """A calibrated coefficient is the same at every Reynolds number, to the bit."""
    terms = constant_discharge_terms(np.array([0.9876, 0.5]))
    for u in (0.2, 0.3, 0.5):
        assert terms.at(np.full(2, u)).tolist() == [0.9876, 0.5]
