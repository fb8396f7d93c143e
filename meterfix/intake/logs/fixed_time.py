"""Times of one fixed width, a whole column at once: the same grammar as line by line."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from meterfix.frames import Instants, Integers, Truths
from meterfix.intake.logs.grammar import MINUTE, WIDTHS, TimeGrammar, format_parts
from meterfix.model.calendar import DAY, HOUR, SECOND

_ZERO, _NINE = ord("0"), 9
_LARGEST_OFFSET = 14 * 60


@dataclass(frozen=True, slots=True)
class FixedTimes:
    """Where the digits and literals stand in times that are all written alike."""

    width: int
    """Bytes."""
    literals: tuple[tuple[int, int], ...]
    """(position, byte)."""
    tokens: tuple[tuple[str, int, int], ...]
    """(token letter, position, width) of digits; the offset's parts are 'h' and 'n'."""
    sign: int | None
    """Position of the offset's sign."""

    def read(self, cells: pa.Array) -> tuple[Instants, Truths]:
        """Return times as TimeGrammar.read does, and which cells hold one written alike.

        A cell that is written otherwise, or names a time that does not exist, is not accepted;
        24:00 neither: it is for the careful reading to judge.
        """
        count = len(cells)
        offsets = np.frombuffer(cells.buffers()[1], dtype=np.int32, count=cells.offset + count + 1)
        offsets = offsets[cells.offset :]
        buffer = cells.buffers()[2]
        alike = np.diff(offsets) == self.width
        walls = np.zeros(count, dtype=np.int64)
        if buffer is None or not alike.any():
            return walls, np.zeros(count, dtype=np.bool_)
        text = np.frombuffer(buffer, dtype=np.uint8)
        if alike.all():
            matrix = text[offsets[0] : offsets[-1]].reshape(count, self.width)
            return self._read(np.ascontiguousarray(matrix.T))
        where = np.flatnonzero(alike)
        matrix = text[offsets[:-1][where][:, None] + np.arange(self.width)]
        found, accepted = self._read(np.ascontiguousarray(matrix.T))
        walls[where] = found
        alike[where] = accepted
        return walls, alike

    def _read(self, text: NDArray[np.uint8]) -> tuple[Instants, Truths]:
        """Return times and acceptance for text of shape (width, n)."""
        accepted = np.ones(text.shape[1], dtype=np.bool_)
        for position, byte in self.literals:
            accepted &= text[position] == byte
        fields: dict[str, Integers] = {}
        for letter, start, width in self.tokens:
            value = np.zeros(text.shape[1], dtype=np.int32)
            for position in range(start, start + width):
                digit = text[position] - np.uint8(_ZERO)  # wraps round below '0'
                accepted &= digit <= _NINE
                value = value * np.int32(10) + digit
            fields[letter] = value.astype(np.int64)
        months, lengths = _months()
        month = fields["m"]
        accepted &= (fields["Y"] >= 1) & (month >= 1) & (month <= 12)
        index = np.where(accepted, fields["Y"] * 12 + month - 1, 12)
        accepted &= (fields["d"] >= 1) & (fields["d"] <= lengths[index])
        walls = (months[index] + fields["d"] - 1) * DAY
        for letter, limit, unit in (("H", 23, HOUR), ("M", 59, MINUTE), ("S", 59, SECOND)):
            if letter in fields:
                accepted &= fields[letter] <= limit
                walls += fields[letter] * unit
        for letter, _, width in self.tokens:
            if letter == "f":
                walls += fields["f"] * np.int64(10 ** (6 - width))
        if self.sign is not None:
            minutes = fields["h"] * 60 + fields["n"]
            accepted &= (fields["n"] <= 59) & (minutes <= _LARGEST_OFFSET)
            sign = text[self.sign]
            accepted &= (sign == ord("+")) | (sign == ord("-"))
            walls -= np.where(sign == ord("-"), -minutes, minutes) * MINUTE
        return walls, accepted


@lru_cache(maxsize=1)
def _months() -> tuple[Integers, Integers]:
    """Return first day (since 1970) and length of the months of the years 0 to 9999."""
    edges = np.arange("0000-01", "10000-02", dtype="datetime64[M]").astype("datetime64[D]")
    days = edges.astype(np.int64)
    return days[:-1].copy(), np.diff(days)


def fixed_times(grammar: TimeGrammar, sample: str) -> FixedTimes | None:
    """Return where things stand in times that are written like a sample, None if it is no time."""
    found = grammar.pattern.fullmatch(sample)
    if found is None:
        return None
    literals: list[tuple[int, int]] = []
    tokens: list[tuple[str, int, int]] = []
    sign: int | None = None
    position = 0
    for letter, literal in format_parts(grammar.time_format):
        if not letter:
            text = literal.encode()
            literals.extend((position + n, byte) for n, byte in enumerate(text))
            position += len(text)
        elif letter == "z":
            offset = found["offset"]
            if offset == "Z":
                literals.append((position, ord("Z")))
            else:
                sign = position
                tokens.append(("h", position + 1, 2))
                tokens.append(("n", position + len(offset) - 2, 2))
                if ":" in offset:
                    literals.append((position + 3, ord(":")))
            position += len(offset)
        else:
            width = len(found["fraction"]) if letter == "f" else WIDTHS[letter]
            tokens.append((letter, position, width))
            position += width
    return FixedTimes(position, tuple(literals), tuple(tokens), sign)
