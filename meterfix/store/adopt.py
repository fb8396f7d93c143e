"""What the archive holds and the database does not know."""

from __future__ import annotations

from collections.abc import Iterable

from sqlalchemy import Connection

from meterfix.store import query
from meterfix.store.archive import Archive, Identity, IndexEntry, PackEntry, identity_of


def unknown_entries(
    connection: Connection, archive: Archive, at_most: int | None
) -> tuple[list[PackEntry], list[str]]:
    """Return unknown deliveries with their bytes, and packs that hold none.

    The archive remembers the places of what is returned, so that it stores nothing twice.
    """
    settled = {str(row["pack"]) for row in query.select_rows(connection, "settled_pack")}
    indexes = {pack: archive.pack_index(pack) for pack in archive.packs() if pack not in settled}
    known = known_identities(
        connection, {entry.sha256 for index in indexes.values() for entry in index}
    )
    finished: list[str] = []
    unknown: list[IndexEntry] = []
    seen: set[Identity] = set()
    for pack in sorted(indexes, key=lambda pack: _arrival(pack, indexes[pack])):
        fresh = [
            entry for entry in indexes[pack] if identity_of(entry.sha256, entry.meta) not in known
        ]
        if not fresh:
            finished.append(pack)
        for entry in fresh:
            identity = identity_of(entry.sha256, entry.meta)
            if identity not in seen:
                seen.add(identity)
                unknown.append(entry)
    return _with_content(connection, archive, indexes, unknown[:at_most]), finished


def _arrival(pack: str, index: list[IndexEntry]) -> tuple[int, int, str]:
    """Order of packs: by the sequence that their deliveries had, then by arrival.

    Many passes can share one arrival, and a clock can jump back between two.
    """
    arrivals = [int(entry.meta.get("arrival_us", 0)) for entry in index]
    sequences = [int(entry.meta.get("sequence", 0)) for entry in index]
    return (min(sequences, default=0), min(arrivals, default=0), pack)


def known_identities(connection: Connection, hashes: Iterable[str]) -> set[Identity]:
    """Return what identifies the database's deliveries of these raw objects."""
    rows = query.select_rows(
        connection,
        "delivery",
        {"raw_sha256": list(hashes)},
        columns=("raw_sha256", "source", "binding", "name", "byte_offset"),
    )
    return {identity_of(str(row["raw_sha256"]), row) for row in rows}


def _with_content(
    connection: Connection,
    archive: Archive,
    indexes: dict[str, list[IndexEntry]],
    unknown: list[IndexEntry],
) -> list[PackEntry]:
    locations = {
        entry.sha256: entry.location
        for index in indexes.values()
        for entry in index
        if entry.location is not None
    }
    stored = query.select_rows(
        connection, "raw_location", {"sha256": [entry.sha256 for entry in unknown]}
    )
    locations.update((str(row["sha256"]), dict(row)) for row in stored)
    entries: list[PackEntry] = []
    for entry in unknown:
        location = locations.get(entry.sha256)
        if location is None:
            # noted without bytes in this pack, and the pack that holds them is settled in a
            # database that has lost its location: look through all packs
            location = archive.find(entry.sha256)
        archive.remember(entry, location)
        entries.append(PackEntry(entry.sha256, archive.read_raw(location), entry.meta))
    return entries
