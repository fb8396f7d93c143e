"""Reads the simulator's packaged coefficient tables."""

from __future__ import annotations

import csv
from functools import cache
from importlib.resources import files


@cache
def coefficient_rows(name: str) -> tuple[dict[str, str], ...]:
    """Return the rows of a packaged table; leading comment lines hold its source.

    Parameters
    ----------
    name : str
        File name without its ending, such as 'detail_terms'.

    Returns
    -------
    tuple of dict
        One mapping from column to text per row, in file order.
    """
    text = files("meterfix.demo").joinpath("coefficients", f"{name}.csv").read_text("utf-8")
    lines = [line for line in text.splitlines() if line and not line.startswith("#")]
    return tuple(csv.DictReader(lines))
