"""Which files of a source lie in its folder, which of them are finished, and their bytes."""

from __future__ import annotations

import os
import re
import stat
import tempfile
from dataclasses import dataclass
from pathlib import Path

from meterfix.intake.logs.text import Refusal
from meterfix.model.source import Source

_FLAGS = os.O_RDONLY | os.O_NOFOLLOW | os.O_NONBLOCK | os.O_CLOEXEC
"""Never follow a link, never hang in the open of a pipe."""


@dataclass(frozen=True, slots=True)
class Found:
    """A file of a source that can be read now."""

    binding: str
    name: str
    """Relative to the source's folder, with '/'; only a label."""
    path: Path
    size: int
    modified_ns: int
    inode: int
    age_us: int
    """How long before the look it was last changed, by the clock of its file system [us]."""

    @property
    def modified_us(self) -> int:
        """When it was last changed, by the clock of its file system [UTC us]."""
        return self.modified_ns // 1000


@dataclass(frozen=True, slots=True)
class NotRead:
    """A file of a source that is not read now, and why."""

    binding: str
    name: str
    reason: str


@dataclass(frozen=True, slots=True)
class Looked:
    """What a look into a source's folder found; each part in order of names."""

    stable: tuple[Found, ...]
    waiting: tuple[NotRead, ...]
    """Still being written, or not readable at present."""
    rejected: tuple[NotRead, ...]
    """Never to be read as they are: links, pipes, devices, too large."""
    trouble: str = ""
    """Why the folder itself cannot be listed; '' if it can."""


def look(source: Source, folder: Path, probe_folder: Path) -> Looked:
    """Return the files in a source's folder that match its pattern, and which may be read.

    A file is stable if it was last changed at least `settle_time` before a file that is
    touched now in the same place: no other clock is asked.

    Parameters
    ----------
    source : Source
        Its `file_pattern` may name subfolders; '*', '?' and '[...]' stand for characters of one
        part of the path (a first dot must be written), '{binding}' for the shortest text that
        lets the rest of the pattern match.
    folder : Path
        The source's folder.
    probe_folder : Path
        Where a file is touched if the folder is not writable.

    Raises
    ------
    OSError
        If neither the folder nor the probe folder can be written.
    """
    try:
        now = _touched(folder)
    except FileNotFoundError as error:
        return Looked((), (), (), f"folder {folder}: {error.strerror}")
    except OSError:
        now = _touched(probe_folder)
    stable: list[Found] = []
    rejected: list[NotRead] = []
    try:
        candidates, waiting = _candidates(folder, source.file_pattern)
    except OSError as error:
        return Looked((), (), (), f"folder {folder}: {error.strerror}")
    for name, binding, path in candidates:
        outcome = _examine(path)
        if isinstance(outcome, Refusal):
            (waiting if outcome.truncated else rejected).append(
                NotRead(binding, name, outcome.reason)
            )
            continue
        if outcome is None:
            continue
        age = (now - outcome.st_mtime_ns) // 1000
        limit = source.layout.size_limit
        if outcome.st_size > limit:
            reason = f"the file has {outcome.st_size} bytes; the limit is {limit}"
            rejected.append(NotRead(binding, name, reason))
        elif age < source.settle_time:
            waiting.append(NotRead(binding, name, _unsettled(age, source.settle_time)))
        else:
            stable.append(
                Found(
                    binding=binding,
                    name=name,
                    path=path,
                    size=outcome.st_size,
                    modified_ns=outcome.st_mtime_ns,
                    inode=outcome.st_ino,
                    age_us=age,
                )
            )
    return Looked(tuple(stable), tuple(waiting), tuple(rejected))


def read_stable(found: Found) -> bytes | Refusal:
    """Return a file's bytes, read once, or why it must wait.

    It must if it is no longer what was found: it vanished, grew, was changed or replaced,
    before or while it was read. At most one byte more than its size is read.
    """
    try:
        descriptor = os.open(found.path, _FLAGS)
    except OSError as error:
        return Refusal(f"cannot be opened: {error.strerror}", truncated=True)
    with os.fdopen(descriptor, "rb") as file:
        expected = (found.size, found.modified_ns, found.inode)
        try:
            if _identity(file.fileno()) != expected:
                return Refusal("changed since it was found", truncated=True)
            content = file.read(found.size + 1)
            if len(content) != found.size or _identity(file.fileno()) != expected:
                return Refusal("changed while it was read", truncated=True)
        except OSError as error:
            return Refusal(f"cannot be read: {error.strerror}", truncated=True)
    return content


def pattern_of(file_pattern: str) -> list[re.Pattern[str]]:
    """Return one regular expression for each part of a source's file pattern."""
    parts = []
    for part in file_pattern.split("/"):
        text = ""
        # A piece is the binding, a set of characters, or one character.
        for piece in re.findall(r"\{binding\}|\[!?\]?[^\]]*\]|.", part, re.DOTALL):
            if piece == "{binding}":
                text += "(?P<binding>.+?)"
            elif piece == "*":
                text += ".*"
            elif piece == "?":
                text += "."
            elif len(piece) > 1:
                negated = piece.startswith("[!")
                inside = re.sub(r"[\\\[\]^&~|]", r"\\\g<0>", piece[1 + negated : -1])
                text += f"[^{inside}]" if negated else f"[{inside}]"
            else:
                text += re.escape(piece)
        # Half-written copies often begin with a dot; a pattern must ask for them.
        hidden = "" if part.startswith(".") else r"(?!\.[^.])"
        parts.append(re.compile(hidden + text, re.DOTALL))
    return parts


def _candidates(
    folder: Path, file_pattern: str
) -> tuple[list[tuple[str, str, Path]], list[NotRead]]:
    """Return (name, binding, path) of what matches the pattern, and subfolders not listed.

    Links to folders are not followed; they are among what matches.
    """
    level: list[tuple[tuple[str, ...], str, Path]] = [((), "", folder)]
    patterns = pattern_of(file_pattern)
    matches: list[tuple[str, str, Path]] = []
    closed: list[NotRead] = []
    for number, pattern in enumerate(patterns):
        following: list[tuple[tuple[str, ...], str, Path]] = []
        for names, binding, place in level:
            try:
                with os.scandir(place) as listing:
                    entries = list(listing)
            except OSError as error:
                if not names:
                    raise
                closed.append(NotRead(binding, "/".join(names), f"folder: {error.strerror}"))
                continue
            for entry in entries:
                found = pattern.fullmatch(entry.name)
                if found is None:
                    continue
                here = found.groupdict().get("binding") or binding
                path = (*names, _label(entry.name))
                if number + 1 == len(patterns) or entry.is_symlink():
                    matches.append(("/".join(path), here, Path(entry.path)))
                elif entry.is_dir(follow_symlinks=False):
                    following.append((path, here, Path(entry.path)))
        level = following
    return sorted(matches), closed


def _label(name: str) -> str:
    """Return a file name as text that can be stored: bytes that are no text are escaped."""
    return os.fsencode(name).decode("utf-8", "backslashreplace")


def _examine(path: Path) -> os.stat_result | Refusal | None:
    """Return a regular file's state, why it is not read (for good or now), None for a folder."""
    try:
        kind = path.lstat().st_mode
        if stat.S_ISDIR(kind):
            return None
        if not stat.S_ISREG(kind):
            return _refused(kind)
        descriptor = os.open(path, _FLAGS)
    except OSError as error:
        return Refusal(f"cannot be opened: {error.strerror}", truncated=True)
    try:
        state = os.fstat(descriptor)
    finally:
        os.close(descriptor)
    # It may have been replaced between the two looks.
    return state if stat.S_ISREG(state.st_mode) else _refused(state.st_mode)


def _refused(kind: int) -> Refusal:
    if stat.S_ISLNK(kind):
        return Refusal("is a symbolic link; links are not followed")
    return Refusal("is a pipe, socket or device, not a file")


def _identity(descriptor: int) -> tuple[int, int, int]:
    state = os.fstat(descriptor)
    return state.st_size, state.st_mtime_ns, state.st_ino


_PROBE_PREFIX = ".meterfix-probe-"


def _touched(folder: Path) -> int:
    """Return the time of a file that is made in the folder now, and removed again [ns]."""
    descriptor, path = tempfile.mkstemp(prefix=_PROBE_PREFIX, dir=folder)
    try:
        os.write(descriptor, b"\n")
        return os.fstat(descriptor).st_mtime_ns
    finally:
        os.close(descriptor)
        Path(path).unlink()


def _unsettled(age: int, settle_time: int) -> str:
    if age < 0:
        return f"was last changed {-age / 1e6:.3f} s in the future of its file system's clock"
    return f"was last changed {age / 1e6:.3f} s ago; it must rest for {settle_time / 1e6:g} s"
