"""Conflicts: two values for one signal and instant, what was chosen, and by which rule."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

import numpy as np

from meterfix.frames import Instants
from meterfix.run.choose import (
    RULE_LATER_VERSION,
    RULE_PRECEDENCE,
    RULE_VALUES,
    Candidates,
    Ranks,
)
from meterfix.run.pool import Pool
from meterfix.store.ledger import Between, Ledger


def conflict_rows(
    ledger: Ledger, pool: Pool, contested: Mapping[str, Instants]
) -> list[dict[str, Any]]:
    """Return a decision for every instant at which a signal has different values.

    Parameters
    ----------
    ledger : earlier decisions on the same instants give the new ones their numbers.
    pool : all readings, this pass's included.
    contested : instants at which this pass brought a value that differs from another one.
    """
    rows: list[dict[str, Any]] = []
    for signal, instants in sorted(contested.items()):
        if len(instants) == 0:
            continue
        start, end = int(instants.min()), int(instants.max())
        earlier: dict[int, tuple[int, str]] = {
            row["instant_us"]: (row["decision"], row["candidates"])
            for row in ledger.rows(
                "conflict",
                where={"signal": signal, "instant_us": Between(start, end)},
                order=("instant_us", "decision"),
            )
        }
        standing = pool.standing([signal], start, end)[signal]
        chosen = pool.chosen([signal], start, end)[signal]
        for instant in np.unique(instants).tolist():
            number, before = earlier.get(instant, (0, ""))
            candidates, rule = _candidates(standing, pool.ranks, instant)
            if candidates == before:
                continue
            at = int(np.searchsorted(chosen.instants, instant))
            rows.append(
                {
                    "signal": signal,
                    "instant_us": instant,
                    "decision": number + 1,
                    "candidates": candidates,
                    "chosen": float(chosen.values[at]),
                    "rule": RULE_VALUES if chosen.disputed[at] else rule,
                }
            )
    return rows


def _candidates(standing: Candidates, ranks: Ranks, instant: int) -> tuple[str, str]:
    """Return the candidates at an instant as text, and the rule that settles them if one does."""
    at = np.flatnonzero(standing.instants == instant)
    places = np.searchsorted(ranks.deliveries, standing.delivery[at])
    listed = sorted([int(standing.delivery[n]), float(standing.values[n])] for n in at.tolist())
    same_precedence = len(set(ranks.precedence[places].tolist())) == 1
    return json.dumps(listed), RULE_LATER_VERSION if same_precedence else RULE_PRECEDENCE
