"""The archive against the database: every pack, every raw object, every segment of readings."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

from sqlalchemy import Connection

from meterfix.store import query
from meterfix.store.adopt import known_identities
from meterfix.store.archive import Archive, DamagedArchiveError, identity_of
from meterfix.store.proof_finding import Finding
from meterfix.store.readings import DamagedReadings

Report = Callable[[str, int, int], None]


def archive_findings(connection: Connection, archive: Archive, report: Report) -> Iterator[Finding]:
    """Yield what is damaged or missing."""
    yield from _object_findings(connection, archive, report)
    yield from _pack_findings(archive, report)
    yield from _segment_findings(connection, archive, report)


def _object_findings(connection: Connection, archive: Archive, report: Report) -> Iterator[Finding]:
    objects = query.select_rows(connection, "raw_object", order=("pass_sequence", "sha256"))
    locations = {str(r["sha256"]): r for r in query.select_rows(connection, "raw_location")}
    for done, row in enumerate(objects):
        report("raw objects", done, len(objects))
        sha256 = str(row["sha256"])
        where = f"raw_object {sha256}"
        location = locations.pop(sha256, None)
        if location is None:
            yield Finding("archive", where, "has no raw_location: nothing says where it is")
            continue
        try:
            content = archive.read_raw(location)
        except DamagedArchiveError as error:
            yield Finding("archive", where, str(error))
            continue
        if len(content) != row["length"]:
            yield Finding("archive", where, f"length {row['length']} stored, {len(content)} found")
    report("raw objects", len(objects), len(objects))
    for sha256 in sorted(locations):
        yield Finding("archive", f"raw_location {sha256}", "is of an object that is not known")


def _pack_findings(archive: Archive, report: Report) -> Iterator[Finding]:
    packs = archive.packs()
    for done, pack in enumerate(packs):
        report("packs", done, len(packs))
        where = f"pack {pack}"
        try:
            found = archive.hash_of_pack(pack)
        except OSError as error:
            yield Finding("archive", where, f"cannot be read: {error}")
            continue
        if found != pack:
            yield Finding("archive", where, f"now hashes to {found}")
        try:
            archive.pack_index(pack)
        except DamagedArchiveError as error:
            yield Finding("archive", where, str(error))
    report("packs", len(packs), len(packs))


def unknown_findings(connection: Connection, archive: Archive) -> Iterator[Finding]:
    """Yield packs with deliveries that the database does not know; damaged packs are left out."""
    for pack in archive.packs():
        try:
            index = archive.pack_index(pack)
        except DamagedArchiveError:
            continue  # has a finding of its own
        known = known_identities(connection, {entry.sha256 for entry in index})
        unknown = [e for e in index if identity_of(e.sha256, e.meta) not in known]
        if unknown:
            meta = unknown[0].meta
            yield Finding(
                "archive",
                f"pack {pack}",
                f"holds {len(unknown)} deliveries that the database does not know, the first "
                f"{meta.get('source')}/{meta.get('name')} with raw object {unknown[0].sha256}; "
                "the next pass adopts them",
            )


def _segment_findings(
    connection: Connection, archive: Archive, report: Report
) -> Iterator[Finding]:
    segments = query.select_rows(connection, "reading_segment", order=("pass_sequence",))
    spans: dict[Any, list[dict[str, Any]]] = {}
    for row in query.select_rows(connection, "reading_span", order=("pass_sequence", "signal")):
        spans.setdefault(row.pop("pass_sequence"), []).append(row)
    for done, segment in enumerate(segments):
        report("readings", done, len(segments))
        where = f"readings of pass {segment['pass_sequence']}"
        stated = spans.pop(segment["pass_sequence"], [])
        try:
            archive.read_readings(segment, (), 0, 0)
            indexed = archive.spans_of(segment)
        except (DamagedReadings, OSError) as error:
            yield Finding("readings", where, str(error))
            continue
        if stated != indexed:
            yield Finding("readings", where, f"reading_span has {stated}, the file {indexed}")
    report("readings", len(segments), len(segments))
    for sequence in spans:
        yield Finding("readings", f"readings of pass {sequence}", "have spans but no segment")
