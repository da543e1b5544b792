"""What the checks may look at: the curve, its fits, the plain algebra, and rows where they are at hand."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.means import with_unit_means
from mixbridge.moments import Moments, noise
from mixbridge.ratio import Curve
from mixbridge.reconcile.identities.plain import EPS, Plain, Solved, plain_of
from mixbridge.routes import Fit

__all__ = ["Rows", "Setting", "multiple", "setting_of"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """The rows that the moments were taken from, in any order.

    Attributes
    ----------
    x : ndarray of shape (n, p)
        Design columns in the order of the formula.
    y : ndarray of shape (n,)
        Outcome.
    codes : ndarray of int, shape (n,)
        Unit of each row, 0 to N - 1.
    """

    x: FloatArray
    y: FloatArray
    codes: NDArray[np.intp]


@dataclass(frozen=True, slots=True, eq=False)
class Setting:
    """One panel with its fits.

    Attributes
    ----------
    curve : Curve
    fits : mapping of str to Fit
        By ledger key; fits on other rows are left out.
    rows : Rows or None
    plain : Plain
        The same moments in plain algebra.
    solved : mapping of str to Solved
        Plain generalised least squares at the components of each random-effects fit, pooled included.
    with_means : Plain
        The same panel with unit means added.
    wide : mapping of float to Solved
        Its generalised least squares at ratio 0, one, and that of REML; none where rows are too few.
    source : mapping of str to str
        Column of `with_means` that is a mean -> the column it is the mean of.
    """

    curve: Curve
    fits: Mapping[str, Fit]
    rows: Rows | None
    plain: Plain
    solved: Mapping[str, Solved]
    with_means: Plain
    wide: Mapping[float, Solved]
    source: Mapping[str, str]

    def on_curve(self) -> Iterator[tuple[str, Fit]]:
        """Yield the fits that are generalised least squares at a finite ratio."""
        for key in self.solved:
            yield key, self.fits[key]

    def missing(self, *keys: str) -> str | None:
        """Say which of some routes has no estimates here and why; None if all have."""
        for key in keys:
            if key not in self.fits:
                return f"route {key} was not fitted on these rows"
            if not self.fits[key].estimated:
                return f"route {key}: {self.fits[key].status}"
        return None

    @property
    def balanced(self) -> bool:
        """Whether all units have the same size."""
        return len(self.curve.sizes) == 1

    @property
    def closed(self) -> bool:
        """Whether the columns are closed under unit averaging: ``rank [PX, QX] = K_p + K_w`` equals K."""
        return self.curve.rank_between + self.curve.rank_within == self.curve.rank

    @property
    def ranks(self) -> str:
        """The ranks in words."""
        c = self.curve
        return f"rank X = {c.rank}, rank PX = {c.rank_between}, rank QX = {c.rank_within}"

    @property
    def stored(self) -> FloatArray:
        """Bound per design column, over all rows and in data units, for the rounding of the stored rows."""
        moments, bound = self.curve.moments, np.zeros(self.curve.rank)
        floor = noise(moments) * moments.scale
        for j, name in enumerate(moments.design):
            if name != moments.constant:
                bound[j] = floor[moments.columns.index(name)]
        return bound

    def hidden_length(self, slope: FloatArray) -> float:
        """Return how long a residual the combinations that count as zero, within or on unit means, can leave.

        Where QXv or PXv is zero but for rounding, it is at most as long as ``|v|`` times the rounding of the stored
        columns, and its coefficient at most the largest ``|b_j / v_j|``. All in scaled units.
        """
        noise_scaled = self.stored / np.abs(self.plain.scale)
        total = 0.0
        for null in (self.curve.within_span.null, self.curve.between_span.null):
            for v in np.abs(null.T):
                used = v > 1e-9 * v.max()
                total += float(v @ noise_scaled) * float((np.abs(slope)[used] / v[used]).max())
        return total

    @property
    def snapped(self) -> bool:
        """Whether the engine took as zero what the stored rows leave of a column or of a combination within units."""
        curve = self.curve
        nonzero = int((self.plain.within[:, :-1] != 0.0).any(axis=0).sum())
        return nonzero > curve.columns_within or any(found.others for found in curve.within_span.dependencies)

    def stored_length(self, beta: FloatArray) -> float:
        """Return how long a residual the stored rounding of columns can leave at these coefficients, in data units."""
        return float(self.stored @ np.abs(beta))

    def engine_condition(self, psi: float) -> float:
        """Return the condition of the weighted covariates as the engine holds them, combined so that ``X'X = I``."""
        p, weights = self.curve.rank, self.curve.sizes / (1.0 + self.curve.sizes * psi)
        products = (self.curve.within_products + self.curve.weighted_between(weights))[:p, :p]
        length = np.sqrt(np.diag(products))
        values = np.linalg.eigvalsh(products / np.outer(length, length))
        return float(np.sqrt(values[-1] / max(values[0], EPS)))

    def engine_total(self, psi: float) -> float:
        """Return the weighted sum of squares of the pooled residual, the engine's outcome, scaled."""
        p, weights = self.curve.rank, self.curve.sizes / (1.0 + self.curve.sizes * psi)
        whole = self.curve.within_products[p, p] + weights @ self.curve.between_products[:, p, p]
        return float(whole) * self.curve.unit / self.plain.unit**2


def components_ratio(fit: Fit) -> float:
    """Return the ratio of the two components that a fit states."""
    return fit.unit_variance / fit.idiosyncratic_variance


def multiple(columns: int) -> float:
    """Return the rounding allowed per unit of condition: 64 units for each column of the matrix factored.

    The textbook constant of a QR with c columns is of the order of c; 64 leaves room for the two sides and
    the maps between units.
    """
    return 64.0 * (columns + 1) * EPS


def setting_of(
    curve: Curve,
    fits: Mapping[str, Fit],
    rows: Rows | None = None,
    with_means: tuple[Moments, Mapping[str, str]] | None = None,
) -> Setting:
    """Prepare what the checks share.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
    rows : Rows, optional
    with_means : (Moments, mapping), optional
        Moments with unit means from elsewhere, and which column is the mean of which; taken from the moments
        unless given.
    """
    usable = {key: fit for key, fit in fits.items() if fit.rows == curve.n and fit.terms == curve.names}
    plain = plain_of(curve.moments)
    ratios = {
        key: components_ratio(fit)
        for key, fit in usable.items()
        if fit.estimated
        and np.isfinite(fit.ratio)
        and np.isfinite(components_ratio(fit))
        and fit.unit_variance >= 0.0
    }
    distinct = sorted(set(ratios.values()))
    at = dict(zip(distinct, plain.at_each(distinct), strict=True)) if distinct else {}
    solved = {key: at[ratio] for key, ratio in ratios.items()}
    if with_means is None:
        own = with_unit_means(curve.moments)
        with_means = own.moments, own.source
    means, looked_at = plain_of(with_means[0]), sorted({0.0, 1.0, ratios.get("reml", 1.0)})
    wide = dict(zip(looked_at, means.at_each(looked_at), strict=True)) if means.rank < curve.n else {}
    return Setting(curve, usable, rows, plain, solved, means, wide, with_means[1])
