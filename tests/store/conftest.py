"""The scenario of the store's tests, for tests and for the processes that they kill."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import pytest


@pytest.fixture(scope="session")
def scenario() -> ModuleType:
    name = "meterfix_store_scenario"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name("scenario.py"))
        assert spec is not None
        assert spec.loader is not None
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]


@pytest.fixture
def ledger(tmp_path, scenario):
    with scenario.open_ledger(tmp_path) as opened:
        yield opened
