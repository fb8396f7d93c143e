"""A process that is killed at any moment and started again loses nothing and doubles nothing."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

import meterfix

MOMENTS = 20
REDRAWS = 8
"""How often a moment is drawn anew, each time an earlier one, if the process had ended by then."""
SEED = 20_260_304
LONGEST = 120.0
"""s that a process may take on a busy machine before a test gives up on it."""


def start(site: Path, hall, *, program: tuple[str, ...] = ("-m", "meterfix")) -> subprocess.Popen:
    """Start a real `process` command on the site."""
    command = [sys.executable, *program, "process", "--site", str(site), "--now", hall.LATE]
    found = [str(Path(meterfix.__file__).parents[1]), os.environ.get("PYTHONPATH", "")]
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(filter(None, found))}
    return subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=environment
    )


def finished(process: subprocess.Popen) -> tuple[int, str]:
    """Wait for a process; return its exit code and what it said."""
    out, err = process.communicate(timeout=LONGEST)
    return process.returncode, out + err


def until_work_begins(process: subprocess.Popen, site: Path) -> None:
    """Wait until the process has loaded its code and takes the ledger's lock."""
    give_up = time.monotonic() + LONGEST
    while not (site.parent / "archive" / "lock").exists():
        assert process.poll() is None, finished(process)
        assert time.monotonic() < give_up
        time.sleep(0.002)


def check_restarted(site: Path, hall, undisturbed: Path, *, inputs: bool = True) -> None:
    """Start again, a minute later, then compare with a ledger that nobody disturbed."""
    hall.run(site, "2026-11-03T12:01:00Z")
    proof = hall.prove(site)
    assert not proof.findings
    assert proof.files == len(hall.rows(site, "delivery"))
    found = hall.figures(site)
    assert hall.doubted(found) > 4
    assert hall.differences(found, hall.figures(undisturbed), inputs=inputs) == []
    assert hall.sums(site) == hall.sums(undisturbed)
    assert hall.rows(site, "attempt") == []
    assert hall.rows(site, "alert", kind="quarantined file") == []


@pytest.fixture(scope="module")
def working_time(hall, flawed_day, tmp_path_factory) -> float:
    """How long a real process works on the day once its code is loaded [s]."""
    folder = tmp_path_factory.mktemp("measured") / "site"
    shutil.copytree(flawed_day.parent, folder)
    process = start(folder / flawed_day.name, hall)
    until_work_begins(process, folder / flawed_day.name)
    begun = time.monotonic()
    code, said = finished(process)
    assert code == 0, said
    return time.monotonic() - begun


FRACTIONS = np.random.default_rng(SEED).random(MOMENTS).round(3).tolist()


@pytest.mark.parametrize("fraction", FRACTIONS)
def test_killed_at_a_random_moment(fraction, hall, copy_of, flawed_day, undisturbed, working_time):
    """Wherever SIGKILL meets the process, the next one ends with the bits of an undisturbed one."""
    for redraw in range(REDRAWS):
        site = copy_of(flawed_day, f"drawn {redraw}")
        process = start(site, hall)
        until_work_begins(process, site)
        time.sleep(fraction * working_time * 0.7**redraw)
        process.kill()
        code, said = finished(process)
        if code == -signal.SIGKILL:
            break
    assert code == -signal.SIGKILL, said
    check_restarted(site, hall, undisturbed)


def test_killed_again_and_again_on_one_ledger(hall, copy_of, flawed_day, undisturbed, working_time):
    """Kill after kill on one ledger sets no good file apart and loses nothing."""
    drawn = np.random.default_rng(SEED + 1)
    for redraw in range(REDRAWS):
        site = copy_of(flawed_day, f"drawn {redraw}")
        sooner = 0.7**redraw
        kills = 0
        while kills < 5:
            process = start(site, hall)
            # the second and later ones find the lock's file in place: loading takes about as long
            if kills == 0:
                until_work_begins(process, site)
                time.sleep(0.7 * working_time * sooner)
            else:
                time.sleep((1.0 + drawn.random() * working_time) * sooner)
            process.kill()
            code, said = finished(process)
            assert code in {0, -signal.SIGKILL}, said
            if code == 0:
                break
            kills += 1
        if kills >= 3:
            break
    assert kills >= 3
    check_restarted(site, hall, undisturbed)


@pytest.mark.slow
def test_whole_works_killed_twenty_times_on_one_ledger(hall, tmp_path):
    """Three days of all meters, files coming one by one, 20 kills in a row: identical bits."""
    from meterfix.demo.simulator import simulate

    calm = simulate(seed=7, days=3).write(tmp_path / "calm")
    begun = time.monotonic()
    code, said = finished(start(calm, hall))
    assert code == 0, said
    whole_time = time.monotonic() - begun
    site = hall.new_site(tmp_path / "site", calm.read_text())
    files = sorted(path for path in (calm.parent / "logs").rglob("*") if path.is_file())
    drawn = np.random.default_rng(SEED + 2)
    files = [files[n] for n in drawn.permutation(len(files))]
    kills = 0
    while kills < MOMENTS:
        for path in files[2 * kills : 2 * kills + 2 if kills < MOMENTS - 1 else None]:
            content, changed = path.read_bytes(), path.stat().st_mtime
            name = path.relative_to(calm.parent)
            hall.lay(site.parent / name, content, changed=changed)
        process = start(site, hall)
        time.sleep(drawn.random() * whole_time)
        process.kill()
        finished(process)
        kills += 1
        if (site.parent / "meterfix.sqlite").exists() and kills % 4 == 0:
            hall.run(site)
            assert not hall.prove(site).findings
    check_restarted(site, hall, calm, inputs=False)


NAMED = ("pack write", "pack renamed", "mid-transaction", "before done")


@pytest.mark.parametrize("moment", NAMED)
def test_killed_at_a_named_moment(moment, hall, copy_of, flawed_day, undisturbed):
    """Killed in the pack's write, after its rename, in mid-transaction, before 'done': the same."""
    site = copy_of(flawed_day)
    child = Path(__file__).with_name("child_killed_at.py")
    process = start(site, hall, program=(str(child), moment))
    code, said = finished(process)
    assert code == -signal.SIGKILL, said
    packs = list((site.parent / "archive" / "packs").glob("*.pack"))
    parts = list((site.parent / "archive" / "packs").glob("*.part"))
    assert (len(packs), len(parts)) == ((0, 1) if moment == "pack write" else (1, 0))
    anchor = (site.parent / "archive" / "anchor").read_text()
    assert ("intent 1" in anchor) == (moment in {"mid-transaction", "before done"})
    assert "done 1" not in anchor
    assert len(hall.rows(site, "audit")) == (moment == "before done")
    check_restarted(site, hall, undisturbed)
    assert len(list((site.parent / "archive" / "packs").iterdir())) == 1, "stored twice"
    # what the archive held already arrived then, not when it was found again
    arrivals = {row["arrival_us"] for row in hall.rows(site, "delivery")}
    assert (arrivals == {hall.instant(hall.LATE)}) == (moment != "pack write")
    resolved = [row["kind"] for row in hall.rows(site, "pass")]
    assert ("resolution" in resolved) == (moment in {"mid-transaction", "before done"})


# --- files that bring a process down ------------------------------------------------------------


def start_with_a_deadly_file(site: Path, hall, how: str) -> tuple[int, str]:
    child = Path(__file__).with_name("child_with_deadly_file.py")
    return finished(start(site, hall, program=(str(child), how)))


def lay_deadly_file(site: Path, hall, flawed_day: Path) -> None:
    good = min((flawed_day.parent / "logs" / "weather").glob("*.csv"))
    content = good.read_bytes() + b"2026-10-02T20:00:00Z,DEADLY\n"
    hall.lay(site.parent / "logs" / "weather" / "barometer_deadly.csv", content)


@pytest.mark.parametrize("how", ["raise", "abort"])
def test_file_that_crashes_every_pass(how, hall, copy_of, flawed_day, undisturbed):
    """After two crashes a file is tried alone, then quarantined with an alert; the rest gets in."""
    site = copy_of(flawed_day)
    lay_deadly_file(site, hall, flawed_day)
    starts = 0
    code = None
    while code not in (0, 1):
        code, said = start_with_a_deadly_file(site, hall, how)
        starts += 1
        assert starts <= 3, said
        if how == "abort" and starts < 3:
            assert code == -signal.SIGABRT, said
            assert len(hall.rows(site, "delivery")) == 0
    assert code == 1, said
    assert starts == (1 if how == "raise" else 3)
    assert "quarantined" not in said or "barometer_deadly.csv" in said
    named = {row["sequence"]: row["name"] for row in hall.rows(site, "delivery")}
    verdicts = {named[f["delivery_sequence"]]: f["verdict"] for f in hall.rows(site, "fate")}
    assert verdicts.pop("barometer_deadly.csv") == "quarantined"
    assert set(verdicts.values()) == {"accepted"}
    assert len(verdicts) == len(hall.rows(undisturbed, "delivery"))
    assert [row["subject"] for row in hall.rows(site, "alert", kind="quarantined file")] == [
        "weather: barometer_deadly.csv"
    ]
    assert hall.rows(site, "attempt") == []
    assert hall.differences(hall.figures(site), hall.figures(undisturbed)) == []
    assert not hall.prove(site).findings
    # and it is left alone from now on
    before = hall.everything(site)
    assert start_with_a_deadly_file(site, hall, how)[0] == 0
    assert hall.differences(before, hall.everything(site)) == []


def test_failure_that_is_no_files_fault_sets_none_apart(hall, copy_of, flawed_day, monkeypatch):
    """A program that fails with good files in hand says so, and quarantines none of them."""
    from meterfix.run import passes

    def broken(*_args, **_more):
        raise ZeroDivisionError("a mistake of the program")

    site = copy_of(flawed_day)
    with monkeypatch.context() as patched:
        patched.setattr(passes, "compute", broken)
        with pytest.raises(ZeroDivisionError):
            hall.run(site)
    hall.run(site)
    assert {fate["verdict"] for fate in hall.rows(site, "fate")} == {"accepted"}
    assert hall.rows(site, "attempt") == []
    assert not hall.prove(site).findings


def test_marks_of_an_attempt_go_when_the_file_changes(hall, copy_of, flawed_day):
    """A mark beside bytes that were replaced before the next pass does not stay for ever."""
    site = copy_of(flawed_day)
    lay_deadly_file(site, hall, flawed_day)
    assert start_with_a_deadly_file(site, hall, "abort")[0] == -signal.SIGABRT
    assert {row["crashes"] for row in hall.rows(site, "attempt")} == {1}
    path = site.parent / "logs" / "weather" / "barometer_deadly.csv"
    hall.lay(path, path.read_bytes().replace(b",DEADLY", b",1001.2"))
    hall.run(site)
    assert hall.rows(site, "attempt") == []
    assert {fate["verdict"] for fate in hall.rows(site, "fate")} == {"accepted"}
