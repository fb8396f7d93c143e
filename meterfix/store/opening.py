"""Opening a ledger: database, archive and anchor are made, or checked to belong together."""

from __future__ import annotations

import uuid
from pathlib import Path

from sqlalchemy import Connection, Engine, func, insert, select
from sqlalchemy.engine import URL
from sqlalchemy.exc import SQLAlchemyError

from meterfix.errors import LedgerError
from meterfix.store.anchor import Anchor
from meterfix.store.archive import Archive
from meterfix.store.engine import reader_engine, sqlite_file, writer_engine
from meterfix.store.lock import WriterLock
from meterfix.store.migrate import LATEST_REVISION, database_revision, upgrade
from meterfix.store.tables import table_named


def anchor_file(archive_folder: Path) -> Path:
    """Return where an archive's anchor is."""
    return archive_folder / "anchor"


def lock_file(archive_folder: Path) -> Path:
    """Return the file whose lock a writer holds."""
    return archive_folder / "lock"


def identity_file(archive_folder: Path) -> Path:
    """Return the file in which the archive itself carries the ledger's id."""
    return archive_folder / "ledger"


def is_ready(url: URL, archive_folder: Path) -> bool:
    """Return whether the ledger exists whole and at this version's revision."""
    path = sqlite_file(url)
    if path is not None and not path.is_file():
        return False
    if not (anchor_file(archive_folder).exists() and identity_file(archive_folder).exists()):
        return False
    engine = reader_engine(url)
    try:
        with engine.connect() as connection:
            return database_revision(connection) == LATEST_REVISION and _database_id(engine) != ""
    except SQLAlchemyError as error:
        raise LedgerError(f"the database {url} cannot be opened: {error}") from error
    finally:
        engine.dispose()


def why_not_ready(url: URL, archive_folder: Path) -> str:
    """Return why a ledger that `is_ready` does not have cannot be read; nothing is changed."""
    path = sqlite_file(url)
    found, passes, revision = None, 0, None
    if path is None or path.is_file():
        engine = reader_engine(url)
        try:
            with engine.connect() as connection:
                revision = database_revision(connection)
                if revision is not None:
                    found, passes = _identity(connection)
        except SQLAlchemyError as error:
            return f"the database {url} cannot be opened: {error}"
        finally:
            engine.dispose()
    anchored, used = _state_of_archive(archive_folder)
    sentence = _parted(url, found, anchored, passes=passes, used=used)
    if sentence:
        return sentence
    if passes and revision == LATEST_REVISION:
        return (
            f"the archive {archive_folder} has no file '{identity_file(archive_folder).name}' that "
            "says whose it is; processing logs makes it again"
        )
    return (
        f"no ledger of this version at {url} with the archive {archive_folder}; "
        "processing logs makes one"
    )


def prepare(url: URL, archive_folder: Path) -> None:
    """Make or migrate the database, and give it, the archive and the anchor one id.

    Each step can be the last one before a crash: what is found later with an id but without any
    pass is completed; what holds passes is never given a new id.

    Raises
    ------
    LedgerBusyError
        If another process writes to the ledger.
    LedgerError
        If one of the three is missing while another holds passes or raw bytes.
    """
    path = sqlite_file(url)
    try:
        archive_folder.mkdir(parents=True, exist_ok=True)
        if path is not None:
            path.parent.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise LedgerError(f"{error.filename}: cannot be made: {error.strerror}") from error
    lock = WriterLock(lock_file(archive_folder))
    lock.acquire()
    try:
        archive = Archive(archive_folder, "")
        archive.make_folders()
        anchored_id, used = _state_of_archive(archive_folder)
        engine = writer_engine(url)
        try:
            ledger_id = _prepare_database(engine, url, anchored_id, used=used)
        finally:
            engine.dispose()
        if anchored_id is None:
            Anchor.create(anchor_file(archive_folder), ledger_id)
        if not identity_file(archive_folder).exists():
            Anchor.create(identity_file(archive_folder), ledger_id)
    finally:
        lock.release()


def _prepare_database(engine: Engine, url: URL, anchored_id: str | None, *, used: bool) -> str:
    try:
        with engine.begin() as connection:
            if database_revision(connection) != LATEST_REVISION:
                upgrade(connection)
            found, passes = _identity(connection)
            sentence = _parted(url, found, anchored_id, passes=passes, used=used)
            if sentence:
                raise LedgerError(sentence)
            ledger_id = found or anchored_id or uuid.uuid4().hex
            if found is None:
                connection.execute(insert(table_named("ledger")).values(id=ledger_id, created_us=0))
            return ledger_id
    except SQLAlchemyError as error:
        raise LedgerError(f"the database {url} cannot be opened: {error}") from error


def _identity(connection: Connection) -> tuple[str | None, int]:
    """Return the ledger's id in the database, None if it has none, and the number of passes."""
    found = connection.execute(select(table_named("ledger").c.id)).scalar()
    passes = connection.execute(select(func.count()).select_from(table_named("audit"))).scalar_one()
    return None if found is None else str(found), int(passes)


def _state_of_archive(folder: Path) -> tuple[str | None, bool]:
    """Return the anchor's ledger id, None without one, and whether the archive has been used."""
    anchor = Anchor(anchor_file(folder))
    state = anchor.state() if anchor.exists() else None
    used = bool(Archive(folder, "").packs()) or (
        state is not None and (state.head.sequence > 0 or bool(state.open))
    )
    return None if state is None else state.ledger_id, used


def _parted(
    url: URL, found: str | None, anchored_id: str | None, *, passes: int, used: bool
) -> str:
    """Return why database and archive cannot be used together; '' if nothing speaks against it."""
    if found is None and used:
        return (
            f"the archive holds ledger {anchored_id or '(no anchor)'} with what arrived so "
            f"far, but the database {url} is empty: put a copy of the database back, or "
            "begin a new ledger with a new archive folder"
        )
    if found is not None and anchored_id is None and (passes or used):
        return (
            f"the database {url} belongs to ledger {found}, but its archive has no anchor: "
            "put the archive back, or name the right archive folder"
        )
    return ""


def checked_id(engine: Engine, archive_folder: Path, anchor: Anchor) -> str:
    """Return the one id of database, archive and anchor.

    Raises
    ------
    LedgerError
        If they carry different ids; names all three.
    """
    database = _database_id(engine)
    archive = Anchor(identity_file(archive_folder)).state().ledger_id
    anchored = anchor.state().ledger_id
    if not database == archive == anchored:
        raise LedgerError(
            "database, archive and anchor do not belong together: their ledger ids are "
            f"{database}, {archive}, {anchored}"
        )
    return database


def _database_id(engine: Engine) -> str:
    with engine.connect() as connection:
        found = connection.execute(select(table_named("ledger").c.id)).scalar()
    return "" if found is None else str(found)
