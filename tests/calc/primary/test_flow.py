"""The flow solver: reference library, residuals, bits, laws."""

from __future__ import annotations

import numpy as np
import pytest
from fluids.flow_meter import differential_pressure_meter_solver
from hypothesis import given
from hypothesis import strategies as st

from meterfix.calc.primary.discharge import DischargeTerms
from meterfix.calc.primary.flow import Flow, device_flow, solve_flow
from meterfix.calc.primary.orifice import (
    discharge_coefficient,
    expansibility,
    reynolds_number_outside_limits,
)

FIELDS = (
    "mass_flow",
    "discharge_coefficient",
    "expansibility",
    "reynolds_number",
    "converged",
)
Inputs = dict[str, np.ndarray]


def random_inputs(count: int, seed: int) -> Inputs:
    """Plates and gases inside the limits of use, p2/p1 >= 0.75 and dp up to 300 kPa."""
    draw = np.random.default_rng(seed)
    D = np.exp(draw.uniform(np.log(0.05), np.log(1.0), count))
    beta = draw.uniform(np.maximum(0.1, 0.0125 / D), 0.75)
    p1 = 10 ** draw.uniform(5.0, 7.0, count)
    return {
        "differential_pressure": np.minimum(10 ** draw.uniform(1.5, 5.5, count), 0.25 * p1),
        "static_pressure": p1,
        "density": p1 / 1e5 * draw.uniform(0.6, 2.0, count),
        "dynamic_viscosity": 10 ** draw.uniform(-5.2, -4.6, count),
        "isentropic_exponent": draw.uniform(1.1, 1.6, count),
        "bore": beta * D,
        "pipe_diameter": D,
        "form": draw.integers(0, 3, count),
    }


def some(inputs: Inputs, which: np.ndarray | slice) -> Inputs:
    return {name: values[which] for name, values in inputs.items()}


def reynolds_outside(flow: Flow, inputs: Inputs) -> np.ndarray:
    return reynolds_number_outside_limits(
        flow.reynolds_number,
        bore=inputs["bore"],
        pipe_diameter=inputs["pipe_diameter"],
        tappings=inputs["form"],
    )


def test_ten_thousand_plates_against_a_reference_library() -> None:
    """The mass flow is that of `fluids` to 1e-9 on 10,000 random points inside the limits.

    Source: fluids, differential_pressure_meter_solver, ISO 5167-2 orifice. Its own variation
    of the discharge coefficient begins below the limits of use.
    """
    inputs = random_inputs(11_000, seed=1)
    flow = device_flow(**inputs)
    inside = np.flatnonzero(~reynolds_outside(flow, inputs))[:10_000]
    assert len(inside) == 10_000
    names = ("corner", "D", "flange")
    point = some(inputs, inside)
    expected = [
        differential_pressure_meter_solver(
            D=D, rho=rho, mu=mu, k=k, D2=d, P1=p, P2=p - dp, taps=names[t],
            meter_type="ISO 5167 orifice",
        )
        for dp, p, rho, mu, k, d, D, t in zip(
            *(values.tolist() for values in point.values()), strict=True
        )
    ]  # fmt: skip
    worst = np.abs(flow.mass_flow[inside] / np.array(expected) - 1.0).max()
    assert worst < 1e-9


def test_residual_on_a_hundred_thousand_plates() -> None:
    """C, Re_D and mass flow agree with each other to 1e-10, and each record says that it does.

    The residual is taken anew with the equation itself at the Reynolds number found.
    """
    inputs = random_inputs(100_000, seed=2)
    flow = device_flow(**inputs)
    inside = ~reynolds_outside(flow, inputs)
    assert inside.sum() > 99_000
    assert flow.converged[inside].all()
    point = some(inputs, inside)
    d, D = point["bore"], point["pipe_diameter"]
    reynolds = 4.0 * flow.mass_flow[inside] / (np.pi * point["dynamic_viscosity"] * D)
    C = discharge_coefficient(reynolds, bore=d, pipe_diameter=D, tappings=point["form"])
    epsilon = expansibility(
        point["differential_pressure"],
        point["static_pressure"],
        point["isentropic_exponent"],
        diameter_ratio=d / D,
    )
    root = np.sqrt(2.0 * point["differential_pressure"] * point["density"])
    mass_flow = C / np.sqrt(1.0 - (d / D) ** 4) * epsilon * np.pi / 4.0 * d**2 * root
    assert np.abs(mass_flow / flow.mass_flow[inside] - 1.0).max() < 1e-10
    assert np.abs(reynolds / flow.reynolds_number[inside] - 1.0).max() < 1e-10


@pytest.mark.parametrize("size", [1, 7, 1000])
def test_bits_do_not_depend_on_the_batch(size: int) -> None:
    """Alone, in sevens, in thousands or all at once (chunks included): identical bits."""
    inputs = random_inputs(20_000, seed=3)
    inputs["differential_pressure"][::97] = 0.0
    inputs["density"][::89] = np.nan
    whole = device_flow(**inputs)
    for first in range(0, 20_000, 20_000 // 200 if size < 1000 else size):
        part = device_flow(**some(inputs, slice(first, first + size)))
        for name in FIELDS:
            expected = getattr(whole, name)[first : first + size]
            assert getattr(part, name).tobytes() == expected.tobytes()


def test_strided_and_broadcast_inputs_have_the_same_bits() -> None:
    """A reversed view and a single plate against many records give the same bits."""
    inputs = random_inputs(5_000, seed=4)
    forward = device_flow(**inputs).mass_flow
    backward = device_flow(**some(inputs, slice(None, None, -1))).mass_flow
    assert backward[::-1].tobytes() == forward.tobytes()
    plate = {name: inputs[name][:1] for name in ("bore", "pipe_diameter", "form")}
    repeated = {name: np.repeat(values, 5_000) for name, values in plate.items()}
    assert (
        device_flow(**(inputs | plate)).mass_flow.tobytes()
        == device_flow(**(inputs | repeated)).mass_flow.tobytes()
    )


def test_zero_differential_pressure_is_exactly_no_flow() -> None:
    """A dp of 0 gives exactly +0.0, converged, even where the density is not known."""
    inputs = random_inputs(2, seed=5)
    inputs["differential_pressure"][:] = 0.0
    inputs["density"][1] = np.nan
    flow = device_flow(**inputs)
    assert flow.mass_flow.tobytes() == np.zeros(2).tobytes()
    assert flow.reynolds_number.tolist() == [0.0, 0.0]
    assert flow.converged.all()
    assert np.isnan(flow.discharge_coefficient).all()


def test_below_reynolds_500_there_is_no_number() -> None:
    """Just above Re_D = 500 there is a flow, just below there is none: NaN, not converged."""
    inputs = some(random_inputs(1, seed=6), np.zeros(400, dtype=np.int64))
    reference = device_flow(**inputs).reynolds_number[0]
    # the viscosity moves Re_D from about 3 to about 5 million times smaller than it was
    inputs["dynamic_viscosity"] = inputs["dynamic_viscosity"] * np.geomspace(
        reference / 5000.0, reference / 50.0, 400
    )
    flow = device_flow(**inputs)
    known = ~np.isnan(flow.mass_flow)
    assert known[0]
    assert not known[-1]
    assert (flow.converged == known).all()
    assert (np.diff(known.astype(int)) <= 0).all()
    lowest = flow.reynolds_number[known].min()
    assert 500.0 <= lowest < 510.0
    assert np.isnan(flow.reynolds_number[~known]).all()


@pytest.mark.parametrize(
    "name",
    ["differential_pressure", "static_pressure", "density", "dynamic_viscosity", "bore"],
)
def test_unknown_input_gives_no_number(name: str) -> None:
    """NaN in gives NaN out and not converged, never zero, and the neighbours are untouched."""
    inputs = random_inputs(3, seed=7)
    clean = device_flow(**inputs).mass_flow
    inputs[name][1] = np.nan
    flow = device_flow(**inputs)
    assert np.isnan(flow.mass_flow[1])
    assert flow.converged.tolist() == [True, False, True]
    assert flow.mass_flow[[0, 2]].tobytes() == clean[[0, 2]].tobytes()


def test_negative_differential_pressure_gives_no_number() -> None:
    """The solver knows no reverse flow: NaN, not converged."""
    inputs = random_inputs(1, seed=8)
    flow = device_flow(**(inputs | {"differential_pressure": np.array([-100.0])}))
    assert np.isnan(flow.mass_flow[0])
    assert not flow.converged[0]


def test_no_records() -> None:
    """No records in, no records out."""
    flow = device_flow(**some(random_inputs(1, seed=9), slice(0, 0)))
    assert all(len(getattr(flow, name)) == 0 for name in FIELDS)


@given(seed=st.integers(0, 2**32 - 1), factor=st.floats(1.0001, 4.0))
def test_flow_grows_with_dp(seed: int, factor: float) -> None:
    """Within the limits more dp is more mass flow."""
    inputs = random_inputs(20, seed=seed)
    dp = np.minimum(inputs["differential_pressure"] / 4.0, 0.05 * inputs["static_pressure"])
    lower = device_flow(**(inputs | {"differential_pressure": dp})).mass_flow
    higher = device_flow(**(inputs | {"differential_pressure": dp * factor})).mass_flow
    known = ~np.isnan(lower)
    assert (higher[known] > lower[known]).all()


@given(seed=st.integers(0, 2**32 - 1), factor=st.floats(0.1, 10.0))
def test_flow_scales(seed: int, factor: float) -> None:
    """At one Reynolds number and one p2/p1, mass flow goes with the root of dp times density.

    dp, p1 and density by f and the viscosity by f leave Re_D, C and expansibility alone.
    """
    inputs = random_inputs(20, seed=seed)
    names = ("differential_pressure", "static_pressure", "density", "dynamic_viscosity")
    scaled = device_flow(**(inputs | {name: inputs[name] * factor for name in names}))
    flow = device_flow(**inputs)
    known = flow.converged & scaled.converged
    assert scaled.mass_flow[known] == pytest.approx(factor * flow.mass_flow[known], rel=1e-12)
    assert scaled.reynolds_number[known] == pytest.approx(flow.reynolds_number[known], rel=1e-12)


def test_constant_coefficient() -> None:
    """A device with a constant C has the closed form C E pi/4 d2 sqrt(2 dp rho) as its flow."""
    terms = DischargeTerms(*(np.array([value]) for value in (0.995, 0.0, 0.0, 0.0, 0.0)))
    flow = solve_flow(
        differential_pressure=np.array([1e4]),
        density=np.array([12.0]),
        dynamic_viscosity=np.array([1.1e-5]),
        expansibility=np.array([1.0]),
        bore=np.array([0.05]),
        pipe_diameter=np.array([0.1]),
        terms=terms,
    )
    expected = 0.995 / (1 - 0.5**4) ** 0.5 * np.pi / 4 * 0.05**2 * (2 * 1e4 * 12.0) ** 0.5
    assert flow.mass_flow[0] == pytest.approx(expected, rel=1e-14)
