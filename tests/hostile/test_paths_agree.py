"""The fast and the careful path, one file and many, a whole file and its tails: one answer."""

import hashlib
import random
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from meterfix.intake.logs import parse_careful, parse_fast, parse_many, tail_of
from meterfix.model.source import LayoutKind, RepeatedHour, Stamp

QUICK = settings(
    max_examples=150,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)

BUILDS = {
    "plain": {},
    "decimal comma, thousands": {
        "delimiter": ";",
        "decimal_mark": ",",
        "thousands_mark": ".",
        "time_format": "%d.%m.%Y %H:%M:%S",
    },
    "two time columns, 24:00": {
        "time_columns": ("date", "clock"),
        "time_format": "%d/%m/%Y %H:%M",
        "hour_24": True,
    },
    "local, order in the file": {
        "time_format": "%Y-%m-%d %H:%M:%S",
        "time_zone": "Europe/Berlin",
        "repeated_hour": RepeatedHour.FILE_ORDER,
    },
    "local, half-hour change": {
        "time_format": "%Y-%m-%d %H:%M:%S",
        "time_zone": "Australia/Lord_Howe",
    },
    "offset and fraction": {
        "delimiter": "\t",
        "time_format": "%Y%m%dT%H%M%S.%f%z",
        "final_line_end_required": False,
    },
    "tags": {"kind": LayoutKind.TAGS},
    "tags, decimal comma, local": {
        "kind": LayoutKind.TAGS,
        "delimiter": ";",
        "decimal_mark": ",",
        "thousands_mark": ".",
        "time_columns": ("date", "clock"),
        "time_format": "%d.%m.%Y %H:%M:%S",
        "time_zone": "Europe/Berlin",
    },
    "tags, no quality": {
        "kind": LayoutKind.TAGS,
        "quality_column": "",
        "qualities": (),
        "final_line_end_required": False,
    },
}
WIDE = [build for build, fields in BUILDS.items() if "kind" not in fields]
TAGS = [build for build, fields in BUILDS.items() if "kind" in fields]


def written(build: str, fields: dict, rows: int, seed: int, line_end: str = "\n") -> bytes:
    """Return a valid file of a build: a row a minute across a clock change.

    Rows of tag logs: six of eight have a declared tag, one an unknown and one an ignored one.
    """
    draw = random.Random(seed)  # noqa: S311 - rows of a file, no secret
    delimiter = fields.get("delimiter", ",")
    mark = fields.get("decimal_mark", ".")
    time_columns = fields.get("time_columns", ("time",))
    zone = ZoneInfo(fields.get("time_zone", "UTC"))
    time_format = fields.get("time_format", "%Y-%m-%dT%H:%M:%SZ")
    start = datetime(2026, 10, 24, 23, 40, tzinfo=UTC)
    if build == "local, half-hour change":
        start = datetime(2026, 4, 4, 14, 10, tzinfo=UTC)
    tags = "kind" in fields
    header = [*time_columns, "dp", "remark", "p", "t"]
    if tags:
        header = [*time_columns, "tag", "value", *([] if "qualities" in fields else ["quality"])]
    lines = [delimiter.join(header)]
    for n in range(rows):
        instant = (start + timedelta(minutes=n, microseconds=250_000 * (n % 4))).astimezone(zone)
        text = instant.strftime(time_format)
        cells = text.split(" ") if len(time_columns) > 1 else [text]
        if tags:
            cells.append(("PDT-1.PV", "NA", "007", "PDT-1.PV", "TT-9", "NA", "SP-1", "NA")[n % 8])
            cells.append(f"{draw.uniform(0, 250):.3f}".replace(".", mark))
            cells += [] if "qualities" in fields else [draw.choice(["GOOD", "192", "UNC", "BAD"])]
            lines.append(delimiter.join(cells))
            continue
        cells += [
            f"{draw.uniform(0, 250):.3f}".replace(".", mark),
            "",
            f"{draw.uniform(0, 20):.5g}".replace(".", mark),
            f"{draw.uniform(-20, 40):.2f}".replace(".", mark),
        ]
        lines.append(delimiter.join(cells))
    return (line_end.join(lines) + line_end).encode()


@pytest.mark.parametrize("build", WIDE)
@pytest.mark.parametrize("line_end", ["\n", "\r\n"])
def test_clean_files_take_the_fast_path(build, line_end, both, layout):
    """A valid file of every build is accepted by the fast path, and all its cells are good."""
    fields = BUILDS[build]
    content = written(build, fields, 150, 1, line_end)
    parsed, accepted = both(content, layout(**fields))
    assert accepted
    # Lord Howe's clock goes back by half an hour: 60 local times cannot be settled.
    lost = 60 if build == "local, half-hour change" else 0
    assert [len(cells.lines) for cells in parsed.cells] == [150 - lost] * 3
    assert len(parsed.problems) == lost


@pytest.mark.parametrize("build", TAGS)
@pytest.mark.parametrize("line_end", ["\n", "\r\n"])
def test_clean_tag_logs_take_the_fast_path(build, line_end, both, layout):
    """A valid tag log is accepted by the fast path: each line is used, skipped or set aside."""
    fields = BUILDS[build]
    content = written(build, fields, 160, 1, line_end)
    parsed, accepted = both(content, layout(**fields))
    assert accepted
    assert parsed.lines_skipped == 1 + 20
    good = sum(len(cells.lines) for cells in parsed.cells)
    assert good + parsed.cells_set_aside == 140
    assert parsed.lines_set_aside == parsed.cells_set_aside
    if build == "tags, no quality":
        assert [len(cells.lines) for cells in parsed.cells] == [40, 60, 20]


@st.composite
def corrupted(draw) -> tuple[str, bytes]:
    """Return a file of any build in which some bytes are changed, removed or added."""
    build = draw(st.sampled_from(sorted(BUILDS)))
    rows = draw(st.integers(0, 12))
    line_end = draw(st.sampled_from(["\n", "\r\n", "\n", "\r"]))
    content = bytearray(written(build, BUILDS[build], rows, draw(st.integers(0, 5)), line_end))
    spice = st.sampled_from(
        [b"", b"\n", b"\r", b"\0", b'"', b",", b";", b".", b"\xff", b" ", b"e9", b"-", b"+", b"_",
         b"nan", b"inf", b"1e309", b"BAD", b"-9999", b"\xef\xbb\xbf", b"Z", b"24:00", b"9", b"dp",
         b"time", b"\xd9\xa1", b"0000", b"\x1a", b"NA", b"TT-9", b"UNC", b"tag", b"value", b"SP-1"]
    )  # fmt: skip
    for _ in range(draw(st.integers(0, 4))):
        kind = draw(st.sampled_from(["flip", "insert", "delete", "cell", "line"]))
        if not content:
            break
        place = draw(st.integers(0, len(content) - 1))
        if kind == "flip":
            content[place] ^= 1 << draw(st.integers(0, 7))
        elif kind == "insert":
            content[place:place] = draw(spice)
        elif kind == "delete":
            del content[place : place + draw(st.integers(1, 3))]
        else:
            lines = content.split(b"\n")
            number = draw(st.integers(0, len(lines) - 1))
            if kind == "line":
                lines[number:number] = [lines[draw(st.integers(0, len(lines) - 1))]]
            else:
                delimiter = BUILDS[build].get("delimiter", ",").encode()
                cells = lines[number].split(delimiter)
                cells[draw(st.integers(0, len(cells) - 1))] = bytearray(draw(spice))
                lines[number] = delimiter.join(cells)
            content = bytearray(b"\n".join(lines))
    return build, bytes(content)


@QUICK
@given(case=corrupted())
def test_both_paths_agree_on_corrupted_files(case, both, layout):
    """Where the fast path accepts, cells, fates, texts and line numbers equal the careful ones."""
    build, content = case
    both(content, layout(**BUILDS[build]))


@QUICK
@given(content=st.binary(max_size=300), encoding=st.sampled_from(["utf-8", "utf-16"]))
def test_any_bytes_are_read_without_an_exception(content, encoding, both, layout):
    """Whatever the bytes, there is an answer, and its counts add up."""
    both(content, layout(encoding=encoding))
    both(b"time,dp,p,t\n" + content, layout(final_line_end_required=False))


@QUICK
@given(content=st.binary(max_size=300))
def test_any_bytes_of_a_tag_log_are_read_without_an_exception(content, both, tag_layout):
    """Whatever the bytes after a tag log's header, there is an answer, and its counts add up."""
    declared = tag_layout(final_line_end_required=False)
    both(b"time,tag,value,quality\n" + content, declared)


@QUICK
@given(order=st.randoms(use_true_random=False), build=st.sampled_from(TAGS))
def test_any_interleaving_of_tags_gives_each_tag_the_same_cells(order, build, layout, arrival):
    """The rows of a tag log in any order: per tag the same instants, values and marks."""
    fields = BUILDS[build]
    content = written(build, fields, 80, 3)
    header, *rows = content.splitlines(keepends=True)
    order.shuffle(rows)
    found = []
    for each in (content, header + b"".join(rows)):
        parsed = parse_fast(
            each, layout(**fields), stamp=Stamp.INSTANT, interval=None, arrival=arrival
        )
        assert parsed is not None
        found.append(
            {
                cells.column: sorted(
                    zip(
                        cells.instants.tolist(),
                        cells.values.tolist(),
                        cells.implausible.tolist(),
                        cells.doubtful.tolist(),
                        strict=True,
                    )
                )
                for cells in parsed.cells
            }
        )
    assert found[0] == found[1]


@QUICK
@given(
    cells=st.lists(
        st.text(alphabet="0123456789+-.eE_ nifax,\u0661", max_size=8), min_size=1, max_size=8
    )
)
def test_both_paths_agree_on_what_a_number_is(cells, both, layout):
    """Whatever a cell looks like, both paths take it for the same number or for none."""
    rows = "".join(f"2026-10-01T00:00:00Z;{cell};1;1\n" for cell in cells)
    both(b"time;dp;p;t\n" + rows.encode(), layout(delimiter=";"))
    both(
        b"time;dp;p;t\n" + rows.encode(),
        layout(delimiter=";", decimal_mark=",", thousands_mark="."),
    )


@QUICK
@given(cases=st.lists(corrupted(), min_size=1, max_size=6), order=st.randoms(use_true_random=False))
def test_many_files_are_read_as_one_by_one(cases, order, layout, as_plain, arrival):
    """Reading many files at once equals reading each alone, whatever else is among them."""
    build = cases[0][0]
    fields = BUILDS[build]
    contents = [content for other, content in cases if other == build]
    contents += [written(build, fields, n, n) for n in (1, 3, 40)]
    order.shuffle(contents)
    arrivals = [arrival - n * 60_000_000 for n in range(len(contents))]
    declared = layout(**fields)
    kw = {"stamp": Stamp.INTERVAL_END, "interval": 60_000_000}
    many = parse_many(contents, declared, arrivals=arrivals, **kw)
    alone = [
        parse_careful(content, declared, arrival=arrived, **kw)
        for content, arrived in zip(contents, arrivals, strict=True)
    ]
    assert [as_plain(each) for each in many] == [as_plain(each) for each in alone]


@QUICK
@given(case=corrupted(), cuts=st.lists(st.floats(0, 1), max_size=3))
def test_tails_hold_what_the_whole_file_holds(case, cuts, layout, as_plain, arrival):
    """A file taken in tail by tail, cut anywhere, gives the cells and fates of the whole."""
    build, content = case
    declared = replace(layout(**BUILDS[build]), final_line_end_required=False)
    if b"\r" in content.replace(b"\r\n", b"") or b"\n\n" in content:
        content = content.replace(b"\r", b"")
    whole = parse_careful(content, declared, stamp=Stamp.INSTANT, interval=None, arrival=arrival)
    known, lines, parts = 0, 0, []
    ends = sorted(int(cut * len(content)) for cut in cuts)
    state: dict[str, object] = {"header": None, "later_hour": False, "last_local": None}
    for end in [*ends, len(content)]:
        seen = content[:end]
        tail = tail_of(seen, known, hashlib.sha256(content[:known]).hexdigest())
        assert tail is not None
        assert tail.offset == known
        piece = content[known:] if end == len(content) else tail.content
        kw = {"stamp": Stamp.INSTANT, "interval": None, "arrival": arrival, **state}
        part = parse_careful(piece, declared, first_line=lines + 1, **kw)
        quick = parse_fast(piece, declared, first_line=lines + 1, **kw)
        assert quick is None or as_plain(quick) == as_plain(part)
        if part.rejected:
            assert whole.rejected
            return
        parts.append(part)
        known += len(piece)
        lines += part.lines_read
        state = {
            "header": part.header or None,
            "later_hour": part.end_instant_is_later,
            "last_local": part.end_local,
        }
    assert not whole.rejected
    for name in ("lines_read", "lines_skipped", "lines_set_aside", "cells_set_aside"):
        assert sum(getattr(part, name) for part in parts) == getattr(whole, name)
    for column in whole.cells:
        found = [c for part in parts for c in part.cells if c.column == column.column]
        assert [v for c in found for v in c.values.tolist()] == column.values.tolist()
        assert [v for c in found for v in c.instants.tolist()] == column.instants.tolist()
        assert [v for c in found for v in c.lines.tolist()] == column.lines.tolist()

    def lasting(problems):
        """Return those that each part tells for itself: not what is told once per file."""
        once = ("neither declared", "from this one on")
        return [(p.line, p.cell, p.text) for p in problems if not any(o in p.reason for o in once)]

    assert lasting([p for part in parts for p in part.problems]) == lasting(whole.problems)


def test_many_small_files_stay_apart(layout, as_plain, arrival):
    """300 files of one build read as one: each keeps its own rows, lines and repeated hour."""
    fields = BUILDS["local, order in the file"]
    contents = [written("local, order in the file", fields, 90 + n % 7, n) for n in range(300)]
    contents[7] = contents[7].replace(b"\n2026", b"\n\xff026", 1)
    contents[8] = contents[8].replace(b"\n2026", b"\nx026", 1)
    many = parse_many(
        contents,
        layout(**fields),
        stamp=Stamp.INSTANT,
        interval=None,
        arrivals=[arrival] * len(contents),
    )
    for content, parsed in zip(contents, many, strict=True):
        alone = parse_careful(
            content, layout(**fields), stamp=Stamp.INSTANT, interval=None, arrival=arrival
        )
        assert as_plain(parsed) == as_plain(alone)
        assert parsed.end_instant_is_later == (parsed.lines_read > 81)
