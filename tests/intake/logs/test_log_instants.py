"""Which instant a row stands for: stamps, intervals, clock changes in file order, tails."""

from datetime import UTC, datetime

import pytest

from meterfix.intake.logs import parse_careful, parse_fast
from meterfix.model.calendar import HOUR, SECOND, to_microseconds
from meterfix.model.source import Stamp

ARRIVAL = to_microseconds(datetime(2026, 11, 15, tzinfo=UTC))
START = to_microseconds(datetime(2026, 10, 25, tzinfo=UTC))
"""02:00 summer time in Berlin; the clock goes back an hour later (Directive 2000/84/EC)."""
MINUTE = 60 * SECOND


def minutes(source, times: list[str], **kw) -> list[int]:
    """Return the instants of rows at these local times, in minutes after START, both ways."""
    layout = source(layout=kw.pop("layout", {})).layout
    content = "".join(f"2026-10-25 {time},1\n" for time in times)
    if "header" not in kw:
        content = "time,dp\n" + content
    kw = {"stamp": Stamp.INSTANT, "interval": None, "arrival": ARRIVAL, **kw}
    careful = parse_careful(content.encode(), layout, **kw)
    fast = parse_fast(content.encode(), layout, **kw)
    assert fast is not None
    instants = careful.cells[0].instants.tolist()
    assert fast.cells[0].instants.tolist() == instants
    assert (fast.end_instant_is_later, fast.end_local) == (
        careful.end_instant_is_later,
        careful.end_local,
    )
    assert all((instant - START) % MINUTE == 0 for instant in instants)
    return [(instant - START) // MINUTE for instant in instants]


def test_a_step_back_begins_the_later_hour(source):
    """02:00 to 02:59 twice: the first run is summer time, the second winter time."""
    times = ["01:59:00", "02:00:00", "02:59:00", "02:00:00", "02:59:00", "03:00:00"]
    assert minutes(source, times) == [-1, 0, 59, 60, 119, 120]


def test_equal_times_are_no_step_back(source):
    """Two rows of the same time are one run; the later hour, once begun, does not end."""
    assert minutes(source, ["02:10:00", "02:10:00", "02:05:00", "02:01:00"]) == [10, 10, 65, 61]


def test_a_single_run_is_the_earlier_hour(source):
    """Without a step back all of it is the earlier hour, as the rule says."""
    assert minutes(source, ["02:10:00", "02:20:00", "03:00:00"]) == [10, 20, 120]


def test_a_tail_goes_on_where_the_file_stopped(source):
    """A tail that begins with the step back knows it by what came before it."""
    header = ("time", "dp")
    local = to_microseconds(datetime(2026, 10, 25, 2, 59, tzinfo=UTC))
    times = ["02:00:00", "02:59:00"]
    assert minutes(source, times, header=header) == [0, 59]
    kw = {"header": header, "last_local": local}
    assert minutes(source, times, **kw) == [60, 119]
    assert minutes(source, ["02:59:00"], **kw) == [59]
    assert minutes(source, ["02:59:00"], **kw, later_hour=True) == [119]
    assert minutes(source, ["02:59:00"], header=header, later_hour=True) == [119]
    last_year = to_microseconds(datetime(2025, 10, 26, 2, 59, tzinfo=UTC))
    assert minutes(source, times, header=header, later_hour=True, last_local=last_year) == [0, 59]


def test_the_end_of_an_interval_is_turned_into_its_start(source):
    """A stamp of an interval's end stands for the interval that begins its length before."""
    times = ["01:00:00", "02:00:00", "02:00:00", "03:00:00", "04:00:00"]
    # A repeated 02:00 without a step back is one run: the rule needs a step.
    got = minutes(source, times, stamp=Stamp.INTERVAL_END, interval=HOUR)
    assert got == [-120, -60, -60, 60, 120]
    got = minutes(
        source,
        ["02:30:00", "02:00:00", "02:30:00", "03:00:00"],
        stamp=Stamp.INTERVAL_END,
        interval=30 * MINUTE,
    )
    assert got == [0, 30, 60, 90]


def test_the_start_of_an_interval_stays(source):
    """A stamp of an interval's start is its instant."""
    assert minutes(source, ["01:00:00"], stamp=Stamp.INTERVAL_START, interval=HOUR) == [-60]


def test_an_interval_end_needs_its_length(source):
    """Its length is declared, never taken from neighbours: without it nothing can be read."""
    with pytest.raises(ValueError, match="interval's length"):
        parse_careful(
            b"time,dp\n2026-10-25 01:00:00,1\n",
            source().layout,
            stamp=Stamp.INTERVAL_END,
            interval=None,
            arrival=ARRIVAL,
        )


def test_a_header_that_no_longer_fits_refuses_its_tail(source):
    """A tail whose file began with columns that are no longer declared is refused with both."""
    parsed = parse_careful(
        b"2026-10-25 01:00:00,1\n",
        source().layout,
        stamp=Stamp.INSTANT,
        interval=None,
        arrival=ARRIVAL,
        header=("time", "dp [kPa]"),
    )
    assert "'dp' missing" in parsed.rejected
    assert "'dp [kPa]'" in parsed.rejected
