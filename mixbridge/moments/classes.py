"""Units gathered by size, and the products of their means."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["means_products", "size_classes"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BLOCK_ROWS = 8192
"""Units whose means are multiplied out at once."""


def size_classes(counts: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Return the distinct unit sizes, the number of units of each, and the units in order of size."""
    short = counts.astype(np.uint16) if counts.max() < 2**16 else counts  # sorted by radix
    order = np.argsort(short, kind="stable")
    ordered = counts[order]
    starts = np.flatnonzero(np.diff(ordered, prepend=0))
    return ordered[starts], np.diff(starts, append=counts.size), order


def means_products(means: FloatArray, units: IntArray, move: FloatArray) -> FloatArray:
    """Return the products of ``(1, mean - move)`` over some units."""
    k = means.shape[1]
    products = np.zeros((k + 1, k + 1))
    products[0, 0] = units.size
    for start in range(0, units.size, BLOCK_ROWS):
        rows = np.take(means, units[start : start + BLOCK_ROWS], axis=0)
        rows -= move
        products[1:, 1:] += rows.T @ rows
        products[0, 1:] += np.ones(rows.shape[0]) @ rows
    products[1:, 0] = products[0, 1:]
    return products
