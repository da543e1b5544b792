"""`OpenMoments`: per unit a count and a mean, and one within product; parts of a data set can be merged."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.linalg.blas import dgemm

try:  # scipy's compiled scatter-add; a public call would allocate all sums anew for each block
    from scipy.sparse._sparsetools import csc_matvecs

    COMPILED = True
except ImportError:  # pragma: no cover
    COMPILED = False

from mixbridge.display import Printed
from mixbridge.display.text import span, wrapped
from mixbridge.errors import DataError
from mixbridge.moments.factors import factor_from_products, stack_factors
from mixbridge.moments.files import keyed_arrays, read_arrays, same_coding, write_arrays
from mixbridge.moments.key_arrays import same_kind_of_keys

__all__ = ["Block", "Blocks", "OpenMoments", "add_by_unit", "gather", "within_factor"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
Block = tuple[IntArray, FloatArray, FloatArray]
"""Unit codes of some rows, their design columns (b, p) and their outcome (b,)."""
Blocks = Callable[[], Iterable[Block]]
"""Gives the blocks of all rows afresh each time it is called."""
FORMAT = "mixbridge-open-moments"
ARRAYS = ("counts", "shift", "means", "within", "loss")
UNITS_AT_ONCE = 8192
CACHED = 2**22
"""Bytes of a table that may stay in a processor's own cache."""
SMALL = 12
"""Number of columns below which the library's own call is faster than the operator, which uses symmetry."""


@dataclass(frozen=True, slots=True)
class OpenMoments(Printed):
    """Moments that can still take rows: per unit a count and a mean, one within product over all units.

    ``z`` is a row ``(x', y)'``: design columns, an explicit constant included, then the outcome.

    Attributes
    ----------
    columns : tuple of str
        Names of the k entries of z; the outcome is the last.
    keys : pandas.Index
        One key per unit, without repetition.
    counts : ndarray of shape (N,)
        Rows per unit.
    shift : ndarray of shape (k,)
        What the means are measured from, in the units of z.
    means : ndarray of shape (N, k)
        Unit means of z minus `shift`.
    within : ndarray of shape (k, k)
        ``W = sum_i sum_t (z_it - mean_i)(z_it - mean_i)'``.
    loss : ndarray of shape (k,)
        Factor by which rounding in the diagonal of W may be amplified by the cancellation
        ``sum dd' - sum T dbar dbar'`` (d is a row minus the first row of its unit); at most the largest size.
    factor : ndarray of shape (k, k) or None
        ``F'F = W`` taken from the rows, where a second pass was made.
    magnitude : ndarray of shape (k,)
        Root mean square of each column over all rows; rounding of the stored data is relative to it.
    coding : str or None
        Digest of how categories are coded and of what transforms learned; None where it is not known.
    """

    columns: tuple[str, ...]
    keys: pd.Index
    counts: NDArray[np.int64]
    shift: FloatArray
    means: FloatArray
    within: FloatArray
    loss: FloatArray
    factor: FloatArray | None = field(default=None)
    coding: str | None = None

    def __str__(self) -> str:
        """Return what the moments are of."""
        text = (
            f"Moments of {self.columns[-1]} on {', '.join(self.columns[:-1])}, with the mean of every unit: "
            f"{self.rows:,} rows, {len(self.keys):,} units of {span(self.counts.min(), self.counts.max())} rows."
        )
        return "\n".join(wrapped([text]))

    @property
    def magnitude(self) -> FloatArray:
        """Root mean square of each column over all rows, in the units of z."""
        levels = self.means + self.shift
        squares = np.einsum("i,ij,ij->j", self.counts.astype(float), levels, levels)
        return np.asarray(np.sqrt((squares + np.diag(self.within)) / self.rows))

    @property
    def rows(self) -> int:
        """Number of rows n."""
        return int(self.counts.sum())

    def __add__(self, other: OpenMoments) -> OpenMoments:
        """Merge with another part; units in both are joined by key.

        The within product of a split unit grows by ``T1 T2 / (T1 + T2) d d'``, d the difference of its two
        means (Chan, Golub & LeVeque 1983, eq. for two samples; number from memory).

        Raises
        ------
        DataError
            If columns, coding or the type of keys differ, or if the other part is closed and has no keys.
        """
        if not isinstance(other, OpenMoments):
            raise DataError(
                f"open moments cannot be merged with {type(other).__name__}: only open moments hold counts and means "
                "of units by key. Close them first where no unit is in both parts."
            )
        if self.columns != other.columns:
            raise DataError(
                "moments with different columns cannot be merged: "
                f"{list(self.columns)} against {list(other.columns)}. "
                "Build both from the same formula and levels."
            )
        coding = same_coding(self.coding, other.coding)
        same_kind_of_keys(self.keys, other.keys)
        moved = other.means + (other.shift - self.shift)
        place = self.keys.get_indexer(other.keys)
        shared = np.flatnonzero(place >= 0)
        fresh = np.flatnonzero(place < 0)
        counts = self.counts.copy()
        means = self.means.copy()
        at = place[shared]
        first, second = self.counts[at], other.counts[shared]
        total = first + second
        gap = moved[shared] - self.means[at]
        # a column constant within units stays so: its two means differ by the rounding of the shifts only
        fixed = (np.diag(self.within) == 0.0) & (np.diag(other.within) == 0.0)
        reach = np.abs(self.means[at]) + np.abs(self.shift) + np.abs(other.shift)
        gap[fixed & (np.abs(gap) <= 4.0 * np.finfo(float).eps * reach)] = 0.0
        extra = gap * np.sqrt(first * (second / total))[:, None]
        counts[at] = total
        means[at] += gap * (second / total)[:, None]
        factor = None
        if self.factor is not None or other.factor is not None:  # what was taken from rows is not given up
            ours, theirs = self._own_factor(), other._own_factor()
            if ours is not None and theirs is not None:
                factor = stack_factors(ours, theirs, extra)
        return OpenMoments(
            columns=self.columns,
            keys=self.keys.append(other.keys[fresh]),
            counts=np.concatenate([counts, other.counts[fresh]]),
            shift=self.shift,
            means=np.vstack([means, moved[fresh]]),
            within=self.within + other.within + extra.T @ extra,
            loss=np.maximum(self.loss, other.loss),
            factor=factor,
            coding=coding,
        )

    def save(self, path: str | Path) -> None:
        """Write the moments as one open file: see `mixbridge.moments.files`."""
        meta = {
            "format": FORMAT,
            "version": 1,
            "columns": list(self.columns),
            "coding": self.coding,
        }
        arrays = {name: getattr(self, name) for name in ARRAYS}
        if self.factor is not None:
            arrays["factor"] = self.factor
        write_arrays(path, meta, arrays, self.keys)

    @classmethod
    def load(cls, path: str | Path) -> OpenMoments:
        """Read moments written by `save`; refuses a file that is damaged, changed or of another kind."""
        meta, arrays = read_arrays(path, FORMAT, 1, (*ARRAYS, "factor"), optional=("factor",))
        keys = keyed_arrays(path, meta, arrays, "counts")
        return cls(tuple(meta["columns"]), keys, coding=meta["coding"], **arrays)

    def _own_factor(self) -> FloatArray | None:
        """Return a factor of W: from the rows, or from the products where these carry the digits."""
        return factor_from_products(self.within) if self.factor is None else self.factor

    def with_factor(self, factor: FloatArray) -> OpenMoments:
        """Return the same moments with a within factor taken from the rows.

        Parameters
        ----------
        factor : ndarray of shape (k, k)
            ``F'F = W``, as from `within_factor`.

        Returns
        -------
        OpenMoments
        """
        return replace(self, factor=factor)


def gather(blocks: Iterable[Block], columns: tuple[str, ...], keys: pd.Index) -> OpenMoments:
    """Take the moments of rows that come in blocks, in one pass.

    Parameters
    ----------
    blocks : iterable of (codes, x, y)
        Codes run over ``0 .. len(keys) - 1``; rows of a unit may lie anywhere.
    columns : tuple of str
        Names of the design columns and, last, of the outcome.
    keys : pandas.Index
        Unit keys by code. Units without a row are left out.

    Returns
    -------
    OpenMoments

    Notes
    -----
    Each row is measured from the first row seen of its unit, ``d = z - z_first``. A column constant within
    units so gives exact zeros, offsets vanish before any product, and with ``dbar`` the unit mean of d

        W = sum dd' - sum_i T_i dbar_i dbar_i',   mean_i = z_first,i + dbar_i.

    Since ``(dbar_i)^2 <= W_i (T_i - 1) / T_i`` for each unit and column, the subtraction amplifies rounding
    by at most T_i.
    """
    n_units, p = len(keys), len(columns) - 1
    # design and outcome apart: every step then runs over contiguous memory, without a copy of the rows
    anchors, anchors_y = np.zeros((n_units, p)), np.zeros(n_units)
    sums, sums_y = np.zeros((n_units, p)), np.zeros(n_units)
    counts = np.zeros(n_units, dtype=np.int64)
    unseen = np.ones(n_units, dtype=bool)
    waiting = n_units > 0
    total = np.zeros((p + 1, p + 1))
    buffer = np.empty((0, p))
    for codes, x, y in blocks:
        if buffer.shape[0] < codes.size:
            buffer = np.empty((codes.size, p))
        if waiting:
            fresh = np.take(unseen, codes, mode="clip")
            fresh[1:] &= codes[1:] != codes[:-1]
            # backwards, so that the first row of a unit is written last
            new = np.flatnonzero(fresh)[::-1]
            if new.size:
                units = codes[new]
                anchors[units], anchors_y[units] = np.take(x, new, axis=0), y[new]
                unseen[units] = False
                waiting = bool(unseen.any())
        d = buffer[: codes.size]
        np.subtract(x, np.take(anchors, codes, axis=0, out=d, mode="clip"), out=d)
        d_y = y - np.take(anchors_y, codes, mode="clip")
        total[:p, :p] += _products(d, d)
        total[:p, p:] += _products(d, d_y[:, None])
        total[p, p] += d_y @ d_y
        add_by_unit(sums, codes, d)
        np.add.at(sums_y, codes, d_y)
        np.add.at(counts, codes, 1)
    total[p, :p] = total[:p, p]
    if waiting:
        seen = ~unseen
        keys, counts = keys[seen], counts[seen]
        anchors, anchors_y, sums, sums_y = anchors[seen], anchors_y[seen], sums[seen], sums_y[seen]
    if counts.size == 0:
        raise DataError("there are no rows to take moments of.")
    _refuse_non_finite(total, columns)
    shift = np.append(anchors[0], anchors_y[0])
    means = np.empty((counts.size, p + 1))
    within = total.copy()
    for start in range(0, counts.size, UNITS_AT_ONCE):
        part = slice(start, start + UNITS_AT_ONCE)
        dsum = np.column_stack([sums[part], sums_y[part]])
        dbar = dsum / counts[part, None]
        within -= dsum.T @ dbar
        means[part, :p], means[part, p] = anchors[part], anchors_y[part]
        means[part] -= shift
        means[part] += dbar
    within = (within + within.T) / 2.0
    return OpenMoments(columns, keys, counts, shift, means, within, _loss(np.diag(total), np.diag(within)))


def _loss(spread: FloatArray, kept: FloatArray) -> FloatArray:
    """Return by how much the subtraction of means may have amplified rounding."""
    loss = np.divide(spread, kept, out=np.ones(spread.size), where=kept > 0.0)
    loss[(spread > 0.0) & (kept <= 0.0)] = np.inf
    return loss


def within_factor(blocks: Iterable[Block], opened: OpenMoments) -> FloatArray:
    """Take the factor of W from the rows: QR of unit-centred rows, block by block (TSQR).

    Parameters
    ----------
    blocks : iterable of (codes, x, y)
        The same rows as before, the codes being positions in ``opened.keys``.
    opened : OpenMoments
        Gives the unit means.

    Returns
    -------
    ndarray of shape (k, k)
        Upper triangular F with ``F'F = W``. Columns constant within every unit stay exactly zero.
    """
    k = len(opened.columns)
    factor = np.zeros((k, k))
    constant = np.diag(opened.within) == 0.0
    near = opened.shift + opened.means  # a representable number near each mean: rows minus it are exact
    rest = opened.means - (near - opened.shift)
    for codes, x, y in blocks:
        d = np.column_stack([x, y]) - near[codes] - rest[codes]
        d[:, constant] = 0.0
        factor = stack_factors(factor, d)
    return factor


def add_by_unit(sums: FloatArray, codes: IntArray, rows: FloatArray) -> None:
    """Add each row to the line of its unit, in place, row after row: ``sums[codes[i]] += rows[i]``.

    Parameters
    ----------
    sums : ndarray of shape (N, k)
        Changed in place; must be contiguous.
    codes : ndarray of int, shape (b,)
        Line of each row.
    rows : ndarray of shape (b, k)
    """
    n_units, k = sums.shape
    size = codes.size
    if COMPILED:
        if sums.nbytes > CACHED and (codes[1:] < codes[:-1]).any():
            # Reads do not wait for each other as additions do: touch the lines that the additions will need.
            start, flat = codes * k, sums.ravel()
            for entry in np.linspace(0, k - 1, -(-k // 8)).astype(int):
                np.take(flat, start + entry, mode="clip")
        csc_matvecs(
            n_units,
            size,
            k,
            np.arange(size + 1, dtype=codes.dtype),
            codes,
            np.ones(size),
            rows.ravel(),
            sums.ravel(),
        )
        return
    for j in range(k):
        sums[:, j] += np.bincount(codes, weights=rows[:, j], minlength=n_units)


def _products(left: FloatArray, right: FloatArray) -> FloatArray:
    """Return ``left'right``."""
    if left.shape[1] < SMALL:
        return np.asarray(dgemm(1.0, left.T, right.T, trans_b=True))
    return left.T @ right


def _refuse_non_finite(total: FloatArray, columns: tuple[str, ...]) -> None:
    bad = ~np.isfinite(np.diag(total))  # a bad value is bad minus its anchor too, itself included
    if bad.any():
        names = ", ".join(repr(columns[j]) for j in np.flatnonzero(bad))
        raise DataError(
            f"column {names} holds infinite or undefined values, or differences too large to square. "
            "Remove these rows, or divide the column by a power of ten."
        )
