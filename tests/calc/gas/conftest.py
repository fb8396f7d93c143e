"""Gases that several of these tests use; the compositions are invented, or stand in a source."""

from __future__ import annotations

import numpy as np
import pytest

NATURAL_GAS = (
    ("methane", 0.9312),
    ("ethane", 0.0385),
    ("propane", 0.0092),
    ("nitrogen", 0.0102),
    ("carbon_dioxide", 0.0109),
)
RICH_GAS = (
    ("methane", 0.78),
    ("ethane", 0.11),
    ("propane", 0.06),
    ("n_butane", 0.02),
    ("n_pentane", 0.005),
    ("nitrogen", 0.015),
    ("carbon_dioxide", 0.01),
)
HYDROGEN_BLEND = (
    ("methane", 0.74),
    ("hydrogen", 0.20),
    ("ethane", 0.03),
    ("nitrogen", 0.02),
    ("carbon_dioxide", 0.01),
)
MIXTURES = {
    "natural_gas": NATURAL_GAS,
    "rich_gas": RICH_GAS,
    "hydrogen_blend": HYDROGEN_BLEND,
}


@pytest.fixture(scope="session")
def mixtures() -> dict[str, tuple[tuple[str, float], ...]]:
    return MIXTURES


@pytest.fixture
def random() -> np.random.Generator:
    return np.random.default_rng(20240917)
