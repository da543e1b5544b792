"""`UnitProducts`: per unit its size, its means and the products of its rows; what cluster-robust figures need."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from mixbridge.display import Printed
from mixbridge.display.text import span, wrapped
from mixbridge.errors import DataError
from mixbridge.moments.closed import Moments, collect
from mixbridge.moments.files import keyed_arrays, read_arrays, write_arrays
from mixbridge.moments.framing import frame_of, framed_rows, square_of
from mixbridge.moments.opened import Block, Blocks, OpenMoments, add_by_unit
from mixbridge.moments.products_merging import merged

__all__ = ["UnitProducts", "collect_products"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

FORMAT = "mixbridge-unit-products"
ARRAYS = ("shift", "scale", "sizes", "means", "frame", "packed")
CENTRED = 1e-12
"""Root of size times squared distance from the mean that needs no correction: squared it is 1e-24 of the total."""
SCATTER_ROWS = 1024
"""Rows whose products are formed at once when units are scattered: they stay in the cache."""


@dataclass(frozen=True, slots=True, eq=False)
class UnitProducts(Printed):
    """Per unit: the number of rows, the mean of z and the products of deviations from that mean.

    ``z`` holds the design columns without an explicit constant, then the outcome, as in `Moments`; scaled,
    ``(z - shift) / scale``. Deviations are kept in *framed* coordinates f with ``deviation of scaled z = f @ frame``,
    where ``frame`` is the triangular factor of all within products: over all units the framed products add up to
    the identity, so that neither nearly collinear columns nor a close fit cost digits.

    Attributes
    ----------
    design, constant, outcome, shift, scale
        As in `Moments`.
    keys : pandas.Index
        One key per unit.
    sizes : ndarray of int, shape (N,)
        Rows of each unit.
    means : ndarray of shape (N, k)
        Mean of the scaled z of each unit.
    frame : ndarray of shape (k, k)
        Upper triangular.
    packed : ndarray of shape (N, k (k + 1) / 2)
        Upper triangle, row by row, of ``sum_t f_it f_it'``.
    coding : str or None
        As in `OpenMoments`.
    """

    design: tuple[str, ...]
    constant: str | None
    outcome: str
    shift: FloatArray
    scale: FloatArray
    keys: pd.Index
    sizes: NDArray[np.int64]
    means: FloatArray
    frame: FloatArray
    packed: FloatArray
    coding: str | None = None

    def __post_init__(self) -> None:
        """Make the arrays read-only."""
        for name in ("shift", "scale", "sizes", "means", "frame", "packed"):
            getattr(self, name).setflags(write=False)

    def __str__(self) -> str:
        """Return what the products are of."""
        text = (
            f"Products of {self.outcome} on {', '.join(self.design)} for every unit: {self.rows:,} rows, "
            f"{self.units:,} units of {span(self.sizes.min(), self.sizes.max())} rows."
        )
        return "\n".join(wrapped([text]))

    @property
    def units(self) -> int:
        """Number of units N."""
        return int(self.sizes.size)

    @property
    def rows(self) -> int:
        """Number of rows n."""
        return int(self.sizes.sum())

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the entries of z."""
        return (*(name for name in self.design if name != self.constant), self.outcome)

    def framed(self, at: slice | IntArray | None = None) -> FloatArray:
        """Return the framed within products of the units at these positions as full matrices, shape (m, k, k)."""
        packed = self.packed if at is None else self.packed[at]
        return square_of(packed, self.frame.shape[0])

    def within(self, at: slice | IntArray | None = None) -> FloatArray:
        """Return the within products of the scaled z, shape (m, k, k): over all units they add up to W."""
        return np.asarray(self.frame.T @ self.framed(at) @ self.frame)

    def within_total(self) -> FloatArray:
        """Return the within products of the scaled z summed over all units, shape (k, k): W of the moments."""
        total = square_of(self.packed.sum(axis=0), self.frame.shape[0])
        return np.asarray(self.frame.T @ total @ self.frame)

    @classmethod
    def from_arrays(
        cls,
        x: ArrayLike,
        y: ArrayLike,
        codes: ArrayLike,
        names: Sequence[str] | None = None,
        outcome: str = "y",
    ) -> UnitProducts:
        """Take the products of arrays in memory; arguments as for `Moments.from_arrays`, keys are the codes."""
        rows, response = np.asarray(x, dtype=float), np.asarray(y, dtype=float)
        unit = np.asarray(codes)
        if rows.ndim != 2 or response.shape != (rows.shape[0],) or unit.shape != response.shape:
            raise DataError(
                f"x {rows.shape}, y {response.shape} and codes {unit.shape} do not describe the same rows."
            )
        if unit.size == 0 or not np.issubdtype(unit.dtype, np.integer) or unit.min() < 0:
            raise DataError("codes must be non-negative integers, one per row, at least one row.")
        unit = unit.astype(np.intp, copy=False)
        labels = tuple(names) if names is not None else tuple(f"x{j}" for j in range(rows.shape[1]))

        def blocks() -> Iterable[Block]:
            for start in range(0, unit.size, 8192):
                yield unit[start : start + 8192], rows[start : start + 8192], response[start : start + 8192]

        keys = pd.RangeIndex(int(unit.max()) + 1)
        opened, moments = collect(blocks, (*labels, outcome), keys)
        return collect_products(blocks, opened, moments, keys)

    def select(self, at: IntArray | NDArray[np.bool_]) -> UnitProducts:
        """Keep the units at these positions, or where a mask is true."""
        chosen = np.asarray(at)
        if chosen.dtype == bool and chosen.shape != (self.units,):
            raise DataError(f"the mask has {chosen.size} entries for {self.units} units.")
        positions = np.flatnonzero(chosen) if chosen.dtype == bool else chosen.astype(np.intp)
        if positions.size == 0:
            raise DataError("no unit is left.")
        if np.unique(positions).size != positions.size:
            raise DataError("a unit is selected more than once.")
        return self._with(
            self.keys[positions], self.sizes[positions], self.means[positions], self.packed[positions]
        )

    def without_sizes(self, *sizes: int) -> UnitProducts:
        """Leave out every unit of the given sizes (one-row units: ``without_sizes(1)``)."""
        return self.select(~np.isin(self.sizes, sizes))

    def __add__(self, other: UnitProducts) -> UnitProducts:
        """Merge with another part; units in both are joined by key: see `mixbridge.moments.products_merging`.

        Raises
        ------
        DataError
            If columns, coding or the type of keys differ, or if the other part is of another kind.
        """
        if not isinstance(other, UnitProducts):
            raise DataError(
                f"unit products cannot be merged with {type(other).__name__}: gather unit products of both parts."
            )
        return replace(self, **merged(self, other))

    def save(self, path: str | Path) -> None:
        """Write the products as one open file: see `mixbridge.moments.files`."""
        meta = {
            "format": FORMAT,
            "version": 1,
            "design": list(self.design),
            "constant": self.constant,
            "outcome": self.outcome,
            "coding": self.coding,
        }
        write_arrays(path, meta, {name: getattr(self, name) for name in ARRAYS}, self.keys)

    @classmethod
    def load(cls, path: str | Path) -> UnitProducts:
        """Read products written by `save`; refuses a file that is damaged, changed or of another kind."""
        meta, arrays = read_arrays(path, FORMAT, 1, ARRAYS)
        keys = keyed_arrays(path, meta, arrays, "sizes")
        return cls(
            tuple(meta["design"]),
            meta["constant"],
            meta["outcome"],
            keys=keys,
            coding=meta["coding"],
            **arrays,
        )

    def _with(
        self, keys: pd.Index, sizes: NDArray[np.int64], means: FloatArray, packed: FloatArray
    ) -> UnitProducts:
        return UnitProducts(
            self.design,
            self.constant,
            self.outcome,
            self.shift,
            self.scale,
            keys,
            sizes,
            means,
            self.frame,
            packed,
            self.coding,
        )


def collect_products(
    blocks: Blocks, opened: OpenMoments, moments: Moments, keys: pd.Index | None = None
) -> UnitProducts:
    """Take the products of every unit in one more pass over the rows.

    Parameters
    ----------
    blocks : callable
        Returns a fresh iterator of ``(codes, x, y)``, the same rows as before.
    opened : OpenMoments
        Gives the unit means that rows are measured from.
    moments : Moments
        Gives shift, scale and the frame.
    keys : pandas.Index, optional
        Unit keys by code; those of `opened` unless given (they differ when some key has no row).

    Returns
    -------
    UnitProducts
        Units in the order of ``opened.keys``.

    Notes
    -----
    Rows are measured from a stored number next to their unit's mean, so no digits cancel afterwards; what remains
    of the distance between that number and the mean is taken off, ``sum ff' - T fbar fbar'``. Where rows of a unit lie
    together their products are one small matrix product per unit, batched by length; else rows are multiplied out and
    added to their unit one by one.
    """
    place = None
    if keys is not None and len(keys) != len(opened.keys):
        place = np.full(len(keys), -1, dtype=np.intp)
        place[keys.get_indexer(opened.keys)] = np.arange(len(opened.keys))
    names = opened.columns
    kept = np.array([j for j, name in enumerate(names) if name != moments.constant or j == len(names) - 1])
    k = kept.size
    frame = frame_of(moments.within)
    unscaled = frame * moments.scale  # exact: scales are powers of two
    shift, means = opened.shift[kept], np.take(opened.means, kept, axis=1)
    near = shift + means
    columns = slice(kept[0], kept[-2] + 1) if k > 1 and kept[-2] - kept[0] == k - 2 else kept[:-1]
    upper = np.ravel_multi_index(np.triu_indices(k), (k, k))
    packed = np.zeros((len(opened.keys), upper.size))
    counts = np.zeros(len(opened.keys), dtype=np.int64)
    buffer = np.empty((0, k))
    for given, x, y in blocks():
        codes = given if place is None else place[given]
        if codes.size == 0:
            continue
        if codes.min() < 0 or codes.max() >= counts.size:
            raise DataError(
                "a row has a unit that the moments do not know: the rows are not the same as in the first pass."
            )
        if buffer.shape[0] < codes.size:
            buffer = np.empty((codes.size, k))
        d = np.take(near, codes, axis=0, out=buffer[: codes.size], mode="clip")
        np.subtract(x[:, columns], d[:, :-1], out=d[:, :-1])
        np.subtract(y, d[:, -1], out=d[:, -1])
        _add_products(packed, counts, codes, framed_rows(d, unscaled), upper)
    if not np.array_equal(counts, opened.counts):
        raise DataError(
            "the number of rows per unit differs from the first pass: the source did not give the same rows again. "
            "Spool it to a file first."
        )
    _centre(packed, counts, framed_rows(means - (near - shift), unscaled))
    return UnitProducts(
        moments.design,
        moments.constant,
        moments.outcome,
        moments.shift,
        moments.scale,
        opened.keys,
        counts,
        (means - (moments.shift - shift)) / moments.scale,
        frame,
        packed,
        moments.coding,
    )


def _add_products(
    packed: FloatArray, counts: NDArray[np.int64], codes: IntArray, f: FloatArray, upper: IntArray
) -> None:
    """Add the products of framed rows to their units, in place."""
    k = f.shape[1]
    step = np.diff(codes)
    starts = np.concatenate([[0], np.flatnonzero(step) + 1])
    if (
        2 * starts.size > codes.size or (step < 0).any()
    ):  # scattered: a unit may also have several runs in this block
        buffer = np.empty((min(SCATTER_ROWS, codes.size), upper.size))
        for start in range(0, codes.size, SCATTER_ROWS):
            part = f[start : start + SCATTER_ROWS]
            products, at = buffer[: part.shape[0]], 0
            for j in range(k):
                np.multiply(part[:, j : j + 1], part[:, j:], out=products[:, at : at + k - j])
                at += k - j
            add_by_unit(packed, codes[start : start + SCATTER_ROWS], products)
        counts += np.bincount(codes, minlength=counts.size)
        return
    lengths = np.diff(np.append(starts, codes.size))
    for length in np.unique(lengths):
        first = starts[lengths == length]
        run = (first[:, None] + np.arange(length)).ravel()
        rows_of = (f if run.size == codes.size else f[run]).reshape(first.size, length, k)
        unit = codes[first]
        packed[unit] += np.matmul(rows_of.transpose(0, 2, 1), rows_of).reshape(first.size, k * k)[:, upper]
        counts[unit] += length


def _centre(packed: FloatArray, counts: NDArray[np.int64], rest: FloatArray) -> None:
    """Take off ``T fbar fbar'`` where the rows were not measured from the exact mean, in place."""
    rest *= np.sqrt(counts)[:, None]
    far = np.flatnonzero(np.abs(rest).max(axis=1) > CENTRED)
    if far.size:
        rows, columns = np.triu_indices(rest.shape[1])
        packed[far] -= rest[far][:, rows] * rest[far][:, columns]
