"""The commented example of a site file, and edits of it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from meterfix.errors import Mistake, SiteFileError
from meterfix.intake.site import site_from_text

EXAMPLE = Path(__file__).parents[3] / "config" / "site.toml"

Edit = tuple[str, str]


@pytest.fixture(scope="session")
def example_path() -> Path:
    return EXAMPLE


@pytest.fixture(scope="session")
def edited() -> Callable[..., str]:
    """Return the example with every first occurrence of an old text replaced by a new one."""

    def edit(*edits: Edit) -> str:
        text = EXAMPLE.read_text(encoding="utf-8")
        for old, new in edits:
            assert old in text, f"the example no longer holds {old!r}"
            text = text.replace(old, new, 1)
        return text

    return edit


@pytest.fixture(scope="session")
def mistakes_of() -> Callable[[str], tuple[Mistake, ...]]:
    """Return every mistake of a site file's text; none if it is usable."""

    def find(text: str) -> tuple[Mistake, ...]:
        try:
            site_from_text(text, "folder/site.toml")
        except SiteFileError as error:
            return error.mistakes
        return ()

    return find
