"""What goes wrong in the simulated logs: lost rows, bad cells, doubled blocks, gaps.

Flaws are drawn on the month's grid and stay clear of each other, of events and of the edges of
days: one lost row leaves its neighbours four minutes apart, which is within `maximum_gap`, so
that what the rule between instants makes of it is beyond doubt.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from meterfix.demo.loads import stream_of
from meterfix.demo.works import DP, PRESSURE, TAG_SNAPSHOT_S, TEMPERATURE, Month
from meterfix.model.calendar import HOUR, SECOND

Instants = NDArray[np.int64]
Truths = NDArray[np.bool_]

GARBLED = ("{half}", "#~#  log#er restart 0x3F", "{time}", "{row}{delimiter}?{delimiter}?")
"""What may stand where a row should: each loses the whole row."""

GOOD_CODE, DOUBTFUL_CODE = "192", "64"
BAD_CODES = ("0", "24", "0", "24")
"""Quality codes of the historian."""

_SPACING_ROWS = 17


@dataclass(frozen=True)
class Flaws:
    """The flaws of one run's (or one shared file's) log; keys are knots [UTC us]."""

    garbled: dict[int, str] = field(default_factory=dict)
    """Instead of the row: one of the texts of `GARBLED`."""
    bad_cells: dict[tuple[int, str], str] = field(default_factory=dict)
    """(knot, kind of signal) to the text in the cell's place."""
    doubled: frozenset[tuple[int, int]] = frozenset()
    """Blocks (first knot, last knot) that were written twice."""
    headers: frozenset[int] = frozenset()
    """Knots before which the header stands again."""
    swapped: frozenset[int] = frozenset()
    """Knots whose row comes after the next one."""
    gaps: tuple[tuple[int, int], ...] = ()
    """(last row before, first row after)."""
    shifted: tuple[int, int, int] | None = None
    """From the first knot on, before the second, rows are stamped later by the third."""
    tags: bool = False
    """A row holds one signal: garbled ones are the dp's, and a bad cell's text is the quality
    code beside it."""
    doubtful: frozenset[int] = frozenset()
    """Knots whose dp stands there with the quality of a doubtful one."""

    def shown(self, knots: Instants) -> Truths:
        """Return which knots have a row at all (garbled ones included)."""
        kept = np.ones(knots.size, dtype=np.bool_)
        for before, after in self.gaps:
            kept &= ~((knots > before) & (knots < after))
        return kept

    def instants(self, knots: Instants) -> Instants:
        """Return the instants that the logger stamps on the rows of these knots."""
        if self.shifted is None:
            return knots
        first, last, by = self.shifted
        return np.where((knots >= first) & (knots < last), knots + by, knots)

    def good(self, knots: Instants, kind: str) -> Truths:
        """Return which of the knots have a usable cell of the kind."""
        rows = self.garbled if kind == DP or not self.tags else ()
        lost = [*rows, *(knot for knot, of in self.bad_cells if of == kind)]
        return ~np.isin(knots, np.array(lost, dtype=np.int64))

    def merged(self, other: Flaws) -> Flaws:
        """Return these flaws with another's rows garbled as well: what a shared file loses."""
        return replace(self, garbled={**self.garbled, **other.garbled})


def draw_flaws(
    seed: int,
    month: Month,
    knots: Instants,
    name: str,
    *,
    rows: int,
    cells: int,
    tags: bool = False,
) -> Flaws:
    """Draw the flaws of one log over the whole month.

    Parameters
    ----------
    seed : int
        Of the simulation.
    month : Month
        Whose events are to be kept clear of.
    knots : (n,) array
        The whole month's knots. [UTC us]
    name : str
        A run, or a shared file's source.
    rows, cells : int
        How many rows are garbled, and how many cells of each kind are bad.
    tags : bool
        Whether a row of the log holds one signal only.

    Returns
    -------
    Flaws
        The same for the same seed and name.
    """
    rng = stream_of(seed, f"flaws {name}")
    hour_of_day = (knots // HOUR) % 24
    clear = (hour_of_day >= 6) & (hour_of_day < 21)
    for start, end in _busy(month):
        clear &= ~((knots > start - HOUR) & (knots < end + HOUR))
    free = np.flatnonzero(clear)
    free = free[free % _SPACING_ROWS == 0]
    wanted = rows + 4 * cells + 4
    chosen = [int(knots[n]) for n in rng.permutation(free)[:wanted]]
    garbled = {chosen.pop(): GARBLED[n % len(GARBLED)] for n in range(rows)}
    bad: dict[tuple[int, str], str] = {}
    texts = ("BAD", "", "-9999", "BAD") if not tags else BAD_CODES
    for kind, text in zip((DP, PRESSURE, TEMPERATURE, PRESSURE), texts, strict=True):
        for _ in range(cells):
            knot = chosen.pop()
            if tags and kind != DP:  # at which it is logged
                knot -= knot % (TAG_SNAPSHOT_S * SECOND)
            bad[knot, kind] = text
    step = int(knots[1] - knots[0])
    uncertain = chosen.pop() if tags else 0
    special = sum(name.encode()) % 3
    block = chosen.pop()
    return Flaws(
        garbled=garbled,
        bad_cells=bad,
        doubled=frozenset({(block, block + 8 * step)}) if special == 0 else frozenset(),
        headers=frozenset({chosen.pop()}) if special == 1 else frozenset(),
        swapped=frozenset({chosen.pop()}) if special == 2 else frozenset(),
        gaps=_gaps_of(month, name),
        shifted=_shift_of(month, name),
        tags=tags,
        doubtful=frozenset(uncertain + n * step for n in range(5)) if tags else frozenset(),
    )


def _gaps_of(month: Month, name: str) -> tuple[tuple[int, int], ...]:
    if name == "FT-301":
        return (month.restart[:2],)
    return (month.outage,) if name == "FT-203" else ()


def _shift_of(month: Month, name: str) -> tuple[int, int, int] | None:
    _, resumed, clock_set = month.restart
    return (resumed, clock_set, 20 * SECOND) if name == "FT-301" else None


def _busy(month: Month) -> list[tuple[int, int]]:
    stopped, resumed, _ = month.restart
    return [
        (stopped, resumed),
        month.outage,
        month.standstill,
        *((out.start, out.end) for out in month.out_of_service),
    ]
