"""Moments from the products of some units: what a refit without others, or with units repeated, starts from.

Nothing is subtracted here: sums run over the units that are left, measured from their own mean. So this is exact
where a unit that is left out dominated, and it costs one pass over the unit products.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError, OptionError
from mixbridge.moments import Moments, factor_from_rows
from mixbridge.moments.factors import factor_from_products
from mixbridge.moments.products import UnitProducts

__all__ = ["keyed", "moments_of", "without"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

DIGITS_LOST = "ill-conditioned within products without a second pass over the rows"
"""Note of `Moments` that widens the tolerance for dependencies: the products, not the rows, carry the digits."""

NOTHING = 1e-7
"""Length of a direction within units, as a share of the longest, that products cannot tell from rounding: its square
is 1e-14."""
CONSTANT = 1e-12
"""Spread, as a share of the spread over all units, that is rounding of a column with one value in the units left."""


def moments_of(products: UnitProducts, times: IntArray | None = None) -> Moments:
    """Close the products of units to moments; a unit may count several times, as that many units of their own.

    Parameters
    ----------
    products : UnitProducts
    times : ndarray of int, shape (N,), optional
        How often each unit counts, zero or more; once unless given.

    Returns
    -------
    Moments
        Measured from the mean of the rows that count.

    Raises
    ------
    DataError
        If no unit is left, or if the outcome has one value in all that is left.
    """
    count = np.ones(products.units, dtype=np.intp) if times is None else np.asarray(times)
    if count.shape != (products.units,) or count.min(initial=0) < 0:
        raise OptionError(f"times has one count of zero or more for each of the {products.units} units.")
    left = np.flatnonzero(count)
    if left.size == 0:
        raise DataError("no unit is left.")
    repeats = count[left].astype(float)
    sizes, means = products.sizes[left], products.means[left]
    rows = float(repeats @ sizes)
    centre = (repeats * sizes) @ means / rows
    means = means - centre
    k = products.frame.shape[0]
    within = _within_factor(repeats @ products.packed[left], products.frame, k)
    between_squares = (repeats * sizes) @ means**2
    spread = np.sqrt(((within[0] ** 2).sum(axis=0) + between_squares) / rows)
    spread[spread <= CONSTANT] = 0.0
    within[0][:, spread == 0.0] = means[:, spread == 0.0] = 0.0
    if not spread[-1] > 0.0:
        raise DataError(
            f"the outcome {products.outcome!r} has the same value in every row: nothing can be fitted."
        )
    ratio = np.exp2(-np.round(np.log2(np.where(spread > 0.0, spread, 1.0))))
    distinct, place = np.unique(sizes, return_inverse=True)
    table = np.column_stack([np.ones(left.size), means * ratio]) * np.sqrt(repeats)[:, None]
    shift = products.shift + products.scale * centre
    return Moments(
        design=products.design,
        constant=products.constant,
        outcome=products.outcome,
        shift=shift,
        scale=products.scale / ratio,
        # means and products were stored to a rounding of the old scale, whatever is left of a column
        magnitude=np.maximum(np.abs(shift + products.scale * means).max(axis=0), products.scale),
        sizes=distinct,
        counts=np.bincount(place, weights=repeats).astype(np.int64),
        within=within[0] * ratio,
        between=np.array([_between_factor(table[place == at]) for at in range(distinct.size)]),
        note=within[1],
    )


def without(products: UnitProducts, positions: IntArray) -> Moments:
    """Return the moments of all units but some.

    Parameters
    ----------
    products : UnitProducts
    positions : ndarray of int
        Units to leave out.

    Returns
    -------
    Moments
    """
    count = np.ones(products.units, dtype=np.intp)
    count[positions] = 0
    return moments_of(products, count)


def keyed(products: UnitProducts, keys: pd.Index) -> IntArray:
    """Return the positions of units by key; refuses keys that are not there."""
    at = products.keys.get_indexer(keys)
    if (at < 0).any():
        missing = list(keys[at < 0][:5])
        raise OptionError(f"no such unit: {', '.join(map(str, missing))}.")
    return np.asarray(at, dtype=np.intp)


def _within_factor(packed: FloatArray, frame: FloatArray, k: int) -> tuple[FloatArray, str]:
    total = np.zeros((k, k))
    total[np.triu_indices(k)] = packed
    total = total + np.triu(total, 1).T
    factor = factor_from_products(total)
    if factor is None:
        factor = _cut_factor(total) @ frame
        factor[:, np.sqrt((factor**2).sum(axis=0)) <= NOTHING * np.sqrt((frame**2).sum(axis=0))] = 0.0
        return factor, DIGITS_LOST
    return factor @ frame, "within products of units"


def _cut_factor(products: FloatArray) -> FloatArray:
    """Return a factor of products from which directions that are rounding are taken out."""
    length = np.sqrt(np.maximum(np.diag(products), 0.0))
    safe = np.where(length > 0.0, length, 1.0)
    values, vectors = np.linalg.eigh(products / np.outer(safe, safe))
    kept = np.where(values > NOTHING**2 * values[-1], values, 0.0)
    return np.asarray(np.sqrt(kept)[:, None] * vectors.T * length)


def _between_factor(rows: FloatArray) -> FloatArray:
    k = rows.shape[1]
    factor = factor_from_products(rows.T @ rows) if rows.shape[0] > 8 * k else None
    return factor_from_rows(rows) if factor is None else factor
