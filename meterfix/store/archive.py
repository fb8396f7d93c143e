"""The archive: every byte that ever arrived, in packs named by their own hash.

A pack holds what one pass brought: an index in JSON, then the objects. With each object stands
what is needed to adopt it as a delivery, so that a database that does not know a pack (after a
crash before COMMIT, or put back from an older copy) can take it up. Raw bytes are never removed.

    meterfix pack 1 LF | length of the index, 8 bytes little-endian | index | objects
"""

from __future__ import annotations

import hashlib
import json
import os
import struct
import zlib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from meterfix.errors import LedgerError
from meterfix.store.files import UNFINISHED, write_durably
from meterfix.store.readings import (
    DamagedReadings,
    RawReadings,
    decode_segment,
    encode_segment,
    segment_spans,
)
from meterfix.store.values import canonical_json

_PACK_MAGIC = b"meterfix pack 1\n"
_GZIP_MAGIC = b"\x1f\x8b"
_LEVEL = 6


class DamagedArchiveError(LedgerError):
    """A pack, or a raw object in it, is missing or is not what its hash says."""


@dataclass(frozen=True, slots=True)
class PackEntry:
    """A raw object, and how it arrived."""

    sha256: str
    content: bytes | None
    """None: the archive holds these bytes already; only the delivery is noted."""
    meta: dict[str, Any]
    """source, binding, name, version, kind, byte_offset, arrival_us, modified_us, ...: enough to
    adopt the object as a delivery. JSON values only."""


@dataclass(frozen=True, slots=True)
class IndexEntry:
    """One line of a pack's index."""

    sha256: str
    meta: dict[str, Any]
    location: dict[str, Any] | None
    """The raw_location row; None where the pack holds only the delivery."""


Identity = tuple[str, str, str, str, int]
"""Raw hash, source, binding, name and byte offset: what makes a delivery the same one."""


def identity_of(sha256: str, meta: Mapping[str, Any]) -> Identity:
    """Return what identifies a delivery, from a pack's index or from a delivery row."""
    return (
        sha256,
        str(meta.get("source", "")),
        str(meta.get("binding", "")),
        str(meta.get("name", "")),
        int(meta.get("byte_offset", 0)),
    )


class Archive:
    """The folder of one ledger's packs and readings."""

    def __init__(self, folder: Path, ledger_id: str) -> None:
        self.folder = folder
        self.ledger_id = ledger_id
        self._stored: dict[str, dict[str, Any]] = {}
        self._noted: set[Identity] = set()
        self._checked: dict[str, tuple[int, int]] = {}

    @property
    def packs_folder(self) -> Path:
        """Where the packs are."""
        return self.folder / "packs"

    @property
    def readings_folder(self) -> Path:
        """Where the segments of readings are."""
        return self.folder / "readings"

    # --- raw objects -------------------------------------------------------------------------

    def write_pack(self, entries: Sequence[PackEntry]) -> list[dict[str, Any]]:
        """Store raw objects in one new pack, durably, and return their raw_location rows.

        The same entries give the same bytes and so the same name. What `remember` was told of is
        not stored again: an object's present location is returned, and a delivery that a pack
        notes already gets no second line; if nothing is left to write, no pack is made.

        Raises
        ------
        ValueError
            If an entry's content does not have its hash.
        """
        locations: dict[str, dict[str, Any]] = {}
        written: dict[str, dict[str, Any]] = {}
        index: list[dict[str, Any]] = []
        objects: list[bytes] = []
        at = 0
        for entry in entries:
            line: dict[str, Any] = {"sha256": entry.sha256, "meta": entry.meta}
            known = self._stored.get(entry.sha256)
            if known is not None:
                locations[entry.sha256] = known
                if identity_of(entry.sha256, entry.meta) in self._noted:
                    continue
            elif entry.content is not None:
                if entry.sha256 not in written:
                    if hashlib.sha256(entry.content).hexdigest() != entry.sha256:
                        raise ValueError(f"{entry.meta}: the content is not {entry.sha256}")
                    packing, stored = _packed(entry.content)
                    written[entry.sha256] = {
                        "offset": at,
                        "stored_length": len(stored),
                        "packing": packing,
                    }
                    objects.append(stored)
                    at += len(stored)
                line.update(written[entry.sha256])
            index.append(line)
        if index:
            head = canonical_json({"ledger": self.ledger_id, "entries": index}).encode()
            start = _PACK_MAGIC + struct.pack("<Q", len(head)) + head
            content = start + b"".join(objects)
            pack = hashlib.sha256(content).hexdigest()
            write_durably(self.packs_folder / f"{pack}.pack", content)
            for sha256, place in written.items():
                locations[sha256] = _location(sha256, pack, len(start), place)
        return list(locations.values())

    def remember(self, entry: IndexEntry, location: dict[str, Any]) -> None:
        """Keep in mind what a pack holds already, so that it is not stored twice."""
        self._stored[entry.sha256] = location
        self._noted.add(identity_of(entry.sha256, entry.meta))

    def read_raw(self, location: Mapping[str, Any]) -> bytes:
        """Return a raw object's bytes, checked against its hash.

        Raises
        ------
        DamagedArchiveError
            Names the pack and the object.
        """
        pack, sha256 = location["pack"], location["sha256"]
        try:
            with (self.packs_folder / f"{pack}.pack").open("rb") as file:
                file.seek(location["offset"])
                stored = file.read(location["stored_length"])
        except OSError as error:
            raise DamagedArchiveError(
                f"pack {pack}: cannot be read for raw object {sha256}: {error}"
            ) from error
        try:
            content = _unpacked(stored, location["packing"])
        except zlib.error as error:
            raise DamagedArchiveError(
                f"pack {pack}: raw object {sha256} cannot be unpacked: {error}"
            ) from error
        found = hashlib.sha256(content).hexdigest()
        if found != sha256:
            raise DamagedArchiveError(f"pack {pack}: raw object {sha256} now hashes to {found}")
        return content

    def packs(self) -> list[str]:
        """Return the names (hashes) of all packs, sorted."""
        return sorted(path.stem for path in self.packs_folder.glob("*.pack"))

    def pack_index(self, pack: str) -> list[IndexEntry]:
        """Return a pack's index, in its order.

        Raises
        ------
        DamagedArchiveError
            If the pack is missing, cannot be read or belongs to another ledger.
        """
        try:
            with (self.packs_folder / f"{pack}.pack").open("rb") as file:
                fixed = len(_PACK_MAGIC) + 8
                start = file.read(fixed)
                if len(start) != fixed or not start.startswith(_PACK_MAGIC):
                    raise DamagedArchiveError(f"pack {pack}: not a pack of this version")
                length = struct.unpack("<Q", start[-8:])[0]
                size = os.fstat(file.fileno()).st_size
                if length > size - fixed:
                    raise DamagedArchiveError(f"pack {pack}: its index is cut off")
                index = json.loads(file.read(length))
                ledger_id, lines = index["ledger"], index["entries"]
                entries = [
                    IndexEntry(
                        line["sha256"],
                        line["meta"],
                        _location(line["sha256"], pack, fixed + length, line)
                        if "offset" in line
                        else None,
                    )
                    for line in lines
                ]
        except (OSError, ValueError, KeyError, TypeError) as error:
            raise DamagedArchiveError(f"pack {pack}: cannot be read: {error!r}") from error
        if ledger_id != self.ledger_id:
            raise DamagedArchiveError(f"pack {pack}: belongs to ledger {ledger_id}")
        return entries

    def find(self, sha256: str) -> dict[str, Any]:
        """Return where the packs hold a raw object, by looking through all of them.

        Raises
        ------
        DamagedArchiveError
            If none of them does.
        """
        for pack in self.packs():
            for entry in self.pack_index(pack):
                if entry.sha256 == sha256 and entry.location is not None:
                    return entry.location
        raise DamagedArchiveError(f"no pack holds raw object {sha256}")

    def hash_of_pack(self, pack: str) -> str:
        """Return the SHA-256 of a pack's present bytes; it should be its name."""
        with (self.packs_folder / f"{pack}.pack").open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()

    # --- readings ----------------------------------------------------------------------------

    def write_readings(
        self,
        signals: Sequence[str],
        columns: Mapping[str, RawReadings] | Sequence[RawReadings],
    ) -> tuple[str, str, list[dict[str, Any]]]:
        """Store a pass's readings in one derived file that can be made again from raw bytes.

        Parameters
        ----------
        signals : sequence of str
        columns : mapping from signal, or sequence in the order of `signals`, of RawReadings

        Returns
        -------
        file, digest : str
            For the reading_segment row.
        spans : list of dict
            For the reading_span rows: signal, first_us, last_us, start, count. A signal without
            readings has none.

        Raises
        ------
        ValueError
            If a value is not finite, or columns differ in length.
        """
        by_signal = (
            dict(columns)
            if isinstance(columns, Mapping)
            else dict(zip(signals, columns, strict=True))
        )
        content, spans = encode_segment({signal: by_signal[signal] for signal in signals})
        digest = hashlib.sha256(content).hexdigest()
        file = f"{digest}.readings"
        write_durably(self.readings_folder / file, content)
        return file, digest, spans

    def read_readings(
        self,
        segment: Mapping[str, Any],
        signals: Iterable[str],
        start: int,
        end: int,
    ) -> dict[str, RawReadings]:
        """Return the readings of signals with start <= instant <= end [UTC us] from one segment.

        The file's digest is checked when this object first reads it, and again if the file has
        been changed since.

        Raises
        ------
        DamagedReadings
            If the file is missing or does not have its digest.
        """
        path = self.readings_folder / segment["file"]
        try:
            with path.open("rb") as file:
                status = os.fstat(file.fileno())
                state = (status.st_mtime_ns, status.st_size)
                if self._checked.get(segment["digest"]) != state:
                    found = hashlib.file_digest(file, "sha256").hexdigest()
                    if found != segment["digest"]:
                        raise DamagedReadings(
                            segment["file"],
                            segment["pass_sequence"],
                            f"digest {segment['digest']} stored, {found} found",
                        )
                    self._checked[segment["digest"]] = state
                return decode_segment(file, signals, start, end)
        except OSError as error:
            raise DamagedReadings(segment["file"], segment["pass_sequence"], str(error)) from error

    def spans_of(self, segment: Mapping[str, Any]) -> list[dict[str, Any]]:
        """Return the spans that a segment's own index states."""
        with (self.readings_folder / segment["file"]).open("rb") as file:
            return segment_spans(file)

    # --- upkeep ------------------------------------------------------------------------------

    def make_folders(self) -> None:
        """Make what is missing of the archive's folders."""
        self.packs_folder.mkdir(parents=True, exist_ok=True)
        self.readings_folder.mkdir(parents=True, exist_ok=True)

    def sweep(self) -> None:
        """Remove files that a killed process left unfinished; only under the writer's lock.

        Finished files stay: packs always, and readings that this database does not name because
        another copy of it may.
        """
        for folder in (self.folder, self.packs_folder, self.readings_folder):
            for path in folder.glob(f".*{UNFINISHED}"):
                path.unlink(missing_ok=True)


def _packed(content: bytes) -> tuple[str, bytes]:
    if content.startswith(_GZIP_MAGIC):
        return "none", content
    stored = zlib.compress(content, _LEVEL)
    return ("zlib", stored) if len(stored) < len(content) else ("none", content)


def _unpacked(stored: bytes, packing: str) -> bytes:
    if packing == "zlib":
        return zlib.decompress(stored)
    if packing == "none":
        return stored
    raise DamagedArchiveError(f"the packing {packing!r} is not known")


def _location(sha256: str, pack: str, objects_at: int, place: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "sha256": sha256,
        "pack": pack,
        "offset": objects_at + int(place["offset"]),
        "stored_length": int(place["stored_length"]),
        "packing": str(place["packing"]),
    }
