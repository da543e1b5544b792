"""Ranges of several coefficients over the variance ratio, on one grid that they share."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import scipy

from mixbridge.inference.pivot import no_pivot, pivot_of
from mixbridge.ratio import Curve
from mixbridge.reconcile.path import changes_of_answer, range_inside
from mixbridge.reconcile.path_points import along, extrema, search_grid

__all__ = ["CoefficientRange", "coefficient_ranges"]

POINTS = 66
"""Ratios per unit size on which extrema and changes are looked for."""


@dataclass(frozen=True, slots=True)
class CoefficientRange:
    """How far one coefficient moves with the variance ratio; fields as in `mixbridge.reconcile.path.Path`."""

    term: str
    range_all: tuple[float, float]
    range_allowed: tuple[float, float]
    changes: tuple[tuple[float, int, int], ...]


def coefficient_ranges(
    curve: Curve, terms: Iterable[str], *, confidence: float = 0.95
) -> tuple[CoefficientRange, ...]:
    """Return what `coefficient_path` says of ranges and changes, for several coefficients at once.

    Parameters
    ----------
    curve : Curve
    terms : iterable of str
        Names among ``curve.names``.
    confidence : float
        Level of the exact set; intervals have its normal quantile.

    Returns
    -------
    tuple of CoefficientRange
    """
    quantile = float(scipy.stats.norm.isf(0.5 * (1.0 - confidence)))
    seen = along(curve, search_grid(curve, POINTS))
    allowed = None if no_pivot(curve) is not None else pivot_of(curve).ratio_set(confidence)
    found = []
    for term in terms:
        at = curve.names.index(term)
        turns = extrema(curve, seen, at)
        values = seen.beta[[0, -1], at]
        if turns:
            values = np.append(values, along(curve, np.array(turns)).beta[:, at])
        found.append(
            CoefficientRange(
                term,
                (float(values.min()), float(values.max())),
                range_inside(curve, allowed, turns, at),
                tuple(changes_of_answer(curve, seen, at, quantile)),
            )
        )
    return tuple(found)
