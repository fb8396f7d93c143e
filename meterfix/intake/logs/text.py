"""From a file's bytes to lines and cells: encoding, line ends, quotes; nothing is guessed."""

from __future__ import annotations

import codecs
import re
from dataclasses import dataclass

LINE_LIMIT = 1 << 20
"""Longest line that is read [bytes]; a longer one refuses the file."""
TEXT_LIMIT = 1000
"""How much of a line or cell is kept beside a problem [bytes]."""


@dataclass(frozen=True, slots=True)
class Refusal:
    """Why a whole file cannot be read."""

    reason: str
    truncated: bool = False
    """True: the file ends too early; it may still be on its way, so it may wait first."""


def to_utf8(content: bytes, encoding: str) -> bytes | Refusal:
    """Return the content in UTF-8 without byte-order mark, or why it is of another encoding.

    Parts that are not valid text stay invalid UTF-8, so that only their lines are set aside.

    Parameters
    ----------
    content : bytes
        A file, or the tail of one (which has no byte-order mark).
    encoding : str
        As declared: 'utf-8' or 'utf-16'.
    """
    if encoding == "utf-8":
        if content.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
            return Refusal("the file begins with a UTF-16 byte-order mark; UTF-8 is declared")
        return content.removeprefix(codecs.BOM_UTF8)
    if encoding != "utf-16":
        message = f"encoding {encoding!r} is not known; it must be 'utf-8' or 'utf-16'"
        raise ValueError(message)
    if not content:
        return content
    if content.startswith(codecs.BOM_UTF16_LE):
        order, content = "utf-16-le", content[2:]
    elif content.startswith(codecs.BOM_UTF16_BE):
        order, content = "utf-16-be", content[2:]
    elif len(content) >= 2 and content[0] != 0 and content[1] == 0:
        order = "utf-16-le"
    elif len(content) >= 2 and content[0] == 0 and content[1] != 0:
        order = "utf-16-be"
    else:
        return Refusal("UTF-16 is declared, but the file does not begin like UTF-16")
    whole = content[: len(content) // 2 * 2]
    text = whole.decode(order, "surrogatepass").encode("utf-8", "surrogatepass")
    # Half a character at the end is no text: one byte that UTF-8 never holds says so.
    return text if len(whole) == len(content) else text + b"\xff"


def has_overlong_line(content: bytes, limit: int = LINE_LIMIT) -> bool:
    """Return whether a line is longer than the limit, looking only where it must."""
    start = 0
    while len(content) - start > limit:
        window = start + limit + 1
        end = max(content.rfind(b"\n", start, window), content.rfind(b"\r", start, window))
        if end < 0:
            return True
        start = end + 1
    return False


def ends_with_line_end(content: bytes, encoding: str = "utf-8") -> bool:
    """Return whether the last line is complete; a file without any line is.

    Parameters
    ----------
    content : bytes
        As it lies in the file.
    encoding : str
        As declared.
    """
    if encoding == "utf-16":
        converted = to_utf8(content, encoding)
        content = content if isinstance(converted, Refusal) else converted
    return not content or content.endswith((b"\n", b"\r"))


def split_lines(content: bytes) -> tuple[list[bytes], bool]:
    """Return the lines without their ends (CRLF, LF or CR), and whether the last one had one."""
    if b"\r" in content:
        content = content.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    lines = content.split(b"\n")
    last = lines.pop()
    if last:
        lines.append(last)
    return lines, not last


def is_blank(line: bytes, delimiter: str) -> bool:
    """Return whether a line holds nothing but blanks (a tab that delimits is no blank)."""
    return not line.strip(b" \t".replace(delimiter.encode(), b""))


@dataclass(frozen=True, slots=True)
class Malformed:
    """Why a line cannot be split into cells."""

    reason: str


def split_cells(line: bytes, delimiter: str) -> list[str] | Malformed:
    """Return a line's cells without surrounding blanks, or why it has none.

    Quoted cells follow RFC 4180, within one line: the quotes enclose the whole cell and are
    doubled inside. Any other quote is a stray one.
    """
    if b"\0" in line:
        return Malformed("the line holds a NUL byte; text is expected")
    try:
        text = line.decode()
    except UnicodeDecodeError as error:
        return Malformed(
            f"byte {error.start + 1} of the line is not valid text in the declared encoding"
        )
    if '"' not in text:
        return [cell.strip(" \t") for cell in text.split(delimiter)]
    cells: list[str] = []
    position = 0
    quoted = re.compile(r'"((?:[^"]|"")*)"')
    while True:
        found = quoted.match(text, position)
        if found:
            cells.append(found[1].replace('""', '"').strip(" \t"))
            end = found.end()
        else:
            end = text.find(delimiter, position)
            end = len(text) if end < 0 else end
            if '"' in text[position:end]:
                return Malformed(f"stray quote in cell {len(cells) + 1} of the line")
            cells.append(text[position:end].strip(" \t"))
        if end == len(text):
            return cells
        if not text.startswith(delimiter, end):
            return Malformed(f"text after the closing quote in cell {len(cells)} of the line")
        position = end + len(delimiter)


def kept(text: str | bytes) -> bytes:
    """Return the part of a cell or line that is kept beside a problem."""
    return (text.encode() if isinstance(text, str) else text)[:TEXT_LIMIT]


def shown(text: str) -> str:
    """Return a text as a message shows it: quoted, control characters escaped, shortened."""
    return repr(text if len(text) <= 60 else text[:57] + "...")
