"""What is new at the end of a file that grows."""

from __future__ import annotations

import codecs
import hashlib
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Tail:
    """The new, complete lines of a file that grows."""

    content: bytes
    """From `offset` up to the last complete line end; b'' if no line is complete yet."""
    offset: int
    """Where the content begins in the file: the known length."""
    waiting: int
    """How many bytes after the content wait for their line end."""


def tail_of(content: bytes, known_length: int, known_sha256: str) -> Tail | None:
    """Return what follows the known part of a file, or None if that part is not what it was.

    Parameters
    ----------
    content : bytes
        The whole file as it is now.
    known_length : int
        How many of its bytes were taken in before.
    known_sha256 : str
        SHA-256 of those bytes, hexadecimal.
    """
    if len(content) < known_length:
        return None
    view = memoryview(content)
    if hashlib.sha256(view[:known_length]).hexdigest() != known_sha256:
        return None
    end = max(known_length, _complete(content))
    return Tail(content[known_length:end], known_length, len(content) - end)


def _complete(content: bytes) -> int:
    """Return the length of the content up to and with its last line end."""
    if content.startswith(codecs.BOM_UTF16_LE):
        return _complete_wide(content, b"\n\0")
    if content.startswith(codecs.BOM_UTF16_BE):
        return _complete_wide(content, b"\0\n")
    if b"\n" in content:
        return content.rfind(b"\n") + 1
    # Only CRs: the first alone may be half of a CRLF; a second one shows that CR ends lines.
    return content.rfind(b"\r") + 1 if content.count(b"\r") > 1 else 0


def _complete_wide(content: bytes, line_end: bytes) -> int:
    """Return the same for UTF-16 with a byte-order mark; characters are two bytes wide."""
    found = content.rfind(line_end)
    while found % 2 and found > 0:
        found = content.rfind(line_end, 0, found + 1)
    return found + 2 if found > 0 else 0
