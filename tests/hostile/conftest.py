"""Layouts and the two ways of reading, for every test of bad input."""

from dataclasses import replace

import numpy as np
import pytest

from meterfix.frames import ParsedFile
from meterfix.intake.logs import parse, parse_careful, parse_fast, parse_many
from meterfix.model.source import Column, Holds, Layout, Quantity, RepeatedHour, Stamp

ARRIVAL = 1_794_700_800_000_000
"""2026-11-15T00:00:00Z [us]."""

LAYOUT = Layout(
    encoding="utf-8",
    delimiter=",",
    decimal_mark=".",
    thousands_mark="",
    time_columns=("time",),
    time_format="%Y-%m-%dT%H:%M:%SZ",
    time_zone="UTC",
    repeated_hour=RepeatedHour.SET_ASIDE,
    hour_24=False,
    columns=(
        Column(
            header="dp",
            quantity=Quantity.DIFFERENTIAL_PRESSURE,
            holds=Holds.SAMPLE,
            scale=100.0,
            offset=0.0,
            gauge=False,
            rooted=False,
            required=True,
            plausible_minimum=-1e4,
            plausible_maximum=1e5,
        ),
        Column(
            header="p",
            quantity=Quantity.STATIC_PRESSURE,
            holds=Holds.SAMPLE,
            scale=1e5,
            offset=0.0,
            gauge=True,
            rooted=False,
            required=True,
            plausible_minimum=0.0,
            plausible_maximum=1e7,
        ),
        Column(
            header="t",
            quantity=Quantity.TEMPERATURE,
            holds=Holds.SAMPLE,
            scale=1.0,
            offset=273.15,
            gauge=False,
            rooted=False,
            required=False,
            plausible_minimum=200.0,
            plausible_maximum=400.0,
        ),
    ),
    ignored_columns=("remark",),
    bad_values=(("BAD", "transmitter fault"), ("-9999", "no reading")),
    final_line_end_required=True,
    earliest=946_684_800_000_000,
    size_limit=50_000_000,
)
"""Times from 2000 on."""


def plain(parsed: ParsedFile) -> dict[str, object]:
    """Return everything that a parsed file says, comparable to the last bit."""
    out = {
        name: getattr(parsed, name)
        for name in ParsedFile.__slots__
        if name not in {"cells", "problems"}
    }
    out["problems"] = [(p.line, p.cell, p.reason, p.text) for p in parsed.problems]
    for cells in parsed.cells:
        out[f"column {cells.column}"] = (
            cells.instants.tolist(),
            cells.values.tobytes(),
            cells.values.tolist(),
            cells.lines.tolist(),
            cells.implausible.tolist(),
        )
    out["order"] = [cells.column for cells in parsed.cells]
    return out


def check_counts(parsed: ParsedFile, first_line: int = 1) -> None:
    """Assert that lines and cells add up: nothing is lost, nothing counted twice."""
    candidates: set[int] = set()
    for cells in parsed.cells:
        assert len(cells.instants) == len(cells.values) == len(cells.lines)
        assert len(cells.implausible) == len(cells.lines)
        assert cells.instants.dtype == np.int64
        assert cells.lines.dtype == np.int64
        assert cells.values.dtype == np.float64
        assert np.isfinite(cells.values).all()
        assert (np.diff(cells.lines) > 0).all()
        candidates.update(cells.lines.tolist())
    assert parsed.lines_read == len(candidates) + parsed.lines_set_aside + parsed.lines_skipped
    assert all(first_line <= line < first_line + parsed.lines_read for line in candidates)
    told = {p.line for p in parsed.problems if "neither declared nor ignored" not in p.reason}
    assert len(told - candidates) == parsed.lines_set_aside
    assert all(p.reason and len(p.text) <= 1000 for p in parsed.problems)


def read_both_ways(
    content: bytes,
    layout: Layout = LAYOUT,
    *,
    stamp: Stamp = Stamp.INSTANT,
    interval: int | None = None,
    arrival: int = ARRIVAL,
    **tail,
) -> tuple[ParsedFile, bool]:
    """Read by every path, assert that all agree and the counts add up; say if fast accepted."""
    kw = {"stamp": stamp, "interval": interval, "arrival": arrival, **tail}
    careful = parse_careful(content, layout, **kw)
    check_counts(careful, tail.get("first_line", 1))
    fast = parse_fast(content, layout, **kw)
    if fast is not None:
        assert plain(fast) == plain(careful)
    assert plain(parse(content, layout, **kw)) == plain(careful)
    if not tail:
        many = parse_many(
            [content, content], layout, stamp=stamp, interval=interval, arrivals=[arrival] * 2
        )
        assert [plain(each) for each in many] == [plain(careful)] * 2
    return careful, fast is not None


@pytest.fixture(scope="session")
def layout():
    """A function that returns the plain layout with some of its fields changed."""

    def changed(**fields) -> Layout:
        return replace(LAYOUT, **fields)

    return changed


@pytest.fixture(scope="session")
def both():
    """`read_both_ways`."""
    return read_both_ways


@pytest.fixture(scope="session")
def as_plain():
    """`plain`."""
    return plain


@pytest.fixture(scope="session")
def arrival() -> int:
    """When every file of these tests arrived."""
    return ARRIVAL
