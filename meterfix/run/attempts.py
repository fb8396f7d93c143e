"""Attempts: which files passes had in hand when they died, kept outside their transactions."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

from meterfix.run.gather import Arrived, Known, Slice
from meterfix.run.opening import OpenSite
from meterfix.run.trial import Rehearsal, faults

CRASHES_BEFORE_TRIAL = 2
_KEY = ("source", "binding", "name", "raw_sha256")


@dataclass
class Attempts:
    """The marks beside the files of one pass."""

    opened: OpenSite
    known: Known
    in_hand: bool = False
    """Files are being taken in; what fails now may be one of theirs."""
    blameless: bool = False
    """Every file in hand was tried alone and passed: what fails now is none of theirs."""
    _cleared: set[tuple[str, str, str, str]] = field(default_factory=set)

    def try_suspects(self, taken: Slice, now: int, rehearse: Rehearsal) -> Slice:
        """Try alone what was in hand when passes died; mark what fails there as quarantined.

        Parameters
        ----------
        taken : the files of this pass.
        now : the instant [UTC us] that the pass takes for the present.
        rehearse : does all of a pass for one file, but commits nothing.
        """
        places = [
            number
            for number, file in enumerate(taken.arrived)
            if self.known.attempts.get(_key(file), 0) >= CRASHES_BEFORE_TRIAL
        ]
        if not places:
            return taken
        suspects = [taken.arrived[place] for place in places]
        found = faults(self.opened.path, suspects, now, rehearse)
        arrived = list(taken.arrived)
        for number, fault in found.items():
            crashes = self.known.attempts[_key(suspects[number])]
            reason = f"passes died {crashes} times with this file in hand; tried alone, {fault}"
            arrived[places[number]] = replace(suspects[number], quarantined=reason)
        self._cleared = {_key(file) for n, file in enumerate(suspects) if n not in found}
        self.blameless = len(places) == len(arrived)
        return replace(taken, arrived=arrived)

    def begin(self, arrived: Sequence[Arrived]) -> None:
        """Mark the files that the pass is about to take in; trials passed wipe older marks out."""
        marks = [
            {
                **dict(zip(_KEY, _key(file), strict=True)),
                "crashes": 1
                if _key(file) in self._cleared
                else self.known.attempts.get(_key(file), 0) + 1,
                "alone": _key(file) in self._cleared,
            }
            for file in arrived
            if not file.quarantined
        ]
        if marks:
            self.in_hand = True
            self.opened.ledger.write_outside(replace={"attempt": marks})

    def forgive(self) -> None:
        """Take the marks back off the files of a pass that failed for no fault of theirs."""
        if not self.in_hand:
            return
        ledger = self.opened.ledger
        marks = [
            {**dict(zip(_KEY, key, strict=True)), "crashes": crashes, "alone": 0}
            for key, crashes in self.known.attempts.items()
        ]
        stored = ledger.rows("attempt", columns=_KEY)
        gone = [row for row in stored if tuple(row.values()) not in self.known.attempts]
        ledger.write_outside(replace={"attempt": marks}, remove={"attempt": gone})


def _key(file: Arrived) -> tuple[str, str, str, str]:
    return (file.source, file.binding, file.name, file.raw_sha256)
