"""The readings that count: committed ones, a pass's own new ones, and the choice among them."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from meterfix.run.choose import Candidates, Chosen, DeliveryRank, Ranks, choose, standing
from meterfix.run.signals import SiteIndex
from meterfix.store.ledger import Between, Ledger
from meterfix.store.readings import RawReadings


@dataclass
class Pool:
    """Readings as of a pass, under one version of the site file."""

    ledger: Ledger
    ranks: Ranks
    up_to_pass: int | None = None
    pending: Mapping[str, RawReadings] = field(default_factory=dict)
    """Readings that the pass under way has parsed and not yet committed, by signal."""

    def candidates(self, signals: Sequence[str], start: int, end: int) -> dict[str, Candidates]:
        """Return every known reading of the signals with start <= instant <= end [UTC us]."""
        committed = self.ledger.load_readings(signals, start, end, up_to_pass=self.up_to_pass)
        found: dict[str, Candidates] = {}
        for name in signals:
            parts = [part for part in (committed.get(name), self._fresh(name, start, end)) if part]
            if parts:
                found[name] = _joined(parts)
        return found

    def standing(self, signals: Sequence[str], start: int, end: int) -> dict[str, Candidates]:
        """Return the candidates whose judgement counts, by signal."""
        return {
            name: standing(candidates, self.ranks)
            for name, candidates in self.candidates(signals, start, end).items()
        }

    def chosen(self, signals: Sequence[str], start: int, end: int) -> dict[str, Chosen]:
        """Return the readings that count with start <= instant <= end [UTC us], by signal."""
        return {
            name: choose(candidates, self.ranks)
            for name, candidates in self.candidates(signals, start, end).items()
        }

    def _fresh(self, name: str, start: int, end: int) -> RawReadings | None:
        fresh = self.pending.get(name)
        if fresh is None:
            return None
        inside = (fresh.instants >= start) & (fresh.instants <= end)
        if inside.all():
            return fresh
        return RawReadings(
            fresh.instants[inside],
            fresh.values[inside],
            fresh.implausible[inside],
            fresh.delivery[inside],
            fresh.judgement[inside],
            fresh.doubtful[inside],
        )


def _joined(parts: Sequence[RawReadings]) -> Candidates:
    if len(parts) == 1:
        one = parts[0]
        return Candidates(
            one.instants, one.values, one.implausible, one.delivery, one.judgement, one.doubtful
        )
    return Candidates(
        np.concatenate([part.instants for part in parts]),
        np.concatenate([part.values for part in parts]),
        np.concatenate([part.implausible for part in parts]),
        np.concatenate([part.delivery for part in parts]),
        np.concatenate([part.judgement for part in parts]),
        np.concatenate([part.doubtful for part in parts]),
    )


def ranks_as_of(
    ledger: Ledger,
    index: SiteIndex,
    up_to_pass: int | None = None,
    fresh: Iterable[tuple[Mapping[str, object], int]] = (),
    without: Collection[int] = (),
) -> Ranks:
    """Return what the choice needs to know of every delivery as of a pass.

    Parameters
    ----------
    ledger, index : the ledger, and the site file in force (it gives sources their precedence).
    up_to_pass : deliveries and judgements of later passes do not count; None: all count.
    fresh : delivery rows of the pass under way, each with its judgement number.
    without : deliveries that do not count.
    """
    where = {} if up_to_pass is None else {"pass_sequence": Between(None, up_to_pass)}
    judged = {
        row["delivery_sequence"]: row["judgement"]
        for row in ledger.rows(
            "fate",
            where=where,
            order=("delivery_sequence", "judgement"),
            columns=("delivery_sequence", "judgement"),
        )
    }
    deliveries: list[Mapping[str, object]] = list(
        ledger.rows(
            "delivery",
            where=where,
            order=("sequence",),
            columns=("sequence", "source", "binding", "name", "version"),
        )
    )
    known = {row["sequence"] for row in deliveries}
    for row, judgement in fresh:
        judged[row["sequence"]] = judgement
        if row["sequence"] not in known:
            deliveries.append(row)
    names: dict[tuple[object, object, object], int] = {}
    ranks: dict[int, DeliveryRank] = {}
    for row in deliveries:
        sequence = int(str(row["sequence"]))
        source = index.sources.get(str(row["source"]))
        if sequence not in judged or sequence in without or source is None:
            continue
        key = (row["source"], row["binding"], row["name"])
        ranks[sequence] = DeliveryRank(
            precedence=source.precedence,
            name=names.setdefault(key, len(names)),
            version=int(str(row["version"])),
            judgement=judged[sequence],
        )
    return Ranks.of(ranks)
