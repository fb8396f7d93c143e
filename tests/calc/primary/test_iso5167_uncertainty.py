"""Stated uncertainties of ISO 5167: every branch, what is added, and silence outside limits."""

from __future__ import annotations

import numpy as np
import pytest

from meterfix.calc.primary.stated_uncertainty import (
    isa_1932_discharge_uncertainty,
    long_radius_discharge_uncertainty,
    mass_flow_uncertainty,
    nozzle_expansibility_uncertainty,
    orifice_discharge_uncertainty,
    orifice_expansibility_uncertainty,
    venturi_discharge_uncertainty,
    venturi_expansibility_uncertainty,
    venturi_nozzle_discharge_uncertainty,
)
from meterfix.calc.primary.venturi import AS_CAST, MACHINED, ROUGH_WELDED


def orifice(
    beta: float, D: float, reynolds: float, *, short: bool = False, eccentric: bool = False
) -> float:
    found = orifice_discharge_uncertainty(
        np.array([reynolds]),
        bore=np.array([beta * D]),
        pipe_diameter=np.array([D]),
        tappings=np.array([0]),
        short_straight_lengths=np.array([short]),
        slightly_eccentric=np.array([eccentric]),
    )
    return 100.0 * float(found[0])


@pytest.mark.parametrize(
    ("beta", "D", "reynolds", "percent"),
    [
        (0.15, 0.2, 1e5, 0.55),
        (0.19, 0.2, 1e5, 0.51),
        (0.25, 0.2, 1e5, 0.5),
        (0.59, 0.2, 1e5, 0.5),
        (0.7, 0.2, 1e5, 1.667 * 0.7 - 0.5),
        (0.5, 0.0508, 1e5, 0.5 + 0.9 * 0.25 * 0.8),
        (0.5, 0.07112, 1e5, 0.5),
        (0.7, 0.0508, 1e5, 1.667 * 0.7 - 0.5 + 0.9 * 0.05 * 0.8),
        (0.55, 0.2, 9.9e3, 1.0),
        (0.55, 0.2, 1.01e4, 0.5),
        (0.49, 0.2, 9.9e3, 0.5),
        (0.55, 0.0508, 9e3, 0.5 + 0.5 + 0.9 * 0.2 * 0.8),
    ],
)
def test_orifice_branches(beta: float, D: float, reynolds: float, percent: float) -> None:
    """Each branch and each added term, by hand from ISO 5167-2:2003, 5.3.3.1; added, not rooted."""
    assert orifice(beta, D, reynolds) == pytest.approx(percent, rel=1e-12)


def test_installation_is_added_arithmetically() -> None:
    """Short straight lengths add 0.5 %, a slight eccentricity 0.3 %, both 0.8 %."""
    base = orifice(0.65, 0.2, 1e5)
    assert orifice(0.65, 0.2, 1e5, short=True) == pytest.approx(base + 0.5, rel=1e-12)
    assert orifice(0.65, 0.2, 1e5, eccentric=True) == pytest.approx(base + 0.3, rel=1e-12)
    both = orifice(0.65, 0.2, 1e5, short=True, eccentric=True)
    assert both == pytest.approx(base + 0.8, rel=1e-12)


def test_outside_the_limits_nothing_is_claimed() -> None:
    """Where geometry or Reynolds number leaves the limits of use there is no uncertainty."""
    for beta, D, reynolds in (
        (0.5, 0.049, 1e5),
        (0.5, 1.01, 1e5),
        (0.76, 0.2, 1e5),
        (0.09, 0.2, 1e5),
        (0.1, 0.1, 1e5),  # a bore of 10 mm
        (0.5, 0.2, 4.9e3),
        (0.5, 0.2, np.nan),
    ):
        assert np.isnan(orifice(beta, D, reynolds))
    bore, pipe = np.array([0.1]), np.array([0.2])
    low = np.array([9e3])
    for of in (
        isa_1932_discharge_uncertainty,
        long_radius_discharge_uncertainty,
        venturi_nozzle_discharge_uncertainty,
    ):
        assert np.isnan(of(low, bore=bore, pipe_diameter=pipe)).all()
        assert np.isfinite(of(np.array([5e5]), bore=bore, pipe_diameter=pipe)).all()
    for kind in (AS_CAST, MACHINED, ROUGH_WELDED):
        assert np.isnan(
            venturi_discharge_uncertainty(kind, low, bore=bore, pipe_diameter=pipe)
        ).all()


def test_nozzles_and_venturis_by_hand() -> None:
    """The rules of ISO 5167-3:2003, 5.1.7, 5.2.7, 5.3.5 and ISO 5167-4:2003, 5.7, by hand."""
    reynolds, pipe = np.full(3, 5e5), np.full(3, 0.2)
    bore = np.array([0.4, 0.6, 0.7]) * 0.2
    given = {"bore": bore, "pipe_diameter": pipe}
    beta = bore / pipe
    assert isa_1932_discharge_uncertainty(reynolds, **given) == pytest.approx([0.008, 0.008, 0.01])
    assert long_radius_discharge_uncertainty(reynolds, **given) == pytest.approx([0.02] * 3)
    assert venturi_nozzle_discharge_uncertainty(reynolds, **given) == pytest.approx(
        0.012 + 0.015 * beta**4
    )
    middle = {"bore": np.array([0.12]), "pipe_diameter": np.array([0.21])}
    for kind, percent in ((AS_CAST, 0.7), (MACHINED, 1.0), (ROUGH_WELDED, 1.5)):
        alone = venturi_discharge_uncertainty(kind, reynolds[:1], **middle)
        short = venturi_discharge_uncertainty(
            kind, reynolds[:1], **middle, short_straight_lengths=True
        )
        assert 100.0 * alone == pytest.approx(percent)
        assert 100.0 * short == pytest.approx(percent + 0.5)


def test_expansibility_rules_by_hand() -> None:
    """3.5 dp/(kappa p1) %, 2 dp/p1 %, (4 + 100 beta^8) dp/p1 %; none below p2/p1 = 0.75."""
    dp, p1 = np.array([0.0, 1e5, 2.5e5, 2.6e5]), np.full(4, 1e6)
    orifices = orifice_expansibility_uncertainty(dp, p1, np.full(4, 1.25))
    nozzles = nozzle_expansibility_uncertainty(dp, p1)
    venturis = venturi_expansibility_uncertainty(dp, p1, diameter_ratio=np.full(4, 0.5))
    assert 100.0 * orifices[:3] == pytest.approx([0.0, 0.28, 0.70])
    assert 100.0 * nozzles[:3] == pytest.approx([0.0, 0.2, 0.5])
    assert 100.0 * venturis[:3] == pytest.approx(
        [0.0, 0.1 * (4.0 + 100.0 / 256.0), 0.25 * (4.0 + 100.0 / 256.0)]
    )
    for found in (orifices, nozzles, venturis):
        assert np.isnan(found[3])


def test_mass_flow_is_the_root_of_squared_parts() -> None:
    """Each input alone counts with its own factor of ISO 5167-1:2003, equation (3)."""
    factors = {
        "discharge_coefficient": 1.0,
        "expansibility": 1.0,
        "pipe_diameter": 2.0 * 0.6**4 / (1.0 - 0.6**4),
        "bore": 2.0 / (1.0 - 0.6**4),
        "differential_pressure": 0.5,
        "density": 0.5,
    }
    nothing = dict.fromkeys(factors, np.zeros(1))
    for name, factor in factors.items():
        found = mass_flow_uncertainty(
            diameter_ratio=np.array([0.6]), **{**nothing, name: np.array([0.004])}
        )
        assert found == pytest.approx(0.004 * factor, rel=1e-12)
