"""Lays the packaged example site in a folder: its site file and a month of logs."""

from __future__ import annotations

from collections.abc import Iterator
from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path

from meterfix.demo.logs import settle
from meterfix.errors import MeterfixError

EXAMPLE_NOW = "2026-11-02T09:00:00+01:00"
"""The time at which the example is looked at: the morning after its last gas day closed."""

_MARK = ".meterfix-example"
_MARK_TEXT = "This folder holds the meterfix example site; meterfix demo may lay it again.\n"


def packaged_site() -> Traversable:
    """Return the packaged site file."""
    return files("meterfix.demo").joinpath("example", "site.toml")


def packaged_logs() -> Traversable:
    """Return the folder of packaged logs: inside the package, or beside it in a checkout."""
    inside = files("meterfix.demo").joinpath("example", "logs")
    if inside.is_dir():
        return inside
    beside = Path(__file__).resolve().parents[2] / "sample_logs"
    if beside.is_dir():
        return beside
    raise MeterfixError(f"the example's logs are neither at {inside} nor at {beside}")


def lay(folder: Path) -> Path:
    """Lay the example in a folder.

    Parameters
    ----------
    folder : Path
        Missing, empty, or one in which the example was laid before; what else such a folder
        has come to hold (a database, an archive) stays as it is.

    Returns
    -------
    Path
        The site file, `folder/site.toml`.

    Raises
    ------
    MeterfixError
        If the folder holds anything else, or is a file: nothing is ever overwritten there.
    """
    mark = folder / _MARK
    if folder.exists():
        if not folder.is_dir():
            raise MeterfixError(f"{folder} is a file; the example needs a folder")
        if not mark.is_file() and any(folder.iterdir()):
            raise MeterfixError(
                f"{folder} is not empty and holds no example that was laid here; "
                "name a new or empty folder"
            )
    folder.mkdir(parents=True, exist_ok=True)
    mark.write_text(_MARK_TEXT, encoding="utf-8")
    site = folder / "site.toml"
    _lay_file(packaged_site(), site)
    for name, found in _below(packaged_logs(), ""):
        path = folder / "logs" / name
        path.parent.mkdir(parents=True, exist_ok=True)
        if _lay_file(found, path):
            settle(path)
    return site


def _lay_file(found: Traversable, path: Path) -> bool:
    """Write a file, whole or not at all, unless it is there with these bytes; say if written."""
    content = found.read_bytes()
    if path.is_file() and path.read_bytes() == content:
        return False
    partial = path.with_name(path.name + ".partial")
    partial.write_bytes(content)
    partial.replace(path)
    return True


def _below(folder: Traversable, prefix: str) -> Iterator[tuple[str, Traversable]]:
    """Yield every log below a folder with its relative name, in order of name."""
    for entry in sorted(folder.iterdir(), key=lambda entry: entry.name):
        name = f"{prefix}{entry.name}"
        if entry.is_dir():
            yield from _below(entry, f"{name}/")
        elif entry.name.endswith((".csv", ".csv.gz")):
            yield name, entry
