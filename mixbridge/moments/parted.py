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
from mixbridge.moments.classes import BLOCK_ROWS
from mixbridge.moments.opened import _refuse_non_finite
from mixbridge.moments.parted_look import Grown, Look, grow_part
from mixbridge.panel.parted import Taught, changed
from mixbridge.panel.streaming_values import Distinct

__all__ = [
    "Bucket",
    "Errand",
    "Part",
    "Sorting",
    "Taken",
    "Units",
    "Within",
    "add_within",
    "bucket_of",
    "bucket_piece",
    "merge_bucket",
    "sort_units",
    "split_by",
    "take_part",
    "within_of",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


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
class Taken:
    """Moments of one part.

    Parameters
    ----------
    within : Within
    units : tuple of Units
        By bucket.
    pairs : tuple of pandas.DataFrame
        Unit and period of every row, by bucket; empty without periods.
    """

    within: Within
    units: tuple[Units, ...]
    pairs: tuple[pd.DataFrame, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Bucket:
    """The units of one bucket, and what the parts of split units add to W."""

    units: Units
    extra: FloatArray


def bucket_of(keys: pd.Series[Any], sorting: Sorting) -> IntArray:
    """Return the bucket of each key; it depends on the key and the number of buckets only."""
    if sorting.buckets == 1:
        return np.zeros(len(keys), dtype=np.intp)
    if sorting.as_text:
        keys = keys.astype(object).astype(str)
    plain = keys.to_numpy() if keys.dtype.kind in "iubMm" else keys.to_numpy(dtype=object)
    return (pd.util.hash_array(plain) % np.uint64(sorting.buckets)).astype(np.intp)


def take_part(errand: Errand, part: Part, frame: object) -> Taken:
    """Take the moments of one part.

    Parameters
    ----------
    errand : Errand
    part : Part
    frame : pandas.DataFrame
        Its rows.
    """
    return _sorted(errand, part, grow_part(errand.taught, part.place, frame))


def sort_units(errand: Errand, part: Part, look: Look) -> Taken:
    """Sort the units of moments that the first look at a part has taken."""
    return _sorted(errand, part, look.grown)


def _sorted(errand: Errand, part: Part, grown: Grown | None) -> Taken:
    """Measure means from the common origin, and sort units by bucket."""
    if grown is None or grown.counts.sum() != part.used:
        raise changed(part.place)
    _refuse_non_finite(grown.total, errand.columns)
    sorting = errand.sorting
    bucket = bucket_of(grown.keys, sorting)
    order, cuts = split_by(bucket, sorting.buckets)
    units = tuple(
        Units(
            grown.keys.iloc[chosen].reset_index(drop=True),
            grown.counts[chosen],
            _taken(grown.anchors - errand.origin, chosen) + np.take(grown.offsets, chosen, axis=0),
        )
        for chosen in np.split(order, cuts)
    )
    return Taken(Within(grown.within, grown.loss), units, _pairs(grown, bucket, sorting.buckets))


def _taken(anchors: FloatArray, chosen: IntArray) -> FloatArray:
    """Return what some units are measured from."""
    return anchors if len(anchors) == 1 else np.take(anchors, chosen, axis=0)


def _pairs(grown: Grown, bucket: IntArray, buckets: int) -> tuple[pd.DataFrame, ...]:
    if not grown.rows:
        return ()
    codes = np.concatenate([codes for codes, _ in grown.rows])
    periods = pd.concat([period for _, period in grown.rows], ignore_index=True)
    both = pd.DataFrame({"unit": grown.keys.iloc[codes].reset_index(drop=True), "period": periods})
    order, cuts = split_by(bucket[codes], buckets)
    return tuple(both.iloc[chosen] for chosen in np.split(order, cuts))


def split_by(bucket: IntArray, buckets: int) -> tuple[IntArray, IntArray]:
    """Return the order by bucket, the given order within, and where each further bucket begins."""
    order = np.argsort(bucket, kind="stable")
    return order, np.searchsorted(bucket[order], np.arange(1, buckets))


def bucket_piece(number: int, taken: Taken) -> tuple[Units, pd.DataFrame | None]:
    """Return what a part has for one bucket."""
    return taken.units[number], taken.pairs[number] if taken.pairs else None


def within_of(taken: Taken) -> Within:
    """Return the within products of a part."""
    return taken.within


def add_within(parts: Sequence[Within]) -> Within:
    """Add within products, in order."""
    products = reduce(np.add, (part.products for part in parts))
    return Within(products, np.max([part.loss for part in parts], axis=0))


def merge_bucket(names: tuple[str, ...], pieces: Sequence[tuple[Units, pd.DataFrame | None]]) -> Bucket:
    """Merge what the parts have for one bucket.

    Parameters
    ----------
    names : tuple of str
        Column of the units and, if given, of the periods.
    pieces : sequence
        In the order of the parts.

    Raises
    ------
    DataError
        If a pair of unit and period is repeated.
    """
    _refuse_repeated(names, [pairs for _, pairs in pieces if pairs is not None])
    units = [units for units, _ in pieces if len(units.counts)]
    k = pieces[0][0].means.shape[1]
    if not units:
        return Bucket(pieces[0][0], np.zeros((k, k)))
    known = Distinct(names[0], whole=True)
    places = [known.enter(part.keys, "a part") for part in units]
    counts = np.zeros(len(known), dtype=np.int64)
    anchors, shift = np.empty((len(known), k)), np.zeros((len(known), k))
    seen = 0
    for part, codes in zip(units, places, strict=True):  # a unit is in each part once: plain indexing adds up
        counts[codes] += part.counts
        new, old = np.flatnonzero(codes >= seen), np.flatnonzero(codes < seen)
        anchors[codes[new]] = part.means[new]
        gap = part.means[old] - anchors[codes[old]]
        shift[codes[old]] += part.counts[old, None] * gap
        seen += new.size
    shift /= counts[:, None]
    extra = np.zeros((k, k))
    for part, codes in zip(units, places, strict=True):
        split = np.flatnonzero(counts[codes] > part.counts)
        for start in range(0, split.size, BLOCK_ROWS):
            some = split[start : start + BLOCK_ROWS]
            off = (part.means[some] - anchors[codes[some]]) - shift[codes[some]]
            extra += off.T @ (part.counts[some, None] * off)
    anchors += shift
    keys = known.plain(known.series())
    return Bucket(Units(keys, counts, anchors), (extra + extra.T) / 2.0)


def _refuse_repeated(names: tuple[str, ...], pairs: Sequence[pd.DataFrame]) -> None:
    if not pairs:
        return
    both = pd.concat(pairs, ignore_index=True)
    again = both.duplicated()
    if again.any():
        unit, period = both[again].iloc[0]
        raise DataError(
            f"Rows repeat a pair of unit and period, for example ({names[0]} {unit}, {names[1]} {period}). Aggregate "
            "them to one row per pair, correct the keys, or leave period out if rows within a unit have no order."
        )
