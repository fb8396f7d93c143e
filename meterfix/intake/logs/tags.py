"""Tags and quality codes of a tag log, whole columns at once, for the fast path."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from meterfix.frames import Floats, Integers, Truths
from meterfix.intake.logs.heading import Heading
from meterfix.intake.logs.rows import IGNORED_TAG, UNKNOWN_TAG, Rules, read_quality, tag_index
from meterfix.model.source import Column, Use


@dataclass(slots=True)
class Tagged:
    """Whose value each row holds, and what its quality code says of it."""

    tags: Integers
    """Index in layout.columns, or UNKNOWN_TAG or IGNORED_TAG."""
    spellings: Integers
    """Index in `names`."""
    names: list[str]
    """The tags as they stand in the file, without surrounding blanks; may repeat."""
    doubtful: Truths
    bad: Truths
    """The value is not used: for the careful reading to say why."""

    @classmethod
    def of(cls, table: pa.Table, heading: Heading, rules: Rules) -> Tagged:
        """Return them from a table of text."""
        spellings, names = _distinct(table.column(f"c{heading.tag}"))
        tags = _looked_up(spellings, names, lambda name: tag_index(name, rules))
        uses = np.full(len(tags), _USES[Use.GOOD])
        if heading.quality >= 0:
            codes, written = _distinct(table.column(f"c{heading.quality}"))
            uses = _looked_up(codes, written, lambda code: _USES[read_quality(code, "", rules)[0]])
        known = tags >= 0
        return cls(
            tags=tags,
            spellings=spellings,
            names=names,
            doubtful=known & (uses == _USES[Use.DOUBTFUL]),
            bad=known & (uses == _USES[Use.BAD]),
        )

    def to_si(self, columns: Sequence[Column]) -> tuple[Floats, Floats]:
        """Return each row's scale and offset; those of the first tag where the tag is none."""
        at = np.maximum(self.tags, 0)
        scales = np.array([column.scale for column in columns])
        offsets = np.array([column.offset for column in columns])
        return scales[at], offsets[at]

    def settled(self, accepted: Truths) -> Truths:
        """Return which rows need no careful reading, given which values are good ones.

        The value of a row that is not for reading does not matter.
        """
        return np.where(self.tags < 0, True, accepted & ~self.bad)

    def leave_out(
        self, keep: Truths, files: Integers, lines: Integers
    ) -> dict[int, tuple[dict[str, tuple[int, int]], int]]:
        """Take the rows that are not for reading out of `keep`; return each file's part of them.

        Parameters
        ----------
        keep : (n,) array
            Which rows are rows at all; changed.
        files, lines : (n,) array
            Each row's file, and its line there.

        Returns
        -------
        dict
            By file: unknown tags with their first line and how many they have; how many lines
            have ignored tags.
        """
        found: dict[int, tuple[dict[str, tuple[int, int]], int]] = {}
        ignored = np.flatnonzero(keep & (self.tags == IGNORED_TAG))
        for file, count in zip(*np.unique(files[ignored], return_counts=True), strict=True):
            found[int(file)] = ({}, int(count))
        unknown = np.flatnonzero(keep & (self.tags == UNKNOWN_TAG))
        keys = files[unknown] * len(self.names) + self.spellings[unknown]
        _, first, counts = np.unique(keys, return_index=True, return_counts=True)
        for at, count in sorted(zip(first.tolist(), counts.tolist(), strict=True)):
            row = unknown[at]
            told, _ = found.setdefault(int(files[row]), ({}, 0))
            name = self.names[self.spellings[row]]
            line, before = told.get(name, (int(lines[row]), 0))
            told[name] = (line, before + count)
        keep[ignored] = keep[unknown] = False
        return found

    def kept(self, keep: Truths) -> Tagged:
        """Return some of the rows."""
        return Tagged(
            tags=self.tags[keep],
            spellings=self.spellings[keep],
            names=self.names,
            doubtful=self.doubtful[keep],
            bad=self.bad[keep],
        )


_USES = {use: number for number, use in enumerate(Use)}


def _distinct(cells: pa.ChunkedArray) -> tuple[Integers, list[str]]:
    """Return each cell's index among the distinct texts, and those without surrounding blanks."""
    encoded = cells.dictionary_encode().unify_dictionaries()
    indices = np.concatenate([chunk.indices.to_numpy() for chunk in encoded.chunks])
    texts = encoded.chunk(0).dictionary.to_pylist()
    return indices.astype(np.int64), [text.strip(" \t") for text in texts]


def _looked_up(indices: Integers, texts: Sequence[str], look: Callable[[str], int]) -> Integers:
    """Return a number for each cell, asked once per distinct text."""
    found = np.array([look(text) for text in texts], dtype=np.int64)
    return found[indices]
