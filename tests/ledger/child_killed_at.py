"""Run `meterfix ...` and die by SIGKILL at a named moment of its first pass.

The moments are reached by wrapping the calls that the operating system, the database driver and
the anchor offer; the program itself has no hooks for tests.
"""

import os
import signal
import sys
from pathlib import Path

from meterfix.faces.commands import main
from meterfix.store import writing
from meterfix.store.anchor import Anchor


def die(*_args, **_more):
    os.kill(os.getpid(), signal.SIGKILL)


def at_pack_write():
    """Die when half of the pack's bytes are in its unfinished file."""
    real = Path.open

    class Half:
        def __init__(self, file):
            self.file = file

        def __enter__(self):
            return self

        def __exit__(self, *_error):
            self.file.close()

        def write(self, content):
            self.file.write(content[: len(content) // 2])
            self.file.flush()
            die()

    def opened(path, mode="r", *args, **more):
        file = real(path, mode, *args, **more)
        return Half(file) if mode == "xb" and path.parent.name == "packs" else file

    Path.open = opened


def at_pack_renamed():
    """Die when the pack has its name and nothing else has happened."""
    real = Path.replace

    def renamed(path, target):
        moved = real(path, target)
        if str(target).endswith(".pack"):
            die()
        return moved

    Path.replace = renamed


def at_mid_transaction():
    """Die when some tables of the pass are written and the transaction is open."""
    real = writing.insert_rows

    def inserted(connection, name, rows):
        real(connection, name, rows)
        if name == "fate":
            die()

    writing.insert_rows = inserted


def at_before_done():
    """Die when COMMIT has returned and the anchor does not say so yet."""
    real = Anchor.append

    def appended(anchor, *lines):
        if any(line.startswith("done ") for line in lines):
            die()
        real(anchor, *lines)

    Anchor.append = appended


if __name__ == "__main__":
    moments = {
        "pack write": at_pack_write,
        "pack renamed": at_pack_renamed,
        "mid-transaction": at_mid_transaction,
        "before done": at_before_done,
    }
    moments[sys.argv.pop(1)]()
    main()
