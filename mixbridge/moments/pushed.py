"""Moments that a database takes: it sums per unit, and only units, or size classes, come back.

With g a number near the mean of a column and c = x - g, the database gives per unit

    T,   mean = sum c / T   (c itself, exactly, in columns that are constant within units),

and over all rows S = sum c c'. Then W = S - sum_i T_i mean_i mean_i', which amplifies rounding in the diagonal of W
by S / W. Where that exceeds `PLAIN_LIMIT`, the database takes the products anew of rows measured from the mean of
their unit, by a join: d = x - mean_i, W = sum dd'. The rounded mean is off by some e_i, which adds T_i e_i e_i' to
W: relative to the rounding of the stored values at that distance from g, a square of it. Where the products are ill
conditioned, the rows d are streamed and W's factor is taken by QR. Sums are compensated in the database (Kahan 1965).
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError
from mixbridge.moments.closed import Moments, close
from mixbridge.moments.factors import factor_from_products, stack_factors
from mixbridge.moments.opened import OpenMoments, _loss, _refuse_non_finite
from mixbridge.moments.parted import Piece, Units, Within
from mixbridge.moments.parted_closing import Classes, Frame, close_bucket, finish, pool_classes
from mixbridge.panel.keys import encode, whole_numbers
from mixbridge.panel.pushed_query import Query, columns_of, fetched_keys, key_sql
from mixbridge.panel.pushed_sql import number_literal

__all__ = ["PushedMoments", "pushed_moments"]

FloatArray = NDArray[np.float64]

PLAIN_LIMIT = 100.0
"""Amplified rounding above which rows are measured from the means of their units: two of sixteen digits."""
LOOKED_AT = 200_000
"""Rows in which a column that varies within some unit is looked for: the database is spared its extremes."""


@dataclass(frozen=True, slots=True, eq=False)
class PushedMoments:
    """Moments from a database.

    Attributes
    ----------
    opened : OpenMoments or None
        None if the units did not fit.
    moments : Moments
    units : int
    how : str
        What was asked of the database.
    """

    opened: OpenMoments | None
    moments: Moments
    units: int
    how: str


@dataclass(frozen=True, slots=True, eq=False)
class _Units:
    """What one batch of units holds: keys, counts, means from the origin, and columns constant in all of them."""

    keys: pd.Series[Any]
    counts: NDArray[np.int64]
    means: FloatArray
    fixed: NDArray[np.bool_]


def pushed_moments(query: Query, memory_limit: int) -> PushedMoments:
    """Take the moments of the rows of a query.

    Parameters
    ----------
    query : Query
    memory_limit : int
        Bytes that counts, means and keys of the units may take; beyond them units are closed as they come.

    Returns
    -------
    PushedMoments

    Raises
    ------
    DataError
        If there is one unit only, the outcome never changes, or the rows are not what they were.
    """
    total = _products(query, f"SELECT {_listed(query, 'x{0} - {1} AS d{0}')} FROM ({query.sql})")
    _refuse_non_finite(total, query.columns)
    spread = np.sqrt(np.diag(total) / query.account.rows_used)
    held: list[_Units] | None = []
    classes: Classes | None = None
    frame = _frame(query, spread)
    rows, units, size, correction = 0, 0, 0, np.zeros_like(total)
    candidates = _may_be_fixed(query)
    fixed = candidates.copy()
    for batch in _units(query, candidates):
        rows += int(batch.counts.sum())
        units += len(batch.counts)
        fixed &= batch.fixed
        correction += batch.means.T @ (batch.counts[:, None] * batch.means)
        size += 4 * batch.means.nbytes + 64 * len(
            batch.counts
        )  # copies as in rows that come in chunks, and a key
        if held is not None:
            held.append(batch)
            if size > memory_limit:
                for earlier in held:
                    classes = _folded(frame, classes, earlier)
                held = None
        else:
            classes = _folded(frame, classes, batch)
    if rows != query.account.rows_used:
        raise DataError(
            "The relation is not what it was when it was first read: the number of rows differs. Do not change its "
            "tables while they are in use."
        )
    if units == 1:
        raise DataError(
            f"All {rows} rows used belong to one unit: a variance between units is not defined. Check that "
            f"unit={query.unit!r} names the grouping column."
        )
    within, loss, factor, how = _within(query, total, correction, fixed)
    note = f"within products by the database: {how}"
    if held is None:
        assert classes is not None, "units that did not fit were folded"
        settled = replace(frame, units=units, rows=rows, within=Within(within, loss))
        return PushedMoments(None, replace(finish(settled, classes, factor), note=note), units, how)
    opened = _opened(query, held, within, loss, factor)
    return PushedMoments(opened, replace(close(opened), note=note), units, how)


def _within(
    query: Query, total: FloatArray, correction: FloatArray, fixed: NDArray[np.bool_]
) -> tuple[FloatArray, FloatArray, FloatArray | None, str]:
    """Return W, its amplification of rounding, its factor where rows were needed, and how it was taken."""
    within = _symmetric(total - correction, fixed)
    spread = np.where(fixed, 0.0, np.diag(total))
    loss = _loss(spread, np.diag(within))
    how = "rows measured from the means of columns"
    if loss.max() > PLAIN_LIMIT:
        within = _symmetric(_products(query, _deviations(query)), fixed)
        loss = np.ones(len(loss))
        how = "rows measured from the means of units"
    if factor_from_products(within) is not None:
        return within, loss, None, how
    factor = np.zeros_like(within)
    for batch in query.source.stream(_deviations(query)):
        d = columns_of(query, batch, "d")
        d[:, fixed] = 0.0
        factor = stack_factors(factor, d)
    return within, loss, factor, "rows measured from the means of units, streamed for a factor by QR"


def _symmetric(products: FloatArray, fixed: NDArray[np.bool_]) -> FloatArray:
    """Return symmetric products; columns constant within every unit have none."""
    products = (products + products.T) / 2.0
    products[fixed] = 0.0
    products[:, fixed] = 0.0
    return products


def _listed(query: Query, form: str) -> str:
    """Return the list of columns in a form that takes their number and their origin."""
    origins = [number_literal(query.origin[j]) for j in query.asked]
    return ", ".join(form.format(place, origin) for place, origin in enumerate(origins))


def _may_be_fixed(query: Query) -> NDArray[np.bool_]:
    """Return the columns that no unit of a first part of the rows was seen to vary in."""
    ends = _listed(query, "min(x{0}) < max(x{0}) AS v{0}")
    first = f"SELECT * FROM ({query.sql}) LIMIT {LOOKED_AT}"
    listed = ", ".join(f"bool_or(v{place}) AS v{place}" for place in range(len(query.asked)))
    row = query.source.table(
        f"SELECT {listed} FROM (SELECT k, {ends} FROM ({first}) GROUP BY k)"
    ).to_pylist()[0]
    found = np.ones(len(query.columns), dtype=bool)
    found[query.asked] = [not row[f"v{place}"] for place in range(len(query.asked))]
    return found


def _units(query: Query, candidates: NDArray[np.bool_]) -> Iterator[_Units]:
    """Ask for count and means of every unit; and of columns that may be constant in all of them, whether they are."""
    mean = "fsum(x{0} - {1}) / count(*)"
    chosen = {place: bool(candidates[j]) for place, j in enumerate(query.asked)}
    forms = {
        True: f"CASE WHEN min(x{{0}}) = max(x{{0}}) THEN min(x{{0}}) - {{1}} ELSE {mean} END AS m{{0}}, "
        "min(x{0}) = max(x{0}) AS f{0}",
        False: f"{mean} AS m{{0}}",
    }
    origins = [number_literal(query.origin[j]) for j in query.asked]
    listed = ", ".join(forms[chosen[place]].format(place, origin) for place, origin in enumerate(origins))
    sql = f"SELECT k, count(*) AS n, {listed} FROM ({query.sql}) GROUP BY k"
    for batch in query.source.stream(f"SELECT * REPLACE ({key_sql(query)}) FROM ({sql})"):
        fixed = candidates.copy()
        for place, j in enumerate(query.asked):
            if chosen[place]:
                fixed[j] = bool(batch.column(f"f{place}").to_numpy(zero_copy_only=False).all())
        keys = fetched_keys(query, batch)
        if pd.api.types.is_float_dtype(keys.dtype):
            keys = pd.Series(whole_numbers(query.unit, keys.to_numpy()))
        counts = batch.column("n").to_numpy().astype(np.int64)
        yield _Units(keys, counts, columns_of(query, batch, "m"), fixed)


def _deviations(query: Query) -> str:
    """Return the query for rows minus the means of their units, ``d0, d1, ...``."""
    middle = _listed(
        query,
        "CASE WHEN min(x{0}) = max(x{0}) THEN min(x{0}) ELSE {1} + fsum(x{0} - {1}) / count(*) END AS m{0}",
    )
    means = f"SELECT k, {middle} FROM ({query.sql}) GROUP BY k"
    listed = _listed(query, "r.x{0} - u.m{0} AS d{0}")
    return f"SELECT {listed} FROM ({query.sql}) AS r JOIN ({means}) AS u ON r.k = u.k"


def _products(query: Query, deviations: str) -> FloatArray:
    """Ask for the products of ``d0, d1, ...`` summed over all rows."""
    asked = query.asked
    pairs = [(i, j) for i in range(len(asked)) for j in range(i, len(asked))]
    listed = ", ".join(f"fsum(d{i} * d{j}) AS p{i}_{j}" for i, j in pairs)
    row = query.source.table(f"SELECT {listed} FROM ({deviations})").to_pylist()[0]
    products = np.zeros((len(query.columns),) * 2)
    for i, j in pairs:
        value = row[f"p{i}_{j}"]
        products[asked[i], asked[j]] = products[asked[j], asked[i]] = np.nan if value is None else value
    return products


def _frame(query: Query, spread: FloatArray) -> Frame:
    """Return the coordinates in which units are closed as they come: those that `close` would choose."""
    keep = np.array([j for j in range(len(query.columns)) if j != query.constant])
    scale = np.exp2(np.round(np.log2(np.where(spread > 0.0, spread, 1.0))))
    zero = np.zeros(len(query.columns))
    blank = Within(np.zeros((len(zero),) * 2), zero)
    constant = None if query.constant is None else query.columns[query.constant]
    return Frame(query.columns, constant, keep, query.origin, zero, spread[keep], scale[keep], 0, 0, blank)


def _folded(frame: Frame, classes: Classes | None, batch: _Units) -> Classes:
    """Add a batch of units to the size classes."""
    units = Units(batch.keys, batch.counts, batch.means)
    fresh = close_bucket(frame, Piece(units, np.zeros_like(frame.within.products)))
    return fresh if classes is None else pool_classes([classes, fresh])


def _opened(
    query: Query,
    held: list[_Units],
    within: FloatArray,
    loss: FloatArray,
    factor: FloatArray | None,
) -> OpenMoments:
    """Put the units together, sorted by key."""
    codes, keys = encode(query.unit, pd.concat([batch.keys for batch in held], ignore_index=True))
    order = np.argsort(codes, kind="stable")
    counts = np.concatenate([batch.counts for batch in held])[order]
    means = np.concatenate([batch.means for batch in held])[order]
    return OpenMoments(query.columns, keys, counts, query.origin, means, within, loss, factor)
