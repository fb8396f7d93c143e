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

from meterfix.store import proof
from meterfix.store.proof import check_store

CHILD = Path(__file__).with_name("killed_child.py")
ROOT = Path(__file__).parents[2]

BEFORE_INTENT = (
    "in_pack_write",
    "before_pack_rename",
    "after_pack_rename",
    "after_readings_rename",
    "in_intent_line",
)
COMMITTED = ("between_commit_and_done", "in_done_line")
CUT_SHORT = ("between_intent_and_begin", "in_transaction", "before_commit")


def start(folder: Path, moment: str, *numbers: int) -> subprocess.Popen[bytes]:
    return subprocess.Popen(
        [sys.executable, str(CHILD), str(folder), moment, "5000", *map(str, numbers)],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stderr=subprocess.PIPE,
    )


def kill_at(folder: Path, moment: str, *numbers: int) -> None:
    child = start(folder, moment, *numbers)
    _, errors = child.communicate(timeout=60)
    assert child.returncode == -signal.SIGKILL, (moment, errors.decode())


@pytest.fixture(autouse=True)
def _nobody_else_commits(monkeypatch):
    """No pass is being committed here, so an open intent need not be waited for."""
    monkeypatch.setattr(proof, "_SETTLING_WAIT", 0.0)


@pytest.fixture(scope="module")
def killed(tmp_path_factory, scenario):
    """Return a function that gives a folder's state after a first kill, made once."""
    made: dict[str, Path] = {}

    def copy_to(folder: Path, moment: str) -> None:
        if moment not in made:
            made[moment] = tmp_path_factory.mktemp(moment)
            with scenario.open_ledger(made[moment]) as ledger:
                scenario.run(ledger, scenario.arrivals(1), 1000)
            kill_at(made[moment], moment, 1, 2, 3)
        shutil.copytree(made[moment], folder, dirs_exist_ok=True)

    return copy_to


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory, scenario):
    folder = tmp_path_factory.mktemp("undisturbed")
    with scenario.open_ledger(folder) as ledger:
        scenario.run(ledger, scenario.arrivals(1), 1000)
        scenario.run(ledger, scenario.arrivals(1, 2, 3), 5000)
        return scenario.state_of(ledger)


def assert_whole(folder: Path, scenario, undisturbed) -> list[dict]:
    """Start again, process the rest, and compare with a ledger that nobody disturbed."""
    with scenario.open_ledger(folder) as ledger:
        facts = scenario.run(ledger, scenario.arrivals(1, 2, 3), 5000)
        assert scenario.run(ledger, scenario.arrivals(1, 2, 3), 6000) == []
        assert check_store(ledger) == []
        assert scenario.state_of(ledger) == undisturbed
        assert ledger.unknown_raw() == []
        left = [path.name for path in ledger.archive.folder.rglob(".*.part")]
        assert left == []
        stored = [
            entry.sha256
            for pack in ledger.archive.packs()
            for entry in ledger.archive.pack_index(pack)
            if entry.location is not None
        ]
        assert len(stored) == len(set(stored)) == 3
    return facts


@pytest.mark.parametrize("moment", [*BEFORE_INTENT, *CUT_SHORT, *COMMITTED, "after_done"])
def test_killed_once(moment, tmp_path, scenario, killed, undisturbed):
    """A pass killed at any of its moments loses and doubles nothing, and the proof is clean."""
    killed(tmp_path, moment)
    with scenario.open_ledger(tmp_path, read_only=True) as ledger:
        findings = check_store(ledger)
        if moment in (*COMMITTED, *CUT_SHORT):
            assert any("without 'done'" in finding.message for finding in findings)
        elif moment in ("after_pack_rename", "after_readings_rename", "in_intent_line"):
            assert [finding.check for finding in findings] == ["archive"]
        else:
            assert findings == []
    facts = assert_whole(tmp_path, scenario, undisturbed)
    expected = {True} if moment in COMMITTED else {False} if moment in CUT_SHORT else set()
    assert {fact["committed"] for fact in facts} == expected
    with scenario.open_ledger(tmp_path, read_only=True) as ledger:
        chained = [row for row in ledger.rows("audit") if "intent resolved" in row["note"]]
        assert len(chained) == len(facts)


@pytest.mark.parametrize("first", ["between_intent_and_begin", "between_commit_and_done"])
@pytest.mark.parametrize(
    "again",
    [
        "in_intent_line",
        "between_intent_and_begin",
        "in_transaction",
        "between_commit_and_done",
        "in_done_line",
        "after_done",
    ],
)
def test_killed_again_while_recovering(first, again, tmp_path, scenario, killed, undisturbed):
    """A start-up killed while it records a killed pass leaves all of it to the next one."""
    killed(tmp_path, first)
    kill_at(tmp_path, again, 1, 2, 3)
    assert_whole(tmp_path, scenario, undisturbed)
    with scenario.open_ledger(tmp_path, read_only=True) as ledger:
        notes = "".join(row["note"] for row in ledger.rows("audit"))
        assert f'"committed":{"true" if first in COMMITTED else "false"}' in notes


@pytest.mark.parametrize("moment", ["while_opening", "after_anchor_was_made", "in_pack_write"])
def test_killed_while_the_ledger_is_made(moment, tmp_path, scenario):
    """A ledger whose making was cut short is completed by the next start."""
    kill_at(tmp_path, moment, 1)
    with scenario.open_ledger(tmp_path) as ledger:
        scenario.run(ledger, scenario.arrivals(1), 1000)
        assert check_store(ledger) == []
        assert ledger.head().sequence == 1


def test_killed_at_random_moments(tmp_path, scenario, undisturbed):
    """A service killed at random moments, again and again, ends where an undisturbed one does."""
    with scenario.open_ledger(tmp_path) as ledger:
        scenario.run(ledger, scenario.arrivals(1), 1000)
    chance = np.random.default_rng(20260301)
    for _ in range(4):
        child = start(tmp_path, "never", 1, 2, 3)
        time.sleep(chance.uniform(0.25, 0.8))
        child.kill()
        child.communicate(timeout=60)
    assert_whole(tmp_path, scenario, undisturbed)
