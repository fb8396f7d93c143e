from __future__ import annotations

import shutil

import pytest

from meterfix.errors import LedgerError
from meterfix.store import proof
from meterfix.store.anchor import Anchor
from meterfix.store.proof import check_store


@pytest.fixture(autouse=True)
def _nobody_else_commits(monkeypatch):
    monkeypatch.setattr(proof, "_SETTLING_WAIT", 0.0)


@pytest.fixture
def put_back(tmp_path, scenario):
    """Yesterday's database beside today's archive."""
    with scenario.open_ledger(tmp_path) as ledger:
        scenario.run(ledger, scenario.arrivals(1, 2), 1000)
    shutil.copy(tmp_path / "site.sqlite", tmp_path / "yesterday")
    with scenario.open_ledger(tmp_path) as ledger:
        scenario.run(ledger, scenario.arrivals(1, 2, 3), 2000)
        scenario.run(ledger, scenario.arrivals(1, 2, 3, 4), 3000)
        shutil.copy(tmp_path / "site.sqlite", tmp_path / "today")
        state = scenario.state_of(ledger)
    replace_database(tmp_path, "yesterday")
    return tmp_path, state


def replace_database(folder, copy):
    for path in folder.glob("site.sqlite*"):
        path.unlink()
    shutil.copy(folder / copy, folder / "site.sqlite")


def test_proof_says_that_the_database_is_behind(put_back, scenario):
    """Before a start-up the proof names the first pass that the database lacks."""
    folder, _ = put_back
    with scenario.open_ledger(folder, read_only=True) as ledger:
        findings = check_store(ledger)
    assert (findings[0].check, findings[0].where) == ("anchor", "audit 2")
    assert "behind the archive" in findings[0].message
    assert [finding.check for finding in findings[1:]] == ["archive", "archive"]


def test_nothing_is_lost(put_back, scenario):
    """An older database takes up what only the archive knows, and the restore is an event."""
    folder, state = put_back
    with scenario.open_ledger(folder) as ledger:
        head = ledger.head()
        # the source folder is empty: everything comes from the archive
        facts = scenario.run(ledger, {}, 4000)
        assert facts == [
            {
                "fact": "older database restored",
                "database_head": 1,
                "database_hash": head.row_hash,
                "anchor_head": 3,
            }
        ]
        assert check_store(ledger) == []
        assert scenario.state_of(ledger) == state
        assert [row["kind"] for row in ledger.rows("pass", order=["sequence"])] == [
            "pass",
            "restore",
            "pass",
        ]
        assert "older database restored" in ledger.rows("audit", where={"sequence": 2})[0]["note"]
        assert len(ledger.archive.packs()) == 3
    lines = (folder / "archive" / "anchor").read_text().splitlines()
    assert f"restore 1 {head.row_hash} 3" in lines


def test_only_a_restore_pass_may_follow(put_back, scenario):
    """No other pass can be committed before the restore is chained."""
    folder, _ = put_back
    with scenario.open_ledger(folder) as ledger:
        with ledger.writer(), pytest.raises(LedgerError, match="call recover"):
            scenario.commit_empty(ledger, "pass", 4000)
        with ledger.writer():
            ledger.recover()
            with pytest.raises(LedgerError, match="must be of kind 'restore'"):
                scenario.commit_empty(ledger, "pass", 4000)


def test_restore_twice_and_back_to_the_abandoned_branch(put_back, scenario):
    """Whichever of its own copies is put back next, the anchor tells the story and it goes on."""
    folder, state = put_back
    with scenario.open_ledger(folder) as ledger:
        scenario.run(ledger, {}, 4000)
    replace_database(folder, "today")
    with scenario.open_ledger(folder) as ledger:
        facts = scenario.run(ledger, {}, 5000)
        assert [(fact["database_head"], fact["anchor_head"]) for fact in facts] == [(3, 3)]
        assert check_store(ledger) == []
        assert scenario.state_of(ledger) == state
    replace_database(folder, "yesterday")
    with scenario.open_ledger(folder) as ledger:
        facts = scenario.run(ledger, {}, 6000)
        assert [(fact["database_head"], fact["anchor_head"]) for fact in facts] == [(1, 4)]
        assert check_store(ledger) == []
        assert scenario.state_of(ledger) == state


def test_restore_of_a_database_from_before_the_first_pass(tmp_path, scenario):
    """A copy that holds no pass yet is an older database too."""
    scenario.open_ledger(tmp_path).close()
    shutil.copy(tmp_path / "site.sqlite", tmp_path / "yesterday")
    with scenario.open_ledger(tmp_path) as ledger:
        scenario.run(ledger, scenario.arrivals(1), 1000)
        state = scenario.state_of(ledger)
    replace_database(tmp_path, "yesterday")
    with scenario.open_ledger(tmp_path) as ledger:
        facts = scenario.run(ledger, {}, 4000)
        assert facts[0]["database_head"] == 0
        assert check_store(ledger) == []
        assert scenario.state_of(ledger) == state


def test_adoption_in_slices(put_back, scenario):
    """What the database lacks can be adopted a few at a time."""
    folder, state = put_back
    with scenario.open_ledger(folder) as ledger, ledger.writer():
        ledger.recover()
        scenario.commit_empty(ledger, "restore", 4000)
        for left in (2, 1):
            assert len(ledger.unknown_raw()) == left
            ledger.commit(scenario.build_pass(ledger, ledger.unknown_raw(at_most=1), 5000))
        assert ledger.unknown_raw() == []
        assert check_store(ledger) == []
        assert scenario.state_of(ledger) == state


def test_torn_line_is_closed_and_not_counted(tmp_path):
    """A line that a power cut left unfinished counts as not written."""
    anchor = Anchor.create(tmp_path / "anchor", "abc")
    anchor.append("intent 1 aa", "done 1")
    with anchor.path.open("ab") as file:
        file.write(b"intent 2 b")
    assert anchor.state().head.sequence == 1
    anchor.append("intent 2 cc", "done 2")
    for read in (anchor, Anchor(anchor.path)):
        state = read.state()
        assert (state.head.row_hash, state.open, state.mistakes) == ("cc", [], [])
    assert "intent 2 b torn\n" in anchor.path.read_text()
