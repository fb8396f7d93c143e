"""Which of several readings of one signal and instant counts.

The choice depends on what the candidates are, never on the order in which they came, but for
one case: a later delivery under the same file name replaces what the earlier one said.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from meterfix.frames import Floats, Instants, Integers, Truths

RULE_PRECEDENCE = "the source of lower precedence number wins"
RULE_LATER_VERSION = "the later delivery of the same file name wins"
RULE_VALUES = "disputed: the lowest value stands until a person decides"


@dataclass(frozen=True, slots=True)
class Candidates:
    """All known readings of one signal over a window, in no particular order."""

    instants: Instants
    values: Floats
    implausible: Truths
    delivery: Integers
    judgement: Integers
    doubtful: Truths


@dataclass(frozen=True, slots=True)
class DeliveryRank:
    """What the choice needs to know of a delivery."""

    precedence: int
    """Of its source in the site file in force."""
    name: int
    """A number that two deliveries share if they share source, binding and file name."""
    version: int
    judgement: int
    """The judgement that counts: the latest one as of the pass asked for."""


@dataclass(frozen=True, slots=True)
class Chosen:
    """The readings of one signal that count, in strict order of time."""

    instants: Instants
    values: Floats
    implausible: Truths
    disputed: Truths
    doubtful: Truths


@dataclass(frozen=True, slots=True)
class Ranks:
    """`DeliveryRank` of every delivery as arrays, found by delivery number."""

    deliveries: Integers
    """Ascending."""
    precedence: Integers
    name: Integers
    version: Integers
    judgement: Integers

    @classmethod
    def of(cls, ranks: Mapping[int, DeliveryRank]) -> Ranks:
        """Return the ranks as arrays."""
        numbers = sorted(ranks)

        def column(attribute: str) -> Integers:
            return np.array([getattr(ranks[n], attribute) for n in numbers], dtype=np.int64)

        return cls(
            np.array(numbers, dtype=np.int64),
            column("precedence"),
            column("name"),
            column("version"),
            column("judgement"),
        )


def standing(candidates: Candidates, ranks: Ranks) -> Candidates:
    """Return the candidates of ranked deliveries whose judgement is the one that counts."""
    if len(ranks.deliveries) == 0:
        counts = np.zeros(len(candidates.delivery), dtype=bool)
    else:
        at = np.minimum(
            np.searchsorted(ranks.deliveries, candidates.delivery), len(ranks.deliveries) - 1
        )
        counts = (ranks.deliveries[at] == candidates.delivery) & (
            ranks.judgement[at] == candidates.judgement
        )
    if bool(counts.all()):
        return candidates
    return Candidates(
        candidates.instants[counts],
        candidates.values[counts],
        candidates.implausible[counts],
        candidates.delivery[counts],
        candidates.judgement[counts],
        candidates.doubtful[counts],
    )


def choose(candidates: Candidates, ranks: Ranks) -> Chosen:
    """Return one reading per instant.

    Source precedence decides first; then, for one file name, the later delivery; else the
    lowest value stands and the reading is marked disputed. Of equal values one of good quality
    stands before a doubtful one. Readings of a superseded judgement or of a delivery without a
    rank do not count.
    """
    candidates = standing(candidates, ranks)
    at = np.searchsorted(ranks.deliveries, candidates.delivery)
    instants = candidates.instants
    if len(instants) < 2 or bool((np.diff(instants) > 0).all()):
        return _as_they_are(candidates, slice(None))
    order = np.lexsort(
        (
            candidates.doubtful,
            candidates.values,
            -ranks.version[at],
            ranks.name[at],
            ranks.precedence[at],
            instants,
        )
    )
    t, v = instants[order], candidates.values[order]
    first = np.ones(len(t), dtype=bool)
    first[1:] = t[1:] != t[:-1]
    if bool(first.all()):
        return _as_they_are(candidates, order)
    group = np.cumsum(first) - 1
    starts = np.flatnonzero(first)
    # only the best precedence of each instant, and only the latest version of each name
    precedence, name = ranks.precedence[at][order], ranks.name[at][order]
    version = ranks.version[at][order]
    best = precedence == precedence[starts][group]
    leads = np.ones(len(t), dtype=bool)
    leads[1:] = first[1:] | (precedence[1:] != precedence[:-1]) | (name[1:] != name[:-1])
    lead_of = np.maximum.accumulate(np.where(leads, np.arange(len(t)), 0))
    left = np.flatnonzero(best & (version == version[lead_of]))
    # what is left, grouped by instant: the lowest value stands, disputed if they differ
    left = left[np.lexsort((candidates.doubtful[order][left], v[left], t[left]))]
    kept = np.ones(len(left), dtype=bool)
    kept[1:] = t[left][1:] != t[left][:-1]
    heads = np.flatnonzero(kept)
    lasts = np.append(heads[1:], len(left)) - 1
    disputed = v[left][lasts] != v[left][heads]
    chosen = order[left[heads]]
    return Chosen(
        instants[chosen],
        candidates.values[chosen],
        candidates.implausible[chosen],
        disputed,
        candidates.doubtful[chosen],
    )


def _as_they_are(candidates: Candidates, order: Integers | slice) -> Chosen:
    return Chosen(
        candidates.instants[order],
        candidates.values[order],
        candidates.implausible[order],
        np.zeros(len(candidates.instants), dtype=bool),
        candidates.doubtful[order],
    )
