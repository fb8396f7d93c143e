"""Hostile files in the layout with a row per tag and time, one case after the other."""

import gzip

import pytest

from meterfix.intake.logs import open_content, parse_fast
from meterfix.model.source import RepeatedHour, Stamp

HEAD = b"time,tag,value,quality\n"
DP = b"2026-10-01T00:00:00Z,PDT-1.PV,12.5,GOOD\n"
P = b"2026-10-01T00:00:20Z,NA,10.25,192\n"
T = b"2026-10-01T00:05:00Z,007,18.5,GOOD\n"
EVERY = {"PDT-1.PV": [2], "NA": [3], "007": [4]}
BERLIN = {"time_format": "%Y-%m-%d %H:%M:%S", "time_zone": "Europe/Berlin"}
COMMA = {"delimiter": ";", "decimal_mark": ","}


CASES = [
    {
        "number": 26,
        "what": "tags named NA and 007 are taken verbatim",
        "content": HEAD + DP + P + T,
        "used": EVERY,
        "fast": True,
    },
    {
        "number": 26,
        "what": "NaN, 7 and 007.0 are other tags than NA and 007",
        "content": HEAD
        + DP
        + b"".join(P.replace(b"NA", tag) for tag in (b"NaN", b"7", b"007.0", b"na")),
        "used": {"PDT-1.PV": [2]},
        "problems": tuple(
            (n, tag, "is not declared for this source; 1 line from")
            for n, tag in ((3, "NaN"), (4, "7"), (5, "007.0"), (6, "na"))
        ),
        "warning": "unknown tags not read: 'NaN', '7', '007.0', 'na'",
        "fast": True,
    },
    {
        "number": 27,
        "what": "an unknown tag is told once, with the number of its lines",
        "content": HEAD + DP + T.replace(b"007", b"TT-9") + P + T.replace(b"007", b" TT-9 ") + T,
        "used": {"PDT-1.PV": [2], "NA": [4], "007": [6]},
        "problems": ((3, "TT-9", "2 lines from this one on are kept and judged again"),),
        "warning": "'TT-9'",
        "fast": True,
    },
    {
        "number": 27,
        "what": "nothing else of an unknown tag's line is judged, not even its time",
        "content": HEAD + DP + b"yesterday,TT-9,x,?\n2026-11-30T00:00:00Z,TT-9,,\n",
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "TT-9", "2 lines"),),
        "warning": "'TT-9'",
        "fast": True,
    },
    {
        "number": 27,
        "what": "a line without a tag",
        "content": HEAD + DP + b"2026-10-01T00:00:00Z,,1,GOOD\n",
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "", "tag '' is not declared"),),
        "warning": "''",
        "fast": True,
    },
    {
        "number": 36,
        "what": "tags that begin like a formula",
        "content": HEAD
        + DP
        + b"".join(P.replace(b"NA", tag) for tag in (b"=1+1", b"+1", b"-1", b"@SUM(A1)")),
        "used": {"PDT-1.PV": [2]},
        "problems": tuple(
            (n, tag, "it begins like a formula")
            for n, tag in ((3, "=1+1"), (4, "+1"), (5, "-1"), (6, "@SUM(A1)"))
        ),
        "warning": "'=1+1', '+1', '-1', '@SUM(A1)'",
        "fast": True,
    },
    {
        "number": 0,
        "what": "an ignored tag is skipped, whatever its line holds",
        "content": HEAD + DP + b"x,SP-1,y,z\n2026-10-01T00:00:00Z,@note,dry,GOOD\n" + P,
        "used": {"PDT-1.PV": [2], "NA": [5]},
        "skipped": 3,
        "fast": True,
    },
    {
        "number": 0,
        "what": "ignored tags only",
        "content": HEAD + P.replace(b"NA", b"SP-1"),
        "skipped": 2,
        "fast": True,
    },
    {
        "number": 0,
        "what": "a bad quality sets the value aside with its meaning",
        "content": HEAD + DP + P.replace(b"192", b"BAD") + T.replace(b"18.5,GOOD", b",0") + T,
        "used": {"PDT-1.PV": [2], "007": [5]},
        "problems": (
            (3, "NA", "quality 'BAD' stands for: not connected"),
            (4, "007", "quality '0' stands for: no communication"),
        ),
        "fast": True,
    },
    {
        "number": 0,
        "what": "a quality code that is not declared sets the value aside",
        "content": HEAD
        + DP
        + b"".join(P.replace(b"192", code) for code in (b"good", b"192.0", b"0x0", b"", b"-")),
        "used": {"PDT-1.PV": [2]},
        "problems": tuple((n, "NA", "is not declared for this source") for n in range(3, 8)),
        "fast": True,
    },
    {
        "number": 0,
        "what": "a doubtful quality is used",
        "content": HEAD + DP + P.replace(b"192", b"UNC"),
        "used": {"PDT-1.PV": [2], "NA": [3]},
        "fast": True,
    },
    {
        "number": 0,
        "what": "a log without a quality column",
        "content": b"tag,time,value\nNA,2026-10-01T00:00:00Z,1\n",
        "used": {"NA": [2]},
        "layout": {"quality_column": "", "qualities": ()},
        "fast": True,
    },
    {
        "number": 2,
        "what": "a last line without an end is set aside where one is required",
        "content": HEAD + DP + P[:-1],
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "", "no line end"),),
        "fast": False,
    },
    {
        "number": 2,
        "what": "a quality code that is cut off is another code",
        "content": HEAD + DP + P[:-2],
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "NA", "quality '19' is not declared"),),
        "layout": {"final_line_end_required": False},
    },
    {
        "number": 3,
        "what": "byte-order mark",
        "content": b"\xef\xbb\xbf" + HEAD + DP + P + T,
        "used": EVERY,
        "fast": True,
    },
    {
        "number": 4,
        "what": "UTF-16 that is declared",
        "content": (HEAD + DP + P + T).decode().encode("utf-16"),
        "used": EVERY,
        "layout": {"encoding": "utf-16"},
        "fast": True,
    },
    {
        "number": 4,
        "what": "UTF-16 that is not declared",
        "content": (HEAD + DP).decode().encode("utf-16"),
        "rejected": "UTF-16 byte-order mark",
    },
    {
        "number": 5,
        "what": "bytes that are not UTF-8, in a tag",
        "content": HEAD + DP + P.replace(b"NA", b"N\xb0") + P,
        "used": {"PDT-1.PV": [2], "NA": [4]},
        "problems": ((3, "", "not valid text"),),
        "fast": False,
    },
    {
        "number": 6,
        "what": "NUL bytes",
        "content": HEAD + DP + b"\0" * 40 + b"\n" + P,
        "used": {"PDT-1.PV": [2], "NA": [4]},
        "problems": ((3, "", "NUL byte"),),
        "fast": False,
    },
    {
        "number": 7,
        "what": "decimal comma, declared",
        "content": b"time;tag;value;quality\n2026-10-01T00:00:00Z;NA;12,5;GOOD\n",
        "used": {"NA": [2]},
        "layout": COMMA,
        "fast": True,
    },
    {
        "number": 7,
        "what": "decimal comma, not declared",
        "content": b"time;tag;value;quality\n2026-10-01T00:00:00Z;NA;12,5;GOOD\n",
        "problems": ((2, "NA", "tag 'NA': '12,5' is not a number"),),
        "layout": {"delimiter": ";"},
        "fast": True,
    },
    {
        "number": 8,
        "what": "semicolons, not declared",
        "content": (HEAD + DP).replace(b",", b";"),
        "rejected": "tag column 'tag'",
    },
    {
        "number": 9,
        "what": "thousands marks, not declared",
        "content": HEAD + DP.replace(b"12.5", b'"1,012.5"'),
        "problems": ((2, "PDT-1.PV", "'1,012.5' is not a number"),),
    },
    {
        "number": 10,
        "what": "mixed time formats",
        "content": HEAD
        + DP
        + b"01.10.2026 00:01:00,NA,1,GOOD\n2026-10-01 00:02:00,NA,1,GOOD\n2026-10-01,NA,1,GOOD\n",
        "used": {"PDT-1.PV": [2]},
        "problems": tuple((n, "time", "does not fit the declared format") for n in range(3, 6)),
        "fast": True,
    },
    {
        "number": 11,
        "what": "a local time in the repeated hour",
        "content": HEAD
        + b"2026-10-25 01:59:59,NA,1,GOOD\n2026-10-25 02:00:00,NA,1,GOOD\n"
        + b"2026-10-25 02:30:00,007,1,GOOD\n2026-10-25 03:00:00,007,1,GOOD\n",
        "used": {"NA": [2], "007": [5]},
        "problems": ((3, "time", "exists twice"), (4, "time", "exists twice")),
        "layout": {**BERLIN, "repeated_hour": RepeatedHour.SET_ASIDE},
        "fast": True,
    },
    {
        "number": 12,
        "what": "a local time in the skipped hour",
        "content": HEAD + b"2026-03-29 02:00:00,NA,1,GOOD\n2026-03-29 03:00:00,NA,1,GOOD\n",
        "used": {"NA": [3]},
        "problems": ((2, "time", "does not exist"),),
        "layout": BERLIN,
        "fast": True,
    },
    {
        "number": 13,
        "what": "24:00, declared and not declared",
        "content": HEAD + b"2026-10-01T24:00:00Z,NA,1,GOOD\n",
        "used": {"NA": [2]},
        "layout": {"hour_24": True},
        "fast": True,
    },
    {
        "number": 13,
        "what": "24:00, not declared",
        "content": HEAD + DP + b"2026-10-01T24:00:00Z,NA,1,GOOD\n",
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "time", "24:00 is not declared"),),
    },
    {
        "number": 14,
        "what": "a two-digit year",
        "content": HEAD + DP + b"26-01-02T00:00:00Z,NA,1,GOOD\n",
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "time", "does not fit"),),
        "fast": True,
    },
    {
        "number": 15,
        "what": "more than five minutes after the arrival",
        "content": HEAD + b"2026-11-15T00:05:00Z,NA,1,GOOD\n2026-11-15T00:05:01Z,NA,1,GOOD\n",
        "used": {"NA": [2]},
        "problems": ((3, "time", "more than 5 minutes"),),
        "fast": True,
    },
    {
        "number": 16,
        "what": "1970",
        "content": HEAD + DP + b"1970-01-01T00:00:00Z,NA,1,BAD\n",
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "time", "before 2000-01-01"),),
        "fast": True,
    },
    {
        "number": 17,
        "what": "two columns with one name",
        "content": b"time,tag,value,value,quality\n",
        "rejected": "named 'value'",
    },
    {
        "number": 18,
        "what": "the same header again in the middle",
        "content": HEAD + DP + HEAD + P,
        "used": {"PDT-1.PV": [2], "NA": [4]},
        "skipped": 2,
        "fast": True,
    },
    {
        "number": 19,
        "what": "another order of columns with a new header",
        "content": HEAD + DP + b"quality,value,tag,time\n192,10.25,NA,2026-10-01T00:00:20Z\n",
        "used": {"PDT-1.PV": [2], "NA": [4]},
        "skipped": 2,
        "fast": False,
    },
    {
        "number": 19,
        "what": "tag and value change places without a new header",
        "content": HEAD + DP + b"2026-10-01T00:00:20Z,10.25,NA,192\n",
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "10.25", "tag '10.25' is not declared"),),
        "warning": "'10.25'",
    },
    *(
        {
            "number": 20,
            "what": f"no {name}",
            "content": HEAD.replace(name.encode(), b"x") + DP,
            "rejected": f"{name} column '{name}' missing",
        }
        for name in ("time", "tag", "value", "quality")
    ),
    {
        "number": 20,
        "what": "the quality column goes missing in the middle",
        "content": HEAD + DP + b"time,tag,value\n2026-10-01T00:00:20Z,NA,1\n",
        "rejected": "line 3: quality column 'quality' missing",
    },
    {
        "number": 21,
        "what": "a unit in the header",
        "content": b"time,tag,value [bar],quality\n" + DP,
        "rejected": "value column 'value' missing",
    },
    *(
        {
            "number": number,
            "what": f"{text} as a value",
            "content": HEAD + DP.replace(b"12.5", text.encode()) + P,
            "used": {"NA": [3]},
            "problems": ((2, "PDT-1.PV", reason),),
            "fast": True,
        }
        for number, text, reason in (
            (22, "nan", "is not a number"),
            (22, "-inf", "is not a number"),
            (23, "1e309", "too large"),
            (24, "1_000", "is not a number"),
            (24, "\uff11\uff12", "is not a number"),
            (24, "0x10", "is not a number"),
            (24, "\u22125", "is not a number"),
            (25, "", "no value"),
            (25, "BAD", "transmitter fault"),
            (25, "-9999", "no reading"),
        )
    ),
    {
        "number": 28,
        "what": "a value out of the plausible range is used",
        "content": HEAD + DP.replace(b"12.5", b"99999"),
        "used": {"PDT-1.PV": [2]},
        "fast": True,
    },
    {
        "number": 29,
        "what": "one line of 2 MB",
        "content": HEAD + b"1" * 2_000_000 + b"\n",
        "rejected": "longer than",
    },
    {
        "number": 40,
        "what": "times out of order",
        "content": HEAD + T + P + DP,
        "used": {"007": [2], "NA": [3], "PDT-1.PV": [4]},
        "fast": True,
    },
    {"number": 41, "what": "an empty file", "content": b"", "warning": "is empty", "skipped": 0},
    {"number": 42, "what": "a header only", "content": HEAD, "warning": "no rows"},
    {
        "number": 43,
        "what": "CRLF line ends",
        "content": (HEAD + DP + P + T).replace(b"\n", b"\r\n"),
        "used": EVERY,
        "fast": True,
    },
    {
        "number": 43,
        "what": "CR line ends",
        "content": (HEAD + DP + P + T).replace(b"\n", b"\r"),
        "used": EVERY,
        "fast": False,
    },
    {
        "number": 44,
        "what": "trailing delimiters, one cell not empty",
        "content": HEAD + DP[:-1] + b",\n" + P[:-1] + b",9\n",
        "used": {"PDT-1.PV": [2]},
        "problems": ((3, "", "has 5 cells; its header has 4 columns"),),
        "fast": True,
    },
    {
        "number": 44,
        "what": "too few cells",
        "content": HEAD + DP + b"2026-10-01T00:01:00Z,NA\n" + P,
        "used": {"PDT-1.PV": [2], "NA": [4]},
        "problems": ((3, "", "has 2 cells; its header has 4 columns"),),
        "fast": False,
    },
    {
        "number": 45,
        "what": "a stray quote, and well-formed ones",
        "content": HEAD
        + DP
        + P.replace(b"NA", b'"NA')
        + P.replace(b"NA", b'"NA"').replace(b"192", b'"192"'),
        "used": {"PDT-1.PV": [2], "NA": [4]},
        "problems": ((3, "", "stray quote"),),
        "fast": False,
    },
    {
        "number": 0,
        "what": "blank lines and an unknown column",
        "content": b"\ntime,tag,value,quality,x\n" + DP[:-1] + b",\n\n" + P[:-1] + b",y\n",
        "used": {"PDT-1.PV": [3], "NA": [5]},
        "problems": ((2, "x", "neither declared nor ignored"),),
        "warning": "'x'",
        "skipped": 3,
        "fast": False,
    },
]


def test_hostile_tag_logs(case, check_fate, tag_layout):
    """Each hostile input has exactly its fate, by both paths, and the counts add up."""
    check_fate(case, tag_layout())


def test_hostile_tag_logs_within_a_large_file(lasting_case, check_lasting, tag_layout):
    """The same input has the same fate when 200 good lines follow."""
    check_lasting(lasting_case, tag_layout())


def test_values_carry_their_own_tags_unit_range_and_quality(both, tag_layout):
    """Units are mbar, bar and degC; what is out of a tag's range and what is doubtful say so."""
    rows = (
        b"2026-10-01T00:00:00Z,007,18.5,UNC\n"
        b"2026-10-01T00:00:00Z,NA,10.25,GOOD\n"
        b"2026-10-01T00:00:00Z,PDT-1.PV,12.5,GOOD\n"
        b"2026-10-01T00:01:00Z,007,-250,GOOD\n"
    )
    parsed, accepted = both(HEAD + rows, tag_layout())
    assert accepted
    found = {cells.column: cells for cells in parsed.cells}
    assert list(found) == ["PDT-1.PV", "NA", "007"]
    assert found["PDT-1.PV"].values.tolist() == [1250.0]
    assert found["NA"].values.tolist() == [10.25 * 1e5]
    assert found["007"].values.tolist() == [18.5 + 273.15, -250 + 273.15]
    assert found["007"].implausible.tolist() == [False, True]
    assert found["007"].doubtful.tolist() == [True, False]
    assert not found["NA"].doubtful.any()


def test_every_line_is_one_cell(both, tag_layout):
    """Cells set aside: one per line of a bad value, quality, time or unknown tag; no more."""
    rows = (
        DP + b"2026-10-01T00:00:00Z,NA,x,GOOD\n"  # a bad value
        b"2026-10-01T00:00:00Z,NA,1,BAD\n"  # a bad quality
        b"yesterday,NA,1,GOOD\n"  # no time
        b"2026-10-01T00:00:00Z,TT-9,1,GOOD\n"  # an unknown tag
        b"2026-10-01T00:00:00Z,NA\n"  # malformed: no cells
        b"2026-10-01T00:00:00Z,SP-1,1,GOOD\n"  # skipped
    )
    parsed, _ = both(HEAD + rows, tag_layout())
    assert (parsed.lines_read, parsed.lines_skipped, parsed.lines_set_aside) == (8, 2, 5)
    assert parsed.cells_set_aside == 4


def test_many_unknown_tags_are_named_in_part(both, tag_layout):
    """The warning names ten unknown tags and counts the rest; each has its own problem."""
    rows = b"".join(b"2026-10-01T00:00:00Z,X-%d,1,GOOD\n" % (n % 14) for n in range(42))
    parsed, accepted = both(HEAD + rows, tag_layout())
    assert accepted
    assert [(p.line, p.cell) for p in parsed.problems] == [(n + 2, f"X-{n}") for n in range(14)]
    assert all("3 lines" in p.reason for p in parsed.problems)
    assert parsed.warning.endswith("'X-9' and 4 more")
    assert parsed.lines_set_aside == parsed.cells_set_aside == 42


def test_a_compressed_tag_log_opens_like_any_other(tag_layout):
    """What gzip packs is seen before the layout is: the content is the same bytes."""
    content = HEAD + DP
    assert open_content(gzip.compress(content), tag_layout(), "x.csv.gz") == content


@pytest.mark.parametrize("stamp", [Stamp.INTERVAL_START, Stamp.INTERVAL_END])
def test_stamps_of_intervals(stamp, tag_layout, arrival):
    """An interval's end becomes its start, as in the other layout."""
    parsed = parse_fast(HEAD + DP, tag_layout(), stamp=stamp, interval=60_000_000, arrival=arrival)
    start = 1_790_812_800_000_000  # 2026-10-01T00:00:00Z
    (cells,) = parsed.cells
    assert cells.instants.tolist() == [start - 60_000_000 * (stamp is Stamp.INTERVAL_END)]
