"""Passes until nothing is new."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

from meterfix.calc.gas.properties import GasLibrary
from meterfix.errors import MeterfixError
from meterfix.run import clock
from meterfix.run.alerts import News
from meterfix.run.compute import Report
from meterfix.run.opening import OpenSite
from meterfix.run.outcome import Outcome
from meterfix.run.passes import PassWork, heartbeat
from meterfix.run.rebuild import missing_segments, rebuild_segment
from meterfix.store.ledger import DamagedReadings


@dataclass
class Processed:
    """What the passes of one call did."""

    passes: int = 0
    files: int = 0
    readings: int = 0
    """New ones of files that arrived."""
    judged_again: int = 0
    """Stored files that the changed site file reads otherwise."""
    days: int = 0
    rejected: list[str] = field(default_factory=list)
    waiting: tuple[str, ...] = ()
    crashes: list[str] = field(default_factory=list)
    alerts: list[News] = field(default_factory=list)
    """Alerts opened or closed, in order."""
    facts: list[str] = field(default_factory=list)
    """What a start-up found and chained: an older database restored, a pass cut short."""

    def add(self, outcome: Outcome) -> None:
        """Count a pass."""
        self.passes += outcome.sequence > 0
        self.files += outcome.files
        self.readings += outcome.readings
        self.judged_again += outcome.judged_again
        self.days += outcome.days
        self.rejected.extend(outcome.rejected)
        self.waiting = outcome.waiting
        self.alerts.extend(outcome.alerts)


def process(
    opened: OpenSite,
    now: int | None = None,
    report: Report | None = None,
    tell: Callable[[str], None] | None = None,
) -> Processed:
    """Run passes until nothing is new.

    A pass that fails or dies while it takes files in leaves a mark beside them; after two such
    marks each of them is tried alone in another process, and one that fails there is
    quarantined. So one file cannot keep the rest out, and a machine that loses power, a process
    that is killed or a full disk cannot set a good file apart.

    Parameters
    ----------
    opened : the site and its ledger.
    now : the instant [UTC us] that the passes take for the present; None: the clock's.
    report : progress.
    tell : called with a sentence about each failure.

    Raises
    ------
    LedgerBusyError
        If another process works on this ledger.
    MeterfixError
        If a pass fails for a reason that is not a file's.
    """
    done = Processed()
    gases = GasLibrary()
    ledger = opened.ledger
    rebuilt: set[int] = set()
    with ledger.writer():
        for sequence in missing_segments(ledger):
            rebuild_segment(opened, sequence)
        more = True
        while more:
            instant = clock.now() if now is None else now
            work = PassWork(opened, instant, clock.now(), gases, report)
            try:
                outcome = work.run()
            except DamagedReadings as damaged:
                work.forgive()
                if damaged.pass_sequence in rebuilt:
                    raise
                rebuild_segment(opened, damaged.pass_sequence)
                rebuilt.add(damaged.pass_sequence)
                continue
            except MeterfixError:
                work.forgive()
                raise
            except Exception as error:
                # whatever a file's bytes can do to the code that reads them ends here, once
                # per attempt: after two marks beside the files the next pass tries them alone
                if not work.may_be_a_files_fault:
                    work.forgive()
                    raise
                sentence = f"a pass failed: {type(error).__name__}: {error}"
                done.crashes.append(sentence)
                ledger.write_outside(replace={"heartbeat": [heartbeat(instant, sentence)]})
                if tell is not None:
                    tell(sentence)
                continue
            finally:
                done.facts.extend(work.facts)
            done.add(outcome)
            more = outcome.more
    return done
