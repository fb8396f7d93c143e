"""Hostile files, headers and lines, one case after the other, by both paths."""

import re
from pathlib import Path

HEAD = b"time,dp,p,t\n"
GOOD = b"2026-10-01T00:00:00Z,12.5,10.25,18.5\n"
NEXT = b"2026-10-01T00:01:00Z,13.5,10.35,19.5\n"


def every(*lines: int) -> dict[str, list[int]]:
    """All three cells of these lines are good."""
    return {"dp": list(lines), "p": list(lines), "t": list(lines)}


CASES = [
    {
        "number": 0,
        "what": "two good lines",
        "content": HEAD + GOOD + NEXT,
        "used": every(2, 3),
        "fast": True,
    },
    {
        "number": 2,
        "what": "a last line without an end is set aside where one is required",
        "content": HEAD + GOOD + b"2026-10-01T00:01:00Z,13.5,10.35,1",
        "used": every(2),
        "problems": ((3, "", "no line end"),),
        "fast": False,
    },
    {
        "number": 2,
        "what": "a last line without an end is read where none is required",
        "content": HEAD + GOOD + NEXT[:-1],
        "used": every(2, 3),
        "layout": {"final_line_end_required": False},
    },
    {
        "number": 2,
        "what": "a number cut off after its decimal mark is no number",
        "content": HEAD + GOOD + b"2026-10-01T00:01:00Z,13.5,10.35,12.",
        "used": {"dp": [2, 3], "p": [2, 3], "t": [2]},
        "problems": ((3, "t", "'12.' is not a number"),),
        "layout": {"final_line_end_required": False},
    },
    {
        "number": 2,
        "what": "a header without an end",
        "content": HEAD[:-1],
        "rejected": "header line has no line end",
    },
    {
        "number": 3,
        "what": "byte-order mark",
        "content": b"\xef\xbb\xbf" + HEAD + GOOD,
        "used": every(2),
        "fast": True,
    },
    {
        "number": 4,
        "what": "UTF-16 that is declared, little end first",
        "content": (HEAD + GOOD).decode().encode("utf-16"),
        "used": every(2),
        "layout": {"encoding": "utf-16"},
        "fast": True,
    },
    {
        "number": 4,
        "what": "UTF-16 that is declared, big end first, without a mark",
        "content": (HEAD + GOOD).decode().encode("utf-16-be"),
        "used": every(2),
        "layout": {"encoding": "utf-16"},
    },
    {
        "number": 4,
        "what": "UTF-16 cut in the middle of a character",
        "content": (HEAD + GOOD + NEXT).decode().encode("utf-16")[:-1],
        "used": every(2),
        "problems": ((3, "", "not valid text"),),
        "layout": {"encoding": "utf-16", "final_line_end_required": False},
    },
    {
        "number": 4,
        "what": "UTF-16 that is not declared",
        "content": (HEAD + GOOD).decode().encode("utf-16"),
        "rejected": "UTF-16 byte-order mark",
    },
    {
        "number": 4,
        "what": "UTF-16 that is not declared, without a mark",
        "content": (HEAD + GOOD).decode().encode("utf-16-le"),
        "rejected": "NUL",
    },
    {
        "number": 4,
        "what": "UTF-8 where UTF-16 is declared",
        "content": HEAD + GOOD,
        "rejected": "does not begin like UTF-16",
        "layout": {"encoding": "utf-16"},
    },
    {
        "number": 5,
        "what": "bytes that are not UTF-8",
        "content": HEAD + GOOD + NEXT.replace(b"13.5", b"13\xb05") + GOOD,
        "used": every(2, 4),
        "problems": ((3, "", "not valid text"),),
        "fast": False,
    },
    {
        "number": 6,
        "what": "NUL bytes",
        "content": HEAD + GOOD + b"\0" * 40 + b"\n" + NEXT,
        "used": every(2, 4),
        "problems": ((3, "", "NUL byte"),),
        "fast": False,
    },
    {
        "number": 8,
        "what": "semicolons, not declared",
        "content": HEAD.replace(b",", b";") + GOOD.replace(b",", b";"),
        "rejected": "'time;dp;p;t'",
    },
    {
        "number": 17,
        "what": "two columns with one name",
        "content": b"time,dp,p,dp\n" + GOOD,
        "rejected": "named 'dp'",
    },
    {
        "number": 17,
        "what": "two unknown columns with one name",
        "content": b"time,dp,p,x,x\n" + GOOD,
        "rejected": "named 'x'",
    },
    {
        "number": 18,
        "what": "the same header again in the middle",
        "content": HEAD + GOOD + HEAD + NEXT,
        "used": every(2, 4),
        "skipped": 2,
        "fast": True,
    },
    {
        "number": 19,
        "what": "another order of columns with a new header",
        "content": HEAD + GOOD + b"time,t,p,dp\n2026-10-01T00:01:00Z,19.5,10.35,13.5\n",
        "used": every(2, 4),
        "skipped": 2,
        "fast": False,
    },
    {
        "number": 19,
        "what": "another order of columns without a new header",
        "content": HEAD + GOOD + b"13.5,2026-10-01T00:01:00Z,10.35,19.5\n",
        "used": every(2),
        "problems": ((3, "time", "does not fit"),),
    },
    {
        "number": 20,
        "what": "no dp",
        "content": b"time,p,t\n",
        "rejected": "required column 'dp' missing",
    },
    {
        "number": 20,
        "what": "no time",
        "content": b"zeit,dp,p,t\n",
        "rejected": "time column 'time' missing",
    },
    {
        "number": 20,
        "what": "a required column goes missing in the middle",
        "content": HEAD + GOOD + b"time,dp,t\n2026-10-01T00:01:00Z,13.5,19.5\n",
        "rejected": "line 3: required column 'p' missing",
    },
    {
        "number": 20,
        "what": "a column that is not required may be missing",
        "content": b"time,p,dp\n2026-10-01T00:01:00Z,13.5,19.5\n",
        "used": {"dp": [2], "p": [2]},
        "fast": True,
    },
    {
        "number": 20,
        "what": "a header without the time in the middle",
        "content": HEAD + GOOD + b"clock,dp,p,t\n" + NEXT,
        "rejected": "line 3: time column 'time' missing",
    },
    {
        "number": 19,
        "what": "an unknown column is told once, under whatever header",
        "content": b"time,dp,p,x\n" + GOOD + b"time,x,p,dp\n" + NEXT,
        "used": {"dp": [2, 4], "p": [2, 4]},
        "problems": ((1, "x", "neither declared nor ignored"),),
        "warning": "'x'",
        "skipped": 2,
    },
    {
        "number": 21,
        "what": "another unit in the header",
        "content": b"time,dp [kPa],p,t\n" + GOOD,
        "rejected": "the header holds 'time', 'dp [kPa]', 'p', 't'",
    },
    {
        "number": 21,
        "what": "another unit from the middle on",
        "content": HEAD + GOOD + b"time,dp [kPa],p,t\n" + NEXT,
        "rejected": "line 3: required column 'dp' missing",
    },
    {
        "number": 29,
        "what": "one line of 2 MB",
        "content": HEAD + b"1" * 2_000_000 + b"\n",
        "rejected": "longer than",
    },
    {
        "number": 29,
        "what": "one line of 2 MB without an end",
        "content": b"1" * 2_000_000,
        "rejected": "longer than",
    },
    {
        "number": 40,
        "what": "times out of order",
        "content": HEAD + NEXT + GOOD,
        "used": every(2, 3),
        "fast": True,
    },
    {
        "number": 41,
        "what": "an empty file",
        "content": b"",
        "warning": "the file is empty",
        "skipped": 0,
    },
    {
        "number": 41,
        "what": "a byte-order mark alone",
        "content": b"\xef\xbb\xbf",
        "warning": "the file is empty",
        "skipped": 0,
    },
    {
        "number": 41,
        "what": "blank lines only",
        "content": b"\n \n",
        "warning": "blank lines only",
        "skipped": 2,
    },
    {
        "number": 42,
        "what": "a header only",
        "content": HEAD,
        "used": every(),
        "warning": "a header and no rows",
    },
    {
        "number": 43,
        "what": "CRLF line ends",
        "content": (HEAD + GOOD + NEXT).replace(b"\n", b"\r\n"),
        "used": every(2, 3),
        "fast": True,
    },
    {
        "number": 43,
        "what": "CR line ends",
        "content": (HEAD + GOOD + NEXT).replace(b"\n", b"\r"),
        "used": every(2, 3),
        "fast": False,
    },
    {
        "number": 43,
        "what": "mixed line ends",
        "content": HEAD + GOOD[:-1] + b"\r" + NEXT[:-1] + b"\r\n",
        "used": every(2, 3),
    },
    {
        "number": 44,
        "what": "empty trailing delimiters",
        "content": b"time,dp,p,t,\n" + GOOD[:-1] + b",\n" + NEXT[:-1] + b",\n",
        "used": every(2, 3),
        "fast": True,
    },
    {
        "number": 44,
        "what": "empty trailing delimiters on some lines only",
        "content": HEAD + GOOD + NEXT[:-1] + b",,\n",
        "used": every(2, 3),
    },
    {
        "number": 44,
        "what": "a trailing cell that is not empty",
        "content": HEAD + GOOD[:-1] + b",\n" + NEXT[:-1] + b",9\n",
        "used": every(2),
        "problems": ((3, "", "has 5 cells; its header has 4 columns"),),
        "fast": True,
    },
    {
        "number": 44,
        "what": "too few cells",
        "content": HEAD + GOOD + b"2026-10-01T00:01:00Z,13.5\n" + NEXT,
        "used": every(2, 4),
        "problems": ((3, "", "has 2 cells; its header has 4 columns"),),
        "fast": False,
    },
    {
        "number": 45,
        "what": "a stray quote",
        "content": HEAD
        + GOOD
        + b'2026-10-01T00:01:00Z,"13.5,10.35,19.5\n'
        + NEXT
        + b'2026-10-01T00:02:00Z,1"3,1,1\n'
        b'2026-10-01T00:03:00Z,"1"3,1,1\n',
        "used": every(2, 4),
        "problems": (
            (3, "", "stray quote"),
            (5, "", "stray quote"),
            (6, "", "after the closing quote"),
        ),
        "fast": False,
    },
    {
        "number": 45,
        "what": "well-formed quotes",
        "content": b'"time","dp",p,t,remark\n'
        b'"2026-10-01T00:00:00Z","12.5",10.25,18.5,"a ""b"", c"\n',
        "used": every(2),
        "fast": False,
    },
    {
        "number": 45,
        "what": "a line end within quotes ends the line all the same",
        "content": b'time,dp,p,t,remark\n2026-10-01T00:00:00Z,1,1,1,"two\nlines"\n'
        + GOOD[:-1]
        + b",\n",
        "used": every(4),
        "problems": ((2, "", "stray quote"), (3, "", "stray quote")),
    },
    {
        "number": 0,
        "what": "blank lines",
        "content": b"\n" + HEAD + b"\n" + GOOD + b" \t\n" + NEXT,
        "used": every(4, 6),
        "skipped": 4,
        "fast": False,
    },
]

NOT_CONTENT = {
    1: "a growing file: discovery",
    30: "a file over the size limit: discovery and opening",
    31: "a gzip bomb: opening",
    32: "truncated gzip: opening",
    33: "a symbolic link: discovery",
    34: "a pipe or device: discovery",
    35: "odd file names: discovery",
    37: "known bytes under another name: the ledger",
    38: "other bytes under a known name: the ledger",
    39: "files that disagree: the ledger",
    46: "vanished while being read: discovery",
}


def test_every_hostile_input_has_a_case_or_another_place():
    """Each of the 46 hostile inputs is a case here, or it is said which station meets it."""
    covered = {
        int(number)
        for path in Path(__file__).parent.glob("test_hostile_*.py")
        for number in re.findall(r'"number": (\d+),', path.read_text(encoding="utf-8"))
    } - {0}
    assert not covered & set(NOT_CONTENT)
    assert covered | set(NOT_CONTENT) == set(range(1, 47))


def test_hostile_lines(case, check_fate):
    """Each hostile input has exactly its fate, by both paths, and the counts add up."""
    check_fate(case)


def test_hostile_lines_within_a_large_file(lasting_case, check_lasting):
    """The same input has the same fate when 200 good lines follow."""
    check_lasting(lasting_case)


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
