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


def mistakes_of_current():
    """Return the mistakes of what the patched parser gives; None where it is a usable site."""
    try:
        site_from_text("", "site.toml")
    except SiteFileError as error:
        return error.mistakes
    return None


@pytest.mark.parametrize("top", RAW)
def test_a_wrong_value_is_a_told_mistake(monkeypatch, top):
    """Each value replaced by each of twelve wrong ones: mistakes told, never a crash."""
    told = usable = 0
    current = {}
    monkeypatch.setattr(structure.tomllib, "loads", lambda _text: current["raw"])
    for place in places(RAW):
        if place[0] != top:
            continue
        for value in WRONG:
            current["raw"] = edited(place, value)
            mistakes = mistakes_of_current()
            if mistakes is None:
                usable += 1
                continue
            assert mistakes
            assert all(mistake.where.startswith("site.toml") for mistake in mistakes)
            told += 1
    assert told > usable
