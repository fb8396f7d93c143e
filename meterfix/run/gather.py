"""The files of a pass: which are new, read once, and what their delivery rows say."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from meterfix.frames import ParsedFile
from meterfix.intake.logs import (
    Found,
    Refusal,
    Tail,
    ends_with_line_end,
    look,
    open_content,
    parse,
    parse_many,
    read_stable,
    tail_of,
)
from meterfix.model.source import Delivery, Source
from meterfix.run.opening import OpenSite
from meterfix.store.archive import PackEntry
from meterfix.store.ledger import Ledger

SLICE_BYTES = 96 * 1024 * 1024
"""A pass takes files up to about this size in all (a packed one counts eightfold)."""
SLICE_FILES = 4_000
PACKED_FACTOR = 8
REFUSED = "refused: "
"""How the reason of a file begins that is never read as it is: a link, a pipe, too large."""

Name = tuple[str, str, str]
"""Source, binding, file name."""


@dataclass(frozen=True)
class Arrived:
    """A file, or the new end of one, that this pass takes in."""

    source: str
    binding: str
    name: str
    raw: bytes
    raw_sha256: str
    kind: str
    """'whole', 'tail' or 'restart'."""
    version: int
    replaces: int
    arrival: int
    modified: int
    byte_offset: int = 0
    line_offset: int = 0
    prefix_sha256: str = ""
    file_sha256: str = ""
    file_length: int = 0
    carried: Mapping[str, Any] = field(default_factory=dict)
    quarantined: str = ""

    def meta(self) -> dict[str, Any]:
        """Return everything but the bytes: what the archive keeps beside them."""
        return {
            "source": self.source,
            "binding": self.binding,
            "name": self.name,
            "kind": self.kind,
            "version": self.version,
            "replaces": self.replaces,
            "arrival_us": self.arrival,
            "modified_us": self.modified,
            "byte_offset": self.byte_offset,
            "line_offset": self.line_offset,
            "prefix_sha256": self.prefix_sha256,
            "file_sha256": self.file_sha256,
            "file_length": self.file_length,
            "carried": dict(self.carried),
        }

    def entry(self, sequence: int, *, with_bytes: bool) -> PackEntry:
        """Return the archive's entry; without bytes where it holds them already.

        The delivery's number stands with it, so that what is adopted keeps its order.
        """
        content = self.raw if with_bytes else None
        return PackEntry(self.raw_sha256, content, {**self.meta(), "sequence": sequence})


@dataclass
class Slice:
    """What one pass takes in."""

    arrived: list[Arrived] = field(default_factory=list)
    waiting: list[dict[str, Any]] = field(default_factory=list)
    """Files that wait now, and why."""
    seen: list[dict[str, Any]] = field(default_factory=list)
    """Files whose bytes are known, by size and time, so that they need not be read again."""
    more: bool = False
    """Stable files are left for another pass."""


@dataclass(frozen=True)
class Known:
    """What the ledger knows of deliveries when a pass begins."""

    latest: Mapping[Name, Mapping[str, Any]]
    """The latest delivery of each file name."""
    wholes: frozenset[tuple[str, str, str]]
    """Source, binding and hash of every whole file."""
    seen: Mapping[Name, tuple[int, int]]
    """Size and time of files looked at before."""
    attempts: Mapping[tuple[str, str, str, str], int]
    """Crashes by source, binding, name and hash."""

    @classmethod
    def of(cls, ledger: Ledger) -> Known:
        """Read it from the ledger."""
        deliveries = ledger.rows("delivery", order=("sequence",))
        return cls(
            latest={_name(row): row for row in deliveries},
            wholes=frozenset(
                (row["source"], row["binding"], row["raw_sha256"])
                for row in deliveries
                if row["kind"] == "whole"
            ),
            seen={_name(row): (row["size"], row["modified_us"]) for row in ledger.rows("seen")},
            attempts={
                (*_name(row), row["raw_sha256"]): row["crashes"] for row in ledger.rows("attempt")
            },
        )


def take_slice(opened: OpenSite, known: Known, arrival: int) -> Slice:
    """Return the next files to take in, a bounded amount, in a fixed order.

    What the archive holds and the database does not know comes first and by itself: only once
    it is committed can be said which version of its name, or which end of it, a file brings.
    """
    taken = Slice()
    adopted = _adopted(opened.ledger, known)
    if adopted:
        return Slice(arrived=adopted, more=True)
    names: set[tuple[str, str, str]] = set()
    size = 0
    for source in opened.site.sources:
        looked = look(source, opened.folder / source.folder, opened.ledger.archive.folder)
        if looked.trouble:
            taken.waiting.append(_waiting_row(source, "", "", looked.trouble))
        taken.waiting.extend(
            _waiting_row(source, wait.binding, wait.name, wait.reason) for wait in looked.waiting
        )
        taken.waiting.extend(
            _waiting_row(source, never.binding, never.name, REFUSED + never.reason)
            for never in looked.rejected
        )
        for found in looked.stable:
            name = (source.name, found.binding, found.name)
            stamp = (found.size, found.modified_us)
            if known.seen.get(name) == stamp:
                continue
            if size >= SLICE_BYTES or len(taken.arrived) >= SLICE_FILES:
                taken.more = True
                break
            outcome = _take(source, found, known, names, arrival)
            if isinstance(outcome, str):
                taken.waiting.append(_waiting_row(source, found.binding, found.name, outcome))
                continue
            if outcome is not None:
                taken.arrived.append(outcome)
                names.add((source.name, found.binding, outcome.raw_sha256))
                packed = PACKED_FACTOR if found.name.endswith(".gz") else 1
                size += packed * len(outcome.raw)
            if source.delivery is Delivery.WHOLE or outcome is None:
                taken.seen.append(_seen_row(name, stamp))
    return taken


def parse_arrived(
    arrived: list[Arrived], opened: OpenSite
) -> list[tuple[ParsedFile, dict[str, Any]]]:
    """Return what the bytes of each file hold, as its source's layout in force reads them.

    Beside it stands the reader's state at the file's end: where its next tail goes on.
    """
    parsed: dict[int, tuple[ParsedFile, dict[str, Any]]] = {}
    batches: dict[str, list[tuple[int, bytes]]] = {}
    states: dict[Name, Mapping[str, Any]] = {}
    for number, file in enumerate(arrived):
        source = opened.index.sources[file.source]
        name = (file.source, file.binding, file.name)
        before = states.get(name, file.carried) if file.kind == "tail" else {}
        content = open_content(file.raw, source.layout, file.name)
        if file.quarantined:
            parsed[number] = (rejected(""), dict(before))
        elif isinstance(content, Refusal):
            parsed[number] = (rejected(content.reason), dict(before))
        elif source.delivery is Delivery.WHOLE:
            batches.setdefault(file.source, []).append((number, content))
        else:
            result = parse(
                content,
                source.layout,
                stamp=source.stamp,
                interval=source.interval,
                arrival=file.arrival,
                header=tuple(before["header"]) if before else None,
                first_line=int(before.get("lines", 0)) + 1,
                later_hour=bool(before.get("later_hour", False)),
                last_local=before.get("last_local"),
            )
            after = {
                "header": list(result.header),
                "lines": int(before.get("lines", 0)) + result.lines_read,
                "later_hour": result.end_instant_is_later,
                "last_local": result.end_local,
            }
            parsed[number] = (result, after)
            states[name] = after
    for source_name, batch in batches.items():
        source = opened.index.sources[source_name]
        results = parse_many(
            [content for _, content in batch],
            source.layout,
            stamp=source.stamp,
            interval=source.interval,
            arrivals=[arrived[number].arrival for number, _ in batch],
        )
        parsed.update({n: (result, {}) for (n, _), result in zip(batch, results, strict=True)})
    return [parsed[number] for number in range(len(arrived))]


def rejected(reason: str) -> ParsedFile:
    """Return the outcome for a file none of whose lines are read."""
    return ParsedFile(
        rejected=reason,
        warning="",
        header=(),
        lines_read=0,
        lines_skipped=0,
        lines_set_aside=0,
        cells_set_aside=0,
        cells=(),
        problems=(),
    )


def arrived_from(
    row: Mapping[str, Any], raw: bytes, carried: Mapping[str, Any], *, quarantined: str = ""
) -> Arrived:
    """Return a stored delivery as it arrived, for judging it again."""
    return Arrived(
        source=row["source"],
        binding=row["binding"],
        name=row["name"],
        raw=raw,
        raw_sha256=row["raw_sha256"],
        kind=row["kind"],
        version=row["version"],
        replaces=row["replaces"],
        arrival=row["arrival_us"],
        modified=row["modified_us"],
        byte_offset=row["byte_offset"],
        line_offset=row["line_offset"],
        prefix_sha256=row["prefix_sha256"],
        file_sha256=row["file_sha256"],
        file_length=row["file_length"],
        carried=carried,
        quarantined=quarantined,
    )


def _take(
    source: Source, found: Found, known: Known, names: set[tuple[str, str, str]], arrival: int
) -> Arrived | str | None:
    """Read a stable file: what arrived, why it must wait, or None if it is known."""
    content = read_stable(found)
    if isinstance(content, Refusal):
        return content.reason
    name = (source.name, found.binding, found.name)
    before = known.latest.get(name)
    old = found.age_us >= source.unfinished_wait
    digest = hashlib.sha256(content).hexdigest()
    version = 1 if before is None else before["version"] + 1
    replaces = 0 if before is None else before["sequence"]
    if source.delivery is Delivery.APPENDED:
        return _appended(source, found, content, before, old=old, arrival=arrival)
    said_otherwise = before is not None and before["raw_sha256"] != digest
    if not said_otherwise and (source.name, found.binding, digest) in known.wholes | names:
        return None  # under a name that last held other bytes, known ones set these right
    if not old:
        unpacked = open_content(content, source.layout, found.name)
        if isinstance(unpacked, Refusal) and unpacked.truncated:
            return "the compressed file ends early; it waits for the rest"
        if (
            source.layout.final_line_end_required
            and not isinstance(unpacked, Refusal)
            and not ends_with_line_end(unpacked, source.layout.encoding)
        ):
            return "the last line has no end yet"
    return Arrived(
        source=source.name,
        binding=found.binding,
        name=found.name,
        raw=content,
        raw_sha256=digest,
        kind="whole",
        version=version,
        replaces=replaces,
        arrival=arrival,
        modified=found.modified_us,
        file_sha256=digest,
        file_length=len(content),
    )


def _appended(
    source: Source,
    found: Found,
    content: bytes,
    before: Mapping[str, Any] | None,
    *,
    old: bool,
    arrival: int,
) -> Arrived | str | None:
    """Return the new end of a growing file, or the file anew if its known part changed."""
    known_length = 0 if before is None else before["file_length"]
    known_sha = hashlib.sha256(b"").hexdigest() if before is None else before["file_sha256"]
    tail: Tail | None = tail_of(content, known_length, known_sha)
    kind = "tail"
    if tail is None or known_length == 0:
        kind = "whole" if known_length == 0 else "restart"
        tail = tail_of(content, 0, hashlib.sha256(b"").hexdigest())
    if tail is None:
        message = f"{found.name}: an empty prefix cannot differ"
        raise AssertionError(message)
    data = tail.content
    if not data and old and len(content) > tail.offset:
        data = content[tail.offset :]  # an old file whose last line never got its end
    if not data:
        return "the last line has no end yet" if len(content) > tail.offset else None
    consumed = tail.offset + len(data)
    carried = {} if kind != "tail" or before is None else json.loads(before["carried"])
    return Arrived(
        source=source.name,
        binding=found.binding,
        name=found.name,
        raw=data,
        raw_sha256=hashlib.sha256(data).hexdigest(),
        kind=kind,
        version=1 if before is None else before["version"] + 1,
        replaces=0 if before is None else before["sequence"],
        arrival=arrival,
        modified=found.modified_us,
        byte_offset=tail.offset if kind == "tail" else 0,
        line_offset=int(carried.get("lines", 0)),
        prefix_sha256=known_sha if kind == "tail" else "",
        file_sha256=hashlib.sha256(content[:consumed]).hexdigest(),
        file_length=consumed,
        carried=carried,
    )


def _adopted(ledger: Ledger, known: Known) -> list[Arrived]:
    """Return raw bytes that the archive holds and the database does not know, as deliveries."""
    adopted: list[Arrived] = []
    latest = {name: (row["version"], row["sequence"]) for name, row in known.latest.items()}
    for entry in ledger.unknown_raw():
        meta = entry.meta
        name = (meta["source"], meta["binding"], meta["name"])
        version, replaces = latest.get(name, (0, 0))
        if entry.content is None:
            message = f"the archive names {entry.sha256} and does not hold it"
            raise AssertionError(message)
        adopted.append(
            Arrived(
                source=name[0],
                binding=name[1],
                name=name[2],
                raw=entry.content,
                raw_sha256=entry.sha256,
                kind=meta["kind"],
                version=version + 1,
                replaces=replaces,
                arrival=meta["arrival_us"],
                modified=meta["modified_us"],
                byte_offset=meta["byte_offset"],
                line_offset=meta["line_offset"],
                prefix_sha256=meta["prefix_sha256"],
                file_sha256=meta["file_sha256"],
                file_length=meta["file_length"],
                carried=meta["carried"],
            )
        )
        latest[name] = (version + 1, 0)
    return adopted


def _name(row: Mapping[str, Any]) -> Name:
    return (row["source"], row["binding"], row["name"])


def _seen_row(name: Name, stamp: tuple[int, int]) -> dict[str, Any]:
    return {
        "source": name[0],
        "binding": name[1],
        "name": name[2],
        "size": stamp[0],
        "modified_us": stamp[1],
    }


def _waiting_row(source: Source, binding: str, name: str, reason: str) -> dict[str, Any]:
    return {"source": source.name, "binding": binding, "name": name, "reason": reason}
