"""Closed moments from unit products: of all their units, or of those that are left after a selection."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mixbridge.moments.classes import means_products, size_classes
from mixbridge.moments.closed import Moments
from mixbridge.moments.factors import eigen_factor, factor_from_products, factor_from_rows
from mixbridge.moments.framing import square_of
from mixbridge.moments.products import UnitProducts
from mixbridge.moments.products_merging import varies_within

__all__ = ["moments_of"]

FloatArray = NDArray[np.float64]


def moments_of(products: UnitProducts) -> Moments:
    """Return the closed moments of the units in unit products.

    Parameters
    ----------
    products : UnitProducts
        All units of a data set, some of them, or those of several sites.

    Returns
    -------
    Moments
        In the shift and scale of the products, so that the two go together: with
        ``mixbridge.from_moments(moments_of(products), products=products)`` cluster-robust figures are there too.
    """
    k = products.frame.shape[0]
    total = square_of(products.packed.sum(axis=0), k)
    factor, note = factor_from_products(total), "within products of units, summed"
    if factor is None:  # some direction has next to no within variation among these units
        factor, note = eigen_factor(total), "ill-conditioned within products, summed over units"
    within = np.where(varies_within(products), factor @ products.frame, 0.0)
    sizes, counts, order = size_classes(products.sizes)
    between = np.array([_between(products.means, units) for units in np.split(order, np.cumsum(counts)[:-1])])
    squares = sizes @ (between[:, :, 1:] ** 2).sum(axis=1)
    level = np.einsum("g,gr,grj->j", sizes.astype(float), between[:, :, 0], between[:, :, 1:]) / products.rows
    spread = (within**2).sum(axis=0) / products.rows + np.maximum(squares / products.rows - level**2, 0.0)
    magnitude = np.hypot(products.shift + products.scale * level, products.scale * np.sqrt(spread))
    arrays = {
        "shift": products.shift,
        "scale": products.scale,
        "magnitude": magnitude,
        "sizes": sizes.astype(np.int64),
        "counts": counts.astype(np.int64),
        "within": within,
        "between": between,
    }
    for array in arrays.values():
        array.setflags(write=False)
    return Moments(
        design=products.design,
        constant=products.constant,
        outcome=products.outcome,
        note=note,
        coding=products.coding,
        **arrays,
    )


def _between(means: FloatArray, units: NDArray[np.intp]) -> FloatArray:
    """Return the factor of the products of ``(1, mean)`` over some units, as in `mixbridge.moments.close`."""
    width = means.shape[1] + 1
    if units.size > 8 * width:
        found = factor_from_products(means_products(means, units, np.zeros(width - 1)))
        if found is not None:
            return found
    return factor_from_rows(np.column_stack([np.ones(units.size), means[units]]))
