"""Closed moments without the size classes that few units share, for sites that may not give away single units.

A closed size class holds the summed products of its units' means: with one unit it gives that unit's means away
exactly, with few units nearly so. W holds the rows of all units together and cannot be taken apart from closed
moments: a unit of two or more rows is left out of both W and B only where its own products are at hand. Classes cannot
be put together instead, since each enters the curve with a weight of its own, ``T / (1 + T psi)``.

Shift, scale and magnitude are taken anew from the units that are left. The grand mean of all units would give the
suppressed ones away by subtraction.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from mixbridge.errors import DataError, OptionError
from mixbridge.moments.closed import Moments, close
from mixbridge.moments.opened import OpenMoments
from mixbridge.moments.pooling import recentred
from mixbridge.moments.products import UnitProducts
from mixbridge.moments.products_closing import moments_of

__all__ = ["Suppressed", "suppress"]


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


def suppress(source: UnitProducts | OpenMoments | Moments, threshold: int) -> Suppressed:
    """Leave out the size classes of fewer units than a threshold.

    Parameters
    ----------
    source : UnitProducts, OpenMoments or Moments
        From unit products any class is left out exactly. From the others only one-row units are, which have no part
        in W.
    threshold : int
        From 2 on.

    Returns
    -------
    Suppressed
        That is a selection of units by size: estimates can move, also where size carries information.

    Raises
    ------
    DataError
        If no size class is left, or if a class of several rows per unit would have to be taken out of W without the
        products of its units.
    OptionError
        If the threshold is not a whole number from 2 on.
    """
    if isinstance(threshold, bool) or not isinstance(threshold, int) or threshold < 2:
        raise OptionError(f"threshold={threshold!r} is not allowed; allowed: a whole number from 2 on.")
    if isinstance(source, Moments):
        sizes, counts = source.sizes, source.counts
    else:
        per_unit = source.sizes if isinstance(source, UnitProducts) else source.counts
        sizes, counts = np.unique(per_unit, return_counts=True)
    small = counts < threshold
    if small.all():
        raise DataError(f"every unit size is shared by fewer than {threshold} units: nothing would be left.")
    dropped = sizes[small].tolist()
    left = tuple(
        (size, count, size * count) for size, count in zip(dropped, counts[small].tolist(), strict=True)
    )
    if isinstance(source, UnitProducts):
        kept = source.without_sizes(*dropped) if dropped else source
        moments = moments_of(kept)
    else:
        if max(dropped, default=1) > 1:
            raise DataError(
                f"units of {', '.join(str(size) for size in dropped if size > 1)} rows are fewer than {threshold} of "
                f"their size, and {type(source).__name__} cannot leave them out: W holds the rows of all units "
                "together, and what these units have put in is not kept. Leave them out before that: take UnitProducts "
                "or leave their rows out of the data."
            )
        moments = close(source) if isinstance(source, OpenMoments) else source
        if dropped:
            moments = moments.without_one_row_units()
    if not dropped:
        return Suppressed(moments, threshold, left)
    found = recentred(moments)
    for array in found.values():
        array.setflags(write=False)
    return Suppressed(replace(moments, **found), threshold, left)
