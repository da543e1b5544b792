r"""Unit products of two parts put together, units that are split over both included.

With T_p rows, mean z_p and products S_p of deviations in each part, the products of the unit are (Chan, Golub & LeVeque
1983)

    S = S_1 + S_2 + T_1 T_2 / (T_1 + T_2) g g',     g = z_2 - z_1.

Means are measured from one origin in one scale (`mixbridge.moments.pooling`). The frame is taken anew: its products
are those of all rows, ``R'R = F_1'F_1 + F_2'F_2 + sum T_1 T_2 / (T_1 + T_2) g g'``, by QR of the two factors over
the rows of the sum. It is at least as long as each part's own frame R_p in every direction, so that the change
``M = R_p R^-1`` is at most the identity, and products move to it, ``M' S M``, without loss.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Protocol

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from mixbridge.moments.factors import eigen_factor, factor_from_products
from mixbridge.moments.framing import frame_of, framed_rows, places_of, square_of
from mixbridge.moments.key_arrays import same_kind_of_keys
from mixbridge.moments.opened import UNITS_AT_ONCE
from mixbridge.moments.pooling import Described, common_frame, same_design

__all__ = ["ProductsPart", "merged", "varies_within"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]
EPS = float(np.finfo(float).eps)


class ProductsPart(Described, Protocol):
    """`UnitProducts`, seen from here."""

    @property
    def keys(self) -> pd.Index:
        """One key per unit."""

    @property
    def sizes(self) -> NDArray[np.int64]:
        """Unit sizes."""

    @property
    def means(self) -> FloatArray:
        """Mean of the scaled z of each unit."""

    @property
    def frame(self) -> FloatArray:
        """Frame of the products."""

    @property
    def packed(self) -> FloatArray:
        """Framed products of each unit."""


def merged(one: ProductsPart, two: ProductsPart) -> dict[str, Any]:
    """Return the attributes of the products of both parts together.

    Parameters
    ----------
    one, two : UnitProducts
        Units are joined by key.

    Returns
    -------
    dict
        By name of the attribute; units in the order of the first part, then those that only the second has.

    Raises
    ------
    DataError
        If designs, codings or the type of keys differ.
    """
    coding = same_design((one, two), "unit products")
    same_kind_of_keys(one.keys, two.keys)
    apart = one.constant != two.constant
    parts = [_with_constant(part) if apart else _Part(part) for part in (one, two)]
    first, second = parts
    shift, scale = common_frame(
        [one.rows, two.rows],
        [part.shift for part in parts],
        [part.scale for part in parts],
        [part.inside | (part.means != 0.0).any(axis=0) for part in parts],
    )
    place = one.keys.get_indexer(two.keys)
    shared, fresh = np.flatnonzero(place >= 0), np.flatnonzero(place < 0)
    at = place[shared]
    means = [part.means * (part.scale / scale) + (part.shift - shift) / scale for part in parts]
    gap = means[1][shared] - means[0][at]
    fixed = (
        ~first.inside & ~second.inside
    )  # constant within units: two means differ by the rounding of origins only
    reach = np.abs(means[0][at]) + (np.abs(first.shift) + np.abs(second.shift)) / scale
    gap[fixed & (np.abs(gap) <= 4.0 * EPS * reach)] = 0.0
    rows, more = one.sizes[at], two.sizes[shared]
    weight = more / (rows + more)
    extra = gap * np.sqrt(rows * weight)[:, None]
    frames = [part.frame * (part.scale / scale) for part in parts]
    if not shared.size and np.array_equal(frames[0], frames[1]):
        frame = frames[0]
        blocks = [first.packed, second.packed]
    else:
        factors = [part.factor * (part.scale / scale) for part in parts]
        frame = frame_of(np.vstack([*factors, extra]))
        blocks = [_moved(part.packed, own, frame) for part, own in zip(parts, frames, strict=True)]
    packed = np.vstack([blocks[0], blocks[1][fresh]])
    packed[at] += blocks[1][shared] + _outer(framed_rows(extra, frame))
    sizes = np.concatenate([one.sizes, two.sizes[fresh]])
    sizes[at] += more
    levels = np.vstack([means[0], means[1][fresh]])
    levels[at] += gap * weight[:, None]
    found = {
        "constant": one.constant,
        "shift": shift,
        "scale": scale,
        "keys": one.keys.append(two.keys[fresh]),
        "sizes": sizes,
        "means": levels,
        "frame": frame,
        "packed": packed,
        "coding": coding,
    }
    if apart:
        ones = (first.shift == 1.0) & (second.shift == 1.0) & fixed & ~levels.any(axis=0)
        found |= _take_constant(found, one.design, ones)
    return found


def varies_within(part: ProductsPart) -> BoolArray:
    """Return whether each column varies within units by more than rounding of the stored rows.

    Parameters
    ----------
    part : UnitProducts

    Returns
    -------
    ndarray of bool, shape (k,)
        The bound is that of `mixbridge.moments.columns.noise`.
    """
    total = square_of(part.packed.sum(axis=0), len(part.frame))
    squares = np.maximum(np.einsum("ij,ik,kj->j", part.frame, total, part.frame), 0.0)
    between = part.sizes @ part.means**2
    level = np.hypot(part.shift / part.scale, np.sqrt((squares + between) / part.rows))
    stored = 4.0 * EPS * np.sqrt(part.rows) * level
    return np.asarray(np.sqrt(squares) > np.maximum(stored, 1e-12 * np.sqrt(squares + between)))


class _Part:
    """A part with what follows from it: where it varies within units, and a factor of its W."""

    def __init__(self, part: ProductsPart) -> None:
        self.shift, self.scale, self.means = part.shift, part.scale, part.means
        self.frame, self.packed = part.frame, part.packed
        self.inside = varies_within(part)

    @property
    def factor(self) -> FloatArray:
        total = square_of(self.packed.sum(axis=0), len(self.frame))
        inner = factor_from_products(total)
        factor = (eigen_factor(total) if inner is None else inner) @ self.frame
        return np.where(self.inside, factor, 0.0)


def _with_constant(part: ProductsPart) -> _Part:
    """Return the part with the column of ones among the others, where it may vary in the other part."""
    found = _Part(part)
    if part.constant is None:
        return found
    k = len(part.frame)
    at = part.design.index(part.constant)
    old = np.delete(np.arange(k + 1), at)
    frame = np.eye(k + 1)
    frame[np.ix_(old, old)] = part.frame
    packed = np.zeros((len(part.packed), (k + 1) * (k + 2) // 2))
    packed[:, places_of(k + 1)[np.ix_(old, old)][np.triu_indices(k)]] = part.packed
    found.shift, found.scale = np.insert(part.shift, at, 1.0), np.insert(part.scale, at, 1.0)
    found.means, found.frame, found.packed = np.insert(part.means, at, 0.0, axis=1), frame, packed
    found.inside = np.insert(found.inside, at, False)
    return found


def _take_constant(found: dict[str, Any], design: tuple[str, ...], ones: BoolArray) -> dict[str, Any]:
    """Take the first column that is one in both parts out again."""
    candidates = np.flatnonzero(ones[:-1])
    if candidates.size == 0:
        return {"constant": None}
    at, k = int(candidates[0]), len(found["frame"])
    old = np.delete(np.arange(k), at)
    return {
        "constant": design[at],
        **{name: np.delete(found[name], at) for name in ("shift", "scale")},
        "means": np.delete(found["means"], at, axis=1),
        "frame": found["frame"][np.ix_(old, old)],
        "packed": found["packed"][:, places_of(k)[np.ix_(old, old)][np.triu_indices(k - 1)]],
    }


def _moved(packed: FloatArray, own: FloatArray, frame: FloatArray) -> FloatArray:
    """Return packed products in another frame, block by block."""
    k = len(frame)
    change = solve_triangular(frame, own.T, trans="T").T
    upper = np.triu_indices(k)

    def block(rows: FloatArray) -> FloatArray:
        full = np.matmul(change.T, np.matmul(square_of(rows, k), change))
        return np.asarray(full[(slice(None), *upper)])

    return _by_block(packed, block)


def _outer(rows: FloatArray) -> FloatArray:
    """Return the packed products of each row with itself."""
    i, j = np.triu_indices(rows.shape[1])
    return rows[:, i] * rows[:, j]


def _by_block(rows: FloatArray, change: Callable[[FloatArray], FloatArray]) -> FloatArray:
    out = np.empty_like(rows)
    for start in range(0, len(rows), UNITS_AT_ONCE):
        out[start : start + UNITS_AT_ONCE] = change(rows[start : start + UNITS_AT_ONCE])
    return out
