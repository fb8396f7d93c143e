"""A process that kills itself with SIGKILL at a named moment of a pass.

Usage: killed_child.py FOLDER MOMENT CLOCK NUMBER...; nothing in the product knows of it: the calls
into the system and the database driver are wrapped here.
"""

from __future__ import annotations

import os
import signal
import sys
from pathlib import Path

import scenario
from sqlalchemy.engine.default import DefaultDialect

real_fsync, real_replace, real_write = os.fsync, os.replace, os.write
real_execute, real_executemany = DefaultDialect.do_execute, DefaultDialect.do_executemany
real_commit = DefaultDialect.do_commit
seen = {"audit": False}


def die() -> None:
    os.kill(os.getpid(), signal.SIGKILL)


def path_of(descriptor: int) -> str:
    return str(Path(f"/proc/self/fd/{descriptor}").readlink())


def kill_at_fsync(when):
    def fsync(descriptor):
        path = path_of(descriptor)
        if when(path, "before"):
            die()
        real_fsync(descriptor)
        if when(path, "after"):
            die()

    os.fsync = fsync


def kill_at_replace(ending, when):
    def replace(source, target, **options):
        hit = str(target).endswith(ending)
        if hit and when == "before":
            die()
        real_replace(source, target, **options)
        if hit:
            die()

    os.replace = replace


def last_word(path):
    lines = Path(path).read_text().splitlines()
    return lines[-1].split(" ")[0]


def kill_in_anchor_line(word):
    def write(descriptor, content):
        if path_of(descriptor).endswith("anchor") and word in bytes(content):
            real_write(descriptor, bytes(content)[: len(content) // 2])
            die()
        return real_write(descriptor, content)

    os.write = write


def watch_audit(*, kill):
    def do_execute(self, cursor, statement, parameters, context=None):
        real_execute(self, cursor, statement, parameters, context)
        if statement.startswith("INSERT INTO audit"):
            seen["audit"] = True
            if kill:
                die()

    def do_executemany(self, cursor, statement, parameters, context=None):
        real_executemany(self, cursor, statement, parameters, context)
        if statement.startswith("INSERT INTO audit"):
            seen["audit"] = True
            if kill:
                die()

    DefaultDialect.do_execute = do_execute
    DefaultDialect.do_executemany = do_executemany


def kill_at_commit(when):
    watch_audit(kill=False)

    def do_commit(self, connection):
        if seen["audit"] and when == "before":
            die()
        real_commit(self, connection)
        if seen["audit"]:
            die()

    DefaultDialect.do_commit = do_commit


MOMENTS = {
    "while_opening": lambda: kill_at_replace("/anchor", "before"),
    "after_anchor_was_made": lambda: kill_at_replace("/anchor", "after"),
    "in_pack_write": lambda: kill_at_fsync(
        lambda path, when: "/packs/" in path and when == "before"
    ),
    "before_pack_rename": lambda: kill_at_replace(".pack", "before"),
    "after_pack_rename": lambda: kill_at_replace(".pack", "after"),
    "after_readings_rename": lambda: kill_at_replace(".readings", "after"),
    "in_intent_line": lambda: kill_in_anchor_line(b"intent"),
    "between_intent_and_begin": lambda: kill_at_fsync(
        lambda path, when: (
            path.endswith("anchor") and when == "after" and last_word(path) == "intent"
        )
    ),
    "in_transaction": lambda: watch_audit(kill=True),
    "before_commit": lambda: kill_at_commit("before"),
    "between_commit_and_done": lambda: kill_at_commit("after"),
    "in_done_line": lambda: kill_in_anchor_line(b"done"),
    "after_done": lambda: kill_at_fsync(
        lambda path, when: path.endswith("anchor") and when == "after" and last_word(path) == "done"
    ),
    "never": lambda: None,
}

if __name__ == "__main__":
    folder, moment, clock, *numbers = sys.argv[1:]
    MOMENTS[moment]()
    with scenario.open_ledger(Path(folder)) as ledger:
        scenario.run(ledger, scenario.arrivals(*map(int, numbers)), int(clock))
