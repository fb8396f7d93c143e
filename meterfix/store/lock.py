"""The writer's lock: at most one process writes to a ledger at a time."""

from __future__ import annotations

import fcntl
import os
from pathlib import Path

from meterfix.errors import LedgerBusyError


class WriterLock:
    """An exclusive lock on a file; the system drops it when its holder ends, however it ends."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._descriptor: int | None = None

    @property
    def held(self) -> bool:
        """Whether this object holds the lock."""
        return self._descriptor is not None

    def acquire(self) -> None:
        """Take the lock at once.

        Raises
        ------
        LedgerBusyError
            If it is taken, by another process or by another ledger object of this one.
        """
        if self.held:
            raise LedgerBusyError(f"{self.path}: this process already writes to the ledger")
        descriptor = os.open(self.path, os.O_RDWR | os.O_CREAT, 0o666)
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            os.close(descriptor)
            if isinstance(error, BlockingIOError):
                raise LedgerBusyError(
                    f"{self.path}: another process writes to this ledger; try again when it is done"
                ) from None
            raise
        self._descriptor = descriptor

    def release(self) -> None:
        """Give the lock back; nothing happens if it is not held."""
        if self._descriptor is not None:
            # unlocked by name: a forked worker may still hold a copy of the descriptor
            fcntl.flock(self._descriptor, fcntl.LOCK_UN)
            os.close(self._descriptor)
            self._descriptor = None
