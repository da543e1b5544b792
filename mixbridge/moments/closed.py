"""`Moments`: one within factor and one between factor per distinct unit size; all that the routes need."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from mixbridge.display import Printed
from mixbridge.display.text import span, wrapped
from mixbridge.errors import DataError, OptionError
from mixbridge.moments.classes import means_products, size_classes
from mixbridge.moments.closed_file import attributes_of, read_record, record_of, write_record
from mixbridge.moments.factors import eigen_factor, factor_from_products, factor_from_rows
from mixbridge.moments.opened import Block, Blocks, OpenMoments, gather, within_factor
from mixbridge.moments.pooling import pooled

__all__ = ["Moments", "close", "collect", "merge_closed"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BLOCK_ROWS = 8192
LOSS_LIMIT = 1e4
"""Amplified rounding above which the within products are taken again from unit-centred rows."""


@dataclass(frozen=True, slots=True)
class Moments(Printed):
    """Closed moments: what every route but ``first_difference`` is computed from.

    ``z`` holds the design columns without an explicit constant, then the outcome; scaled, ``(z - shift) /
    scale``.

    Attributes
    ----------
    design : tuple of str
        Names of the design columns in the order of the formula, an explicit constant included.
    constant : str or None
        Name of the explicit constant column, if there is one.
    outcome : str
        Name of the outcome.
    shift, scale : ndarray of shape (k,)
        Origin and unit of each entry of z (scale: a power of two near its standard deviation).
    magnitude : ndarray of shape (k,)
        Root mean square of each column over all rows, in the units of z: rounding of the stored data is relative
        to it.
    sizes : ndarray of int, shape (G,)
        Distinct unit sizes T, increasing.
    counts : ndarray of int, shape (G,)
        Number of units m_T of each size.
    within : ndarray of shape (m, k)
        F with ``F'F = W`` of the scaled z.
    between : ndarray of shape (G, k + 1, k + 1)
        Per size F_T with ``F_T'F_T = B_T = sum zbar zbar'`` of ``(1, scaled z)``.
    note : str
        How the within factor was obtained.
    coding : str or None
        As in `OpenMoments`.
    """

    design: tuple[str, ...]
    constant: str | None
    outcome: str
    shift: FloatArray
    scale: FloatArray
    magnitude: FloatArray
    sizes: NDArray[np.int64]
    counts: NDArray[np.int64]
    within: FloatArray
    between: FloatArray
    note: str
    coding: str | None = None

    def __str__(self) -> str:
        """Return what the moments are of."""
        return "\n".join(
            wrapped(
                [
                    f"Closed moments of {self.outcome} on {', '.join(self.design)}: {self.rows:,} rows, {self.units:,} "
                    f"units of {span(self.sizes[0], self.sizes[-1])} rows; {self.note}."
                ]
            )
        )

    @property
    def rows(self) -> int:
        """Number of rows n."""
        return int((self.sizes * self.counts).sum())

    @property
    def units(self) -> int:
        """Number of units N."""
        return int(self.counts.sum())

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the entries of z."""
        return (*(name for name in self.design if name != self.constant), self.outcome)

    @classmethod
    def from_arrays(
        cls,
        x: ArrayLike,
        y: ArrayLike,
        codes: ArrayLike,
        names: Sequence[str] | None = None,
        outcome: str = "y",
    ) -> Moments:
        """Take closed moments from arrays in memory.

        Parameters
        ----------
        x : array_like of shape (n, p)
            Design columns; a column of ones is the constant.
        y : array_like of shape (n,)
            Outcome.
        codes : array_like of int, shape (n,)
            Unit codes, small non-negative integers, in any order.
        names : sequence of str, optional
            Names of the design columns, ``x0, x1, ...`` unless given.
        outcome : str
            Name of the outcome.

        Returns
        -------
        Moments
        """
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

        def blocks() -> Iterator[Block]:
            for start in range(0, unit.size, BLOCK_ROWS):
                stop = start + BLOCK_ROWS
                yield unit[start:stop], rows[start:stop], response[start:stop]

        keys = pd.RangeIndex(int(unit.max()) + 1)
        return collect(blocks, (*labels, outcome), keys)[1]

    def without_one_row_units(self) -> Moments:
        """Leave out the units with one row, which have no part in W.

        Returns
        -------
        Moments

        Raises
        ------
        DataError
            If no unit is left.
        """
        keep = self.sizes > 1
        if not keep.any():
            raise DataError("every unit has one row: nothing is left when one-row units are dropped.")
        return _frozen(
            replace(self, sizes=self.sizes[keep], counts=self.counts[keep], between=self.between[keep])
        )

    def __add__(self, other: Moments) -> Moments:
        """Pool with moments of other units: see `merge_closed`.

        A unit must not be in both. Closed moments hold no keys to check it; a part that is added to itself is
        refused.
        """
        return merge_closed((self, other), units_are_distinct=True)

    def to_record(self) -> dict[str, Any]:
        """Return the moments as plain lists and numbers, with a checksum over all of them.

        Returns
        -------
        dict
            JSON-ready: ``format``, ``version``, every attribute by name, ``checksum``.
        """
        return record_of({name: getattr(self, name) for name in self.__slots__})

    @classmethod
    def from_record(cls, record: Mapping[str, Any]) -> Moments:
        """Rebuild moments from the record that `to_record` made.

        Parameters
        ----------
        record : mapping

        Returns
        -------
        Moments

        Raises
        ------
        DataError
            If this is no such record, or if its checksum does not fit.
        """
        return _frozen(cls(**attributes_of(record, "this record")))

    def save(self, path: str | Path) -> None:
        """Write the moments as one JSON file, numbers in shortest exact form: see `mixbridge.moments.closed_file`.

        Parameters
        ----------
        path : str or Path

        Raises
        ------
        DataError
            If the file cannot be written.
        """
        write_record(path, self.to_record())

    @classmethod
    def load(cls, path: str | Path) -> Moments:
        """Read moments written by `save`; refuses a file that is damaged, changed or of another kind.

        Parameters
        ----------
        path : str or Path

        Returns
        -------
        Moments

        Raises
        ------
        DataError
            Naming the file.
        """
        return _frozen(cls(**attributes_of(read_record(path), str(path))))


def merge_closed(parts: Iterable[Moments], *, units_are_distinct: bool) -> Moments:
    """Pool the closed moments of several parts of a data set, such as sites that do not share rows.

    Parameters
    ----------
    parts : iterable of Moments
        Of the same formula, with the same levels of categories and the same learned constants.
    units_are_distinct : bool
        That no unit is in two parts. Closed moments hold no keys: nobody can check it afterwards.

    Returns
    -------
    Moments
        Those of all rows, to rounding: see `mixbridge.moments.pooling`.

    Raises
    ------
    DataError
        If there is no part, if columns or codings differ, or if the same part is there twice.
    OptionError
        If the units are not said to be distinct.

    Examples
    --------
    >>> import mixbridge
    >>> data = mixbridge.demo.apiaries()
    >>> sites = [rows for _, rows in data.groupby(data["apiary"] < "A20")]
    >>> parts = [mixbridge.crosscheck("honey ~ forage", rows, unit="apiary").moments for rows in sites]
    >>> pooled = merge_closed(parts, units_are_distinct=True)
    >>> pooled.rows == sum(part.rows for part in parts)
    True
    """
    if units_are_distinct is not True:
        raise OptionError(
            f"units_are_distinct={units_are_distinct!r} is not allowed; allowed: True. Closed moments hold no keys, so "
            "that the rows of a unit in two parts cannot be joined: merge OpenMoments or UnitProducts instead."
        )
    given = tuple(parts)
    if not given:
        raise DataError("there are no moments to pool.")
    for part in given:
        if not isinstance(part, Moments):
            raise DataError(
                f"closed moments cannot be pooled with {type(part).__name__}: close that one first where no unit is in "
                "both, or merge what holds keys on both sides."
            )
    return given[0] if len(given) == 1 else _frozen(replace(given[0], **pooled(given)))


def collect(blocks: Blocks, columns: tuple[str, ...], keys: pd.Index) -> tuple[OpenMoments, Moments]:
    """Take open and closed moments of rows in blocks.

    One pass over the rows, and a second one where the products lose digits.

    Parameters
    ----------
    blocks : callable
        Returns a fresh iterator of ``(codes, x, y)`` each time it is called.
    columns : tuple of str
        Design columns, then the outcome.
    keys : pandas.Index
        Unit keys by code.

    Returns
    -------
    OpenMoments, Moments
    """
    opened = gather(blocks(), columns, keys)
    source: Blocks = blocks
    if len(opened.keys) != len(keys):
        place = keys.get_indexer(opened.keys)
        recode = np.zeros(len(keys), dtype=np.intp)
        recode[place] = np.arange(place.size)

        def recoded() -> Iterator[Block]:
            return ((recode[codes], x, y) for codes, x, y in blocks())

        source = recoded
    if opened.loss.max() > LOSS_LIMIT or factor_from_products(opened.within) is None:
        opened = opened.with_factor(within_factor(source(), opened))
    return opened, close(opened)


def close(opened: OpenMoments) -> Moments:
    """Close open moments: no rows can be added after it.

    The shift becomes the grand mean, the scale a power of two near the total standard deviation, the explicit
    constant leaves z, and the unit means are gathered by size.

    Parameters
    ----------
    opened : OpenMoments

    Returns
    -------
    Moments

    Raises
    ------
    DataError
        If the outcome has the same value in every row.
    """
    first = opened.means[0]
    level = np.diag(opened.within) == 0.0
    for j in np.flatnonzero(level):
        level[j] = (opened.means[:, j] == first[j]).all()
    candidates = np.flatnonzero(level[:-1] & (first + opened.shift == 1.0)[:-1])  # a column of ones
    constant = int(candidates[0]) if candidates.size else None
    if level[-1]:
        raise DataError(
            f"the outcome {opened.columns[-1]!r} has the same value in every row: nothing can be fitted."
        )
    keep = np.array([j for j in range(len(opened.columns)) if j != constant])
    shift = opened.shift + (opened.counts.astype(float) @ opened.means) / opened.rows
    move = shift - opened.shift
    sizes, counts, order = size_classes(opened.counts)
    classes = np.split(order, np.cumsum(counts)[:-1])
    products = np.array([means_products(opened.means, units, move) for units in classes])
    between_squares = sizes @ np.diagonal(products, axis1=1, axis2=2)[:, 1:]
    spread = np.sqrt((np.diag(opened.within) + between_squares)[keep] / opened.rows)
    scale = np.exp2(np.round(np.log2(np.where(spread > 0.0, spread, 1.0))))
    factor = opened.factor
    note = "within products by QR of unit-centred rows"
    if factor is None:
        factor = factor_from_products(opened.within)
        note = "within products of rows measured from their unit's first"
    if factor is None:
        factor = eigen_factor(opened.within)
        note = "ill-conditioned within products without a second pass over the rows"
    axes, units_of = np.append(0, keep + 1), np.append(1.0, scale)
    products = products[:, axes[:, None], axes] / np.outer(units_of, units_of)
    between = np.zeros_like(products)
    for at, units in enumerate(classes):
        found = factor_from_products(products[at]) if units.size > 8 * axes.size else None
        if found is None:
            rows = (opened.means[units] - move)[:, keep] / scale
            found = factor_from_rows(np.column_stack([np.ones(units.size), rows]))
        between[at] = found
    columns = [opened.columns[j] for j in keep]
    return _frozen(
        Moments(
            design=opened.columns[:-1],
            constant=None if constant is None else opened.columns[constant],
            outcome=columns[-1],
            shift=shift[keep],
            scale=scale,
            magnitude=np.hypot(spread, shift[keep]),
            sizes=sizes,
            counts=counts,
            within=factor[:, keep] / scale,
            between=between,
            note=note,
            coding=opened.coding,
        )
    )


def _frozen(moments: Moments) -> Moments:
    for name in moments.__slots__:
        value = getattr(moments, name)
        if isinstance(value, np.ndarray):
            value.setflags(write=False)
    return moments
