"""The database URL and folders: secrets by reference only, paths beside the site file."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

from meterfix.intake.site.findings import Findings, Place
from meterfix.model.site import Site

_REFERENCE = re.compile(r"\$\{(env|file):([^}]+)\}")
_SCHEMES = ("sqlite", "postgresql")
_SQLITE = re.compile(r"(sqlite(?:\+\w+)?:///)([^?]*)(.*)")


def check_database(place: Place, url: str, findings: Findings) -> None:
    """Record what is wrong with a database URL; a password in it is never repeated."""
    left_over = _REFERENCE.sub("", url)
    if "${" in left_over:
        findings.add(
            place, "a reference that cannot be read", 'use "${env:NAME}" or "${file:PATH}"'
        )
        return
    if _REFERENCE.fullmatch(url):
        return
    scheme, mark, rest = url.partition("://")
    if not mark or scheme.partition("+")[0] not in _SCHEMES:
        findings.add(
            place,
            f"a URL that begins with '{scheme[:20]}'" if mark else "no database URL",
            'use for example "sqlite:///meterfix.sqlite" or "${env:DATABASE_URL}"',
        )
        return
    if scheme.startswith("sqlite"):
        path = _SQLITE.fullmatch(url)
        if path is None or path[2] in {"", ":memory:"}:
            findings.add(
                place,
                f"'{url}' names no file",
                'name one: "sqlite:///meterfix.sqlite", relative to the site file',
            )
        return
    user, at, _ = rest.rpartition("@")
    password = user.partition(":")[2]
    if (at and _REFERENCE.sub("", password)) or re.search(r"[?&]password=[^$&]", rest):
        findings.add(
            place,
            "a password in plain text",
            'give it by reference: "${env:NAME}" or "${file:PATH}"',
        )


def resolve_secrets(text: str, lookup: Callable[[str, str], str]) -> str:
    """Return a text with every reference replaced by what the lookup returns for it.

    Parameters
    ----------
    text : str
        As in the site file: "postgresql://meterfix:${env:METERFIX_PASSWORD}@db/meterfix".
    lookup : callable
        Gets ("env", name) or ("file", path) and returns the secret.
    """
    return _REFERENCE.sub(lambda found: lookup(found[1], found[2]), text)


def anchored(site: Site, folder: Path) -> Site:
    """Return the site with its SQLite file and archive folder made absolute beside a folder.

    A URL, path or folder that is absolute or begins with a reference stays as it is.
    """
    base = folder.resolve()
    url = site.database_url
    found = _SQLITE.fullmatch(url)
    if found and not found[2].startswith("${"):
        url = f"{found[1]}{(base / found[2]).as_posix()}{found[3]}"
    return replace(site, database_url=url, archive_folder=str(base / site.archive_folder))
