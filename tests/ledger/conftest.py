"""The kiln hall, for tests and for the processes that they kill."""

from __future__ import annotations

import importlib.util
import shutil
import sys
from pathlib import Path
from types import ModuleType

import pytest


@pytest.fixture(scope="session")
def hall() -> ModuleType:
    """Load the module `hall.py`."""
    name = "meterfix_ledger_hall"
    if name not in sys.modules:
        spec = importlib.util.spec_from_file_location(name, Path(__file__).with_name("hall.py"))
        assert spec is not None
        assert spec.loader is not None
        module = importlib.util.module_from_spec(spec)
        sys.modules[name] = module
        spec.loader.exec_module(module)
    return sys.modules[name]


@pytest.fixture(scope="session")
def flawed_day(hall, tmp_path_factory) -> Path:
    """Lay one day of the hall with malformed lines, never processed: to be copied."""
    site = hall.new_site(tmp_path_factory.mktemp("flawed") / "site", hall.hall_text(packed=True))
    for name, content in hall.flawed_logs(1).items():
        hall.lay(site.parent / "logs" / name, content)
    return site


@pytest.fixture(scope="session")
def undisturbed(hall, flawed_day, tmp_path_factory) -> Path:
    """Process the same day in one go, undisturbed: to be read only."""
    site = copied(flawed_day, tmp_path_factory.mktemp("undisturbed"))
    hall.run(site)
    return site


def copied(site: Path, folder: Path) -> Path:
    """Copy a site with its logs, times of change included, and its ledger if there is one."""
    shutil.copytree(site.parent, folder / "site")
    return folder / "site" / site.name


@pytest.fixture
def copy_of(tmp_path):
    """Return a function that copies a site into this test's folder."""

    def copy(site: Path, name: str = "copy") -> Path:
        return copied(site, tmp_path / name)

    return copy
