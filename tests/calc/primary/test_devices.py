"""Every form of device behind one solver: reference library, mixtures, calibration, limits."""

from __future__ import annotations

import numpy as np
import pytest
from fluids.flow_meter import differential_pressure_meter_solver

from meterfix.calc.elementary import power
from meterfix.calc.primary import orifice
from meterfix.calc.primary.devices import devices_of
from meterfix.calc.primary.flow import device_flow
from meterfix.calc.primary.forms import (
    FORM_CODES,
    discharge_terms,
    geometry_outside_limits,
    groups,
    pressure_loss,
    reynolds_number_outside_limits,
)
from meterfix.model.device import (
    Calibration,
    Nozzle,
    NozzleForm,
    OrificePlate,
    Tappings,
    VenturiForm,
    VenturiTube,
)

FIELDS = ("mass_flow", "discharge_coefficient", "expansibility", "reynolds_number", "converged")
NAMES = {
    NozzleForm.ISA_1932: "ISA 1932 nozzle",
    NozzleForm.LONG_RADIUS: "long radius nozzle",
    NozzleForm.VENTURI_NOZZLE: "venturi nozzle",
    VenturiForm.AS_CAST: "as cast convergent venturi tube",
    VenturiForm.MACHINED: "machined convergent venturi tube",
    VenturiForm.ROUGH_WELDED: "rough welded convergent venturi tube",
}
"""What fluids calls them."""
RANGES = {
    NozzleForm.ISA_1932: ((0.05, 0.5), (0.3, 0.8)),
    NozzleForm.LONG_RADIUS: ((0.05, 0.63), (0.2, 0.8)),
    NozzleForm.VENTURI_NOZZLE: ((0.16, 0.5), (0.316, 0.775)),
    VenturiForm.AS_CAST: ((0.1, 0.8), (0.3, 0.75)),
    VenturiForm.MACHINED: ((0.05, 0.25), (0.4, 0.75)),
    VenturiForm.ROUGH_WELDED: ((0.2, 1.2), (0.4, 0.7)),
}
"""Pipe diameters and diameter ratios within the limits of use."""
COMMON = {
    "bore_expansion": 16e-6,
    "pipe_expansion": 11e-6,
    "bore_reference_temperature": 293.15,
    "pipe_reference_temperature": 293.15,
}


def points(form: NozzleForm | VenturiForm, count: int, seed: int) -> dict[str, np.ndarray]:
    draw = np.random.default_rng(seed)
    (narrow, wide), (low, high) = RANGES[form]
    D = np.exp(draw.uniform(np.log(narrow), np.log(wide), count))
    p1 = 10 ** draw.uniform(5.0, 7.0, count)
    return {
        "differential_pressure": np.minimum(10 ** draw.uniform(2.0, 5.5, count), 0.25 * p1),
        "static_pressure": p1,
        "density": p1 / 1e5 * draw.uniform(0.6, 2.0, count),
        "dynamic_viscosity": 10 ** draw.uniform(-5.2, -4.6, count),
        "isentropic_exponent": draw.uniform(1.1, 1.6, count),
        "bore": draw.uniform(low, high, count) * D,
        "pipe_diameter": D,
        "form": np.full(count, FORM_CODES[form]),
    }


@pytest.mark.parametrize("form", NAMES)
def test_nozzles_and_venturi_tubes_against_a_reference_library(form) -> None:
    """The mass flow is that of `fluids` to 1e-9 on 2,000 random points inside the limits.

    Source: fluids, differential_pressure_meter_solver. Its default coefficient of the as-cast,
    machined and rough-welded Venturi tubes is the standard's.
    """
    given = points(form, 4000, seed=FORM_CODES[form])
    flow = device_flow(**given)
    limits = {"bore": given["bore"], "pipe_diameter": given["pipe_diameter"]}
    outside = reynolds_number_outside_limits(
        flow.reynolds_number, **limits, form=given["form"]
    ) | geometry_outside_limits(**limits, form=given["form"])
    inside = np.flatnonzero(~outside)[:2000]
    assert len(inside) > 600
    worst = 0.0
    for k in inside.tolist():
        point = {name: float(values[k]) for name, values in given.items() if name != "form"}
        expected = differential_pressure_meter_solver(
            D=point["pipe_diameter"],
            D2=point["bore"],
            P1=point["static_pressure"],
            P2=point["static_pressure"] - point["differential_pressure"],
            rho=point["density"],
            mu=point["dynamic_viscosity"],
            k=point["isentropic_exponent"],
            meter_type=NAMES[form],
        )
        worst = max(worst, abs(flow.mass_flow[k] / expected - 1.0))
    assert worst < 1e-9


@pytest.mark.parametrize("form", [NozzleForm.ISA_1932, NozzleForm.LONG_RADIUS])
def test_coefficient_and_reynolds_number_agree(form) -> None:
    """C of the result is the polynomial at the result's own Re_D, to 1e-10."""
    given = points(form, 20_000, seed=40)
    flow = device_flow(**given)
    terms = discharge_terms(
        bore=given["bore"],
        pipe_diameter=given["pipe_diameter"],
        form=given["form"],
        calibrated=np.full(20_000, np.nan),
    )
    good = flow.converged & (flow.reynolds_number > 1e4)
    assert good.sum() > 15_000
    again = terms.at(np.where(good, flow.reynolds_number, 1.0) ** -0.1)
    assert np.abs(again / flow.discharge_coefficient - 1.0)[good].max() < 1e-10


@pytest.mark.parametrize("form", list(FORM_CODES)[:6])
def test_slope_of_the_coefficient(form) -> None:
    """The terms' u dC/du is the central difference of C, to 1e-8 of C."""
    bore, D = np.full(5, 0.06), np.full(5, 0.1)
    codes = np.full(5, FORM_CODES[form])
    terms = discharge_terms(bore=bore, pipe_diameter=D, form=codes, calibrated=np.full(5, np.nan))
    u = np.array([2e4, 1e5, 3e5, 1e6, 1e7]) ** -0.1
    step = 1e-5
    difference = (terms.at(u * (1 + step)) - terms.at(u * (1 - step))) / (2 * step)
    assert terms.slope(u) == pytest.approx(difference, abs=1e-8)


def mixture(count: int) -> dict[str, np.ndarray]:
    """All nine forms in turn, every fifth record calibrated."""
    parts = [points(NozzleForm.LONG_RADIUS, count, seed=50)]
    given = parts[0] | {"form": np.arange(count) % len(FORM_CODES)}
    given["calibrated"] = np.where(np.arange(count) % 5 == 0, 0.95, np.nan)
    return given


def test_forms_mixed_in_one_call_give_what_each_gives_alone() -> None:
    """Nine forms and calibrated devices in any batch, across chunks: identical bits."""
    given = mixture(20_000)
    whole = device_flow(**given)
    for first, size in ((0, 1), (7, 1), (3, 5), (8000, 400), (19_000, 1000)):
        part = device_flow(**{n: v[first : first + size] for n, v in given.items()})
        for name in FIELDS:
            expected = getattr(whole, name)[first : first + size]
            assert getattr(part, name).tobytes() == expected.tobytes()
    for code in range(len(FORM_CODES)):
        which = given["form"] == code
        part = device_flow(**{n: v[which] for n, v in given.items()})
        assert part.mass_flow.tobytes() == whole.mass_flow[which].tobytes()


def test_orifice_plates_keep_their_bits_beside_others() -> None:
    """Orifice plates in a batch with nozzles have the bits that they have without them."""
    given = mixture(9000)
    del given["calibrated"]
    whole = device_flow(**given).mass_flow
    plates = given["form"] <= FORM_CODES[Tappings.FLANGE]
    alone = device_flow(**{n: v[plates] for n, v in given.items()}).mass_flow
    assert whole[plates].tobytes() == alone.tobytes()


def test_an_orifice_plate_is_solved_with_its_own_kernels_alone() -> None:
    """Plates have the bits of the orifice kernels and of five Newton steps of their polynomial.

    The steps are written out here as the solver took them before it knew nozzles.
    """
    given = mixture(5000)
    plates = given["form"] <= FORM_CODES[Tappings.FLANGE]
    del given["calibrated"]
    point = {name: np.ascontiguousarray(values[plates]) for name, values in given.items()}
    d, D, dp = point["bore"], point["pipe_diameter"], point["differential_pressure"]
    terms = orifice.discharge_terms(bore=d, pipe_diameter=D, tappings=point["form"])
    epsilon = orifice.expansibility(
        dp, point["static_pressure"], point["isentropic_exponent"], diameter_ratio=d / D
    )
    beta2 = (d / D) * (d / D)
    approach = 1.0 / np.sqrt(1.0 - beta2 * beta2)
    root = np.sqrt(2.0 * dp * point["density"])
    without_C = approach * epsilon * (0.25 * np.pi) * (d * d) * root
    X = without_C * (4.0 / np.pi) / (point["dynamic_viscosity"] * D)
    u = power(0.6 * X, -0.1)

    def coefficient(u: np.ndarray) -> np.ndarray:
        u3 = u * u * u
        inner = terms.c7 + u * (terms.c8 + u3 * terms.c11)
        return terms.constant + u3 * (terms.c3 + u3 * u * inner)

    for _ in range(5):
        u3 = u * u * u
        u4 = u3 * u
        inner = 7 * terms.c7 + u * (8 * terms.c8 + u3 * (11 * terms.c11))
        slope = u3 * (3 * terms.c3 + u4 * inner)
        C = coefficient(u)
        u = u - u * (C - 1.0 / (X * (u3 * u3 * u4))) / (10.0 * C + slope)
    flow = device_flow(**given)
    expected = coefficient(u) * without_C
    assert flow.converged[plates].all()
    assert flow.mass_flow[plates].tobytes() == expected.tobytes()


def test_a_calibrated_coefficient_is_constant() -> None:
    """Any form with C from a certificate has exactly that C at every Reynolds number."""
    given = mixture(900)
    given["calibrated"] = np.full(900, 0.955)
    flow = device_flow(**given)
    assert flow.converged.all()
    assert (flow.discharge_coefficient == 0.955).all()
    epsilon, beta = flow.expansibility, given["bore"] / given["pipe_diameter"]
    expected = (
        0.955 * epsilon / np.sqrt(1 - beta**4) * np.pi / 4 * given["bore"] ** 2
        * np.sqrt(2 * given["differential_pressure"] * given["density"])
    )  # fmt: skip
    assert flow.mass_flow == pytest.approx(expected, rel=1e-13)


def test_groups_cover_every_record_once() -> None:
    """Each record is in one group, orifice plates of all tappings in one; none of none."""
    form = np.array([8, 0, 2, 5, 1, 8, 3])
    found = {one: which.tolist() for one, which in groups(form)}
    assert found == {
        None: [1, 2, 4],
        NozzleForm.ISA_1932: [6],
        NozzleForm.VENTURI_NOZZLE: [3],
        VenturiForm.ROUGH_WELDED: [0, 5],
    }
    assert list(groups(np.zeros(0, dtype=np.int64))) == []
    assert list(groups(np.array([2, 0, 1]))) == [(None, slice(None))]


@pytest.mark.parametrize(
    ("form", "D", "beta", "lowest", "highest"),
    [
        (NozzleForm.ISA_1932, 0.1, 0.43, 7e4, 1e7),
        (NozzleForm.ISA_1932, 0.1, 0.45, 2e4, 1e7),
        (NozzleForm.LONG_RADIUS, 0.1, 0.5, 1e4, 1e7),
        (NozzleForm.VENTURI_NOZZLE, 0.2, 0.5, 1.5e5, 2e6),
        (VenturiForm.AS_CAST, 0.3, 0.5, 2e5, 2e6),
        (VenturiForm.MACHINED, 0.2, 0.5, 2e5, 1e6),
        (VenturiForm.ROUGH_WELDED, 0.3, 0.5, 2e5, 2e6),
    ],
)
def test_reynolds_limits_of_each_form(form, D, beta, lowest, highest) -> None:
    """Re_D between the form's limits is inside, beyond either, or not known, outside.

    ISO 5167-3:2003, 5.1.6.1, 5.2.6.1, 5.3.4.1; ISO 5167-4:2003, 5.5 (from memory).
    """
    Re = np.array([lowest * 0.999, lowest * 1.001, highest * 0.999, highest * 1.001, np.nan])
    found = reynolds_number_outside_limits(
        Re,
        bore=np.full(5, beta * D),
        pipe_diameter=np.full(5, D),
        form=np.full(5, FORM_CODES[form]),
    )
    assert found.tolist() == [True, False, False, True, True]


@pytest.mark.parametrize("form", NAMES)
def test_geometry_limits_of_each_form(form) -> None:
    """Pipe diameter and diameter ratio inside, and each just beyond its limits.

    Limits as in RANGES; a Venturi nozzle's throat is at least 50 mm besides.
    """
    (narrow, wide), (low, high) = RANGES[form]
    middle, beta = 0.5 * (narrow + wide), 0.5 * (low + high)
    D = np.array([middle, wide * 1.001, middle, middle, 0.0499])
    ratio = np.array([beta, beta, low * 0.999, high * 1.001, beta])
    found = geometry_outside_limits(
        bore=ratio * D, pipe_diameter=D, form=np.full(5, FORM_CODES[form])
    )
    assert found.tolist() == [False, True, True, True, True]


def test_a_certificate_replaces_the_limits_of_use() -> None:
    """A calibrated device is judged by its certificate's range of Re_D, not by its standard's.

    Without a stated range the standard's limits of Re_D stand; geometry is never flagged.
    """
    odd = {"bore": 0.008, "pipe_diameter": 0.02, **COMMON}
    with_range = Calibration(0.61, 0.002, "C-1", (3e3, 9e4))
    devices = devices_of(
        [
            OrificePlate(**odd, tappings=Tappings.CORNER),
            OrificePlate(**odd, tappings=Tappings.CORNER, calibration=with_range),
            OrificePlate(
                **odd, tappings=Tappings.CORNER, calibration=Calibration(0.61, 0.002, "C-2")
            ),
        ],
        np.array([1, 3, 2]),
    )
    assert devices.geometry_outside_limits().tolist() == [True, *(5 * [False])]
    found = devices.reynolds_number_outside_limits(np.array([1e4, 2e3, 4e3, 1e5, 4e3, 1e5]))
    assert found.tolist() == [False, True, False, True, True, False]
    assert devices.calibration_uncertainty.tolist()[1:] == 5 * [0.002]
    assert np.isnan(devices.calibration_uncertainty[0])


def test_pressure_loss_as_stated_or_by_the_equation() -> None:
    """A stated ratio gives that part of dp; without one it is the equation's.

    ISO 5167-2:2003, equation (7): 9069.47 Pa of 17 kPa at beta 0.6788 and C 0.61512 (the example
    of the reference library fluids).
    """
    loss = pressure_loss(
        np.full(2, 17_000.0),
        np.full(2, 0.61512),
        diameter_ratio=np.full(2, 0.05 / 0.07366),
        stated_ratio=np.array([0.12, np.nan]),
    )
    assert loss == pytest.approx([2040.0, 9069.474705745388], rel=1e-9)


def test_what_cannot_be_computed_is_refused() -> None:
    """An impossible throat, and a Venturi tube without its pressure loss, raise and say why."""
    with pytest.raises(ValueError, match="bore is 120 mm in a pipe of 100 mm"):
        devices_of(
            [Nozzle(bore=0.12, pipe_diameter=0.1, form=NozzleForm.ISA_1932, **COMMON)],
            np.array([1]),
        )
    for device in (
        VenturiTube(bore=0.06, pipe_diameter=0.1, form=VenturiForm.MACHINED, **COMMON),
        Nozzle(bore=0.06, pipe_diameter=0.1, form=NozzleForm.VENTURI_NOZZLE, **COMMON),
    ):
        with pytest.raises(ValueError, match="states no pressure loss"):
            devices_of([device], np.array([1]))
