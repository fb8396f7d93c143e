"""Campaigns on every core: sites in chunks, one chunk and one set of factors a task."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from functools import lru_cache
from multiprocessing import get_context

import numpy as np
from works_campaign import Outcome, compare
from works_simulated import Campaign, Period

CHUNK = 125
"""Sites of a task."""


@lru_cache(maxsize=16)
def _campaign(sites: range, period: Period) -> Campaign:
    return Campaign(sites, period)


def _outcome(sites: range, period: Period, factors: Mapping[str, float]) -> Outcome:
    return compare(_campaign(sites, period), factors, whole=period.days > 1)


def outcomes(
    sites: range, period: Period, settings: Sequence[Mapping[str, float]]
) -> Iterator[Outcome]:
    """Yield the outcome of all sites under each setting of factors, in order, as they come.

    A month is computed in one piece, which `test_a_month_in_one_piece` holds against gas days.
    """
    chunks = [sites[n : n + CHUNK] for n in range(0, len(sites), CHUNK)]
    # processes that are started afresh: no threads of this one's libraries are copied
    pool = ProcessPoolExecutor(os.cpu_count(), mp_context=get_context("spawn"))
    try:
        tasks = [
            [pool.submit(_outcome, chunk, period, factors) for chunk in chunks]
            for factors in settings
        ]
        for of_setting in tasks:
            parts = [task.result() for task in of_setting]
            yield Outcome(
                *(
                    np.concatenate([getattr(part, name) for part in parts])
                    for name in ("error", "stated", "total")
                )
            )
    finally:
        pool.shutdown(cancel_futures=True)
