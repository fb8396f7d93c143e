"""Hostile values and times, one case after the other, by both paths."""

from meterfix.model.source import RepeatedHour

HEAD = b"time,dp,p,t\n"
GOOD = b"2026-10-01T00:00:00Z,12.5,10.25,18.5\n"
NEXT = b"2026-10-01T00:01:00Z,13.5,10.35,19.5\n"
BERLIN = {"time_format": "%Y-%m-%d %H:%M:%S", "time_zone": "Europe/Berlin"}
COMMA = {"delimiter": ";", "decimal_mark": ","}


def every(*lines: int) -> dict[str, list[int]]:
    """All three cells of these lines are good."""
    return {"dp": list(lines), "p": list(lines), "t": list(lines)}


CASES = [
    {
        "number": 7,
        "what": "decimal comma, declared",
        "content": b"time;dp;p;t\n2026-10-01T00:00:00Z;12,5;10,25;18,5\n",
        "used": every(2),
        "layout": COMMA,
        "fast": True,
    },
    {
        "number": 7,
        "what": "decimal comma, not declared",
        "content": b"time;dp;p;t\n2026-10-01T00:00:00Z;12,5;10.25;18.5\n",
        "used": {"dp": [], "p": [2], "t": [2]},
        "problems": ((2, "dp", "'12,5' is not a number"),),
        "layout": {"delimiter": ";"},
        "fast": True,
    },
    {
        "number": 7,
        "what": "decimal point where a comma is declared",
        "content": b"time;dp;p;t\n2026-10-01T00:00:00Z;12.5;10,25;18,5\n",
        "used": {"dp": [], "p": [2], "t": [2]},
        "problems": ((2, "dp", "decimal mark ','"),),
        "layout": COMMA,
    },
    {
        "number": 9,
        "what": "thousands marks, declared",
        "content": b"time;dp;p;t\n2026-10-01T00:00:00Z;1.012,5;10,25;18,5\n",
        "used": every(2),
        "layout": {**COMMA, "thousands_mark": "."},
        "fast": True,
    },
    {
        "number": 9,
        "what": "thousands marks in the wrong place, declared",
        "content": b"time;dp;p;t\n2026-10-01T00:00:00Z;10.12,5;10,25;18,5\n",
        "used": {"dp": [], "p": [2], "t": [2]},
        "problems": ((2, "dp", "thousands mark '.'"),),
        "layout": {**COMMA, "thousands_mark": "."},
    },
    {
        "number": 9,
        "what": "thousands marks, not declared",
        "content": HEAD + b'2026-10-01T00:00:00Z,"1,012.5",10.25,18.5\n',
        "used": {"dp": [], "p": [2], "t": [2]},
        "problems": ((2, "dp", "'1,012.5' is not a number"),),
    },
    {
        "number": 10,
        "what": "mixed time formats",
        "content": HEAD + GOOD + b"01.10.2026 00:01:00,1,1,1\n2026-10-01 00:02:00,1,1,1\n"
        b"2026-10-01,1,1,1\n2026-10-01T00:03:00+00:00,1,1,1\n2026-10-1T00:04:00Z,1,1,1\n",
        "used": every(2),
        "problems": tuple((n, "time", "does not fit the declared format") for n in range(3, 8)),
        "fast": True,
    },
    {
        "number": 11,
        "what": "a local time in the repeated hour, nothing settles it",
        "content": HEAD + b"2026-10-25 01:59:59,1,1,1\n2026-10-25 02:00:00,1,1,1\n"
        b"2026-10-25 02:59:59,1,1,1\n2026-10-25 03:00:00,1,1,1\n",
        "used": every(2, 5),
        "problems": ((3, "time", "exists twice"), (4, "time", "exists twice")),
        "layout": BERLIN,
        "fast": True,
    },
    {
        "number": 11,
        "what": "a local time in the repeated hour, settled by the order in the file",
        "content": HEAD + b"2026-10-25 02:00:00,1,1,1\n2026-10-25 02:30:00,1,1,1\n"
        b"2026-10-25 02:00:00,1,1,1\n2026-10-25 02:30:00,1,1,1\n",
        "used": every(2, 3, 4, 5),
        "layout": {**BERLIN, "repeated_hour": RepeatedHour.FILE_ORDER},
        "fast": True,
    },
    {
        "number": 11,
        "what": "a local time in the repeated hour, settled by its offset",
        "content": HEAD + b"2026-10-25 02:30:00+02:00,1,1,1\n2026-10-25 02:30:00+01:00,1,1,1\n",
        "used": every(2, 3),
        "layout": {"time_format": "%Y-%m-%d %H:%M:%S%z", "time_zone": "Europe/Berlin"},
        "fast": True,
    },
    {
        "number": 12,
        "what": "a local time in the skipped hour",
        "content": HEAD + b"2026-03-29 01:59:59,1,1,1\n2026-03-29 02:00:00,1,1,1\n"
        b"2026-03-29 02:59:59,1,1,1\n2026-03-29 03:00:00,1,1,1\n",
        "used": every(2, 5),
        "problems": ((3, "time", "does not exist"), (4, "time", "does not exist")),
        "layout": BERLIN,
        "fast": True,
    },
    {
        "number": 13,
        "what": "24:00, declared",
        "content": HEAD + b"2026-10-01T24:00:00Z,1,1,1\n2026-10-01T24:00:01Z,1,1,1\n",
        "used": every(2),
        "problems": ((3, "time", "after 24:00"),),
        "layout": {"hour_24": True},
        "fast": True,
    },
    {
        "number": 13,
        "what": "24:00, not declared",
        "content": HEAD + b"2026-10-01T24:00:00Z,1,1,1\n",
        "used": {"dp": [], "p": [], "t": []},
        "problems": ((2, "time", "24:00 is not declared"),),
    },
    {
        "number": 14,
        "what": "a two-digit year",
        "content": HEAD + GOOD + b"26-01-02T00:00:00Z,1,1,1\n",
        "used": every(2),
        "problems": ((3, "time", "does not fit"),),
        "fast": True,
    },
    {
        "number": 15,
        "what": "more than five minutes after the arrival",
        "content": HEAD
        + b"2026-11-15T00:05:00Z,1,1,1\n2026-11-15T00:05:01Z,1,1,1\n9999-12-31T23:59:59Z,1,1,1\n",
        "used": every(2),
        "problems": ((3, "time", "more than 5 minutes"), (4, "time", "more than 5 minutes")),
        "fast": True,
    },
    {
        "number": 16,
        "what": "1970 and otherwise ancient",
        "content": HEAD
        + b"1970-01-01T00:00:00Z,1,1,1\n0001-01-01T00:00:00Z,1,1,1\n0000-01-01T00:00:00Z,1,1,1\n"
        b"1999-12-31T23:59:59Z,1,1,1\n2000-01-01T00:00:00Z,1,1,1\n",
        "used": every(6),
        "problems": (
            (2, "time", "before 2000-01-01"),
            (3, "time", "before 2000-01-01"),
            (4, "time", "date that does not exist"),
            (5, "time", "before 2000-01-01"),
        ),
        "fast": True,
    },
    *(
        {
            "number": 22,
            "what": f"{text} as a value",
            "content": HEAD + GOOD.replace(b"12.5", text.encode()) + NEXT,
            "used": {"dp": [3], "p": [2, 3], "t": [2, 3]},
            "problems": ((2, "dp", "is not a number"),),
            "fast": True,
        }
        for text in ("nan", "NaN", "NA", "null", "inf", "-Infinity", "+inf", "1.#QNAN")
    ),
    *(
        {
            "number": 23,
            "what": f"{text} as a value",
            "content": HEAD + GOOD.replace(b"12.5", text.encode()) + NEXT,
            "used": {"dp": [3], "p": [2, 3], "t": [2, 3]},
            "problems": ((2, "dp", "too large"),),
            "fast": True,
        }
        for text in ("1e309", "-1e999", "9" * 400, "1e307")
    ),
    *(
        {
            "number": 24,
            "what": f"{text} as a value",
            "content": HEAD + GOOD.replace(b"12.5", text.encode()) + NEXT,
            "used": {"dp": [3], "p": [2, 3], "t": [2, 3]},
            "problems": ((2, "dp", "is not a number"),),
            "fast": True,
        }
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
    {
        "number": 24,
        "what": "full-width digits in a time",
        "content": HEAD + GOOD.replace(b"2026", "２０２６".encode()),
        "used": {"dp": [], "p": [], "t": []},
        "problems": ((2, "time", "does not fit"),),
    },
    {
        "number": 25,
        "what": "an empty value",
        "content": HEAD + b"2026-10-01T00:00:00Z,,10.25,18.5\n2026-10-01T00:01:00Z, ,,\n",
        "used": {"dp": [], "p": [2], "t": [2]},
        "problems": (
            (2, "dp", "no value"),
            (3, "dp", "no value"),
            (3, "p", "no value"),
            (3, "t", "no value"),
        ),
        "fast": True,
    },
    {
        "number": 25,
        "what": "texts that stand for a bad value",
        "content": HEAD
        + b"2026-10-01T00:00:00Z,BAD,-9999,18.5\n2026-10-01T00:01:00Z,-9999.0,1,1\n",
        "used": {"dp": [3], "p": [3], "t": [2, 3]},
        "problems": ((2, "dp", "transmitter fault"), (2, "p", "no reading")),
        "fast": True,
    },
    {
        "number": 25,
        "what": "a number that stands for a bad value, nothing else on its line is bad",
        "content": HEAD + GOOD + b"2026-10-01T00:01:00Z,1,-9999,1\n",
        "used": {"dp": [2, 3], "p": [2], "t": [2, 3]},
        "problems": ((3, "p", "no reading"),),
        "fast": True,
    },
    {
        "number": 26,
        "what": "columns named NA and 007 are taken by their names",
        "content": b"time,dp,p,NA,007\n2026-10-01T00:00:00Z,1,1,7,7\n",
        "used": {"dp": [2], "p": [2]},
        "problems": (
            (1, "NA", "neither declared nor ignored"),
            (1, "007", "neither declared nor ignored"),
        ),
        "warning": "'NA', '007'",
        "fast": True,
    },
    {
        "number": 28,
        "what": "values out of the plausible range are used",
        "content": HEAD + b"2026-10-01T00:00:00Z,99999,10.25,-250\n",
        "used": every(2),
        "fast": True,
    },
    {
        "number": 0,
        "what": "an ignored column may hold anything that is text",
        "content": b"time,remark,dp,p,t\n2026-10-01T00:00:00Z,-,1,1,1\n"
        b"2026-10-01T00:01:00Z,\xc3\xa9,1,1,1\n",
        "used": every(2, 3),
        "fast": True,
    },
    {
        "number": 0,
        "what": "times that do not exist",
        "content": HEAD
        + b"2026-02-29T00:00:00Z,1,1,1\n2026-13-01T00:00:00Z,1,1,1\n2026-01-00T00:00:00Z,1,1,1\n"
        b"2026-01-01T25:00:00Z,1,1,1\n2026-01-01T00:60:00Z,1,1,1\n2026-01-01T00:00:60Z,1,1,1\n"
        b"2024-02-29T00:00:00Z,1,1,1\n",
        "used": every(8),
        "problems": tuple((n, "time", "does not exist") for n in range(2, 8)),
        "fast": True,
    },
    {
        "number": 0,
        "what": "every cell of a line is bad",
        "content": HEAD + b"2026-10-01T00:00:00Z,x,y,z\n",
        "used": {"dp": [], "p": [], "t": []},
        "problems": ((2, "dp", "not a number"), (2, "p", "not a number"), (2, "t", "not a number")),
        "fast": True,
    },
]


def test_hostile_cells(case, check_fate):
    """Each hostile input has exactly its fate, by both paths, and the counts add up."""
    check_fate(case)


def test_hostile_cells_within_a_large_file(lasting_case, check_lasting):
    """The same input has the same fate when 200 good lines follow."""
    check_lasting(lasting_case)


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
    parsed, _ = both(
        HEAD + b"9" * 5000 + b"\n" + b"2026-10-01T00:00:00Z,1," + b"x" * 3000 + b",1\n"
    )
    assert [len(p.text) for p in parsed.problems] == [1000, 1000]
    assert all(len(p.reason) < 300 for p in parsed.problems)
