"""Layouts and the two ways of reading, for every test of bad input."""

import re
from dataclasses import dataclass, field, replace

import numpy as np
import pytest

from meterfix.frames import ParsedFile
from meterfix.intake.logs import parse, parse_careful, parse_fast, parse_many
from meterfix.model.source import (
    Column,
    Holds,
    Layout,
    LayoutKind,
    Quality,
    Quantity,
    RepeatedHour,
    Stamp,
    Use,
)

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

TAG_LAYOUT = replace(
    LAYOUT,
    kind=LayoutKind.TAGS,
    columns=tuple(
        replace(column, header=tag, required=False)
        for tag, column in zip(("PDT-1.PV", "NA", "007"), LAYOUT.columns, strict=True)
    ),
    tag_column="tag",
    value_column="value",
    quality_column="quality",
    qualities=(
        Quality("GOOD", Use.GOOD, ""),
        Quality("192", Use.GOOD, ""),
        Quality("UNC", Use.DOUBTFUL, "uncertain, last usable value"),
        Quality("BAD", Use.BAD, "not connected"),
        Quality("0", Use.BAD, "no communication"),
    ),
    ignored_tags=("SP-1", "@note"),
)
"""The same three quantities, a row per tag and time; two tags bear odd names."""


@dataclass(frozen=True)
class Case:
    """What a file holds and what must come of it."""

    number: int
    """In the list of hostile inputs that every layout is measured against; 0: not in it."""
    what: str
    content: bytes
    used: dict[str, list[int]] = field(default_factory=dict)
    """Line numbers of the good cells, by column."""
    problems: tuple[tuple[int, str, str], ...] = ()
    """(line, cell, part of the reason): exactly these."""
    rejected: str = ""
    warning: str = ""
    skipped: int = 1
    layout: dict[str, object] = field(default_factory=dict)
    fast: bool | None = None
    """Whether the fast path must accept it (True) or decline it (False); None: either."""


def pytest_generate_tests(metafunc):
    """Give the cases of a module to its tests: all of them, or those that more lines leave be."""
    cases = [Case(**fields) for fields in getattr(metafunc.module, "CASES", [])]
    lasting = [c for c in cases if c.used and not c.rejected and c.number not in {2, 4, 42, 43}]
    for name, chosen in (("case", cases), ("lasting_case", lasting)):
        if name in metafunc.fixturenames and hasattr(metafunc.module, "CASES"):
            metafunc.parametrize(name, chosen, ids=[f"{c.number}: {c.what[:60]}" for c in chosen])


def plain(parsed: ParsedFile) -> dict[str, object]:
    """Return everything that a parsed file says, comparable to the last bit."""
    out = {
        name: getattr(parsed, name)
        for name in ParsedFile.__slots__
        if name not in {"cells", "problems"}
    }
    out["problems"] = [(p.line, p.cell, p.reason, p.text) for p in parsed.problems]
    for cells in parsed.cells:
        out[f"doubtful {cells.column}"] = cells.doubtful.tolist()
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
        assert len(cells.implausible) == len(cells.doubtful) == len(cells.lines)
        assert cells.doubtful.dtype == np.bool_
        assert cells.instants.dtype == np.int64
        assert cells.lines.dtype == np.int64
        assert cells.values.dtype == np.float64
        assert np.isfinite(cells.values).all()
        assert (np.diff(cells.lines) > 0).all()
        candidates.update(cells.lines.tolist())
    assert parsed.lines_read == len(candidates) + parsed.lines_set_aside + parsed.lines_skipped
    assert all(first_line <= line < first_line + parsed.lines_read for line in candidates)
    told = {p.line for p in parsed.problems if "neither declared nor ignored" not in p.reason}
    # an unknown tag is told once, with the number of its lines
    counts = (re.search(r"(\d+) lines? from this one on", p.reason) for p in parsed.problems)
    more = sum(int(count[1]) - 1 for count in counts if count)
    assert len(told - candidates) + more == parsed.lines_set_aside
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
    """Return a function that gives a plain layout with some of its fields changed.

    With `kind=LayoutKind.TAGS` it is the layout of tag logs.
    """

    def changed(**fields) -> Layout:
        tags = fields.get("kind") is LayoutKind.TAGS
        return replace(TAG_LAYOUT if tags else LAYOUT, **fields)

    return changed


@pytest.fixture(scope="session")
def tag_layout():
    """Return a function that gives the layout of tag logs with some of its fields changed."""

    def changed(**fields) -> Layout:
        return replace(TAG_LAYOUT, **fields)

    return changed


@pytest.fixture(scope="session")
def both():
    """Return `read_both_ways`."""
    return read_both_ways


@pytest.fixture(scope="session")
def as_plain():
    """Return `plain`."""
    return plain


@pytest.fixture(scope="session")
def arrival() -> int:
    """Return when every file of these tests arrived."""
    return ARRIVAL


@pytest.fixture(scope="session")
def check_fate():
    """Return the check that a case has exactly its fate in a layout."""

    def check(case: Case, base: Layout = LAYOUT) -> None:
        parsed, accepted = read_both_ways(case.content, replace(base, **case.layout))
        assert case.rejected in parsed.rejected
        assert bool(parsed.rejected) == bool(case.rejected)
        if case.fast is not None:
            assert accepted == case.fast
        if case.rejected:
            assert parsed.lines_read == 0
            assert parsed.cells == ()
            return
        assert {cells.column: cells.lines.tolist() for cells in parsed.cells} == case.used
        assert len(parsed.problems) == len(case.problems)
        for problem, (line, cell, part) in zip(parsed.problems, case.problems, strict=True):
            assert (problem.line, problem.cell) == (line, cell)
            assert part in problem.reason
        assert case.warning in parsed.warning
        assert bool(parsed.warning) == bool(case.warning)
        assert parsed.lines_skipped == case.skipped

    return check


@pytest.fixture(scope="session")
def check_lasting():
    """Return the check that a case keeps its fate when 200 good lines follow it."""

    def check(case: Case, base: Layout = LAYOUT) -> None:
        declared = replace(base, **case.layout)
        alone, _ = read_both_ways(case.content, declared)
        time = "2026-09-{:02}T{:02}:00:00Z"
        if declared.time_format.startswith("%Y-%m-%d %H"):
            time = "2026-09-{:02} {:02}:00:00" + ("+00:00" if "%z" in declared.time_format else "")
        rows = []
        for n in range(200):
            value = f"{n}{declared.decimal_mark}25"
            by_header = {"tag": declared.columns[n % 2].header, "quality": "GOOD"}
            by_header[declared.time_columns[0]] = time.format(1 + n // 24, n % 24)
            cells = [by_header.get(name, value) for name in alone.header]
            rows.append(declared.delimiter.join(cells))
        parsed, _ = read_both_ways(case.content + "\n".join(rows).encode() + b"\n", declared)
        assert parsed.lines_read == alone.lines_read + 200
        assert plain(parsed)["problems"] == plain(alone)["problems"]
        assert parsed.cells_set_aside == alone.cells_set_aside
        before = {cells.column: cells for cells in alone.cells}
        rows_of = {cells.column: 200 for cells in parsed.cells}
        if declared.kind is LayoutKind.TAGS:
            names = [column.header for column in declared.columns]
            rows_of = {names[0]: 100, names[1]: 100, names[2]: 0}
        assert set(before) <= {cells.column for cells in parsed.cells}
        for cells in parsed.cells:
            count = len(before[cells.column].lines) if cells.column in before else 0
            if count:
                first = before[cells.column]
                assert cells.values[:count].tolist() == first.values.tolist()
                assert cells.instants[:count].tolist() == first.instants.tolist()
            assert len(cells.lines) == count + rows_of[cells.column]

    return check
