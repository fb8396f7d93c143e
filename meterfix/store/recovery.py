"""What a start-up finds: the anchor compared with the database, and what settles it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from meterfix.errors import LedgerError
from meterfix.store.anchor import AnchorState, Restored, restore_line
from meterfix.store.chain import Head


@dataclass(frozen=True, slots=True)
class Recovery:
    """Facts that the next pass must chain, and the anchor lines that go with them."""

    facts: tuple[dict[str, Any], ...] = ()
    before: tuple[str, ...] = ()
    """Lines written with the next pass's intent."""
    after: tuple[str, ...] = ()
    """Lines written once that pass has committed, before its own `done`."""

    @property
    def kinds(self) -> tuple[str, ...]:
        """Kinds of pass that may chain the facts."""
        if any(fact["fact"] == "older database restored" for fact in self.facts):
            return ("restore",)
        if self.facts:
            return ("resolution", "restore")
        return ("pass", "resolution", "restore")


def compare(
    state: AnchorState, head: Head, committed: Callable[[Head], bool], leftovers: Callable[[], str]
) -> Recovery:
    """Return what the difference between anchor and database means.

    Parameters
    ----------
    state : AnchorState
    head : Head
        The database's head.
    committed : callable
        Whether the database's chain has this audit row.
    leftovers : callable
        '' or a sentence about rows of passes that the database's chain does not have.

    Raises
    ------
    LedgerError
        If neither a killed pass nor an older copy of the database explains the difference.
    """
    if state.mistakes:
        raise LedgerError(f"anchor: {state.mistakes[0]}; it was altered by hand")
    facts: list[dict[str, Any]] = []
    after: list[str] = []
    reached = state.head
    for intent in state.open:
        found = committed(intent)
        facts.append(
            {
                "fact": "intent resolved",
                "sequence": intent.sequence,
                "hash": intent.row_hash,
                "committed": found,
            }
        )
        if found and intent.sequence == reached.sequence + 1:
            after.append(f"done {intent.sequence}")
            reached = intent
        else:
            after.append(f"void {intent.sequence}")
    restores = list(state.restores)
    before: tuple[str, ...] = ()
    if head != reached:
        if not state.knows(head):
            raise LedgerError(
                f"the database ends with pass {head.sequence} ({head.row_hash}), which the anchor "
                f"never announced (it ends with pass {reached.sequence}): the archive is older "
                "than the database, or one of them was altered; nothing was written"
            )
        left = leftovers()
        if left:
            raise LedgerError(
                f"the database's audit chain ends with pass {head.sequence}, the anchor with pass "
                f"{reached.sequence}, and {left}: the chain was cut; nothing was written"
            )
        restores.append(Restored(head, reached.sequence))
        before = (restore_line(restores[-1]),)
        # the restore line itself says where the anchor's head is now
        after = [f"void {intent.sequence}" for intent in state.open]
    facts += [
        {
            "fact": "older database restored",
            "database_head": restored.database.sequence,
            "database_hash": restored.database.row_hash,
            "anchor_head": restored.anchor_sequence,
        }
        for restored in restores
    ]
    return Recovery(tuple(facts), before, tuple(after))
