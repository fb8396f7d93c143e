"""Trials: files that were in hand when passes died, each tried alone in another process.

That a pass died says little about the files in its hand: the machine lost power, somebody killed
it, the disk was full. So no file is set apart for that. Each is tried by itself, in a process
that commits nothing; only one that brings this process down, or fails in it, is to blame.
"""

from __future__ import annotations

import multiprocessing
import signal
from collections.abc import Callable, Sequence
from multiprocessing.connection import Connection
from pathlib import Path

from meterfix.calc.gas.properties import GasLibrary
from meterfix.errors import MeterfixError
from meterfix.run.gather import Arrived
from meterfix.run.opening import OpenSite, open_site

Rehearsal = Callable[[OpenSite, Arrived, int, GasLibrary], None]
"""All of a pass for one file, but its commit; found by name in the other process."""

_BEGUN, _DONE, _FAILED = "begun", "done", "failed"


def faults(
    site_path: Path, files: Sequence[Arrived], now: int, rehearse: Rehearsal
) -> dict[int, str]:
    """Return what went wrong with each file that cannot be taken in, by its place in `files`.

    Parameters
    ----------
    site_path : the site file.
    files : what is tried, one after the other.
    now : the instant [UTC us] that the passes take for the present.
    rehearse : takes one file in and commits nothing.
    """
    found: dict[int, str] = {}
    first = 0
    while first < len(files):
        first = _try_from(first, site_path, files, now, rehearse, found)
    return found


def _try_from(
    first: int,
    site_path: Path,
    files: Sequence[Arrived],
    now: int,
    rehearse: Rehearsal,
    found: dict[int, str],
) -> int:
    """Try files in one process until it ends; return where the next one goes on."""
    # spawned: a fork would take locks of threads and open database handles along
    context = multiprocessing.get_context("spawn")
    here, there = context.Pipe(duplex=False)
    child = context.Process(
        target=_try_files,
        args=(site_path, list(files[first:]), now, rehearse, there),
        daemon=True,
    )
    child.start()
    there.close()
    at, begun = first, False
    with here:
        while at < len(files):
            try:
                what, text = here.recv()
            except EOFError:
                break
            if what == _BEGUN:
                begun = True
                continue
            if what == _FAILED:
                found[at] = text
            at, begun = at + 1, False
    child.join()
    if at < len(files):
        if not begun:
            message = (
                f"the process that tries files ended before it began ({_ending(child.exitcode)})"
            )
            raise RuntimeError(message)
        found[at] = f"the process that took it in {_ending(child.exitcode)}"
        at += 1
    return at


def _try_files(
    site_path: Path,
    files: Sequence[Arrived],
    now: int,
    rehearse: Rehearsal,
    results: Connection,
) -> None:
    """Try the files and tell what came of each; runs in a process of its own."""
    with results, open_site(site_path, read_only=True) as opened:
        gases = GasLibrary()
        for file in files:
            results.send((_BEGUN, ""))
            try:
                rehearse(opened, file, now, gases)
            except MeterfixError:
                # of the site, the ledger or the archive: the pass itself will say so
                results.send((_DONE, ""))
            except Exception as error:  # noqa: BLE001 - whatever its bytes can do is the answer
                results.send((_FAILED, f"{type(error).__name__}: {error}"))
            else:
                results.send((_DONE, ""))


def _ending(code: int | None) -> str:
    if code is not None and code < 0:
        return f"was ended by {signal.Signals(-code).name}"
    return f"ended with exit code {code}"
