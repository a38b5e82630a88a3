"""Fewer points to draw, with every peak still among them.

Of each bucket of consecutive rows the least and the largest value are kept, at their own rows. A line through these
touches every extreme of the whole, and as long as a bucket is no wider than what the eye or the printer can part, it
looks like the line through all rows.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Index = NDArray[np.intp]

__all__ = ["bucket_size", "extremes", "run_ends"]


def bucket_size(rows: int, buckets: int) -> int:
    """Rows a bucket so that there are at most `buckets`; 1 where all rows may be drawn as they are."""
    return 1 if rows <= 2 * buckets else -(-rows // buckets)


def extremes(values: Array, size: int) -> Index:
    """Rows (K, C) at which each column of values (N, C) is least and largest within each bucket of `size` rows.

    K is twice the number of buckets, rows ascend, and one that is both stands twice. With `size` 1 every row once.
    What is not a number counts only where a whole bucket has nothing else: its first row then stands for the gap.
    """
    count, columns = values.shape
    if size == 1:
        return np.repeat(np.arange(count)[:, None], columns, axis=1)
    buckets = -(-count // size)
    padded = np.full((buckets * size, columns), np.nan)
    padded[:count] = values
    cube = padded.reshape(buckets, size, columns)
    gap = np.isnan(cube)
    low = np.where(gap, np.inf, cube).argmin(axis=1)
    high = np.where(gap, -np.inf, cube).argmax(axis=1)
    both = np.sort(np.stack([low, high], axis=1), axis=1)
    return np.asarray((both + (np.arange(buckets) * size)[:, None, None]).reshape(2 * buckets, columns))


def run_ends(values: NDArray[np.int64]) -> Index:
    """Rows after which a column of whole numbers (N,) changes, and N: the ends of its runs, for N above 0."""
    return np.append(np.flatnonzero(np.diff(values)) + 1, len(values))
