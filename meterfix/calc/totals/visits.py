"""The same pieces seen from the records: with what weight each record enters each hour.

A total is linear in its records' rates, with weights that depend on instants alone. A *cell* is
an hour as far as one stretch serves it; a *visit* is a record that a cell uses. A cell's sum of
weight times rate is the sum of its pieces' contributions, up to rounding; where there are
twenty things to integrate, this is the cheaper way round.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meterfix.calc.elementary import segment_sum
from meterfix.calc.totals.pieces import Weights
from meterfix.frames import Floats, Integers


@dataclass(frozen=True, slots=True)
class Visits:
    """Records by the cells that use them, in order of the cells and of time."""

    row: Integers
    """Hour of each cell, (cells,), counted over the batch; ascending."""
    stretch: Integers
    """Stretch of each cell, (cells,); ascending."""
    offsets: Integers
    """(cells + 1,): cell k's visits are [offsets[k], offsets[k + 1])."""
    piece_offsets: Integers
    """(cells + 1,): cell k is made of the measured pieces [.[k], .[k + 1])."""
    record: Integers
    """Record of each visit, (visits,)."""
    weight: Floats
    """s of each visit, (visits,)."""

    def summed(self, of_visits: Floats) -> Floats:
        """Return the sum over each cell's visits."""
        return segment_sum(of_visits, self.offsets[:-1], self.offsets[1:])

    def summed_pieces(self, of_pieces: Floats) -> Floats:
        """Return the sum over each cell's measured pieces."""
        return segment_sum(of_pieces, self.piece_offsets[:-1], self.piece_offsets[1:])

    def integral(self, rates: Floats) -> Floats:
        """Return each cell's integral of a rate that every record has, (records,) array."""
        return self.summed(rates[self.record] * self.weight)

    def total_weight(self, records: int) -> Floats:
        """Return the weight of each record over all cells [s]."""
        total = np.bincount(self.record, weights=self.weight, minlength=records)
        return total.astype(np.float64, copy=False)


def visits(weights: Weights, row: Integers, stretch: Integers) -> Visits:
    """Return the visits of the measured pieces.

    Parameters
    ----------
    weights : Weights
        Of the measured pieces, in order of stretch and time.
    row, stretch : (pieces,) arrays
        Hour and stretch of each piece.
    """
    count = len(row)
    nothing = np.zeros(0, dtype=np.int64)
    if count == 0:
        edge = np.zeros(1, dtype=np.int64)
        return Visits(nothing, nothing, edge, edge, nothing, np.zeros(0))
    new = np.flatnonzero((np.diff(row) != 0) | (np.diff(stretch) != 0)) + 1
    heads = np.concatenate([[0], new])
    tails = np.concatenate([new, [count]]) - 1
    piece_offsets = np.concatenate([heads, [count]]).astype(np.int64)
    pieces = np.diff(piece_offsets)
    lowest, highest = weights.first[heads], weights.second[tails]
    offsets = np.concatenate([[0], np.cumsum(highest - lowest + 1)]).astype(np.int64)
    shift = offsets[:-1] - lowest
    by_piece = np.repeat(shift, pieces)
    # (v - u)(r(u) + r(v))/2 with both ends on the line between two records
    later = weights.start + np.where(weights.end_is_second, 1.0, weights.end)
    of_second = 0.5 * weights.seconds * later
    total = int(offsets[-1])
    of_first = weights.seconds - of_second
    # a bin holds one visit's pieces in order of time, whatever else is in the batch
    weight = np.bincount(weights.first + by_piece, weights=of_first, minlength=total)
    weight += np.bincount(weights.second + by_piece, weights=of_second, minlength=total)
    return Visits(
        row=row[heads],
        stretch=stretch[heads],
        offsets=offsets,
        piece_offsets=piece_offsets,
        record=np.arange(total) - np.repeat(shift, np.diff(offsets)),
        weight=weight.astype(np.float64, copy=False),
    )
