"""The one place for power, exponential and logarithm, and the one segment reduction.

Everything that calc computes must have the same bits whatever else is computed beside it.
NumPy's transcendental functions take another code path for strided arrays and for scalars, so
here they only ever see contiguous float64 arrays of at least one dimension.
"""

from __future__ import annotations

import numpy as np

from meterfix.frames import Floats, Integers


def contiguous(values: object) -> Floats:
    """Return the values as a contiguous float64 array of at least one dimension."""
    return np.ascontiguousarray(np.atleast_1d(np.asarray(values, dtype=np.float64)))


def power(base: object, exponent: object) -> Floats:
    """Return base ** exponent, element by element; broadcast before the call decides nothing."""
    b, e = np.broadcast_arrays(contiguous(base), contiguous(exponent))
    result: Floats = np.power(np.ascontiguousarray(b), np.ascontiguousarray(e))
    return result


def exponential(values: object) -> Floats:
    """Return e ** values, element by element."""
    result: Floats = np.exp(contiguous(values))
    return result


def logarithm(values: object) -> Floats:
    """Return the natural logarithm, element by element."""
    result: Floats = np.log(contiguous(values))
    return result


def segment_sum(values: Floats, starts: Integers, ends: Integers) -> Floats:
    """Return the sum over each half-open segment [start, end) of a flat array.

    The one summation of calc: one segment is one meter's one hour in order of time. It is
    unpadded, and its result depends on the segment's own values only.

    Parameters
    ----------
    values : (n,) array
    starts, ends : (m,) integer arrays
        Segments in ascending order, not overlapping; an empty one (start == end) sums to 0.

    Returns
    -------
    (m,) array
    """
    values = np.ascontiguousarray(values, dtype=np.float64)
    covering = len(starts) > 0 and starts[0] == 0 and ends[-1] == len(values)
    if covering and (ends > starts).all() and (starts[1:] == ends[:-1]).all():
        return np.add.reduceat(values, starts)  # the same sums without a copy
    sums = np.zeros(len(starts))
    filled = np.flatnonzero(ends > starts)
    if len(filled) == 0:
        return sums
    # reduceat sums from one index to the next, so every second result is a real segment
    edges = np.empty(2 * len(filled), dtype=np.int64)
    edges[0::2] = starts[filled]
    edges[1::2] = ends[filled]
    padded = np.append(values, 0.0)
    sums[filled] = np.add.reduceat(padded, edges)[0::2]
    return sums
