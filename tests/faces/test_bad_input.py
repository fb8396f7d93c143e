"""Bad input at the command line: each kind told clearly, and the rest of the work goes on."""

from __future__ import annotations

import json
import os
import re
from dataclasses import dataclass

import pytest

GOOD = "FT-1_07_good.csv"
ACCEPTED, REJECTED, WAITING = "accepted", "rejected", "waiting"


@dataclass(frozen=True)
class Taken:
    """What one run of `process` made of a folder of good and bad files."""

    folder: object
    exit_code: int
    out: str
    err: str
    files: dict[str, dict]


def with_column(log: str, name: str, value: str) -> str:
    """Return a log with one more column."""
    head, *rows = log.splitlines()
    return "\n".join([f"{head},{name}", *(f"{row},{value}" for row in rows)]) + "\n"


def without_column(log: str, place: int) -> str:
    """Return a log without one of its columns."""
    rows = [line.split(",") for line in log.splitlines()]
    return "\n".join(",".join(c for n, c in enumerate(row) if n != place) for row in rows) + "\n"


@pytest.fixture(scope="module")
def taken(new_one_meter, hour_log) -> Taken:
    """One good file and one of each bad kind, taken in by one command."""
    folder = new_one_meter()
    folder.log(GOOD, hour_log(7))
    folder.log(
        "FT-1_08_line.csv",
        hour_log(8).replace("2026-10-02T08:12:00Z,102,5.0,20.2", "2026-10-02T08:12:00Z;102 what"),
    )
    folder.log("FT-1_09_cell.csv", hour_log(9).replace(",102,", ",1O2,"))
    folder.log("FT-1_10_unknown.csv", with_column(hour_log(10), "humidity", "55"))
    folder.log("FT-1_11_unit.csv", hour_log(11, header="time,dp [psi],p,t"))
    folder.log("FT-1_12_missing.csv", without_column(hour_log(12), 2))
    folder.log("FT-1_13_empty.csv", "")
    folder.log("FT-1_13_header.csv", "time,dp,p,t\n")
    cut = folder.log("FT-1_14_cut.csv.gz", hour_log(14))
    cut.write_bytes(cut.read_bytes()[:-12])
    folder.rest(cut)
    plain = folder.log("FT-1_15_plain.csv.gz", "")
    plain.write_text(hour_log(15), encoding="utf-8")
    folder.rest(plain)
    folder.log("FT-1_16_large.csv", hour_log(16) + "x" * 200_000)
    folder.log("FT-1_17_words.csv", hour_log(17).replace(",104,", ",BAD,").replace(",105,", ",,"))
    folder.log("FT-1_18_good.csv", hour_log(18))
    folder.log("FT-1_19_part.csv", hour_log(18, rows=4))
    os.mkfifo(folder.path / "logs" / "FT-1_20_pipe.csv")
    (folder.path / "logs" / "FT-1_21_link.csv").symlink_to(GOOD)
    result = folder.process(exit_code=None)
    files = {row["name"]: row for row in folder.json("files")}
    return Taken(folder, result.exit_code, result.stdout, result.stderr, files)


def counts(row):
    return tuple(
        row[f"lines_{name}"] for name in ("read", "used", "set_aside", "duplicate", "skipped")
    )


def test_a_rejected_file_is_exit_1(taken):
    """The work is done, but whole files were rejected: exit 1, each named with its reason."""
    assert taken.exit_code == 1
    rejected = {name for name, row in taken.files.items() if row["verdict"] == REJECTED}
    assert rejected == {
        "FT-1_11_unit.csv",
        "FT-1_12_missing.csv",
        "FT-1_14_cut.csv.gz",
        "FT-1_15_plain.csv.gz",
    }
    for name in rejected:
        assert f"rejected: station: {name}: {taken.files[name]['reason']}" in taken.err


def test_the_rest_goes_on(taken):
    """Beside bad files the good ones give their totals."""
    hours = {row["period_start"]: row for row in taken.folder.json("totals", "--by", "hour")}
    for number in (7, 18):
        good = hours[f"2026-10-02T{number:02d}:00:00Z"]
        assert good["mass_kg"] > 1000
        assert good["measured_fraction"] >= 0.9
    missing = hours["2026-10-02T12:00:00Z"]
    assert missing["mass_kg"] is None
    assert "missing differential pressure" in missing["reason"]


def test_a_malformed_line(taken):
    """A line of another shape is set aside whole, with its number, text and what is expected."""
    row = taken.files["FT-1_08_line.csv"]
    assert row["verdict"] == ACCEPTED
    assert counts(row) == (11, 9, 1, 0, 1)
    assert row["set_aside"] == [
        {
            "line": 4,
            "column": None,
            "text": "2026-10-02T08:12:00Z;102 what",
            "reason": "the line has 1 cell; its header has 4 columns",
        }
    ]


def test_a_bad_cell(taken):
    """One bad cell is set aside; the line's other cells are used and the line counts as used."""
    row = taken.files["FT-1_09_cell.csv"]
    assert counts(row) == (11, 10, 0, 0, 1)
    assert (row["cells_read"], row["cells_used"], row["cells_set_aside"]) == (30, 29, 1)
    (problem,) = row["set_aside"]
    assert (problem["line"], problem["column"], problem["text"]) == (4, "dp", "1O2")
    assert "'1O2' is not a number (decimal mark '.')" in problem["reason"]
    assert "station/FT-1_09_cell.csv:4: column 'dp': '1O2'" in taken.folder.text("files")


def test_a_declared_bad_value_and_an_empty_cell(taken):
    """BAD has its declared meaning, an empty cell is no value; both set one cell aside."""
    problems = taken.files["FT-1_17_words.csv"]["set_aside"]
    assert [(p["line"], p["column"], p["text"]) for p in problems] == [
        (6, "dp", "BAD"),
        (7, "dp", ""),
    ]
    assert "transmitter fault" in problems[0]["reason"]
    assert "no value" in problems[1]["reason"]


def test_an_unknown_column(taken):
    """A column that is not declared is not read, and the file says so."""
    row = taken.files["FT-1_10_unknown.csv"]
    assert (row["verdict"], counts(row)) == (ACCEPTED, (11, 10, 0, 0, 1))
    assert "'humidity'" in row["reason"]
    assert "unknown columns not read" in row["reason"]


def test_another_unit_in_the_header(taken):
    """A header that names another unit is another column: the file is rejected, not scaled."""
    row = taken.files["FT-1_11_unit.csv"]
    assert row["verdict"] == REJECTED
    assert "required column 'dp' missing" in row["reason"]
    assert "'dp [psi]'" in row["reason"]
    assert counts(row) == (0, 0, 0, 0, 0)


def test_a_missing_column(taken):
    """Without a required column the file is rejected: which one, and what there is."""
    reason = taken.files["FT-1_12_missing.csv"]["reason"]
    assert "required column 'p' missing; the header holds 'time', 'dp', 't'" in reason


def test_an_empty_file(taken):
    """An empty file, and one with nothing but a header, are taken with a warning."""
    empty, header = taken.files["FT-1_13_empty.csv"], taken.files["FT-1_13_header.csv"]
    assert (empty["verdict"], empty["reason"]) == (ACCEPTED, "the file is empty")
    assert header["verdict"] == ACCEPTED
    assert "a header and no rows" in header["reason"]
    assert (counts(empty), counts(header)) == ((0, 0, 0, 0, 0), (1, 0, 0, 0, 1))


@pytest.mark.parametrize(
    ("name", "verdict", "said"),
    [
        ("FT-1_14_cut.csv.gz", REJECTED, "ends too early"),
        ("FT-1_15_plain.csv.gz", REJECTED, "not gzip-compressed"),
        ("FT-1_20_pipe.csv", WAITING, "is a pipe, socket or device"),
        ("FT-1_21_link.csv", WAITING, "is a symbolic link"),
        ("FT-1_16_large.csv", WAITING, "the limit is 100000"),
    ],
)
def test_an_unreadable_file(taken, name, verdict, said):
    """A file that cannot be read as what it is has its verdict and reason; nothing hangs."""
    row = taken.files[name]
    assert row["verdict"] == verdict
    assert said in row["reason"]
    assert name in taken.err
    assert said in taken.err


def test_the_same_readings_again_are_duplicates(taken):
    """A part of a file delivered under another name counts as duplicate, not twice."""
    assert counts(taken.files["FT-1_19_part.csv"]) == (5, 0, 0, 4, 1)


def test_lines_add_up(taken):
    """Lines read = used + set aside + duplicate + skipped, in every file and over the source."""
    known = [row for row in taken.files.values() if row["verdict"] != WAITING]
    assert len(known) == 13
    for row in known:
        read, *parts = counts(row)
        assert read == sum(parts), row["name"]
    read, *parts = map(sum, zip(*map(counts, known), strict=True))
    assert read == sum(parts) > 70
    lines = taken.folder.text("files").splitlines()
    (line,) = (text for text in lines if re.match(r"station +13 ", text))
    assert [int(n) for n in line.split()[2:]] == [read, *parts]


def test_a_second_run_says_what_still_waits(taken):
    """Nothing is new, but refused files are named again: exit stays 1."""
    again = taken.folder.process(exit_code=1)
    assert "nothing new" in again.stdout
    assert "FT-1_20_pipe.csv" in again.stderr


EDITS = (
    # what is replaced, by what, where it is told, what is said of it
    ('gas_day_start = "06:00"', 'gas_day_start = "25:00"', "gas_day_start", "25:00"),
    ('unit = "mbar"', 'unit = "kg"', "[source.station.column.dp] unit", "kg"),
    ('bore = "50 mm"', 'bore = "150 mm"', "[meter.FT-1.orifice] bore", "150 mm"),
    ("nitrogen = 79", "nitrogen = 97", "[gas.air.composition", "1.18"),
    ('static_pressure = "PT-1"', 'static_pressure = "PT-9"', "static_pressure", "'PT-9'"),
    ('low_flow_cut_off = "1 mbar"', 'low_flow_cut_off = "-1 mbar"', "low_flow_cut_off", "-1 mbar"),
    ('maximum_gap = "10 min"', 'maximum_gap = "10 mm"', "maximum_gap", "10 mm"),
    ('"0 mbar", "250 mbar"', '"250 mbar", "0 mbar"', "[signal.PDT-1]", "downwards"),
    ('reference = "gauge"', "", "[source.station.column.p] reference", "missing"),
    ('delivery = "whole"', 'delivery = "hole"', "[source.station] delivery", "'hole'"),
)  # fmt: skip


def test_an_impossible_site_file_tells_ten_mistakes_at_once(one_meter, invoke):
    """Ten different mistakes are reported in one run: where, what was given, what is allowed."""
    text = one_meter.site.read_text(encoding="utf-8")
    for old, new, _, _ in EDITS:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    one_meter.site.write_text(text, encoding="utf-8")
    found = json.loads(
        invoke("check", "--site", one_meter.site, "--format", "json", exit_code=2).stdout
    )
    assert found["usable"] is False
    assert len(found["mistakes"]) == 10, found["mistakes"]
    for _, _, where, given in EDITS:
        told = [m for m in found["mistakes"] if where in m["where"] and given in m["given"]]
        assert len(told) == 1, (where, given, found["mistakes"])
        assert told[0]["allowed"]
        assert told[0]["where"].startswith("site.toml, [")
    result = invoke("check", "--site", one_meter.site, exit_code=2)
    assert "10 mistakes" in result.stderr
    for mistake in found["mistakes"]:
        assert all(part in result.stderr for part in mistake.values())


@pytest.mark.parametrize("command", [("process",), ("show", "totals"), ("verify",)])
def test_an_impossible_site_file_stops_every_command(one_meter, invoke, command):
    """No command works with such a file: exit 2, the mistakes told, nothing made."""
    text = one_meter.site.read_text(encoding="utf-8")
    one_meter.site.write_text(text.replace('"50 mm"', '"150 mm"'), encoding="utf-8")
    result = invoke(*command, "--site", one_meter.site, exit_code=2)
    assert "bore" in result.stderr
    assert "150 mm" in result.stderr
    assert not (one_meter.path / "meterfix.sqlite").exists()
    assert not (one_meter.path / "archive").exists()


def test_a_file_that_is_no_toml(one_meter, invoke):
    """A syntax mistake is told with line and column."""
    one_meter.site.write_text('[site]\nname = "x\n', encoding="utf-8")
    result = invoke("check", "--site", one_meter.site, exit_code=2)
    assert "line 2" in result.stderr
    assert "this is not TOML" in result.stderr


def test_a_log_folder_that_is_not_there(one_meter, invoke):
    """A missing log folder is waited for and named; nothing fails."""
    (one_meter.path / "logs").rmdir()
    result = one_meter.process()
    assert "logs" in result.stderr
    (waiting,) = one_meter.json("files")
    assert waiting["verdict"] == WAITING
    assert waiting["reason"]
