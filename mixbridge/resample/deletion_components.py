"""Variance components of the quadratic routes for many panels at once.

The forms and expectations are those of `mixbridge.routes.quadratic`, written out: with ``A = W + sum T B_T``,
``B2 = X'ZZ'X = sum T^2 B_T``, and all traces over the axes of each panel,

    pooled residuals            E e'e   = (n - K, n - tr A^-1 B2)
      their within part         E e'Qe  = (n - N - tr A^-1 W, tr A^-1 W A^-1 B2)
      their between part        E e'Pe  = (N - tr A^-1 B1, n - 2 tr A^-1 B2 + tr A^-1 B1 A^-1 B2)
    unit means, weighted        E q     = (N - K_p, n - tr B1^+ B2)
      each counted once         E q     = (sum 1/T_i - tr B0^+ sum B_T/T, N - K_p)

and MINQUE at a prior from the traces of ``P_0 P_0``, ``P_0 P_0 ZZ'`` and ``P_0 ZZ' P_0 ZZ'``.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.deletion_batch import full, quadratic, solved, trace, trace_of_four
from mixbridge.resample.deletion_sums import Sums

__all__ = ["COMPONENTS", "Pairs", "solve_pairs"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Conventions = Mapping[str, object]
Entry = FloatArray | float


@dataclass(frozen=True, slots=True, eq=False)
class Pairs:
    """Two forms and the system solved for the two variances, for m panels.

    Attributes
    ----------
    values : ndarray of shape (2, m)
    system : ndarray of shape (2, 2, m)
        Rows are forms, columns idiosyncratic and unit variance.
    possible : ndarray of bool, shape (m,)
        Whether the route has the degrees of freedom it needs.
    """

    values: FloatArray
    system: FloatArray
    possible: BoolArray


def solve_pairs(pairs: Pairs) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Return idiosyncratic and unit variance, and where they can be trusted."""
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = np.abs(pairs.system).max(axis=1)
        (a, b), (c, d) = pairs.system / scale[:, None]
        p, q = pairs.values / scale
        det = a * d - b * c
        idiosyncratic, unit = (d * p - b * q) / det, (a * q - c * p) / det
        # a difference this small loses four digits, and rows this parallel are for the route's own code to judge
        kept = (np.abs(det) > 1e-4 * (np.abs(a * d) + np.abs(b * c))) & (np.abs(det) > 1e-11)
        safe = pairs.possible & kept & np.isfinite(idiosyncratic + unit)
    return idiosyncratic, unit, safe


def _pairs(
    values: tuple[FloatArray, FloatArray], rows: tuple[tuple[Entry, Entry], ...], possible: BoolArray
) -> Pairs:
    system = np.empty((2, 2, possible.size))
    for i, row in enumerate(rows):
        for j, entry in enumerate(row):
            system[i, j] = entry
    return Pairs(np.array(values), system, possible)


def within_df(sums: Sums, conventions: Conventions) -> FloatArray:
    """Return ``n - N - K_w``, with columns in place of the rank where the convention says so."""
    curve = sums.batch.axes.curve
    columns = conventions.get("count") == "columns"
    return sums.rows - sums.units - (curve.columns_within if columns else curve.rank_within)


def between_df(sums: Sums, conventions: Conventions) -> FloatArray:
    """Return ``N - K_p``, with columns in place of the rank where the convention says so."""
    curve = sums.batch.axes.curve
    return sums.units - (curve.rank if conventions.get("count") == "columns" else curve.rank_between)


def _has_remainders(sums: Sums) -> BoolArray:
    return np.asarray((sums.units > sums.batch.axes.constants) & (sums.rows > sums.units))


def _swamy_arora(sums: Sums, conventions: Conventions) -> Pairs:
    form = conventions["between"]
    df_w, df_b = within_df(sums, conventions), between_df(sums, conventions)
    weighted = form == "size_weighted"
    line = sums.between(weighted)
    values, possible = (sums.within.residual, line.residual), (df_w >= 1) & (df_b >= 1)
    first = (df_w, 0.0)
    outer, order = sums.batch.axes.outer, sums.order
    if weighted:
        on_unit = sums.rows - trace(line.inverse, full(sums.by_square, order, outer))
        return _pairs(values, (first, (df_b, on_unit)), possible)
    inverse_sizes = sums.batch.tally(1.0 / sums.sizes)
    if form == "harmonic":
        return _pairs(values, (first, (df_b * inverse_sizes / sums.units, df_b)), possible)
    on_idiosyncratic = inverse_sizes - trace(line.inverse, full(sums.by_inverse, order, outer))
    return _pairs(values, (first, (on_idiosyncratic, df_b)), possible)


def _wansbeek_kapteyn(sums: Sums, conventions: Conventions) -> Pairs:
    df_w = within_df(sums, conventions)
    values = (sums.within.residual, sums.remainders(True))
    return _pairs(values, ((df_w, 0.0), sums.remainder_expectations()), (df_w >= 1) & _has_remainders(sums))


def _amemiya(sums: Sums, conventions: Conventions) -> Pairs:
    values = (sums.within.residual, sums.remainders(True))
    rows = ((sums.rows - sums.units, 0.0), (sums.units, sums.rows))
    return _pairs(values, rows, _has_remainders(sums))


def _nerlove(sums: Sums, conventions: Conventions) -> Pairs:
    divisor = sums.units - (1.0 if conventions["divisor"] == "units_minus_one" else 0.0)
    values = (sums.within.residual, sums.remainders(False))
    return _pairs(values, ((sums.rows, 0.0), (0.0, divisor)), _has_remainders(sums) & (divisor > 0))


def _wallace_hussain(sums: Sums, conventions: Conventions) -> Pairs:
    order, every = sums.order, np.arange(sums.order)
    residual = np.concatenate([-sums.pooled.slope, np.ones((1, sums.batch.size))])
    w, b = full(sums.batch.within, order, every), full(sums.by_size, order, every)
    values, n, units = (quadratic(w, residual), quadratic(b, residual)), sums.rows, sums.units
    possible = n > units
    if conventions["expectation"] == "short":
        return _pairs(values, ((n - units, 0.0), (units, n)), possible)
    inverse, square = sums.pooled.inverse, full(sums.by_square, order, sums.every)
    w, b = w[:-1, :-1], b[:-1, :-1]
    first = (n - units - trace(inverse, w), trace_of_four(inverse, w, square))
    on_unit = n - 2.0 * trace(inverse, square) + trace_of_four(inverse, b, square)
    return _pairs(values, (first, (units - trace(inverse, b), on_unit)), possible)


def _pooled_minus_within(sums: Sums, conventions: Conventions) -> Pairs:
    df_w, df = within_df(sums, conventions), sums.rows - sums.batch.axes.curve.rank
    values = (sums.within.residual, sums.pooled.residual)
    return _pairs(values, ((df_w, 0.0), (df, df)), (df_w >= 1) & _has_remainders(sums))


def _fitting_constants(sums: Sums, conventions: Conventions) -> Pairs:
    df_w, df = within_df(sums, conventions), sums.rows - sums.batch.axes.curve.rank
    on_unit = sums.rows - trace(sums.pooled.inverse, full(sums.by_square, sums.order, sums.every))
    values = (sums.within.residual, sums.pooled.residual)
    return _pairs(values, ((df_w, 0.0), (df, on_unit)), (df_w >= 1) & _has_remainders(sums))


def _minque(sums: Sums, conventions: Conventions) -> Pairs:
    prior, batch, sizes = float(str(conventions["prior"])), sums.batch, sums.sizes
    shrink = 1.0 / (1.0 + sizes * prior)
    pull = sizes * shrink
    order, whole = sums.order, np.arange(sums.order)
    line = sums.pooled if prior == 0.0 else solved(batch.within + batch.sums(pull), order, sums.every)
    residual = np.concatenate([-line.slope, np.ones((1, batch.size))])
    twice = full(batch.within + batch.sums(pull * shrink), order, whole)  # X'V^-2 X
    square = full(batch.sums(pull**2), order, whole)  # X'V^-1 ZZ'V^-1 X
    values = (quadratic(twice, residual), quadratic(square, residual))
    twice, square, inverse = twice[:-1, :-1], square[:-1, :-1], line.inverse
    thrice = full(batch.within + batch.sums(pull * shrink**2), order, sums.every)
    mixed = full(batch.sums(pull**2 * shrink), order, sums.every)
    cube = full(batch.sums(pull**3), order, sums.every)
    inside = sums.rows - sums.units + batch.tally(shrink**2)
    first = inside - 2.0 * trace(inverse, thrice) + trace_of_four(inverse, twice, twice)
    cross = batch.tally(pull * shrink) - 2.0 * trace(inverse, mixed) + trace_of_four(inverse, twice, square)
    last = batch.tally(pull**2) - 2.0 * trace(inverse, cube) + trace_of_four(inverse, square, square)
    return _pairs(values, ((first, cross), (cross, last)), _has_remainders(sums))


COMPONENTS: dict[str, Callable[[Sums, Conventions], Pairs]] = {
    "swamy_arora": _swamy_arora,
    "wansbeek_kapteyn": _wansbeek_kapteyn,
    "wallace_hussain": _wallace_hussain,
    "amemiya": _amemiya,
    "nerlove": _nerlove,
    "pooled_minus_within": _pooled_minus_within,
    "fitting_constants": _fitting_constants,
    "minque": _minque,
}
"""Each quadratic route by key, as in `mixbridge.routes.quadratic.QUADRATIC`; a test compares the two tables."""
