"""No wrong value anywhere in a site file is anything but a told mistake."""

from __future__ import annotations

import copy
import tomllib
from pathlib import Path

import pytest

from meterfix.errors import SiteFileError
from meterfix.intake.site import site_from_text, structure

EXAMPLE = Path(__file__).parents[2] / "config" / "site.toml"
RAW = tomllib.loads(EXAMPLE.read_text(encoding="utf-8"))
GONE = object()
WRONG = (GONE, [], {}, "", 5, -1.5, True, ["x"], [{}], [[]], float("nan"), "x" * 300)


def places(value, place=()):
    """Yield the way to every key and list entry of a parsed file."""
    inner = value.items() if isinstance(value, dict) else enumerate(value)
    for step, item in inner:
        yield (*place, step)
        if isinstance(item, (dict, list)):
            yield from places(item, (*place, step))


def edited(place, value):
    """Return the example with one value replaced or taken away."""
    raw = copy.deepcopy(RAW)
    table = raw
    for step in place[:-1]:
        table = table[step]
    if value is GONE:
        del table[place[-1]]
    else:
        table[place[-1]] = value
    return raw


@pytest.mark.parametrize("top", RAW)
def test_a_wrong_value_is_a_told_mistake(monkeypatch, top):
    """Each value replaced by each of twelve wrong ones: a usable site or mistakes, never a crash."""
    told = usable = 0
    current = {}
    monkeypatch.setattr(structure.tomllib, "loads", lambda _text: current["raw"])
    for place in places(RAW):
        if place[0] != top:
            continue
        for value in WRONG:
            current["raw"] = edited(place, value)
            try:
                site_from_text("", "site.toml")
                usable += 1
            except SiteFileError as error:
                assert error.mistakes
                assert all(m.where.startswith("site.toml") for m in error.mistakes)
                told += 1
    assert told > usable
