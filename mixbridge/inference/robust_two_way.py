"""Covariances robust to dependence within units and within periods (Cameron, Gelbach & Miller 2011).

``V = V_unit + V_period - V_both``, each a sandwich around sums of row scores by unit, by period, and by unit and
period together. The scores of rows need the rows: one more pass. Two forms are in use:

- ``quasi_demeaned``: ``x*_it e*_it`` with quasi-demeaned rows, as least squares on these rows would report it;
- ``weighted``: ``(V_0^-1 X)_it e_it`` with the residual of the row itself. Sums by unit are the same; by
  period they are not, since a quasi-demeaned residual holds a share of the other periods of its unit. This form is
  the one that follows from errors independent between rows that share neither unit nor period.

At ψ = 0 both are the same. The difference of three matrices need not be non-negative definite; then the status
says so and nothing is mended.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import DataError, IdentificationError, OptionError
from mixbridge.inference.robust import COMPUTED, RobustCovariance, multiplier_value
from mixbridge.inference.robust_regression import Regression, regression_of
from mixbridge.moments.opened import add_by_unit
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["TWO_WAY_MULTIPLIERS", "PeriodBlock", "two_way_covariance"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
PeriodBlock = tuple[IntArray, FloatArray, FloatArray, IntArray]
"""Unit codes of some rows, their design columns, their outcome and their period codes."""

TWO_WAY_MULTIPLIERS = ("none", "units", "units_and_rows", "smallest", "smallest_and_rows")
ROWS = ("quasi_demeaned", "weighted")
LARGEST_CODE = 1_000_000
"""Period codes up to here, or to the number of rows, may have gaps: one line of sums is kept for each."""
NEGATIVE = 1e-12
"""Eigenvalue of the covariance, scaled to unit variances, that counts as negative: about a thousand roundings."""


def two_way_covariance(
    curve: Curve,
    products: UnitProducts,
    point: float | str | Fit,
    blocks: Callable[[], Iterable[PeriodBlock]],
    *,
    keys: pd.Index | None = None,
    rows: str = "quasi_demeaned",
    multiplier: str = "units",
) -> RobustCovariance:
    """Compute a covariance robust to dependence within units and, across units, within periods.

    Parameters
    ----------
    curve, products, point
        As for `robust_covariance`; not for `between`, which has no periods.
    blocks : callable
        Returns a fresh iterator of ``(codes, x, y, period_codes)``; period codes are non-negative integers.
    keys : pandas.Index, optional
        Unit keys by code; those of `products` unless given.
    rows : {'quasi_demeaned', 'weighted'}
        Which scores of rows are summed, see the head of this file. `within` has only the first.
    multiplier : {'units', 'none', 'units_and_rows', 'smallest', 'smallest_and_rows'}
        G/(G - 1) of each sum with its own number of clusters, or of the smaller of units and periods for all; with
        ``and_rows`` times (n - 1)/(n - K).

    Returns
    -------
    RobustCovariance
        Kind ``two_way``; `df` is NaN.
    """
    if rows not in ROWS:
        raise OptionError.not_among("rows", rows, ROWS)
    if multiplier not in TWO_WAY_MULTIPLIERS:
        raise OptionError.not_among("multiplier", multiplier, TWO_WAY_MULTIPLIERS)
    regression = regression_of(curve, products, point)
    if regression.side == "between":
        raise OptionError("unit means have no period: there is no two-way covariance of the between route.")
    if regression.side == "within" and rows == "weighted":
        raise OptionError(
            "rows='weighted' needs a finite ratio: the residual of a row in 'within' holds the unit effect."
        )
    scored = _RowScores(regression, rows)
    place = _places(products, keys)
    meats, counts, repeated = _period_sums(scored, products, place, blocks)
    by_unit = regression.scores() @ regression.root.T
    meats = {"unit": by_unit.T @ by_unit, **meats}
    counts = {"unit": products.units, **counts}
    factors = _factors(multiplier, counts, regression)
    covariance = (
        factors["unit"] * meats["unit"] + factors["period"] * meats["period"] - factors["row"] * meats["row"]
    )
    covariance = (covariance + covariance.T) / 2.0
    status = _definiteness(covariance, regression.free, curve.names)
    covariance[~regression.free] = np.nan
    covariance[:, ~regression.free] = np.nan
    values = ", ".join(f"{key} {factor:.6g}" for key, factor in factors.items())
    notes = [
        f"{counts['unit']} units, {counts['period']} periods, {counts['row']} pairs of unit and period",
        f"multiplier {multiplier}: {values}",
        f"scores of rows: {rows}"
        if regression.correlated
        else "scores of rows: both forms are the same here",
    ]
    if repeated:
        notes.append("several rows share unit and period: they are summed in the third term")
    if regression.correlated:
        notes.append("the variance ratio counts as known")
    p = len(curve.names)
    return RobustCovariance(
        terms=curve.names,
        kind="two_way",
        side=regression.side,
        psi=regression.psi,
        covariance_array=covariance,
        multiplier=multiplier,
        multiplier_values=factors,
        root="none",
        df=np.full(p, np.nan),
        expectation=np.full(p, np.nan),
        units=products.units,
        status=status,
        notes=tuple(notes),
        regression=regression,
    )


class _RowScores:
    """Scores of rows in data coordinates, from raw rows."""

    def __init__(self, regression: Regression, rows: str) -> None:
        products = regression.products
        r = regression.rank
        shift, scale = products.shift, products.scale
        self.near = shift + products.means * scale
        rest = products.means - (self.near - shift) / scale
        growth = regression.growth
        share_x, share_e = (
            (growth**-0.5, growth**-0.5) if rows == "quasi_demeaned" else (1.0 / growth, growth**0.0)
        )
        if regression.side == "within":
            share_x = share_e = np.zeros_like(growth)
        means = regression.means()
        means[:, :r] *= share_x[:, None]
        means[:, r] *= share_e
        self.means = means - rest @ regression.from_scaled
        self.change = regression.from_scaled / scale[:, None]
        self.root = regression.root
        self.kept = [j for j, name in enumerate(products.design) if name != products.constant]

    def __call__(self, codes: IntArray, x: FloatArray, y: FloatArray) -> FloatArray:
        """Return the scores of these rows, shape (b, p)."""
        z = np.column_stack([x[:, self.kept], y]) - self.near[codes]
        transformed = z @ self.change + self.means[codes]
        r = self.root.shape[1]
        return np.asarray((transformed[:, :r] * transformed[:, r:]) @ self.root.T)


def _places(products: UnitProducts, keys: pd.Index | None) -> IntArray | None:
    """Return the position in the products of each code."""
    if keys is None or keys.equals(products.keys):
        return None
    place = np.full(len(keys), -1, dtype=np.intp)
    at = keys.get_indexer(products.keys)
    if (at < 0).any():
        raise DataError("the unit products hold units that the keys of the rows do not.")
    place[at] = np.arange(at.size)
    return place


def _period_sums(
    scored: _RowScores,
    products: UnitProducts,
    place: IntArray | None,
    blocks: Callable[[], Iterable[PeriodBlock]],
) -> tuple[dict[str, FloatArray], dict[str, int], bool]:
    """Return the products of sums by period and by pair, and the numbers of both."""
    p = scored.root.shape[0]
    periods = np.zeros((0, p))
    by_row = np.zeros((p, p))
    seen: list[NDArray[np.int64]] = []
    counts = np.zeros(products.units, dtype=np.int64)
    for codes, x, y, period in _located(blocks, place, products):
        scores = scored(codes, x, y)
        top = int(period.max(initial=-1)) + 1
        if top > max(LARGEST_CODE, products.rows):
            raise DataError(f"period code {top - 1} is too large: number the periods from 0 in their order.")
        if top > periods.shape[0]:
            periods = np.vstack([periods, np.zeros((top - periods.shape[0], p))])
        add_by_unit(periods, np.asarray(period, dtype=np.intp), scores)
        by_row += scores.T @ scores
        counts += np.bincount(codes, minlength=counts.size)
        seen.append(period.astype(np.int64) * counts.size + codes)
    if not np.array_equal(counts, products.sizes):
        raise DataError("the rows are not those of the unit products: the number of rows per unit differs.")
    pairs = np.concatenate(seen)
    levels, pair_of = np.unique(pairs, return_inverse=True)
    repeated = levels.size < pairs.size
    if repeated:
        sums = np.zeros((levels.size, p))
        start = 0
        for codes, x, y, _ in _located(blocks, place, products):
            add_by_unit(sums, pair_of[start : start + codes.size].astype(np.intp), scored(codes, x, y))
            start += codes.size
        by_row = sums.T @ sums
    number = int(np.unique(levels // counts.size).size)
    if number < 2:
        raise IdentificationError("a two-way covariance needs at least two periods.")
    return (
        {"period": periods.T @ periods, "row": by_row},
        {"period": number, "row": int(levels.size)},
        repeated,
    )


def _located(
    blocks: Callable[[], Iterable[PeriodBlock]], place: IntArray | None, products: UnitProducts
) -> Iterable[PeriodBlock]:
    """Yield blocks with positions in the products as codes; rows of units that were left out are passed over."""
    for given, x, y, period in blocks():
        if period.size != given.size or (period.size and period.min() < 0):
            raise DataError("every row needs a period code, an integer from 0.")
        codes = given if place is None else place[given]
        if codes.size and codes.max() >= products.units:
            raise DataError("a row has a unit that the unit products do not know.")
        here = codes >= 0
        yield (codes, x, y, period) if here.all() else (codes[here], x[here], y[here], period[here])


def _factors(multiplier: str, counts: dict[str, int], regression: Regression) -> dict[str, float]:
    """Return the multiplier of each sum."""
    name = multiplier.replace("smallest", "units")
    smallest = min(counts["unit"], counts["period"])
    used = dict.fromkeys(counts, smallest) if multiplier.startswith("smallest") else counts
    return {
        key: multiplier_value(name, regression.side, number, regression.rows, regression.rank)
        for key, number in used.items()
    }


def _definiteness(covariance: FloatArray, free: NDArray[np.bool_], names: tuple[str, ...]) -> str:
    """Say whether the covariance is non-negative definite."""
    part = covariance[np.ix_(free, free)]
    variances = np.diag(part)
    length = np.sqrt(np.where(variances > 0.0, variances, np.abs(part).max()))
    smallest = float(np.linalg.eigvalsh(part / np.outer(length, length))[0])
    if smallest >= -NEGATIVE:
        return COMPUTED
    bad = [name for name, value in zip(np.array(names)[free], variances, strict=True) if value < 0.0]
    text = f"not non-negative definite: smallest eigenvalue {smallest:.3g} after scaling to unit variances"
    return text + (f"; negative variance of {', '.join(bad)}, no standard error" if bad else "")
