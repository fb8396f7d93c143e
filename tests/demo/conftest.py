"""Simulated spans that several tests of the example works look at."""

import pytest

from meterfix.demo.logs import files_of
from meterfix.demo.simulator import simulate


@pytest.fixture(scope="session")
def clean_month():
    """Return the month without noise, calibration errors or flaws."""
    return simulate(noise=False, calibration=False, flaws=False)


@pytest.fixture(scope="session")
def example_month():
    """Return the month as it is stored."""
    return simulate()


@pytest.fixture(scope="session")
def example_files(example_month):
    """Return every log of that month: name to bytes."""
    return dict(files_of(example_month))
