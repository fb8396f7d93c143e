"""The kiln hall with tag logs, for every test of this folder."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import pytest


@pytest.fixture(scope="session")
def hall() -> ModuleType:
    """Load the module `historian.py`."""
    name = "meterfix_tags_historian"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(
            name, Path(__file__).with_name("historian.py")
        )
        assert spec is not None
        assert spec.loader is not None
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]


@pytest.fixture(scope="session")
def wide(hall, tmp_path_factory) -> Path:
    """Process the hall with wide logs: to be read only."""
    return hall.processed(
        tmp_path_factory.mktemp("wide") / "site", hall.wide_text(), hall.wide_files()
    )


@pytest.fixture(scope="session")
def tagged(hall, tmp_path_factory) -> Path:
    """Process the hall with one tag log, rows in order of time: to be read only."""
    return hall.processed(
        tmp_path_factory.mktemp("tagged") / "site",
        hall.tag_text(),
        hall.mixed_files(hall.METERS, hall.tag_rows()),
    )
