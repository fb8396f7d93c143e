"""What numbers and times may look like, against Python's own reading of them."""

import re
from datetime import UTC, datetime

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meterfix.intake.logs.fixed_time import fixed_times
from meterfix.intake.logs.grammar import format_parts, number_pattern, time_grammar
from meterfix.intake.logs.joined import read_numbers
from meterfix.model.calendar import to_microseconds


@pytest.mark.parametrize(
    "text", ["0", "-0.0", "+5", "007", "12.50", "1e5", "1E-05", "-3.25e+2", "123456789.123456789"]
)
def test_numbers_of_the_grammar(text):
    """Signs, leading zeros and powers of ten belong to a number."""
    assert re.fullmatch(number_pattern("."), text)


@pytest.mark.parametrize(
    "text",
    ["", " 1", "1 ", "12.", ".5", "1,5", "1e", "e5", "--1", "0x1f", "1_0", "nan", "inf", "\u0661"],
)
def test_texts_that_are_no_numbers(text):
    """Nothing else does, above all nothing that float() would take."""
    assert not re.fullmatch(number_pattern("."), text, re.ASCII)


@settings(max_examples=300, deadline=None)
@given(values=st.lists(st.floats(allow_nan=False, allow_infinity=False), min_size=1, max_size=50))
def test_whole_columns_are_rounded_as_single_numbers(values):
    """A column read at once gives the same bits as float() of each text."""
    texts = [repr(value) for value in values] + [f"{value:.17e}" for value in values]
    texts += [f"{value:.3f}" for value in values if abs(value) < 1e15]
    numbers, accepted = read_numbers(
        pa.chunked_array([pa.array(texts)]), rf"\A{number_pattern('.')}\z", "."
    )
    assert accepted.all()
    assert numbers.tobytes() == np.array([float(text) for text in texts]).tobytes()


def test_numbers_beside_others_in_a_column_are_read():
    """Cells that are no numbers are said not to be, and do not disturb the others."""
    cells = pa.chunked_array([pa.array(["1.5", "nan", "", "2,5"]), pa.array(["-3"])])
    numbers, accepted = read_numbers(cells, rf"\A{number_pattern('.')}\z", ".")
    assert accepted.tolist() == [True, False, False, False, True]
    assert numbers[accepted].tolist() == [1.5, -3.0]


FORMATS = [
    "%Y-%m-%dT%H:%M:%SZ",
    "%d.%m.%Y %H:%M",
    "%Y%m%d%H%M%S",
    "%m/%d/%Y %H:%M:%S.%f",
    "%Y-%m-%d %H:%M:%S%z",
]


@pytest.mark.parametrize("time_format", FORMATS)
@settings(max_examples=200, deadline=None)
@given(when=st.datetimes(timezones=st.just(UTC)))
def test_times_are_read_exactly(time_format, when):
    """Every time of the years 1 to 9999 is read to the microsecond, alone and in a column."""
    # strftime does not pad years below 1000 everywhere.
    text = when.strftime(time_format.replace("%Y", "year")).replace("year", f"{when.year:04}")
    expected = when
    if "%f" not in time_format:
        expected = expected.replace(microsecond=0)
    if "%S" not in time_format:
        expected = expected.replace(second=0)
    grammar = time_grammar(time_format, hour_24=False)
    assert grammar.read(text) == to_microseconds(expected)
    column = fixed_times(grammar, text)
    assert column is not None
    walls, accepted = column.read(pa.array(["x", text, "", text])[1:])
    assert accepted.tolist() == [True, False, True]
    assert walls[accepted].tolist() == [to_microseconds(expected)] * 2


@settings(max_examples=500, deadline=None)
@given(
    text=st.text(alphabet="0123456789-:TZ+ .", min_size=18, max_size=22),
    time_format=st.sampled_from(["%Y-%m-%dT%H:%M:%SZ", "%Y-%m-%dT%H:%M:%S%z"]),
)
def test_a_column_never_accepts_a_time_that_the_grammar_refuses(text, time_format):
    """Whatever a cell holds: accepted in a column means the same time when read alone."""
    grammar = time_grammar(time_format, hour_24=True)
    for sample in ("2026-10-01T00:00:00Z", "2026-10-01T00:00:00+01:00", "2026-10-01T00:00:00-0130"):
        column = fixed_times(grammar, sample)
        if column is None:
            continue
        near = sample[: 20 - len(text) % 7] + text[20 - len(text) % 7 :]
        for cell in (text, near, near[: len(sample)]):
            walls, accepted = column.read(pa.array([cell]))
            if accepted[0]:
                assert grammar.read(cell) == walls[0]


@pytest.mark.parametrize(
    ("offset", "minutes"),
    [("Z", 0), ("+00:00", 0), ("+0530", 330), ("-03:30", -210), ("+14:00", 840)],
)
def test_offsets(offset, minutes):
    """An offset is minutes east of UTC: it is taken away."""
    grammar = time_grammar("%Y-%m-%dT%H:%M%z", hour_24=False)
    noon = to_microseconds(datetime(2026, 7, 1, 12, tzinfo=UTC))
    assert grammar.read(f"2026-07-01T12:00{offset}") == noon - minutes * 60_000_000


def test_a_column_refuses_offsets_that_no_zone_has():
    """Offsets in a column are judged as single ones are."""
    grammar = time_grammar("%Y-%m-%dT%H:%M%z", hour_24=False)
    texts = [
        f"2026-07-01T12:00{offset}"
        for offset in ("+01:00", "-14:00", "+14:01", "+00:60", "*01:00", "-99:00")
    ]
    column = fixed_times(grammar, texts[0])
    assert column is not None
    walls, accepted = column.read(pa.array(texts))
    assert accepted.tolist() == [True, True, False, False, False, False]
    assert walls[:2].tolist() == [grammar.read(text) for text in texts[:2]]


@pytest.mark.parametrize("offset", ["", "z", "+1", "+1:00", "+14:01", "+00:60", "01:00", "UTC"])
def test_texts_that_are_no_offsets(offset):
    """No offset, an unknown kind, or one that no zone has is refused with a sentence."""
    grammar = time_grammar("%Y-%m-%dT%H:%M%z", hour_24=False)
    assert isinstance(grammar.read(f"2026-07-01T12:00{offset}"), str)


@pytest.mark.parametrize("time_format", ["%y-%m-%d", "%Y-%m", "%Y-%m-%d %Y", "%Y-%m-%d %p", "%"])
def test_formats_that_cannot_be_declared(time_format):
    """Two-digit years, incomplete dates, repeated and other tokens are refused."""
    with pytest.raises(ValueError, match="time format"):
        format_parts(time_format)
