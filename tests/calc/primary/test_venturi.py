"""Classical Venturi tubes: constants, limits of use, pressure loss, reference library."""

from __future__ import annotations

import numpy as np
import pytest

from meterfix.calc.primary.adiabatic import adiabatic_expansibility
from meterfix.calc.primary.flow import solve_flow
from meterfix.calc.primary.venturi import (
    AS_CAST,
    MACHINED,
    ROUGH_WELDED,
    ClassicalVenturi,
    pressure_loss_range,
    venturi_discharge_terms,
    venturi_outside_limits,
)

KINDS = {
    "as cast convergent venturi tube": AS_CAST,
    "machined convergent venturi tube": MACHINED,
    "rough welded convergent venturi tube": ROUGH_WELDED,
}


@pytest.mark.parametrize("name", KINDS)
def test_flow_of_a_reference_library(name: str) -> None:
    """C, expansibility and mass flow are those of fluids to 1e-9 at 10,000 points inside."""
    from fluids.flow_meter import differential_pressure_meter_C_epsilon, flow_meter_discharge

    kind = KINDS[name]
    random, count = np.random.default_rng(51674), 10_000
    D = random.uniform(*kind.pipe_diameter, count)
    beta = random.uniform(kind.diameter_ratio[0] + 1e-9, kind.diameter_ratio[1] - 1e-9, count)
    # the state is chosen so that the Reynolds number falls inside the limits
    p1 = 10.0 ** random.uniform(5.5, 7.0, count)
    dp = p1 * 10.0 ** random.uniform(-4.0, np.log10(0.25), count)
    kappa, density = random.uniform(1.1, 1.5, count), p1 / 1.4e5
    epsilon = adiabatic_expansibility(dp, p1, kappa, diameter_ratio=beta)
    wanted = np.exp(random.uniform(*np.log(kind.reynolds_number), count))
    velocity_part = kind.discharge_coefficient * epsilon * np.sqrt(2.0 * dp * density)
    velocity_part = velocity_part * (beta * D) ** 2 / np.sqrt(1.0 - beta**4)
    viscosity = velocity_part / (D * wanted)
    flow = solve_flow(
        differential_pressure=dp,
        density=density,
        dynamic_viscosity=viscosity,
        expansibility=epsilon,
        bore=beta * D,
        pipe_diameter=D,
        terms=venturi_discharge_terms(kind, diameter_ratio=beta),
    )
    assert flow.converged.all()
    inside = ~venturi_outside_limits(kind, flow.reynolds_number, bore=beta * D, pipe_diameter=D)
    assert inside.mean() > 0.999
    expected = []
    for k in range(count):
        given = {
            "D": float(D[k]),
            "D2": float(beta[k] * D[k]),
            "P1": float(p1[k]),
            "P2": float(p1[k] - dp[k]),
            "rho": float(density[k]),
        }
        C, eps = differential_pressure_meter_C_epsilon(
            **given,
            m=float(flow.mass_flow[k]),
            mu=float(viscosity[k]),
            k=float(kappa[k]),
            meter_type=name,
        )
        renamed = {("Do" if key == "D2" else key): value for key, value in given.items()}
        expected.append(flow_meter_discharge(**renamed, C=C, expansibility=eps))
    assert flow.mass_flow == pytest.approx(expected, rel=1e-9)
    assert flow.discharge_coefficient == pytest.approx(kind.discharge_coefficient, rel=1e-15)


@pytest.mark.parametrize("name", KINDS)
def test_limits_of_use(name: str) -> None:
    """Each limit of D, beta and Re_D separates a point inside from one just outside.

    The limits themselves: ISO 5167-4:2003, 5.5 (from memory).
    """
    kind = KINDS[name]
    D, beta, reynolds = 0.22, 0.6, 5e5

    def outside(reynolds: float, beta: float, D: float) -> bool:
        found = venturi_outside_limits(
            kind, np.array([reynolds]), bore=np.array([beta * D]), pipe_diameter=np.array([D])
        )
        return bool(found[0])

    assert not outside(reynolds, beta, D)
    for low, high, at in (
        (*kind.reynolds_number, lambda v: (v, beta, D)),
        (*kind.diameter_ratio, lambda v: (reynolds, v, D)),
        (*kind.pipe_diameter, lambda v: (reynolds, beta, v)),
    ):
        assert not outside(*at(low * 1.0001))
        assert outside(*at(low * 0.9999))
        assert not outside(*at(high * 0.9999))
        assert outside(*at(high * 1.0001))
    assert outside(np.nan, beta, D)


def test_kinds_are_the_standards() -> None:
    """Coefficients, limits and uncertainties of the three kinds; ISO 5167-4:2003, 5.5 and 5.7.

    From memory; the coefficients are also those of fluids, above.
    """
    assert ClassicalVenturi(0.984, 0.007, (0.1, 0.8), (0.3, 0.75), (2e5, 2e6)) == AS_CAST
    assert ClassicalVenturi(0.995, 0.01, (0.05, 0.25), (0.4, 0.75), (2e5, 1e6)) == MACHINED
    assert ClassicalVenturi(0.985, 0.015, (0.2, 1.2), (0.4, 0.7), (2e5, 2e6)) == ROUGH_WELDED


def test_pressure_loss_of_a_reference_library_is_in_the_usual_range() -> None:
    """The loss that fluids reads from the standard's figure is within 5 to 20 %.

    For beta up to 0.68; beyond, the figure goes down to 4 % for great pipes.
    """
    from fluids.flow_meter import dP_venturi_tube

    random = np.random.default_rng(4)
    D, beta = random.uniform(0.065, 0.5, 500), random.uniform(0.3, 0.68, 500)
    dp = random.uniform(1e3, 5e4, 500)
    low, high = pressure_loss_range(dp)
    loss = np.array(
        [
            dP_venturi_tube(D=float(D[k]), Do=float(beta[k] * D[k]), P1=1e6, P2=1e6 - float(dp[k]))
            for k in range(500)
        ]
    )
    assert (low <= loss * (1.0 + 1e-9)).all()
    assert (loss <= high * (1.0 + 1e-9)).all()


def test_impossible_ratios_are_refused() -> None:
    """A diameter ratio of 0 or of 1 raises with its value; an unknown one passes as NaN."""
    for ratio in (0.0, 1.0):
        with pytest.raises(ValueError, match=f"diameter ratio is {ratio:.6g}"):
            venturi_discharge_terms(AS_CAST, diameter_ratio=np.array([0.5, ratio]))
    terms = venturi_discharge_terms(AS_CAST, diameter_ratio=np.array([0.5, np.nan]))
    assert terms.at(np.full(2, 0.3))[0] == 0.984
    assert np.isnan(terms.at(np.full(2, 0.3))[1])
