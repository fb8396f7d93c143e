"""Bytes to content: gzip in bounded steps; tails of growing files; lines and cells."""

import gzip
import hashlib
import tracemalloc

import pytest
from hypothesis import given
from hypothesis import strategies as st

from meterfix.intake.logs import Refusal, Tail, ends_with_line_end, open_content, tail_of
from meterfix.intake.logs.text import (
    Malformed,
    has_overlong_line,
    split_cells,
    split_lines,
    to_utf8,
)

TEXT = b"time,dp\n" + b"".join(b"2026-10-01 %02d:00:00,%d.5\n" % (n, 7 * n) for n in range(24))
NOTHING = hashlib.sha256(b"").hexdigest()


def test_plain_content_is_left_as_it_is(source):
    """What is not gzip is its own content, an empty file included."""
    assert open_content(TEXT, source().layout, "a.csv") == TEXT
    assert open_content(b"", source().layout) == b""


def test_gzip_is_seen_by_its_bytes(source):
    """A compressed file is decompressed whatever its name; several members are one content."""
    layout = source().layout
    assert open_content(gzip.compress(TEXT), layout, "a.csv") == TEXT
    members = gzip.compress(TEXT[:50]) + gzip.compress(b"") + gzip.compress(TEXT[50:])
    assert open_content(members, layout) == TEXT
    assert open_content(members + b"\0" * 512, layout) == TEXT


def test_a_name_that_says_gzip_must_hold_it(source):
    """A .gz file that is text is refused; one too short to tell may still be on its way."""
    wrong = open_content(TEXT, source().layout, "a.csv.gz")
    assert isinstance(wrong, Refusal)
    assert "not gzip" in wrong.reason
    assert not wrong.truncated
    short = open_content(b"", source().layout, "A.CSV.GZ")
    assert isinstance(short, Refusal)
    assert short.truncated


def test_gzip_cut_anywhere_is_truncated(source):
    """32: cut at any byte, also within a second member, it is truncated and nothing else."""
    packed = gzip.compress(TEXT) + gzip.compress(TEXT)
    first = len(gzip.compress(TEXT))
    for length in range(2, len(packed)):
        outcome = open_content(packed[:length], source().layout)
        if length == first:
            assert outcome == TEXT
            continue
        assert isinstance(outcome, Refusal), length
        assert outcome.truncated, length


def test_damaged_gzip_is_refused(source):
    """A wrong check sum, wrong data and foreign bytes behind are refused for good."""
    packed = bytearray(gzip.compress(TEXT))
    packed[-6] ^= 1
    garbage = gzip.compress(TEXT) + b"garbage"
    broken = bytearray(gzip.compress(TEXT))
    broken[14] ^= 0xFF
    for raw in (bytes(packed), garbage, bytes(broken)):
        outcome = open_content(raw, source().layout)
        assert isinstance(outcome, Refusal)
        assert not outcome.truncated


def test_the_size_limit_holds_before_and_after_decompression(source):
    """30: at the limit it is read; one byte more is refused."""
    exact = source(layout={"size_limit": len(TEXT)}).layout
    below = source(layout={"size_limit": len(TEXT) - 1}).layout
    for raw in (TEXT, gzip.compress(TEXT)):
        assert open_content(raw, exact) == TEXT
        outcome = open_content(raw, below)
        assert isinstance(outcome, Refusal)
        assert str(len(TEXT) - 1) in outcome.reason


def test_a_bomb_is_refused(source):
    """31: 60 MB of zeros in 60 kB are refused for what they are, whatever the size limit."""
    bomb = gzip.compress(b"\0" * 60_000_000)
    assert len(bomb) * 1000 < 60_000_000
    outcome = open_content(bomb, source(layout={"size_limit": 10**12}).layout)
    assert isinstance(outcome, Refusal)
    assert "1000 times" in outcome.reason
    assert not outcome.truncated


def test_the_size_limit_bounds_the_memory(source):
    """31: with a limit of 2 MB never much more than that is held."""
    bomb = gzip.compress(b"\0" * 50_000_000)
    layout = source(layout={"size_limit": 2_000_000}).layout
    tracemalloc.start()
    try:
        outcome = open_content(bomb, layout)
        peak = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert isinstance(outcome, Refusal)
    assert peak < 8_000_000


def test_a_tail_begins_where_the_known_part_ends():
    """Only complete lines are in a tail; the rest waits."""
    known = b"time,dp\n1,2\n"
    digest = hashlib.sha256(known).hexdigest()
    assert tail_of(known, len(known), digest) == Tail(b"", 12, 0)
    assert tail_of(known + b"3,4", len(known), digest) == Tail(b"", 12, 3)
    assert tail_of(known + b"3,4\r\n5", len(known), digest) == Tail(b"3,4\r\n", 12, 1)
    assert tail_of(known, 0, NOTHING) == Tail(known, 0, 0)
    assert tail_of(b"", 0, NOTHING) == Tail(b"", 0, 0)


def test_a_known_part_that_changed_or_shrank_has_no_tail():
    """The known part is checked by its hash: another or a shorter file is not continued."""
    known = b"time,dp\n1,2\n"
    digest = hashlib.sha256(known).hexdigest()
    assert tail_of(b"time,dp\n1,9\n3,4\n", len(known), digest) is None
    assert tail_of(known[:-1], len(known), digest) is None


def test_tails_with_other_line_ends():
    """A CR alone ends lines once a second one shows it; half a CRLF never does."""
    assert tail_of(b"time,dp\r", 0, NOTHING) == Tail(b"", 0, 8)
    assert tail_of(b"time,dp\r1,2\r3", 0, NOTHING) == Tail(b"time,dp\r1,2\r", 0, 1)
    assert tail_of(b"time,dp\r\n1,2\r", 0, NOTHING) == Tail(b"time,dp\r\n", 0, 4)


@pytest.mark.parametrize("order", ["utf-16-le", "utf-16-be"])
def test_tails_of_utf16_end_with_whole_characters(order):
    """In UTF-16 a line end is two bytes at an even place; others only look like one."""
    text = "\ufefft,dp\n1,2\n\u0a0a\u0a00\u000d3"
    raw = text.encode(order)
    tail = tail_of(raw, 0, NOTHING)
    assert tail is not None
    assert tail.content.decode(order) == "\ufefft,dp\n1,2\n"


@given(st.binary(max_size=200).map(lambda b: b.replace(b"\xff", b"\r").replace(b"\xfe", b"\n")))
def test_lines_are_those_of_the_standard_library(content):
    """Lines end at CRLF, CR and LF, as bytes.splitlines has it, and nowhere else."""
    lines, complete = split_lines(content)
    assert lines == content.splitlines()
    assert complete == (not content or content.endswith((b"\r", b"\n")))
    assert ends_with_line_end(content) == complete


@given(st.binary(max_size=60).map(lambda b: b.replace(b"\xff", b"\n").replace(b"\0", b"\r")))
def test_overlong_lines_are_found(content):
    """A line is overlong exactly if one of them is longer than the limit."""
    longest = max((len(line) for line in content.splitlines()), default=0)
    assert has_overlong_line(content, limit=7) == (longest > 7)


@given(
    st.lists(
        st.text(st.characters(codec="utf-8", exclude_characters='\0\r\n"'), max_size=6), min_size=1
    )
)
def test_quoted_cells_are_those_that_were_written(cells):
    """Cells written with quotes by RFC 4180 come back, blanks around them apart."""
    line = ",".join(f'"{cell}"' if "," in cell else cell for cell in cells)
    assert split_cells(line.encode(), ",") == [cell.strip(" \t") for cell in cells]
    doubled = ",".join(f'"{cell}""{cell[:1]}"' for cell in cells)
    expected = [f'{cell}"{cell[:1]}'.strip(" \t") for cell in cells]
    assert split_cells(doubled.encode(), ",") == expected


@pytest.mark.parametrize(
    "line", [b'a,"b', b'a"b', b'"a"b', b'"a""', b' "a"', b'a,"', b"a,\0", b"\xff"]
)
def test_lines_that_cannot_be_split(line):
    """A stray quote, a NUL and bytes that are no text make a line malformed."""
    assert isinstance(split_cells(line, ","), Malformed)


@given(st.text(max_size=30))
def test_utf16_becomes_utf8(text):
    """UTF-16 with its byte-order mark, of either order, is the same text in UTF-8."""
    for order in ("utf-16-le", "utf-16-be"):
        raw = ("\ufeff" + text).encode(order, "surrogatepass")
        assert to_utf8(raw, "utf-16") == text.encode("utf-8", "surrogatepass")
