"""A panel with any columns that are constant within units: moments, unit-level means and rows, consistently.

Nothing is read again. A value v_i of unit i has no within products, and its unit mean is itself, so that the open
moments take it as a further entry of the unit means.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.means import design_factor, in_data_units
from mixbridge.moments import Moments, OpenMoments, close, dependency_text, span_of
from mixbridge.panel import Panel
from mixbridge.panel.widened import WidenedPanel

__all__ = ["WithUnitColumns", "add_unit_columns"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True, eq=False)
class WithUnitColumns:
    """A panel with unit-constant columns added.

    Attributes
    ----------
    panel, opened, moments
        The same rows, with the added columns after the given ones.
    kept : tuple of int
        Places of the columns that were added, among those offered.
    dropped : mapping of str to str
        Column not added because it is a combination of others -> that combination.
    """

    panel: Panel
    opened: OpenMoments = field(repr=False)
    moments: Moments = field(repr=False)
    kept: tuple[int, ...]
    dropped: dict[str, str]


def add_unit_columns(
    panel: Panel, opened: OpenMoments, values: FloatArray, names: Sequence[str]
) -> WithUnitColumns:
    """Add columns that are constant within units.

    Parameters
    ----------
    panel, opened
        Of one study.
    values : ndarray of shape (N, q)
        By unit in the order of ``opened.keys``.
    names : sequence of str
        Of the q columns; free of those in use.

    Returns
    -------
    WithUnitColumns
        A column that is a combination of given columns and of added ones before it is not added; a given column is
        never left out.
    """
    raw = len(opened.columns) - 1
    wide = close(_widened(opened, values, tuple(names)))
    full, floor = design_factor(wide)
    span = span_of(full, floor, 1e-7 if wide.note.startswith("ill-conditioned") else 1e-12)
    kept = tuple(int(j) - raw for j in span.kept if j >= raw)
    null, sizes = in_data_units(wide, span.null)
    dropped = {}
    for at, dependency in enumerate(span.dependencies):
        if dependency.column >= raw:
            name = wide.design[dependency.column]
            text = dependency_text(dependency.column, null[:, at], wide.design, sizes)
            dropped[name] = text if dependency.others else f"{name} is the same for all units"
    chosen = np.array(kept, dtype=np.intp)
    used = tuple(names[j] for j in kept)
    widened = _widened(opened, values[:, chosen], used)
    place = opened.keys.get_indexer(panel.unit_keys)
    return WithUnitColumns(
        panel=WidenedPanel(panel, values[:, chosen][place], used),
        opened=widened,
        moments=close(widened),
        kept=kept,
        dropped=dropped,
    )


def _widened(opened: OpenMoments, values: FloatArray, names: tuple[str, ...]) -> OpenMoments:
    p, q = len(opened.columns) - 1, values.shape[1]
    old = np.r_[np.arange(p), p + q]

    def padded(square: FloatArray) -> FloatArray:
        wide = np.zeros((p + q + 1, p + q + 1))
        wide[np.ix_(old, old)] = square
        return wide

    first = values[0] if q else np.zeros(0)
    return OpenMoments(
        columns=(*opened.columns[:-1], *names, opened.columns[-1]),
        keys=opened.keys,
        counts=opened.counts,
        shift=np.r_[opened.shift[:p], first, opened.shift[p:]],
        means=np.hstack([opened.means[:, :p], values - first, opened.means[:, p:]]),
        within=padded(opened.within),
        loss=np.r_[opened.loss[:p], np.ones(q), opened.loss[p:]],
        factor=None if opened.factor is None else padded(opened.factor),
    )
