"""Closed moments without the size classes that few units share, for sites that may not give away single units.

A closed size class holds the summed products of its units' means: with one unit it gives that unit's means away
exactly, with few units nearly so. The within products W hold all units together and cannot be taken apart from closed
moments, so that a unit is left out of both only where its own products are at hand.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from mixbridge.errors import DataError, OptionError
from mixbridge.moments.closed import Moments, close
from mixbridge.moments.factors import factor_from_products
from mixbridge.moments.opened import OpenMoments
from mixbridge.moments.products import UnitProducts

__all__ = ["Suppressed", "moments_of", "suppress"]


@dataclass(frozen=True, slots=True)
class Suppressed:
    """Moments without small size classes.

    Attributes
    ----------
    moments : Moments
        Of the units that are left, as if the others had never been there.
    threshold : int
        Size classes of fewer units were left out.
    left_out : tuple of (int, int, int)
        Size, units and rows of each class left out.
    """

    moments: Moments
    threshold: int
    left_out: tuple[tuple[int, int, int], ...]


def suppress(products: UnitProducts, threshold: int) -> Suppressed:
    """Leave out the size classes of fewer units than a threshold.

    Parameters
    ----------
    products : UnitProducts
    threshold : int
        From 2 on.

    Returns
    -------
    Suppressed
        That is a selection of units by size: estimates can move, also where size carries information.

    Raises
    ------
    DataError
        If no size class is left.
    OptionError
        If the threshold is not a whole number from 2 on.
    """
    if isinstance(threshold, bool) or not isinstance(threshold, int) or threshold < 2:
        raise OptionError(f"threshold={threshold!r} is not allowed; allowed: a whole number from 2 on.")
    sizes, counts = np.unique(products.sizes, return_counts=True)
    small = counts < threshold
    if small.all():
        raise DataError(f"every unit size is shared by fewer than {threshold} units: nothing would be left.")
    left = tuple(
        (int(size), int(count), int(size * count))
        for size, count in zip(sizes[small], counts[small], strict=True)
    )
    kept = products.without_sizes(*sizes[small].tolist()) if small.any() else products
    return Suppressed(moments_of(kept), threshold, left)


def moments_of(products: UnitProducts) -> Moments:
    """Return the closed moments of the units in unit products.

    Parameters
    ----------
    products : UnitProducts
        All units of a data set, or some of them.

    Returns
    -------
    Moments
    """
    total = products.packed.sum(axis=0)
    k = products.frame.shape[0]
    square = np.zeros((k, k))
    square[np.triu_indices(k)] = total
    square = square + np.triu(square, 1).T
    inner = factor_from_products(square)
    if inner is None:  # directions without any within variation among these units
        values, vectors = np.linalg.eigh(square)
        inner = np.sqrt(np.maximum(values, 0.0))[:, None] * vectors.T
    narrow = inner @ products.frame * products.scale
    means = products.means * products.scale
    columns = (*products.design, products.outcome)
    kept = [j for j, name in enumerate(columns) if name != products.constant or j == len(columns) - 1]
    wide = np.zeros((len(means), len(columns)))
    wide[:, kept] = means
    shift, factor = np.ones(len(columns)), np.zeros((narrow.shape[0], len(columns)))
    shift[kept] = products.shift
    factor[:, kept] = narrow
    within = factor.T @ factor
    fixed = products.within_total()
    for place, column in enumerate(kept):  # a column constant within units stays exactly so
        if fixed[place, place] == 0.0:
            factor[:, column] = 0.0
            within[:, column] = within[column] = 0.0
    return close(
        OpenMoments(
            columns=columns,
            keys=products.keys,
            counts=products.sizes,
            shift=shift,
            means=wide,
            within=within,
            loss=np.ones(len(columns)),
            factor=factor,
            coding=products.coding,
        )
    )
