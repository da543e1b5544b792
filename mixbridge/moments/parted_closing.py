"""Close the units of all buckets in common coordinates, and take the within factor of parts where it is needed."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import reduce
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError
from mixbridge.moments.classes import BLOCK_ROWS, means_products, size_classes
from mixbridge.moments.closed import Moments, _frozen
from mixbridge.moments.factors import (
    eigen_factor,
    factor_from_products,
    factor_from_rows,
    stack_factors,
)
from mixbridge.moments.opened import Block, OpenMoments, within_factor
from mixbridge.moments.parted import Errand, Part, Piece, Within, bucket_of, split_by
from mixbridge.panel.parted import changed, read_rows
from mixbridge.panel.streaming_values import Distinct

__all__ = [
    "Classes",
    "Frame",
    "Summary",
    "close_bucket",
    "factor_of_part",
    "finish",
    "keys_of_part",
    "means_of",
    "pool_classes",
    "settle",
    "summarise",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True, eq=False)
class Summary:
    """What has to be known of all buckets before one can be closed: means over rows, squares around them."""

    units: int
    rows: int
    mean: FloatArray
    squares: FloatArray
    least: FloatArray
    greatest: FloatArray
    extra: FloatArray


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """The coordinates in which every bucket is closed.

    Parameters
    ----------
    names : tuple of str
        Design columns, the constant included, then the outcome.
    constant : str or None
        Name of the constant.
    keep : ndarray of int
        Places of the entries of z that stay, among those that means hold.
    origin, move : ndarray of shape (k,)
        What means are measured from, and the mean over all rows, measured so.
    spread, scale : ndarray
        Root mean square of the entries that stay, around their mean, and the power of two near it.
    units, rows : int
    within : Within
    """

    names: tuple[str, ...]
    constant: str | None
    keep: IntArray
    origin: FloatArray
    move: FloatArray
    spread: FloatArray
    scale: FloatArray
    units: int
    rows: int
    within: Within


@dataclass(frozen=True, slots=True, eq=False)
class Classes:
    """Per size: number of units and the factor of the products of their means."""

    sizes: NDArray[np.int64]
    counts: NDArray[np.int64]
    between: FloatArray


def summarise(bucket: Piece) -> Summary | None:
    """Say of a bucket what the others need to know; None if it is empty."""
    units = bucket.units
    if not len(units.counts):
        return None
    weights = units.counts.astype(float)
    rows = int(units.counts.sum())
    mean = weights @ units.means / rows
    squares = np.zeros_like(mean)
    for start in range(0, len(weights), BLOCK_ROWS):
        some = slice(start, start + BLOCK_ROWS)
        squares += weights[some] @ (units.means[some] - mean) ** 2
    return Summary(
        len(weights), rows, mean, squares, units.means.min(axis=0), units.means.max(axis=0), bucket.extra
    )


def _both(one: Summary, two: Summary) -> Summary:
    rows, gap = one.rows + two.rows, two.mean - one.mean
    return Summary(
        one.units + two.units,
        rows,
        one.mean + gap * (two.rows / rows),
        one.squares + two.squares + gap**2 * (one.rows * (two.rows / rows)),
        np.minimum(one.least, two.least),
        np.maximum(one.greatest, two.greatest),
        one.extra + two.extra,
    )


def settle(errand: Errand, names: tuple[str, ...], within: Within, summaries: list[Summary | None]) -> Frame:
    """Choose the coordinates of the closed moments, as `mixbridge.moments.close` does.

    Parameters
    ----------
    errand : Errand
    names : tuple of str
        Design columns, an explicit constant included, then the outcome.
    within : Within
        Of all parts.
    summaries : list of Summary or None
        Of the buckets.

    Raises
    ------
    DataError
        If there is one unit only, or the outcome never changes.
    """
    columns, unit = errand.columns, errand.taught.recipe.keys[0]
    whole = reduce(_both, [summary for summary in summaries if summary is not None])
    if whole.units == 1:
        raise DataError(
            f"All {whole.rows} rows used belong to one unit: a variance between units is not defined. Check that "
            f"unit={unit!r} names the grouping column."
        )
    products = within.products + whole.extra
    level = (np.diag(products) == 0.0) & (whole.least == whole.greatest)
    if level[-1]:
        raise DataError(
            f"the outcome {columns[-1]!r} has the same value in every row: nothing can be fitted."
        )
    keep = np.arange(len(columns))
    constant = None
    if len(columns) < len(names):
        constant = names[int(errand.taught.design.constant or 0)]
    else:  # a column of ones that the formula does not call a constant
        ones = np.flatnonzero(level[:-1] & (whole.least + errand.origin == 1.0)[:-1])
        if ones.size:
            constant, keep = columns[ones[0]], np.delete(keep, ones[0])
    spread = np.sqrt((np.diag(products) + whole.squares)[keep] / whole.rows)
    return Frame(
        names,
        constant,
        keep,
        errand.origin,
        whole.mean,
        spread,
        np.exp2(np.round(np.log2(np.where(spread > 0.0, spread, 1.0)))),
        whole.units,
        whole.rows,
        Within(products, within.loss),
    )


def close_bucket(frame: Frame, bucket: Piece) -> Classes:
    """Gather the means of a bucket by unit size, as `mixbridge.moments.close` does."""
    k = frame.keep.size + 1
    counts, means = bucket.units.counts, bucket.units.means
    if not len(counts):
        return Classes(np.zeros(0, dtype=np.int64), np.zeros(0, dtype=np.int64), np.zeros((0, k, k)))
    sizes, numbers, order = size_classes(counts)
    axes, unit = np.append(0, frame.keep + 1), np.append(1.0, frame.scale)
    between = np.zeros((len(sizes), k, k))
    for at, chosen in enumerate(np.split(order, np.cumsum(numbers)[:-1])):
        found = None
        if chosen.size > 8 * k:
            products = means_products(means, chosen, frame.move)
            found = factor_from_products(products[axes[:, None], axes] / np.outer(unit, unit))
        if found is None:
            found = _factor_of_means((means[chosen] - frame.move)[:, frame.keep] / frame.scale)
        between[at] = found
    return Classes(sizes.astype(np.int64), numbers.astype(np.int64), between)


def _factor_of_means(rows: FloatArray) -> FloatArray:
    """Return the triangular factor of ``(1, rows)``."""
    return factor_from_rows(np.column_stack([np.ones(len(rows)), rows]))


def pool_classes(parts: Sequence[Classes]) -> Classes:
    """Put the size classes of different units together."""
    sizes = np.unique(np.concatenate([part.sizes for part in parts]))
    counts = np.zeros(len(sizes), dtype=np.int64)
    factors: list[list[FloatArray]] = [[] for _ in sizes]
    for part in parts:
        for place, count, factor in zip(
            np.searchsorted(sizes, part.sizes), part.counts, part.between, strict=True
        ):
            counts[place] += count
            factors[place].append(factor)
    between = [found[0] if len(found) == 1 else stack_factors(*found) for found in factors]
    return Classes(sizes, counts, np.array(between))


def finish(frame: Frame, classes: Classes, factor: FloatArray | None = None) -> Moments:
    """Close: put coordinates, size classes and the within factor together.

    Parameters
    ----------
    frame : Frame
    classes : Classes
    factor : ndarray of shape (k, k), optional
        Within factor from the rows; from the products unless given.
    """
    note = "within products by QR of unit-centred rows, part by part"
    if factor is None:
        factor = factor_from_products(frame.within.products)
        note = "within products of rows measured from their unit's first, part by part"
    if factor is None:
        factor = eigen_factor(frame.within.products)
        note = "ill-conditioned within products without a second pass over the rows"
    shift = (frame.origin + frame.move)[frame.keep]
    return _frozen(
        Moments(
            design=frame.names[:-1],
            constant=frame.constant,
            outcome=frame.names[-1],
            shift=shift,
            scale=frame.scale,
            magnitude=np.hypot(frame.spread, shift),
            sizes=classes.sizes,
            counts=classes.counts,
            within=factor[:, frame.keep] / frame.scale,
            between=classes.between,
            note=note,
        )
    )


def keys_of_part(errand: Errand, part: Part, frame: object) -> tuple[pd.Series[Any], ...]:
    """Return the unit keys of one part by bucket."""
    units = Distinct(errand.taught.recipe.keys[0], whole=True)
    for rows in read_rows(errand.taught, part.place, frame):
        units.add(rows.key, rows.place)
    keys = units.plain(units.series())
    order, cuts = split_by(bucket_of(keys, errand.sorting), errand.sorting.buckets)
    return tuple(keys.iloc[chosen] for chosen in np.split(order, cuts))


def means_of(number: int, keys: tuple[pd.Series[Any], ...], bucket: Piece) -> FloatArray:
    """Return the means of the units that a part has in one bucket."""
    places = pd.Index(bucket.units.keys).get_indexer(pd.Index(keys[number]))
    means: FloatArray = np.take(bucket.units.means, places, axis=0)
    return means


def factor_of_part(
    errand: Errand,
    settled: Frame,
    part: Part,
    frame: object,
    found: tuple[tuple[pd.Series[Any], ...], Sequence[FloatArray]],
) -> FloatArray:
    """Take the within factor of the rows of one part, measured from the means of their units over all parts.

    Parameters
    ----------
    errand : Errand
    settled : Frame
    part : Part
    frame : pandas.DataFrame
        Its rows.
    found : tuple of (tuple of pandas.Series, sequence of ndarray)
        Keys of the part's units by bucket, and their means.
    """
    keys, means = found
    known = pd.Index(pd.concat(list(keys), ignore_index=True))
    opened = OpenMoments(
        errand.columns,
        known,
        np.ones(len(known), dtype=np.int64),
        settled.origin,
        np.concatenate(list(means)),
        settled.within.products,
        settled.within.loss,
    )
    return within_factor(_blocks(errand, part, frame, known), opened)


def _blocks(errand: Errand, part: Part, frame: object, known: pd.Index) -> Iterator[Block]:
    units = Distinct(errand.taught.recipe.keys[0], whole=True)
    seen = 0
    for rows in read_rows(errand.taught, part.place, frame):
        codes = np.asarray(known.get_indexer(pd.Index(units.plain(rows.key)))).astype(np.intp)
        seen += len(codes)
        for start in range(0, len(codes), BLOCK_ROWS):
            z = rows.z[start : start + BLOCK_ROWS]
            yield codes[start : start + BLOCK_ROWS], z[:, :-2], z[:, -2]
    if seen != part.used:
        raise changed(part.place)
