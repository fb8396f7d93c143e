"""Malformed and hostile content of log files, one case after the other, by both paths."""

import gzip
from dataclasses import dataclass, field

import pytest

from meterfix.intake.logs import Refusal, open_content
from meterfix.model.source import RepeatedHour

HEAD = b"time,dp,p,t\n"
GOOD = b"2026-10-01T00:00:00Z,12.5,10.25,18.5\n"
NEXT = b"2026-10-01T00:01:00Z,13.5,10.35,19.5\n"
BERLIN = {"time_format": "%Y-%m-%d %H:%M:%S", "time_zone": "Europe/Berlin"}
COMMA = {"delimiter": ";", "decimal_mark": ","}


@dataclass(frozen=True)
class Case:
    """What a file holds and what must come of it."""

    number: int
    """In the list of hostile inputs that every layout is measured against."""
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


def every(*lines: int) -> dict[str, list[int]]:
    """All three cells of these lines are good."""
    return {"dp": list(lines), "p": list(lines), "t": list(lines)}


CASES = [
    Case(0, "two good lines", HEAD + GOOD + NEXT, every(2, 3), fast=True),
    Case(
        2,
        "a last line without an end is set aside where one is required",
        HEAD + GOOD + b"2026-10-01T00:01:00Z,13.5,10.35,1",
        every(2),
        ((3, "", "no line end"),),
        fast=False,
    ),
    Case(
        2,
        "a last line without an end is read where none is required",
        HEAD + GOOD + NEXT[:-1],
        every(2, 3),
        layout={"final_line_end_required": False},
    ),
    Case(
        2,
        "a number cut off after its decimal mark is no number",
        HEAD + GOOD + b"2026-10-01T00:01:00Z,13.5,10.35,12.",
        {"dp": [2, 3], "p": [2, 3], "t": [2]},
        ((3, "t", "'12.' is not a number"),),
        layout={"final_line_end_required": False},
    ),
    Case(2, "a header without an end", HEAD[:-1], rejected="header line has no line end"),
    Case(3, "byte-order mark", b"\xef\xbb\xbf" + HEAD + GOOD, every(2), fast=True),
    Case(
        4,
        "UTF-16 that is declared, little end first",
        (HEAD + GOOD).decode().encode("utf-16"),
        every(2),
        layout={"encoding": "utf-16"},
        fast=True,
    ),
    Case(
        4,
        "UTF-16 that is declared, big end first, without a mark",
        (HEAD + GOOD).decode().encode("utf-16-be"),
        every(2),
        layout={"encoding": "utf-16"},
    ),
    Case(
        4,
        "UTF-16 cut in the middle of a character",
        (HEAD + GOOD + NEXT).decode().encode("utf-16")[:-1],
        every(2),
        ((3, "", "not valid text"),),
        layout={"encoding": "utf-16", "final_line_end_required": False},
    ),
    Case(
        4,
        "UTF-16 that is not declared",
        (HEAD + GOOD).decode().encode("utf-16"),
        rejected="UTF-16 byte-order mark",
    ),
    Case(
        4,
        "UTF-16 that is not declared, without a mark",
        (HEAD + GOOD).decode().encode("utf-16-le"),
        rejected="NUL",
    ),
    Case(
        4,
        "UTF-8 where UTF-16 is declared",
        HEAD + GOOD,
        rejected="does not begin like UTF-16",
        layout={"encoding": "utf-16"},
    ),
    Case(
        5,
        "bytes that are not UTF-8",
        HEAD + GOOD + NEXT.replace(b"13.5", b"13\xb05") + GOOD,
        every(2, 4),
        ((3, "", "not valid text"),),
        fast=False,
    ),
    Case(
        6,
        "NUL bytes",
        HEAD + GOOD + b"\0" * 40 + b"\n" + NEXT,
        every(2, 4),
        ((3, "", "NUL byte"),),
        fast=False,
    ),
    Case(
        7,
        "decimal comma, declared",
        b"time;dp;p;t\n2026-10-01T00:00:00Z;12,5;10,25;18,5\n",
        every(2),
        layout=COMMA,
        fast=True,
    ),
    Case(
        7,
        "decimal comma, not declared",
        b"time;dp;p;t\n2026-10-01T00:00:00Z;12,5;10.25;18.5\n",
        {"dp": [], "p": [2], "t": [2]},
        ((2, "dp", "'12,5' is not a number"),),
        layout={"delimiter": ";"},
        fast=True,
    ),
    Case(
        7,
        "decimal point where a comma is declared",
        b"time;dp;p;t\n2026-10-01T00:00:00Z;12.5;10,25;18,5\n",
        {"dp": [], "p": [2], "t": [2]},
        ((2, "dp", "decimal mark ','"),),
        layout=COMMA,
    ),
    Case(
        8,
        "semicolons, not declared",
        HEAD.replace(b",", b";") + GOOD.replace(b",", b";"),
        rejected="'time;dp;p;t'",
    ),
    Case(
        9,
        "thousands marks, declared",
        b"time;dp;p;t\n2026-10-01T00:00:00Z;1.012,5;10,25;18,5\n",
        every(2),
        layout={**COMMA, "thousands_mark": "."},
        fast=True,
    ),
    Case(
        9,
        "thousands marks in the wrong place, declared",
        b"time;dp;p;t\n2026-10-01T00:00:00Z;10.12,5;10,25;18,5\n",
        {"dp": [], "p": [2], "t": [2]},
        ((2, "dp", "thousands mark '.'"),),
        layout={**COMMA, "thousands_mark": "."},
    ),
    Case(
        9,
        "thousands marks, not declared",
        HEAD + b'2026-10-01T00:00:00Z,"1,012.5",10.25,18.5\n',
        {"dp": [], "p": [2], "t": [2]},
        ((2, "dp", "'1,012.5' is not a number"),),
    ),
    Case(
        10,
        "mixed time formats",
        HEAD + GOOD + b"01.10.2026 00:01:00,1,1,1\n2026-10-01 00:02:00,1,1,1\n"
        b"2026-10-01,1,1,1\n2026-10-01T00:03:00+00:00,1,1,1\n2026-10-1T00:04:00Z,1,1,1\n",
        every(2),
        tuple((n, "time", "does not fit the declared format") for n in range(3, 8)),
        fast=True,
    ),
    Case(
        11,
        "a local time in the repeated hour, nothing settles it",
        HEAD + b"2026-10-25 01:59:59,1,1,1\n2026-10-25 02:00:00,1,1,1\n"
        b"2026-10-25 02:59:59,1,1,1\n2026-10-25 03:00:00,1,1,1\n",
        every(2, 5),
        ((3, "time", "exists twice"), (4, "time", "exists twice")),
        layout=BERLIN,
        fast=True,
    ),
    Case(
        11,
        "a local time in the repeated hour, settled by the order in the file",
        HEAD + b"2026-10-25 02:00:00,1,1,1\n2026-10-25 02:30:00,1,1,1\n"
        b"2026-10-25 02:00:00,1,1,1\n2026-10-25 02:30:00,1,1,1\n",
        every(2, 3, 4, 5),
        layout={**BERLIN, "repeated_hour": RepeatedHour.FILE_ORDER},
        fast=True,
    ),
    Case(
        11,
        "a local time in the repeated hour, settled by its offset",
        HEAD + b"2026-10-25 02:30:00+02:00,1,1,1\n2026-10-25 02:30:00+01:00,1,1,1\n",
        every(2, 3),
        layout={"time_format": "%Y-%m-%d %H:%M:%S%z", "time_zone": "Europe/Berlin"},
        fast=True,
    ),
    Case(
        12,
        "a local time in the skipped hour",
        HEAD + b"2026-03-29 01:59:59,1,1,1\n2026-03-29 02:00:00,1,1,1\n"
        b"2026-03-29 02:59:59,1,1,1\n2026-03-29 03:00:00,1,1,1\n",
        every(2, 5),
        ((3, "time", "does not exist"), (4, "time", "does not exist")),
        layout=BERLIN,
        fast=True,
    ),
    Case(
        13,
        "24:00, declared",
        HEAD + b"2026-10-01T24:00:00Z,1,1,1\n2026-10-01T24:00:01Z,1,1,1\n",
        every(2),
        ((3, "time", "after 24:00"),),
        layout={"hour_24": True},
        fast=True,
    ),
    Case(
        13,
        "24:00, not declared",
        HEAD + b"2026-10-01T24:00:00Z,1,1,1\n",
        {"dp": [], "p": [], "t": []},
        ((2, "time", "24:00 is not declared"),),
    ),
    Case(
        14,
        "a two-digit year",
        HEAD + GOOD + b"26-01-02T00:00:00Z,1,1,1\n",
        every(2),
        ((3, "time", "does not fit"),),
        fast=True,
    ),
    Case(
        15,
        "more than five minutes after the arrival",
        HEAD + b"2026-11-15T00:05:00Z,1,1,1\n2026-11-15T00:05:01Z,1,1,1\n9999-12-31T23:59:59Z,1,1,1\n",
        every(2),
        ((3, "time", "more than 5 minutes"), (4, "time", "more than 5 minutes")),
        fast=True,
    ),
    Case(
        16,
        "1970 and otherwise ancient",
        HEAD + b"1970-01-01T00:00:00Z,1,1,1\n0001-01-01T00:00:00Z,1,1,1\n0000-01-01T00:00:00Z,1,1,1\n"
        b"1999-12-31T23:59:59Z,1,1,1\n2000-01-01T00:00:00Z,1,1,1\n",
        every(6),
        (
            (2, "time", "before 2000-01-01"),
            (3, "time", "before 2000-01-01"),
            (4, "time", "date that does not exist"),
            (5, "time", "before 2000-01-01"),
        ),
        fast=True,
    ),
    Case(17, "two columns with one name", b"time,dp,p,dp\n" + GOOD, rejected="named 'dp'"),
    Case(
        17,
        "two unknown columns with one name",
        b"time,dp,p,x,x\n" + GOOD,
        rejected="named 'x'",
    ),
    Case(
        18,
        "the same header again in the middle",
        HEAD + GOOD + HEAD + NEXT,
        every(2, 4),
        skipped=2,
        fast=True,
    ),
    Case(
        19,
        "another order of columns with a new header",
        HEAD + GOOD + b"time,t,p,dp\n2026-10-01T00:01:00Z,19.5,10.35,13.5\n",
        every(2, 4),
        skipped=2,
        fast=False,
    ),
    Case(
        19,
        "another order of columns without a new header",
        HEAD + GOOD + b"13.5,2026-10-01T00:01:00Z,10.35,19.5\n",
        every(2),
        ((3, "time", "does not fit"),),
    ),
    Case(20, "no dp", b"time,p,t\n", rejected="required column 'dp' missing"),
    Case(20, "no time", b"zeit,dp,p,t\n", rejected="time column 'time' missing"),
    Case(
        20,
        "a required column goes missing in the middle",
        HEAD + GOOD + b"time,dp,t\n2026-10-01T00:01:00Z,13.5,19.5\n",
        rejected="line 3: required column 'p' missing",
    ),
    Case(
        20,
        "a column that is not required may be missing",
        b"time,p,dp\n2026-10-01T00:01:00Z,13.5,19.5\n",
        {"dp": [2], "p": [2]},
        fast=True,
    ),
    Case(
        21,
        "another unit in the header",
        b"time,dp [kPa],p,t\n" + GOOD,
        rejected="the header holds 'time', 'dp [kPa]', 'p', 't'",
    ),
    Case(
        21,
        "another unit from the middle on",
        HEAD + GOOD + b"time,dp [kPa],p,t\n" + NEXT,
        rejected="line 3: required column 'dp' missing",
    ),
    *(
        Case(
            22,
            f"{text} as a value",
            HEAD + GOOD.replace(b"12.5", text.encode()) + NEXT,
            {"dp": [3], "p": [2, 3], "t": [2, 3]},
            ((2, "dp", "is not a number"),),
            fast=True,
        )
        for text in ("nan", "NaN", "NA", "null", "inf", "-Infinity", "+inf", "1.#QNAN")
    ),
    *(
        Case(
            23,
            f"{text} as a value",
            HEAD + GOOD.replace(b"12.5", text.encode()) + NEXT,
            {"dp": [3], "p": [2, 3], "t": [2, 3]},
            ((2, "dp", "too large"),),
            fast=True,
        )
        for text in ("1e309", "-1e999", "9" * 400, "1e307")
    ),
    *(
        Case(
            24,
            f"{text} as a value",
            HEAD + GOOD.replace(b"12.5", text.encode()) + NEXT,
            {"dp": [3], "p": [2, 3], "t": [2, 3]},
            ((2, "dp", "is not a number"),),
            fast=True,
        )
        for text in (
            "1_000",
            "\uff11\uff12",  # full-width digits
            "\u0661\u0662",  # Arabic-Indic digits
            "0x10",
            "\u22125",  # Unicode minus
            "12.",
            ".5",
            "1e",
            "--5",
            "1.2.3",
            "12 5",
            "5-",
            "1e5.5",
            "\u00a05",  # no-break space
        )
    ),
    Case(
        24,
        "full-width digits in a time",
        HEAD + GOOD.replace(b"2026", "２０２６".encode()),
        {"dp": [], "p": [], "t": []},
        ((2, "time", "does not fit"),),
    ),
    Case(
        25,
        "an empty value",
        HEAD + b"2026-10-01T00:00:00Z,,10.25,18.5\n2026-10-01T00:01:00Z, ,,\n",
        {"dp": [], "p": [2], "t": [2]},
        ((2, "dp", "no value"), (3, "dp", "no value"), (3, "p", "no value"), (3, "t", "no value")),
        fast=True,
    ),
    Case(
        25,
        "texts that stand for a bad value",
        HEAD + b"2026-10-01T00:00:00Z,BAD,-9999,18.5\n2026-10-01T00:01:00Z,-9999.0,1,1\n",
        {"dp": [3], "p": [3], "t": [2, 3]},
        ((2, "dp", "transmitter fault"), (2, "p", "no reading")),
        fast=True,
    ),
    Case(
        26,
        "columns named NA and 007 are taken by their names",
        b"time,dp,p,NA,007\n2026-10-01T00:00:00Z,1,1,7,7\n",
        {"dp": [2], "p": [2]},
        ((1, "NA", "neither declared nor ignored"), (1, "007", "neither declared nor ignored")),
        warning="'NA', '007'",
        fast=True,
    ),
    Case(
        28,
        "values out of the plausible range are used",
        HEAD + b"2026-10-01T00:00:00Z,99999,10.25,-250\n",
        every(2),
        fast=True,
    ),
    Case(29, "one line of 2 MB", HEAD + b"1" * 2_000_000 + b"\n", rejected="longer than"),
    Case(29, "one line of 2 MB without an end", b"1" * 2_000_000, rejected="longer than"),
    Case(
        40,
        "times out of order",
        HEAD + NEXT + GOOD,
        every(2, 3),
        fast=True,
    ),
    Case(41, "an empty file", b"", warning="the file is empty", skipped=0),
    Case(41, "a byte-order mark alone", b"\xef\xbb\xbf", warning="the file is empty", skipped=0),
    Case(41, "blank lines only", b"\n \n", warning="blank lines only", skipped=2),
    Case(42, "a header only", HEAD, every(), warning="a header and no rows"),
    Case(
        43,
        "CRLF line ends",
        (HEAD + GOOD + NEXT).replace(b"\n", b"\r\n"),
        every(2, 3),
        fast=True,
    ),
    Case(43, "CR line ends", (HEAD + GOOD + NEXT).replace(b"\n", b"\r"), every(2, 3), fast=False),
    Case(43, "mixed line ends", HEAD + GOOD[:-1] + b"\r" + NEXT[:-1] + b"\r\n", every(2, 3)),
    Case(
        44,
        "empty trailing delimiters",
        b"time,dp,p,t,\n" + GOOD[:-1] + b",\n" + NEXT[:-1] + b",\n",
        every(2, 3),
        fast=True,
    ),
    Case(
        44,
        "empty trailing delimiters on some lines only",
        HEAD + GOOD + NEXT[:-1] + b",,\n",
        every(2, 3),
    ),
    Case(
        44,
        "a trailing cell that is not empty",
        HEAD + GOOD[:-1] + b",\n" + NEXT[:-1] + b",9\n",
        every(2),
        ((3, "", "has 5 cells; its header has 4 columns"),),
        fast=True,
    ),
    Case(
        44,
        "too few cells",
        HEAD + GOOD + b"2026-10-01T00:01:00Z,13.5\n" + NEXT,
        every(2, 4),
        ((3, "", "has 2 cells; its header has 4 columns"),),
        fast=False,
    ),
    Case(
        45,
        "a stray quote",
        HEAD + GOOD + b'2026-10-01T00:01:00Z,"13.5,10.35,19.5\n' + NEXT + b'2026-10-01T00:02:00Z,1"3,1,1\n'
        b'2026-10-01T00:03:00Z,"1"3,1,1\n',
        every(2, 4),
        ((3, "", "stray quote"), (5, "", "stray quote"), (6, "", "after the closing quote")),
        fast=False,
    ),
    Case(
        45,
        "well-formed quotes",
        b'"time","dp",p,t,remark\n"2026-10-01T00:00:00Z","12.5",10.25,18.5,"a ""b"", c"\n',
        every(2),
        fast=False,
    ),
    Case(
        45,
        "a line end within quotes ends the line all the same",
        b'time,dp,p,t,remark\n2026-10-01T00:00:00Z,1,1,1,"two\nlines"\n' + GOOD[:-1] + b",\n",
        every(4),
        ((2, "", "stray quote"), (3, "", "stray quote")),
    ),
    Case(
        0,
        "an ignored column may hold anything that is text",
        b"time,remark,dp,p,t\n2026-10-01T00:00:00Z,-,1,1,1\n2026-10-01T00:01:00Z,\xc3\xa9,1,1,1\n",
        every(2, 3),
        fast=True,
    ),
    Case(
        0,
        "blank lines",
        b"\n" + HEAD + b"\n" + GOOD + b" \t\n" + NEXT,
        every(4, 6),
        skipped=4,
        fast=False,
    ),
    Case(
        0,
        "times that do not exist",
        HEAD + b"2026-02-29T00:00:00Z,1,1,1\n2026-13-01T00:00:00Z,1,1,1\n2026-01-00T00:00:00Z,1,1,1\n"
        b"2026-01-01T25:00:00Z,1,1,1\n2026-01-01T00:60:00Z,1,1,1\n2026-01-01T00:00:60Z,1,1,1\n"
        b"2024-02-29T00:00:00Z,1,1,1\n",
        every(8),
        tuple((n, "time", "does not exist") for n in range(2, 8)),
        fast=True,
    ),
    Case(
        0,
        "every cell of a line is bad",
        HEAD + b"2026-10-01T00:00:00Z,x,y,z\n",
        {"dp": [], "p": [], "t": []},
        ((2, "dp", "not a number"), (2, "p", "not a number"), (2, "t", "not a number")),
        fast=True,
    ),
]

NOT_CONTENT = {
    1: "a growing file: discovery",
    27: "an unknown tag: this layout has columns; a column that no signal uses is the run's",
    30: "a file over the size limit: discovery and opening",
    31: "a gzip bomb: opening",
    32: "truncated gzip: opening",
    33: "a symbolic link: discovery",
    34: "a pipe or device: discovery",
    35: "odd file names: discovery",
    36: "a tag that looks like a formula: this layout has no tags",
    37: "known bytes under another name: the ledger",
    38: "other bytes under a known name: the ledger",
    39: "files that disagree: the ledger",
    46: "vanished while being read: discovery",
}


def test_every_hostile_input_has_a_case_or_another_place():
    """Each of the 46 hostile inputs is a case here, or it is said which station meets it."""
    covered = {case.number for case in CASES} - {0}
    assert not covered & set(NOT_CONTENT)
    assert covered | set(NOT_CONTENT) == set(range(1, 47))


@pytest.mark.parametrize("case", CASES, ids=lambda c: f"{c.number}: {c.what[:60]}")
def test_hostile_content(case, both, layout):
    """Each hostile input has exactly its fate, by both paths, and the counts add up."""
    declared = layout(**case.layout)
    parsed, accepted = both(case.content, declared)
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


WITHIN = [c for c in CASES if c.used and not c.rejected and c.number not in {2, 4, 42, 43}]
"""Cases that stay what they are when more lines follow."""


@pytest.mark.parametrize("case", WITHIN, ids=lambda c: f"{c.number}: {c.what[:60]}")
def test_hostile_content_within_a_large_file(case, both, layout, as_plain):
    """The same input has the same fate when 200 good lines follow, as for a file of real size."""
    declared = layout(**case.layout)
    alone, _ = both(case.content, declared)
    mark = declared.decimal_mark
    time = "2026-09-{:02}T{:02}:00:00Z"
    if declared.time_format.startswith("%Y-%m-%d %H"):
        time = "2026-09-{:02} {:02}:00:00" + ("+00:00" if "%z" in declared.time_format else "")
    width = len(alone.header)
    rows = []
    for n in range(200):
        cells = [time.format(1 + n // 24, n % 24), *(f"{n}{mark}25" for _ in alone.header[1:])]
        rows.append(declared.delimiter.join(cells[:width]))
    parsed, _ = both(case.content + "\n".join(rows).encode() + b"\n", declared)
    assert parsed.lines_read == alone.lines_read + 200
    told, before = as_plain(parsed), as_plain(alone)
    assert told["problems"] == before["problems"]
    assert parsed.cells_set_aside == alone.cells_set_aside
    for cells, first in zip(parsed.cells, alone.cells, strict=True):
        count = len(first.lines)
        assert cells.values[:count].tolist() == first.values.tolist()
        assert cells.instants[:count].tolist() == first.instants.tolist()
        assert len(cells.lines) == count + 200


def test_the_columns_of_a_new_header_are_not_swapped(both):
    """After a new header in the middle each value is in its own column."""
    parsed, _ = both(HEAD + GOOD + b"time,t,p,dp\n2026-10-01T00:01:00Z,19.5,10.35,13.5\n")
    values = {cells.column: cells.values.tolist() for cells in parsed.cells}
    assert values == {
        "dp": [1250.0, 1350.0],
        "p": [10.25 * 1e5, 10.35 * 1e5],
        "t": [18.5 + 273.15, 19.5 + 273.15],
    }
    assert parsed.header == ("time", "t", "p", "dp")


def test_implausible_values_carry_their_flag(both):
    """A value outside the plausible range is used with the flag; at its edge without."""
    rows = b"2026-10-01T00:00:00Z,1000,100,-250\n2026-10-01T00:01:00Z,1000.01,-0.01,10\n"
    parsed, _ = both(HEAD + rows)
    flags = {cells.column: cells.implausible.tolist() for cells in parsed.cells}
    assert flags == {"dp": [False, True], "p": [False, True], "t": [True, False]}


def test_cells_are_counted_one_by_one(both):
    """Lost cells: bad ones, all of a line without a time, none of a malformed line."""
    rows = (
        b"2026-10-01T00:00:00Z,x,1,1\n"  # one cell
        b"2026-10-01 00:01:00,1,1,1\n"  # three cells, line set aside
        b"2026-10-01T00:02:00Z,x,y,z\n"  # three cells, line set aside
        b"2026-10-01T00:03:00Z,1\n"  # malformed: line set aside, no cells
        b"2026-11-16T00:00:00Z,x,1,1\n"  # in the future: three cells, and only that is told
    )
    parsed, _ = both(HEAD + rows)
    assert (parsed.lines_read, parsed.lines_skipped, parsed.lines_set_aside) == (6, 1, 4)
    assert parsed.cells_set_aside == 1 + 3 + 3 + 0 + 3
    assert [(p.line, p.cell) for p in parsed.problems] == [
        (2, "dp"),
        (3, "time"),
        (4, "dp"),
        (4, "p"),
        (4, "t"),
        (5, ""),
        (6, "time"),
    ]


def test_at_most_1000_bytes_of_a_bad_line_are_kept(both):
    """The text beside a problem is the line's beginning, never more than 1,000 bytes of it."""
    parsed, _ = both(HEAD + b"9" * 5000 + b"\n" + b"2026-10-01T00:00:00Z,1," + b"x" * 3000 + b",1\n")
    assert [len(p.text) for p in parsed.problems] == [1000, 1000]
    assert all(len(p.reason) < 300 for p in parsed.problems)


def test_gzip_bomb_is_refused(layout):
    """31: a file that decompresses to more than 1,000 times its size is refused."""
    bomb = gzip.compress(gzip.compress(b"\0" * 30_000_000))
    once = gzip.decompress(bomb)
    assert len(once) * 1000 < 30_000_000
    outcome = open_content(once, layout())
    assert isinstance(outcome, Refusal)
    assert "1000 times" in outcome.reason
    assert not outcome.truncated
