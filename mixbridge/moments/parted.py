"""Moments of parts of the rows that stay where they are, merged unit by unit in buckets.

A part gives its within products and, per unit, a count and a mean. Units go to buckets by a hash of their key, so
that all that is known of a unit meets in one place; a bucket merges it (Chan, Golub & LeVeque 1983), and is closed
on its own. With T_r rows and mean z_r of a unit in its r-th part, a = z_1,

    g_r = z_r - a,   gbar = sum_r T_r g_r / sum_r T_r,   mean = a + gbar,
    W  += sum_r T_r (g_r - gbar)(g_r - gbar)'.

All parts measure from one origin: the mean of a column constant within units is then the same number in each part,
its g_r are zero, and so is its place in W. The order of every sum is that of the parts. The explicit constant is left
out throughout.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import reduce
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError
from mixbridge.moments.opened import _refuse_non_finite, add_by_unit
from mixbridge.moments.parted_look import Grown, Look, grow_part
from mixbridge.panel.parted import Taught, changed
from mixbridge.panel.streaming_values import Distinct

__all__ = [
    "Errand",
    "Part",
    "Piece",
    "Sorting",
    "Taken",
    "Units",
    "Within",
    "add_within",
    "bucket_of",
    "bucket_piece",
    "grown_of",
    "merge_pieces",
    "sort_units",
    "split_by",
    "take_part",
    "within_of",
    "without_pairs",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
_AT_ONCE = 2048
"""Units merged at once: what is made on the way stays in the cache, and is not given back in between."""


@dataclass(frozen=True, slots=True, eq=False)
class Sorting:
    """How units find their bucket.

    Parameters
    ----------
    buckets : int
    as_text : bool
        Whether keys are hashed as text, needed where their type differs between parts.
    """

    buckets: int
    as_text: bool


@dataclass(frozen=True, slots=True, eq=False)
class Errand:
    """What is done with every part.

    Parameters
    ----------
    taught : Taught
        How its rows are laid out.
    columns : tuple of str
        Design columns but the constant, then the outcome.
    origin : ndarray of shape (k,)
        What all means are measured from.
    sorting : Sorting
    """

    taught: Taught
    columns: tuple[str, ...]
    origin: FloatArray
    sorting: Sorting


@dataclass(frozen=True, slots=True)
class Part:
    """Name of a part, and its number of rows used when it was first read."""

    place: str
    used: int


@dataclass(frozen=True, slots=True, eq=False)
class Units:
    """Some units: key, count of rows, and mean from the common origin."""

    keys: pd.Series[Any]
    counts: NDArray[np.int64]
    means: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Within:
    """Within products of some rows, and by how much rounding in their diagonal may be amplified."""

    products: FloatArray
    loss: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Piece:
    """Some units of some parts.

    Parameters
    ----------
    units : Units
    extra : ndarray of shape (k, k)
        What units split between these parts add to W.
    pairs : pandas.DataFrame or None
        Unit and period of every row; None without periods.
    """

    units: Units
    extra: FloatArray
    pairs: pd.DataFrame | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Taken:
    """Moments of a group of parts: within products, and the units by bucket."""

    within: Within
    pieces: tuple[Piece, ...]


def bucket_of(keys: pd.Series[Any], sorting: Sorting) -> IntArray:
    """Return the bucket of each key; it depends on the key and the number of buckets only."""
    if sorting.buckets == 1:
        return np.zeros(len(keys), dtype=np.intp)
    if sorting.as_text:
        keys = keys.astype(object).astype(str)
    plain = keys.to_numpy() if keys.dtype.kind in "iubMm" else keys.to_numpy(dtype=object)
    return (pd.util.hash_array(plain) % np.uint64(sorting.buckets)).astype(np.intp)


def take_part(errand: Errand, part: Part, frame: object) -> Grown | None:
    """Take the moments of one part.

    Parameters
    ----------
    errand : Errand
    part : Part
    frame : pandas.DataFrame
        Its rows.
    """
    return grow_part(errand.taught, part.place, frame)


def grown_of(look: Look) -> Grown | None:
    """Return the moments that the first look at a part has taken."""
    return look.grown


def sort_units(errand: Errand, parts: Sequence[Part], grown: Sequence[Grown | None]) -> Taken:
    """Merge the moments of a few parts, measured from the common origin, and sort their units by bucket.

    Parameters
    ----------
    errand : Errand
    parts : sequence of Part
    grown : sequence of Grown or None
        Their moments.

    Raises
    ------
    DataError
        If the rows are not what they were when they were first read, or a pair of unit and period is repeated.
    """
    measured = [_measured(errand, part, each) for part, each in zip(parts, grown, strict=True)]
    within = add_within([within for within, _ in measured])
    merged = merge_pieces(errand.taught.recipe.keys, [piece for _, piece in measured])
    return Taken(Within(within.products + merged.extra, within.loss), _split(errand, merged))


def _measured(errand: Errand, part: Part, grown: Grown | None) -> tuple[Within, Piece]:
    """Measure the means of a part from the common origin."""
    if grown is None or grown.counts.sum() != part.used:
        raise changed(part.place)
    _refuse_non_finite(grown.total, errand.columns)
    means = (grown.anchors - errand.origin) + grown.offsets
    units = Units(grown.keys, grown.counts, means)
    return Within(grown.within, grown.loss), Piece(units, np.zeros_like(grown.within), _pairs(grown))


def _pairs(grown: Grown) -> pd.DataFrame | None:
    if not grown.rows:
        return None
    codes = np.concatenate([codes for codes, _ in grown.rows])
    periods = pd.concat([period for _, period in grown.rows], ignore_index=True)
    return pd.DataFrame({"unit": grown.keys.iloc[codes].reset_index(drop=True), "period": periods})


def _split(errand: Errand, piece: Piece) -> tuple[Piece, ...]:
    """Sort the units of a piece by bucket, without what they add to W."""
    sorting, units, nothing = errand.sorting, piece.units, np.zeros_like(piece.extra)
    if sorting.buckets == 1:
        return (Piece(units, nothing, piece.pairs),)
    order, cuts = split_by(bucket_of(units.keys, sorting), sorting.buckets)
    pairs: Sequence[pd.DataFrame | None] = [None] * sorting.buckets
    if piece.pairs is not None:
        rows, at = split_by(bucket_of(piece.pairs["unit"], sorting), sorting.buckets)
        pairs = [piece.pairs.iloc[chosen] for chosen in np.split(rows, at)]
    return tuple(
        Piece(
            Units(
                units.keys.iloc[chosen].reset_index(drop=True),
                units.counts[chosen],
                np.take(units.means, chosen, axis=0),
            ),
            nothing,
            pairs[number],
        )
        for number, chosen in enumerate(np.split(order, cuts))
    )


def split_by(bucket: IntArray, buckets: int) -> tuple[IntArray, IntArray]:
    """Return the order by bucket, the given order within, and where each further bucket begins."""
    small = bucket.astype(np.uint16) if buckets < 2**16 else bucket  # sorted by counting
    order = np.argsort(small, kind="stable")
    return order, np.searchsorted(bucket[order], np.arange(1, buckets))


def bucket_piece(number: int, taken: Taken) -> Piece:
    """Return what a group of parts has for one bucket."""
    return taken.pieces[number]


def without_pairs(piece: Piece) -> Piece:
    """Return a bucket, all whose pieces are in one, without the periods that were looked at."""
    return Piece(piece.units, piece.extra)


def within_of(taken: Taken) -> Within:
    """Return the within products of a part."""
    return taken.within


def add_within(parts: Sequence[Within]) -> Within:
    """Add within products, in order."""
    products = reduce(np.add, (part.products for part in parts))
    return Within(products, np.max([part.loss for part in parts], axis=0))


def merge_pieces(names: tuple[str, ...], pieces: Sequence[Piece]) -> Piece:
    """Merge pieces that may hold the same units.

    Parameters
    ----------
    names : tuple of str
        Column of the units and, if given, of the periods.
    pieces : sequence of Piece
        In the order of the parts.

    Raises
    ------
    DataError
        If a pair of unit and period is repeated.
    """
    if len(pieces) == 1:
        _refuse_repeated(names, pieces[0].pairs)
        return pieces[0]
    held = [piece.pairs for piece in pieces if piece.pairs is not None]
    pairs = pd.concat(held, ignore_index=True) if held else None
    _refuse_repeated(names, pairs)
    extra = reduce(np.add, (piece.extra for piece in pieces))
    units = [piece.units for piece in pieces if len(piece.units.counts)]
    if len(units) < 2:
        return Piece(units[0] if units else pieces[0].units, extra, pairs)
    k = extra.shape[0]
    known = Distinct(names[0], whole=True)
    places = [known.enter(part.keys, "a part") for part in units]
    counts = np.zeros(len(known), dtype=np.int64)
    anchors, shift = np.empty((len(known), k)), np.zeros((len(known), k))
    seen = 0
    for part, codes in zip(units, places, strict=True):  # a unit is in each part once: plain indexing adds up
        counts[codes] += part.counts
        new = np.flatnonzero(codes >= seen)  # in the order of their numbers
        anchors[seen : seen + new.size] = np.take(part.means, new, axis=0)
        seen += new.size
        if new.size < codes.size:
            for some in _blocks_of(codes.size):
                at = codes[some]
                gap = part.means[some] - np.take(anchors, at, axis=0)
                gap *= part.counts[some, None]
                add_by_unit(shift, at, gap)
    shift /= counts[:, None]
    more = np.zeros((k, k))
    for part, codes in zip(units, places, strict=True):
        for some in _blocks_of(codes.size):
            at = codes[some]
            if (counts[at] > part.counts[some]).any():
                off = part.means[some] - np.take(anchors, at, axis=0)
                off -= np.take(shift, at, axis=0)
                more += off.T @ (part.counts[some, None] * off)
    anchors += shift
    keys = known.plain(known.series())
    return Piece(Units(keys, counts, anchors), extra + (more + more.T) / 2.0, pairs)


def _blocks_of(size: int) -> list[slice]:
    """Return slices that are small enough to stay in the cache."""
    return [slice(start, start + _AT_ONCE) for start in range(0, size, _AT_ONCE)]


def _refuse_repeated(names: tuple[str, ...], both: pd.DataFrame | None) -> None:
    if both is None:
        return
    again = both.duplicated()
    if again.any():
        unit, period = both[again].iloc[0]
        raise DataError(
            f"Rows repeat a pair of unit and period, for example ({names[0]} {unit}, {names[1]} {period}). Aggregate "
            "them to one row per pair, correct the keys, or leave period out if rows within a unit have no order."
        )
