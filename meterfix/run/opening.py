"""Opening a site with its ledger: the site file, its secrets, its database and archive."""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

from meterfix.errors import LedgerError, MeterfixError
from meterfix.intake.site import anchored, read_site, resolve_secrets
from meterfix.model.site import Site
from meterfix.run.gas_check import check_gases
from meterfix.run.signals import SiteIndex
from meterfix.store.ledger import Ledger


@dataclass(frozen=True)
class OpenSite:
    """A site file in force and the ledger that it names."""

    path: Path
    index: SiteIndex
    ledger: Ledger

    @property
    def site(self) -> Site:
        """The site file's model."""
        return self.index.site

    @property
    def folder(self) -> Path:
        """The folder against which the site file's relative paths stand."""
        return self.path.parent


@contextmanager
def open_site(path: Path, *, read_only: bool = False) -> Iterator[OpenSite]:
    """Read the site file and open its ledger; close the ledger afterwards.

    Raises
    ------
    SiteFileError
        If the site file has mistakes, all of which are in it, or names a gas that cannot be
        computed.
    LedgerError
        If database, archive and anchor do not belong together or cannot be opened.
    """
    path = path.absolute()
    site = anchored(read_site(path), path.parent)
    database, archive = resolve_secrets(site.database_url, secret), Path(site.archive_folder)
    if not read_only and not _in_use(site, database, archive):
        check_gases(site, path)
    ledger = Ledger.open(database, archive, read_only=read_only)
    try:
        yield OpenSite(path, SiteIndex(site), ledger)
    finally:
        ledger.close()


def _in_use(site: Site, database: str, archive: Path) -> bool:
    """Return whether a pass has computed with this very site file.

    Then its gases can be computed, and a pass that finds nothing new is spared the seconds that
    loading the gas models takes.
    """
    try:
        with Ledger.open(database, archive, read_only=True) as ledger:
            return bool(ledger.rows("site_version", where={"digest": site.digest}))
    except LedgerError:
        return False  # there is none yet, or opening it to be written says what is wrong


def secret(kind: str, name: str) -> str:
    """Return what `${env:NAME}` or `${file:PATH}` names.

    Raises
    ------
    MeterfixError
        If there is no such variable or file.
    """
    if kind == "env":
        if name not in os.environ:
            message = f"database: the environment variable {name} is not set"
            raise MeterfixError(message)
        return os.environ[name]
    try:
        return Path(name).read_text(encoding="utf-8").strip()
    except OSError as error:
        message = f"database: {name} cannot be read: {error.strerror}"
        raise MeterfixError(message) from error
