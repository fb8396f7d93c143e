"""From the bytes of a file to its content: decompressed in bounded steps, or refused."""

from __future__ import annotations

import zlib

from meterfix.intake.logs.text import Refusal
from meterfix.model.source import Layout

GZIP_MAGIC = b"\x1f\x8b"
BOMB_RATIO = 1000
"""More bytes than this out of one compressed byte are no log."""
_STEP = 1 << 20
_GZIP_WINDOW = 16 + zlib.MAX_WBITS


def open_content(raw: bytes, layout: Layout, name: str = "") -> bytes | Refusal:
    """Return a file's content, decompressed if it is gzip, or why it cannot be read.

    Gzip is seen by its first two bytes, which no text begins with; a name that ends with .gz
    and other bytes are refused. Several gzip members one after the other are one content.

    Parameters
    ----------
    raw : bytes
        The file as it lies there.
    layout : Layout
        Of its source; its `size_limit` [bytes] holds before and after decompression.
    name : str
        The file's name, if it is known.

    Returns
    -------
    bytes or Refusal
        `Refusal.truncated` is True where a compressed file ends too early: it may be on its way.
    """
    if len(raw) > layout.size_limit:
        return Refusal(f"the file has {len(raw)} bytes; the limit is {layout.size_limit}")
    if raw.startswith(GZIP_MAGIC):
        return _gunzip(raw, layout.size_limit)
    if name.lower().endswith(".gz"):
        if len(raw) < len(GZIP_MAGIC):
            return Refusal("the compressed file ends too early", truncated=True)
        return Refusal("the name ends with .gz, but the file is not gzip-compressed")
    return raw


def _gunzip(raw: bytes, size_limit: int) -> bytes | Refusal:
    """Return what gzip members hold; never more than one step beyond the limits in memory."""
    largest = min(size_limit, BOMB_RATIO * len(raw))
    content = bytearray()
    rest = raw
    while rest:
        member = zlib.decompressobj(_GZIP_WINDOW)
        pending = rest
        while not member.eof:
            try:
                piece = member.decompress(pending, _STEP)
            except zlib.error as error:
                return Refusal(f"the compressed file is damaged: {error}")
            content += piece
            if len(content) > largest:
                if size_limit <= largest:
                    return Refusal(f"the file decompresses to more than {size_limit} bytes")
                return Refusal(
                    f"the file decompresses to more than {BOMB_RATIO} times its size; no log does"
                )
            pending = member.unconsumed_tail
            if not piece and not pending and not member.eof:
                return Refusal("the compressed file ends too early", truncated=True)
        # Zero bytes after the last member are padding (tapes, block devices), not content.
        rest = member.unused_data
        if not rest.strip(b"\0"):
            break
        if not rest.startswith(GZIP_MAGIC[: len(rest)]):
            return Refusal("the compressed file has other bytes after its end")
    return bytes(content)
