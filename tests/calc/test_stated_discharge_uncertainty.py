"""What is stated of a discharge coefficient: by the standard, by a certificate, and what adds."""

from dataclasses import replace

import numpy as np
import pytest

from meterfix.calc.disturbance import discharge_standard_uncertainty
from meterfix.calc.primary.devices import devices_of
from meterfix.model.device import Calibration, OrificePlate, Tappings

PLATE = OrificePlate(
    bore=0.09,
    pipe_diameter=0.15,
    tappings=Tappings.FLANGE,
    bore_expansion=16e-6,
    pipe_expansion=11e-6,
    bore_reference_temperature=293.15,
    pipe_reference_temperature=293.15,
)
CALIBRATED = replace(
    PLATE,
    calibration=Calibration(
        discharge_coefficient=0.6, relative_standard_uncertainty=0.00125, certificate="C-1"
    ),
)


def stated(device, *reynolds_numbers):
    count = np.array([len(reynolds_numbers)])
    return discharge_standard_uncertainty(
        devices_of([device], count), np.array(reynolds_numbers)
    ).tolist()


def test_short_straight_lengths_add_to_the_standard_and_to_a_certificate():
    """ISO 5167-2:2003, 6.2.4 (from memory): 0.5 % at k = 2 is added arithmetically to either."""
    short = {"short_straight_lengths": True}
    assert stated(PLATE, 1e6) == pytest.approx([0.0025])
    assert stated(replace(PLATE, **short), 1e6) == pytest.approx([0.005])
    assert stated(CALIBRATED, 1e6) == pytest.approx([0.00125])
    assert stated(replace(CALIBRATED, **short), 1e6) == pytest.approx([0.00375])


def test_a_certificate_without_a_range_holds_within_the_limits_of_use():
    """Where no range of Re_D is stated the standard's limits of use stand: nothing below them."""
    low, inside = stated(CALIBRATED, 2e3, 1e6)
    assert np.isnan(low)
    assert inside == pytest.approx(0.00125)


def test_a_certificate_with_a_range_holds_there_and_nowhere_else():
    """Inside the certificate's range its figure, even below the standard's limit; outside none."""
    calibration = replace(CALIBRATED.calibration, reynolds_number_range=(1e3, 1e5))
    low, outside = stated(replace(CALIBRATED, calibration=calibration), 2e3, 1e6)
    assert low == pytest.approx(0.00125)
    assert np.isnan(outside)
