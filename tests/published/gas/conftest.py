"""Reading of the published tables beside these tests."""

from __future__ import annotations

import csv
from collections.abc import Callable
from pathlib import Path

import pytest

Rows = list[dict[str, str]]


def read_rows(name: str) -> Rows:
    lines = (Path(__file__).parent / name).read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("#")))


@pytest.fixture(scope="session")
def published() -> Callable[[str], Rows]:
    return read_rows


@pytest.fixture(scope="session")
def compositions() -> dict[str, tuple[tuple[str, float], ...]]:
    """Mole fractions of every gas of the check values, by its name."""
    found: dict[str, tuple[tuple[str, float], ...]] = {}
    for row in read_rows("compositions.csv"):
        found[row["comp_id"]] = (
            *found.get(row["comp_id"], ()),
            (row["component"], float(row["mole_fraction"])),
        )
    return found
