"""What `process`, `check` and `show` tell a user who is new to them, and what they accept."""

from __future__ import annotations

import json
import shutil
from datetime import datetime, timedelta

import pytest

from meterfix.model.calendar import to_microseconds
from meterfix.run import clock

NOW = "2026-10-02T20:00:00Z"
LATER = "2026-10-02T21:00:00Z"


@pytest.fixture
def clock_at(monkeypatch):
    """Return a function that sets this machine's clock for the test."""

    def set_clock(text: str) -> None:
        monkeypatch.setattr(clock, "now", lambda: to_microseconds(datetime.fromisoformat(text)))

    return set_clock


@pytest.mark.parametrize(
    ("ahead", "said"),
    [
        (timedelta(minutes=5), None),
        (timedelta(minutes=6), "--now is 6 minutes ahead of this machine's clock"),
        (timedelta(days=30), "--now is 30 days ahead of this machine's clock"),
    ],
)
def test_a_now_ahead_of_the_clock_is_told(one_meter, clock_at, ahead, said):
    """More than 5 minutes ahead: what follows from it is said on stderr; it is not refused."""
    clock_at(NOW)
    now = (datetime.fromisoformat(NOW) + ahead).isoformat()
    told = one_meter.process(now).stderr
    assert ("ahead of this machine's clock" in told) == (said is not None)
    if said:
        assert f"{said}: what closes now stays closed, and nothing else closes until" in told


def test_help_tells_what_a_now_ahead_does(invoke):
    """`process --help` says that nothing else closes until the clock gets there."""
    assert "until the clock gets there" in " ".join(invoke("process", "--help").stdout.split())


def test_a_clock_behind_is_told_when_it_opens_and_when_it_closes(one_meter, invoke):
    """The alert is printed once opened, not again while it lasts, and once closed; JSON has it."""
    one_meter.process(LATER)
    first = one_meter.process(NOW)
    assert "alert opened: clock behind, clock: the clock says 2026-10-02T20:00:00Z," in first.stderr
    assert "alert" not in one_meter.process(NOW).stderr
    closed = invoke(
        "process", "--site", one_meter.site, "--now", "2026-10-02T22:00:00Z", "--format", "json"
    )
    (news,) = json.loads(closed.stdout)["alerts"]
    assert (news["state"], news["kind"], news["since"]) == ("closed", "clock behind", LATER)


def test_a_disputed_hour_is_told_with_how_to_settle_it(one_meter, hour_log):
    """The message and the evidence hold what a person needs; a resend settles and says so."""
    one_meter.log("FT-1_a.csv", hour_log(8))
    wrong = hour_log(8).replace(",5.0,", ",4.0,")
    one_meter.log("FT-1_b.csv", wrong)
    told = one_meter.process(NOW).stderr
    assert "alert opened: disputed hour, FT-1: " in told
    assert "deliver the file that is wrong again under its own name" in told
    assert "precedence" in told
    (alert,) = one_meter.json("alerts")
    evidence = alert["evidence"]
    assert evidence["hours"] == ["2026-10-02T08:00:00Z"]
    assert evidence["conflicts"] == 10
    assert [one["instant"] for one in evidence["first_conflicts"]] == [
        f"2026-10-02T08:{minute:02d}:00Z" for minute in range(0, 30, 6)
    ]
    assert {one["signal"] for one in evidence["first_conflicts"]} == {"PT-1"}
    assert [v["files"] for v in evidence["first_conflicts"][0]["values"]] == [
        ["station: FT-1_b.csv"],
        ["station: FT-1_a.csv"],
    ]
    one_meter.log("FT-1_b.csv", hour_log(8), age_s=3600)
    assert "alert closed: disputed hour, FT-1: " in one_meter.process(LATER).stderr


def test_an_older_database_put_back_is_told(one_meter, hour_log):
    """What a start-up finds and chains is printed, and stands in `show passes` as a sentence."""
    one_meter.log("FT-1_a.csv", hour_log(8))
    one_meter.process(NOW)
    old = one_meter.path / "old.sqlite"
    shutil.copy(one_meter.path / "meterfix.sqlite", old)
    one_meter.log("FT-1_b.csv", hour_log(9))
    one_meter.process(NOW)
    shutil.copy(old, one_meter.path / "meterfix.sqlite")
    told = one_meter.process(NOW)
    assert "recorded: older database restored: it ends with pass 1" in told.stderr
    notes = [row["note"] for row in one_meter.json("passes") if row["kind"] == "restore"]
    assert len(notes) == 1
    assert notes[0] in told.stderr.replace("recorded: ", "")
    assert len(one_meter.json("files")) == 2


def test_files_judged_again_are_counted_apart(one_meter, hour_log):
    """A changed site file makes no new readings: the files are told as judged again."""
    one_meter.log("FT-1_a.csv", hour_log(8))
    assert "1 pass: 1 file, 30 new readings, " in one_meter.process(NOW).stdout
    text = one_meter.site.read_text(encoding="utf-8")
    changed = text.replace('reference = "gauge"', 'reference = "absolute"')
    one_meter.site.write_text(changed, encoding="utf-8")
    again = one_meter.process(LATER).stdout
    assert "0 files, 0 new readings, 1 file judged again under the changed site file, " in again
    row = next(r for r in one_meter.json("passes")[::-1] if r["kind"] == "pass")
    assert row["readings"] == 0
    assert row["note"] == "1 file judged again under the changed site file"


@pytest.mark.parametrize("command", [("show", "totals"), ("verify",), ("process",)])
@pytest.mark.parametrize(
    ("gone", "said"),
    [
        ("archive/anchor", "but its archive has no anchor: put the archive back"),
        ("archive", "but its archive has no anchor: put the archive back"),
        ("meterfix.sqlite", "is empty: put a copy of the database back"),
    ],
)
def test_a_part_that_is_missing_is_named(one_meter, hour_log, invoke, command, gone, said):
    """Whatever command meets it: database or archive without the other is exit 2, and told."""
    one_meter.log("FT-1_a.csv", hour_log(8))
    one_meter.process(NOW)
    path = one_meter.path / gone
    (shutil.rmtree if path.is_dir() else type(path).unlink)(path)
    result = invoke(*command, "--site", one_meter.site, exit_code=2)
    assert said in result.stderr
    assert "makes one" not in result.stderr


def test_a_meter_that_left_the_site_file_is_still_shown(one_meter, hour_log, invoke):
    """Totals of a meter that only the ledger knows are shown; one that neither knows is refused."""
    one_meter.log("FT-1_a.csv", hour_log(8))
    one_meter.process(NOW)
    before = one_meter.json("totals", "--meter", "FT-1")
    text = one_meter.site.read_text(encoding="utf-8")
    one_meter.site.write_text(text.replace("[meter.FT-1", "[meter.FT-2"), encoding="utf-8")
    assert before
    assert one_meter.json("totals", "--meter", "FT-1") == before
    assert one_meter.json("files", "--meter", "FT-1") == []
    assert invoke(
        "show", "totals", "--site", one_meter.site, "--meter", "FT-3", exit_code=2
    ).stderr.endswith("no meter 'FT-3'; there are FT-1, FT-2\n")


def test_a_missing_log_folder_is_named_once_and_by_check(one_meter, invoke):
    """`process` puts no empty name before the reason; `check` notes the folder, and is content."""
    (one_meter.path / "logs").rmdir()
    assert "waiting: station: folder " in one_meter.process(NOW).stderr
    noted = json.loads(invoke("check", "--site", one_meter.site, "--format", "json").stdout)
    assert any(str(one_meter.path / "logs") in note for note in noted["notes"])
    said = invoke("check", "--site", one_meter.site).stdout
    assert "1 gas, 1 meter, 0 envelopes" in said


@pytest.mark.parametrize("mark", [";", "\t"])
def test_a_header_with_another_delimiter(one_meter, hour_log, mark):
    """A header that is one cell and holds another delimiter: the reason asks for it."""
    one_meter.log("FT-1_a.csv", hour_log(8).replace(",", mark))
    told = one_meter.process(NOW, exit_code=1).stderr
    assert f"is the delimiter {mark!r}?" in told


def test_versions_and_the_newest_remarks_first(one_meter, hour_log):
    """`show files` has a column of versions once there are some, and the newest remark on top."""
    one_meter.log("FT-1_a.csv", hour_log(8).replace("08:06:00Z,101", "08:06:00Z,what"))
    one_meter.process(NOW)
    assert "ver." not in one_meter.text("files")
    one_meter.log("FT-1_a.csv", hour_log(8), age_s=3600)
    one_meter.log("FT-1_b.csv", hour_log(9).replace("09:06:00Z,101", "09:06:00Z,else"))
    one_meter.process(LATER)
    text = one_meter.text("files")
    assert "ver." in text
    (line,) = [line for line in text.splitlines() if "FT-1_a.csv" in line and " 2 " in line]
    assert "accepted" in line
    assert 0 < text.index("FT-1_b.csv:3:") < text.index("FT-1_a.csv:3:")


def test_months_are_named_in_csv(works, invoke):
    """The last column of totals and balances is the month of the row."""
    for what in ("totals", "balances"):
        text = invoke(
            "show", what, "--site", works.site, "--by", "month", "--format", "csv"
        ).stdout.splitlines()
        assert text[0].endswith(",month")
        assert len(text) > 1
        assert all(line.endswith(",2026-10") for line in text[1:])
