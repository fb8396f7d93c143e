"""The anchor: a text file beside the archive that remembers how far the chain had come.

It lies outside the database, so that a chain that was cut at its end, or a database that was
put back from a copy, does not look complete. One line each, written whole and flushed to disk:

    ledger ID                      the first line
    intent SEQUENCE HASH           a pass is about to commit this audit row
    done SEQUENCE                  it has
    void SEQUENCE                  it has not
    restore SEQUENCE HASH FROM     an older database, with this head, goes on in place of head FROM

`done` and `void` settle open intents in the order in which these were written. What a start-up
finds open stays open until the pass that records the finding has committed; so a process can be
killed anywhere and the next one still finds, and records, all of it. A line that a power cut left
unfinished is closed with the word `torn` and counts as not written.
"""

from __future__ import annotations

import os
from dataclasses import dataclass, field
from pathlib import Path

from meterfix.errors import LedgerError
from meterfix.store.chain import EMPTY, Head
from meterfix.store.files import append_durably, write_durably

_NO_HASH = "-"


@dataclass(frozen=True, slots=True)
class Restored:
    """A `restore` line: the database's head, and the head that the anchor had then."""

    database: Head
    anchor_sequence: int


@dataclass
class AnchorState:
    """What the lines of an anchor say, taken together."""

    ledger_id: str = ""
    head: Head = EMPTY
    open: list[Head] = field(default_factory=list)
    """Intents that are not settled, oldest first."""
    restores: list[Restored] = field(default_factory=list)
    """Restores after which no pass is known to have committed."""
    mistakes: list[str] = field(default_factory=list)
    """Lines that cannot follow what stands before them, the first first."""
    _parents: dict[Head, Head] = field(default_factory=dict)

    def knows(self, head: Head) -> bool:
        """Return whether the head was ever announced here, in whichever branch."""
        return head == EMPTY or head in self._parents or head in self.open

    def path(self) -> dict[int, str]:
        """Return sequence -> hash of every settled pass that led to the head."""
        found: dict[int, str] = {}
        at = self.head
        while at != EMPTY:
            found[at.sequence] = at.row_hash
            at = self._parents.get(at, EMPTY)
        return found

    def read(self, number: int, line: str) -> None:
        """Take one more line into account."""
        if line.endswith(" torn"):
            return
        match line.split(" "):
            case ["ledger", identity] if number == 1:
                self.ledger_id = identity
            case ["intent", sequence, row_hash] if sequence.isdecimal():
                self._intent(number, Head(int(sequence), row_hash))
            case ["done", sequence] if self._settles(sequence, self.head.sequence + 1):
                settled = self.open.pop(0)
                self._parents[settled] = self.head
                self.head = settled
                self.restores.clear()
            case ["void", sequence] if self._settles(sequence, None):
                self.open.pop(0)
            case ["restore", sequence, row_hash, before] if (
                sequence.isdecimal() and before.isdecimal()
            ):
                self._restore(number, sequence, row_hash, before)
            case _:
                self.mistakes.append(f"line {number} ({line!r}) does not fit what is before it")

    def _settles(self, sequence: str, expected: int | None) -> bool:
        return (
            sequence.isdecimal()
            and bool(self.open)
            and self.open[0].sequence == int(sequence)
            and expected in (None, int(sequence))
        )

    def _intent(self, number: int, intent: Head) -> None:
        earliest = self.head.sequence + 1
        if not earliest <= intent.sequence <= earliest + len(self.open):
            self.mistakes.append(
                f"line {number} announces pass {intent.sequence} after pass {self.head.sequence}"
            )
        else:
            before = [found for found in self.open if found.sequence == intent.sequence - 1]
            # the parent of a pass that is never settled as done; `done` writes the true one
            self._parents.setdefault(intent, before[-1] if before else self.head)
        self.open.append(intent)

    def _restore(self, number: int, sequence: str, row_hash: str, before: str) -> None:
        database = Head(int(sequence), "" if row_hash == _NO_HASH else row_hash)
        if not self.knows(database):
            self.mistakes.append(f"line {number} goes on from a head that was never announced")
            return
        self.head = database
        self.restores.append(Restored(database, int(before)))


def intent_line(head: Head) -> str:
    """Return the line that announces an audit row."""
    return f"intent {head.sequence} {head.row_hash}"


def restore_line(restored: Restored) -> str:
    """Return the line from which a new branch goes on."""
    database = restored.database
    return f"restore {database.sequence} {database.row_hash or _NO_HASH} {restored.anchor_sequence}"


class Anchor:
    """The anchor file of one archive folder."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._state = AnchorState()
        self._read_to = 0
        self._lines = 0

    @classmethod
    def create(cls, path: Path, ledger_id: str) -> Anchor:
        """Make the file with its first line; it appears whole or not at all."""
        write_durably(path, f"ledger {ledger_id}\n".encode())
        return cls(path)

    def exists(self) -> bool:
        """Return whether there is an anchor."""
        return self.path.exists()

    def state(self) -> AnchorState:
        """Return what the file says now; only new lines are read again.

        Raises
        ------
        LedgerError
            If the file is missing or does not begin with the ledger's id.
        """
        try:
            size = self.path.stat().st_size
        except FileNotFoundError:
            raise LedgerError(f"{self.path}: the archive has no anchor") from None
        if size < self._read_to:
            self._state, self._read_to, self._lines = AnchorState(), 0, 0
        with self.path.open("rb") as file:
            file.seek(self._read_to)
            fresh = file.read()
        whole = fresh[: fresh.rfind(b"\n") + 1]
        for line in whole.decode("utf-8", errors="replace").split("\n")[:-1]:
            self._lines += 1
            self._state.read(self._lines, line)
        self._read_to += len(whole)
        if not self._state.ledger_id:
            raise LedgerError(f"{self.path}: the first line is not 'ledger ID'")
        return self._state

    def append(self, *lines: str) -> None:
        """Add lines in one write and flush them to disk before returning."""
        text = "".join(f"{line}\n" for line in lines).encode()
        with self.path.open("rb") as file:
            file.seek(-1, os.SEEK_END)
            if file.read(1) != b"\n":
                text = b" torn\n" + text
        append_durably(self.path, text)
