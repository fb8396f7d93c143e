"""Mistakes of a site file: all in one run, each with its place, what was given, what is allowed."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import pytest

from meterfix.errors import SiteFileError
from meterfix.intake.site import site_from_text

TABLE = Path(__file__).with_name("mistakes.toml")
SINGLE = {
    entry["name"]: (entry["edits"], entry["place"], entry["given"], entry["allowed"])
    for entry in tomllib.loads(TABLE.read_text(encoding="utf-8"))["mistake"]
}


@pytest.mark.parametrize("name", SINGLE)
def test_each_mistake_is_told_where_what_and_what_instead(edited, mistakes_of, name):
    """One mistake in an otherwise good file gives a message with place, given and allowed."""
    edits, place, given, allowed = SINGLE[name]
    found = [m for m in mistakes_of(edited(*edits)) if m.where == f"site.toml, {place}"]
    assert found, mistakes_of(edited(*edits))
    assert given in found[0].given
    assert allowed in found[0].allowed
    assert "hunter2" not in str(found[0])


# these mistakes rightly show in a second place too
ECHOES = {
    "gas that begins after its meter",
    "kappa from a fixed compression factor",
    "base conditions within a gas day",
}


@pytest.mark.parametrize("name", [name for name in SINGLE if name not in ECHOES])
def test_one_mistake_gives_one_message(edited, mistakes_of, name):
    """A mistake is told once and drags no others behind it."""
    assert len(mistakes_of(edited(*SINGLE[name][0]))) == 1


IMPOSSIBLE = (
    "unknown key",
    "wrong word",
    "two atmospheres",
    "price per m3",
    "gauge or absolute missing",
    "range upside down",
    "unknown column",
    "negative fraction",
    "energy of another kind",
    "bore not smaller than the pipe",
    "a dp signal used as temperature",
    "an instant without its offset",
    "unknown meter",
    "no clock time",
    "two-digit year",
)


def test_an_impossible_site_file_tells_everything_in_one_run(edited, mistakes_of):
    """Fifteen different mistakes, of shape, unit, reference and physics, all in one run."""
    edits = [edit for name in IMPOSSIBLE for edit in SINGLE[name][0]]
    text = edited(*edits)
    found = mistakes_of(text)
    assert len(found) == len(IMPOSSIBLE)
    for name in IMPOSSIBLE:
        _, place, given, allowed = SINGLE[name]
        assert any(
            m.where == f"site.toml, {place}" and given in m.given and allowed in m.allowed
            for m in found
        ), name
    with pytest.raises(SiteFileError) as caught:
        site_from_text(text, "folder/site.toml")
    assert str(caught.value).startswith(f"folder/site.toml: {len(found)} mistakes")
    assert all(str(mistake) in str(caught.value) for mistake in found)


@pytest.mark.parametrize(
    ("text", "place"),
    [
        ("[site]\nname = \n", "line 2, column 8"),
        ('[site]\nname = "x', "end of the file"),
        ("[site]\n[site]\n", "line 2"),
        ("a = " + "[" * 5000, ""),
    ],
)
def test_a_syntax_error_is_one_mistake_with_its_line(mistakes_of, text, place):
    """What is not TOML is one mistake that names line and column."""
    (mistake,) = mistakes_of(text)
    assert mistake.where == "site.toml"
    assert place in mistake.given


def test_an_empty_file_names_every_missing_section(mistakes_of):
    """An empty site file lacks its sections, each told."""
    places = {mistake.where for mistake in mistakes_of("")}
    assert places == {f"site.toml, [{s}]" for s in ("site", "source", "signal", "gas", "meter")}


def test_any_value_replaced_by_any_other_never_crashes(edited, mistakes_of):
    """Each assignment of the example, replaced by values of every TOML type: mistakes or a site.

    Nothing but SiteFileError may come out, whatever stands where.
    """
    lines = edited().splitlines()
    values = ('""', '"x"', "0", "-1.5", "true", "[]", "[1]", "{}", "{ a = 1 }", "nan", "2026-01-01")
    keys = [n for n, line in enumerate(lines) if re.match(r"[\w.]+ = [^\[]", line)]
    assert len(keys) > 60
    for k, n in enumerate(keys):
        for value in (values[k % len(values)], values[(k + 4) % len(values)]):
            changed = [*lines]
            changed[n] = re.sub(r"^([\w.]+) = .*", rf"\1 = {value}", lines[n])
            mistakes_of("\n".join(changed))
        mistakes_of("\n".join(lines[:n] + lines[n + 1 :]))


def test_origins_must_mean_the_same(edited, mistakes_of):
    """A signal whose two origins disagree in gauge, root or stamp is a mistake for each."""
    second = """
[source.spare]
folder = "logs/spare"
files = "*.csv"
delivery = "whole"
stamp = "interval_end"
interval = "1 min"
maximum_gap = "5 min"
delimiter = ";"
decimal_mark = ","
time_columns = ["date", "time"]
time_format = "%d.%m.%Y %H:%M"
time_zone = "Europe/Berlin"
[source.spare.column.pressure]
quantity = "static_pressure"
unit = "bar"
reference = "absolute"
holds = "mean"

[signal.PT-101]
"""
    both = 'column = "p" }, { source = "spare", column = "pressure" }]\nrange = ["0 bar"'
    text = edited(("[signal.PT-101]\n", second), ('column = "p" }]\nrange = ["0 bar"', both))
    found = mistakes_of(text)
    assert {m.where for m in found} == {"site.toml, [signal.PT-101.from #2]"}
    fields = " ".join(m.given for m in found)
    for word in ("reference", "holds", "stamp", "interval", "between", "maximum_age"):
        assert f"its {word} is" in fields
    assert "its maximum_age is 300 s, that of the first origin 900 s" in fields
    assert len(found) == 6
