"""Conflicts: two values for one signal and instant, what was chosen, and by which rule."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from meterfix.frames import Instants
from meterfix.model.wording import utc_text
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


def disputes(
    pool: Pool,
    signals: Sequence[str],
    window: tuple[int, int],
    deliveries: Mapping[int, str],
    at_most: int,
) -> tuple[int, list[dict[str, Any]]]:
    """Return how many readings of the signals are disputed in a window, and the first of them.

    Parameters
    ----------
    pool : all readings.
    signals : in the order in which they are told.
    window : first and last instant [UTC us].
    deliveries : what to call each delivery, by number.
    at_most : how many are described.

    Returns
    -------
    tuple of int and list of dict
        Each with `signal`, `instant` (ISO, UTC), and `values`: SI values with their files.
    """
    number = 0
    told: list[dict[str, Any]] = []
    standing = pool.standing(signals, *window)
    for signal, chosen in pool.chosen(signals, *window).items():
        instants = chosen.instants[chosen.disputed]
        number += len(instants)
        for instant in instants[: at_most - len(told)].tolist():
            values: dict[float, set[str]] = {}
            for delivery, value in _rivals(standing[signal], pool.ranks, instant):
                values.setdefault(value, set()).add(deliveries[delivery])
            told.append(
                {
                    "signal": signal,
                    "instant": utc_text(instant),
                    "values": [
                        {"value_SI": value, "files": sorted(files)}
                        for value, files in sorted(values.items())
                    ],
                }
            )
    return number, told


def _rivals(standing: Candidates, ranks: Ranks, instant: int) -> list[tuple[int, float]]:
    """Return delivery and value of every candidate that neither rank nor version rules out."""
    at = np.flatnonzero(standing.instants == instant)
    places = np.searchsorted(ranks.deliveries, standing.delivery[at])
    at = at[ranks.precedence[places] == ranks.precedence[places].min()]
    places = np.searchsorted(ranks.deliveries, standing.delivery[at])
    latest: dict[int, int] = {}
    for name, version in zip(ranks.name[places], ranks.version[places], strict=True):
        latest[int(name)] = max(int(version), latest.get(int(name), 0))
    return [
        (int(standing.delivery[n]), float(standing.values[n]))
        for n, place in zip(at.tolist(), places.tolist(), strict=True)
        if ranks.version[place] == latest[int(ranks.name[place])]
    ]


def _candidates(standing: Candidates, ranks: Ranks, instant: int) -> tuple[str, str]:
    """Return the candidates at an instant as text, and the rule that settles them if one does."""
    at = np.flatnonzero(standing.instants == instant)
    places = np.searchsorted(ranks.deliveries, standing.delivery[at])
    listed = sorted([int(standing.delivery[n]), float(standing.values[n])] for n in at.tolist())
    same_precedence = len(set(ranks.precedence[places].tolist())) == 1
    return json.dumps(listed), RULE_LATER_VERSION if same_precedence else RULE_PRECEDENCE
