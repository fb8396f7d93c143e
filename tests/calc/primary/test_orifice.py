"""Orifice kernels: laws, limits of use, impossible geometry, agreement with a reference library."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.calc.primary.orifice import (
    diameter_at,
    discharge_coefficient,
    discharge_terms,
    expansibility,
    geometry_outside_limits,
    pressure_loss,
    reynolds_number_outside_limits,
)

CORNER, D_AND_D_2, FLANGE = 0, 1, 2


def one(value: float) -> np.ndarray:
    return np.array([value])


def test_tappings_mix_in_one_call() -> None:
    """Three plates with three kinds of tappings in one call give what each gives alone."""
    reynolds, d, D = np.full(3, 2e5), np.full(3, 0.05), np.full(3, 0.1)
    taps = np.array([CORNER, D_AND_D_2, FLANGE])
    together = discharge_coefficient(reynolds, bore=d, pipe_diameter=D, tappings=taps)
    alone = [
        discharge_coefficient(
            reynolds[k : k + 1],
            bore=d[k : k + 1],
            pipe_diameter=D[k : k + 1],
            tappings=taps[k : k + 1],
        )[0]
        for k in range(3)
    ]
    assert together.tolist() == alone
    assert len(set(alone)) == 3


def test_small_pipe_term() -> None:
    """The term of small pipes is 0.011 (0.75 - beta)(2.8 - D/25.4 mm), and 0 from 71.12 mm on.

    Source: ISO 5167-2:2003, 5.3.2.1. Corner tappings, so nothing else depends on D.
    """
    beta, D = 0.5, np.array([0.05, 0.07, 0.07112, 0.2])
    found = discharge_coefficient(
        np.full(4, 1e5), bore=beta * D, pipe_diameter=D, tappings=np.zeros(4, dtype=np.int64)
    )
    expected = [0.011 * 0.25 * (2.8 - 50 / 25.4), 0.011 * 0.25 * (2.8 - 70 / 25.4), 0.0, 0.0]
    assert found - found[-1] == pytest.approx(expected, abs=1e-14)


def test_impossible_geometry_is_named() -> None:
    """A bore as large as its pipe, or not positive, raises and names both diameters."""
    with pytest.raises(ValueError, match=r"bore is 158\.1 mm in a pipe of 154\.1 mm"):
        discharge_terms(
            bore=np.array([0.05, 0.1581]),
            pipe_diameter=np.array([0.1, 0.1541]),
            tappings=np.array([CORNER, FLANGE]),
        )
    for bore in (0.0, -0.01, 0.1):
        with pytest.raises(ValueError, match="pipe of 100 mm"):
            discharge_terms(bore=one(bore), pipe_diameter=one(0.1), tappings=np.array([CORNER]))


def test_diameter_at_working_temperature() -> None:
    """100 mm of 16e-6/K steel is 100.016 mm when 10 K warmer; linear law, common practice."""
    found = diameter_at(
        np.array([303.15, 293.15]), diameter=0.1, expansion=16e-6, reference_temperature=293.15
    )
    assert found == pytest.approx([0.100016, 0.1], abs=1e-16)


@pytest.mark.parametrize(
    ("d", "D", "outside"),
    [
        (0.0125, 0.05, False),
        (0.0124, 0.05, True),
        (0.02, 0.0499, True),
        (0.5, 1.0, False),
        (0.5, 1.001, True),
        (0.75, 1.0, False),
        (0.0751, 0.1, True),
        (0.0999, 1.0, True),
    ],
)
def test_geometry_limits(d: float, D: float, *, outside: bool) -> None:
    """Bore >= 12.5 mm, 50 mm <= D <= 1000 mm, 0.1 <= beta <= 0.75; ISO 5167-2:2003, 5.3.1."""
    assert geometry_outside_limits(bore=one(d), pipe_diameter=one(D))[0] == outside


@pytest.mark.parametrize(
    ("taps", "beta", "D", "lowest"),
    [
        (CORNER, 0.56, 0.1, 5000.0),
        (D_AND_D_2, 0.2, 0.1, 5000.0),
        (CORNER, 0.7, 0.1, 16000 * 0.49),
        (D_AND_D_2, 0.6, 0.9, 16000 * 0.36),
        (FLANGE, 0.5, 0.1, 5000.0),
        (FLANGE, 0.6, 0.5, 170 * 0.36 * 500),
    ],
)
def test_reynolds_limits(taps: int, beta: float, D: float, lowest: float) -> None:
    """The lowest Re_D follows tappings, beta and D; ISO 5167-2:2003, 5.3.1. NaN is outside."""
    found = reynolds_number_outside_limits(
        np.array([lowest * (1 - 1e-9), lowest * (1 + 1e-9), np.nan]),
        bore=np.full(3, beta * D),
        pipe_diameter=np.full(3, D),
        tappings=np.full(3, taps),
    )
    assert found.tolist() == [True, False, True]


@given(
    p1=st.floats(1e5, 1e7),
    kappa=st.floats(1.05, 1.7),
    beta=st.floats(0.1, 0.75),
    share=st.floats(1e-9, 0.25),
)
def test_expansibility_falls_from_one(p1: float, kappa: float, beta: float, share: float) -> None:
    """The expansibility is exactly 1 at dp = 0, below 1 otherwise, and tends to 1 with dp."""
    dp = np.array([0.0, share * p1, 2 * share * p1])
    found = expansibility(dp, np.full(3, p1), np.full(3, kappa), diameter_ratio=np.full(3, beta))
    assert found[0] == 1.0
    assert 1.0 > found[1] > found[2]
    # slope at dp = 0: (0.351 + 0.256 beta^4 + 0.93 beta^8) / kappa, at most 0.53 / kappa
    assert 1.0 - found[1] < 0.6 * share / kappa * 1.5


def test_expansibility_is_not_known_without_a_downstream_pressure() -> None:
    """NaN where dp exceeds p1 or an input is NaN; never a number, never a warning."""
    found = expansibility(
        np.array([2e5, np.nan, 1e3]),
        np.array([1e5, 1e5, np.nan]),
        np.full(3, 1.3),
        diameter_ratio=np.full(3, 0.5),
    )
    assert np.isnan(found).all()


@given(beta=st.floats(0.1, 0.75), C=st.floats(0.58, 0.65), dp=st.floats(1.0, 1e5))
def test_pressure_loss_is_a_part_of_dp(beta: float, C: float, dp: float) -> None:
    """The loss is between 0 and dp, and within 0.05 dp of (1 - beta^1.9) dp.

    Source of the short form: ISO 5167-2:2003, 5.4.1, equation (8).
    """
    loss = pressure_loss(one(dp), one(C), diameter_ratio=one(beta))[0]
    assert 0.0 < loss < dp
    assert loss == pytest.approx((1.0 - beta**1.9) * dp, abs=0.05 * dp)
