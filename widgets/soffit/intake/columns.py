"""Sums over many columns at a time, with small temporaries whatever the number of series."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

__all__ = ["column_blocks", "column_medians", "longest_run"]

Floats = NDArray[np.float64]


def column_blocks(count: int, width: int = 256) -> Iterator[slice]:
    """Slices over columns."""
    for start in range(0, count, width):
        yield slice(start, min(start + width, count))


def column_medians(x: Floats) -> Floats:
    """Median of each column of a T×n array without its NaN; NaN for a column that has nothing else."""
    ordered = np.sort(x, axis=0)
    count = len(x) - np.isnan(ordered).sum(axis=0)
    columns = np.arange(x.shape[1])
    low, high = np.maximum((count - 1) // 2, 0), np.minimum(count // 2, len(x) - 1)
    return np.where(count > 0, 0.5 * (ordered[low, columns] + ordered[high, columns]), np.nan)


def longest_run(y: Floats) -> tuple[int, int]:
    """Start and length of the longest stretch of equal values of one series."""
    edges = np.flatnonzero(np.concatenate([[True], y[1:] != y[:-1], [True]]))
    lengths = np.diff(edges)
    longest = int(lengths.argmax())
    return int(edges[longest]), int(lengths[longest])
