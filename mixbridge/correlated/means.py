"""Unit means as further columns, from moments alone.

The mean of a column over its unit does not vary within the unit, so its within products are zero, and on
unit means it equals
the column it came from: every product is already in the moments, and the means are those of the rows used.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from mixbridge.moments import Moments, dependency_text, noise, span_of

__all__ = ["WithMeans", "design_factor", "in_data_units", "varying_columns", "with_unit_means"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class WithMeans:
    """Moments with unit means added.

    Attributes
    ----------
    moments : Moments
        The design columns as before, then the means, then the outcome.
    source : mapping of str to str
        Added column -> the column whose unit mean it is.
    dropped : mapping of str to str
        Mean left out -> what it is a combination of.
    """

    moments: Moments
    source: Mapping[str, str]
    dropped: Mapping[str, str]


def with_unit_means(moments: Moments, means_of: Collection[str] | None = None) -> WithMeans:
    """Add the unit mean of every column that varies within units, or of some of them.

    A mean that is a combination of the columns given and of means already added is left out; a given column
    never is.

    Parameters
    ----------
    moments : Moments
    means_of : collection of str, optional
        Design columns whose means are added; those among them that do not vary within units are passed over.

    Returns
    -------
    WithMeans
    """
    columns = moments.columns
    varying = [j for j in _varying(moments) if means_of is None or columns[j] in means_of]
    wide = _widened(moments, varying, _names(moments, varying))
    full, floor = design_factor(wide)
    span = span_of(full, floor, 1e-7 if moments.note.startswith("ill-conditioned") else 1e-12)
    raw = len(moments.design)
    kept = [int(j) - raw for j in span.kept if j >= raw]
    null, sizes = in_data_units(wide, span.null)
    dropped = {}
    for at, dependency in enumerate(span.dependencies):
        name = wide.design[dependency.column]
        if dependency.column >= raw:
            text = dependency_text(dependency.column, null[:, at], wide.design, sizes)
            dropped[name] = text if dependency.others else f"{name} is the same for all units"
    added = tuple(wide.design[raw + j] for j in kept)
    chosen = [varying[j] for j in kept]
    return WithMeans(
        _widened(moments, chosen, added), dict(zip(added, (columns[j] for j in chosen), strict=True)), dropped
    )


def varying_columns(moments: Moments) -> tuple[str, ...]:
    """Return the design columns that vary within units, beyond what rounding of the data can produce."""
    return tuple(moments.columns[j] for j in _varying(moments))


def _varying(moments: Moments) -> list[int]:
    bound = noise(moments)
    length = np.sqrt((moments.within**2).sum(axis=0))
    return [j for j in range(len(moments.columns) - 1) if length[j] > bound[j]]


def _names(moments: Moments, varying: list[int]) -> tuple[str, ...]:
    taken, names = set(moments.design) | {moments.outcome}, []
    for j in varying:
        name = f"mean({moments.columns[j]})"
        while name in taken:
            name = f"unit_{name}"
        taken.add(name)
        names.append(name)
    return tuple(names)


def _widened(moments: Moments, varying: list[int], names: tuple[str, ...]) -> Moments:
    """Return moments with the unit means of some columns put before the outcome."""
    k, q = len(moments.columns), len(varying)
    picks = np.array(varying, dtype=np.intp)
    weights = moments.sizes.astype(float)
    squares = np.einsum("g,gri->i", weights, moments.between[:, :, 1:] ** 2)[picks]
    spread = np.sqrt(squares / moments.rows)
    ratio = np.exp2(
        np.round(np.log2(np.where(spread > 0.0, spread, 1.0)))
    )  # the mean's own unit, in those of its column
    last = k - 1
    within = np.zeros((moments.within.shape[0] + q, k + q))
    within[: -q or None, :last] = moments.within[:, :last]
    within[: -q or None, -1] = moments.within[:, last]
    groups, rows, _ = moments.between.shape
    between = np.zeros((groups, rows + q, k + 1 + q))
    between[:, :rows, :k] = moments.between[:, :, :k]
    between[:, :rows, k : k + q] = moments.between[:, :, 1 + picks] / ratio
    between[:, :rows, -1] = moments.between[:, :, k]
    order = np.concatenate([np.arange(last), picks, [last]]).astype(np.intp)
    scale = moments.scale[order].copy()
    scale[last : last + q] *= ratio
    changed = replace(
        moments,
        design=(*moments.design, *names),
        shift=moments.shift[order],
        scale=scale,
        magnitude=moments.magnitude[order],
        within=within,
        between=between,
    )
    for array in (changed.shift, changed.scale, changed.magnitude, changed.within, changed.between):
        array.setflags(write=False)
    return changed


def design_factor(moments: Moments) -> tuple[FloatArray, FloatArray]:
    """Return a factor of X'X in scaled columns (centred beside a constant), and their rounding floors."""
    columns, bound = moments.columns, noise(moments)
    weights = np.sqrt(moments.sizes.astype(float))[:, None]
    factor, floor = [], np.zeros(len(moments.design))
    for j, name in enumerate(moments.design):
        level, inside = moments.between[:, :, 0], np.zeros(moments.within.shape[0])
        if name != moments.constant:
            at = columns.index(name)
            inside, floor[j] = moments.within[:, at], bound[at]
            origin = 0.0 if moments.constant is not None else moments.shift[at] / moments.scale[at]
            level = moments.between[:, :, at + 1] + origin * level
        factor.append(np.concatenate([inside, (weights * level).ravel()]))
    return np.column_stack(factor), floor


def in_data_units(moments: Moments, null: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return combinations of scaled columns in the columns themselves, and the typical size of each."""
    sizes, shift = np.ones(len(moments.design)), np.zeros(len(moments.design))
    for j, name in enumerate(moments.design):
        if name != moments.constant:
            at = moments.columns.index(name)
            sizes[j], shift[j] = moments.scale[at], moments.shift[at]
    plain = null / sizes[:, None]
    if moments.constant is not None:
        plain[moments.design.index(moments.constant)] -= shift @ plain
    return plain, sizes
