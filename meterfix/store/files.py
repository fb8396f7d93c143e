"""Files that are whole or absent, and on the disk before the call returns."""

from __future__ import annotations

import os
import uuid
from pathlib import Path

UNFINISHED = ".part"
"""End of the name of a file that is still being written; after a crash it can be removed."""


def sync_folder(folder: Path) -> None:
    """Flush a folder's entries, so that a rename in it survives a power cut."""
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def write_durably(path: Path, content: bytes) -> None:
    """Write a file under another name, flush it, rename it, flush its folder."""
    unfinished = path.with_name(f".{uuid.uuid4().hex}{UNFINISHED}")
    try:
        with unfinished.open("xb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        unfinished.replace(path)
    except BaseException:
        unfinished.unlink(missing_ok=True)
        raise
    sync_folder(path.parent)


def append_durably(path: Path, content: bytes) -> None:
    """Add bytes to the end of a file and flush them."""
    descriptor = os.open(path, os.O_WRONLY | os.O_APPEND)
    try:
        view = memoryview(content)
        while view:
            view = view[os.write(descriptor, view) :]
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
