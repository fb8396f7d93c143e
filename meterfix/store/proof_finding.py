"""One difference that a proof found."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Finding:
    """A difference between what is stored and what proves it."""

    check: str
    """'database', 'anchor', 'chain', 'rows', 'archive' or 'readings'."""
    where: str
    """Table and key, pack, or file."""
    message: str
    """A sentence with the stored and the found value."""

    def __str__(self) -> str:
        return f"{self.check}: {self.where}: {self.message}"
