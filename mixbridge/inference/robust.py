"""Cluster-robust covariances by unit, CR0 to CR3, for every route but `first_difference`.

With the score ``s_i = X_i'V_i^-1 e_i`` of unit i and ``M = (X'V^-1 X)^-1`` at the ψ of the route,

    CR0   M (sum s_i s_i') M
          (Liang & Zeger 1986; Arellano 1987 for `within`)
    CR1   a multiplier times CR0; `MULTIPLIERS` lists those in use
    CR2   residuals adjusted to be unbiased under the working model I + psi J; `robust_adjust` says with which root
          (Bell & McCaffrey 2002; Pustejovsky & Tipton 2018)
    CR3   sum (beta_(i) - beta)(beta_(i) - beta)', deletions of one unit at fixed ψ
          (Mancl & DeRouen 2001)

ψ counts as known throughout: what estimating it adds is not in these figures. For `within` the regression is the
one on deviations from unit means, under independent errors as working model. CR2 and its degrees of freedom are
then those of the regression with one indicator per unit (Pustejovsky & Tipton 2018, theorem 2; its number from
memory): residuals add up to zero in each unit, so the indicators' part of ``I - H_i`` acts on nothing. For
`between` each unit is one row.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.robust_adjust import ROOTS, adjust, carried_alone
from mixbridge.inference.robust_regression import Regression, regression_of
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["KINDS", "MULTIPLIERS", "RobustCovariance", "robust_covariance"]

FloatArray = NDArray[np.float64]

KINDS = ("CR0", "CR1", "CR2", "CR3")
COMPUTED = "computed"
FEW = 4.0
"""Degrees of freedom below which a note says that a t reference is rough (Pustejovsky & Tipton 2018)."""
TOUCHED = 1e-8
"""Share of a coefficient's row of `root` in a lost direction that counts as none."""

MULTIPLIERS: Mapping[str, tuple[str, Callable[[int, int, int], float]]] = MappingProxyType(
    {
        "none": ("1", lambda units, rows, rank: 1.0),
        "units": ("N/(N - 1)", lambda units, rows, rank: units / (units - 1.0)),
        "units_and_rows": (
            "N/(N - 1) (n - 1)/(n - K)",
            lambda units, rows, rank: units / (units - 1.0) * ((rows - 1.0) / (rows - rank)),
        ),
        "units_and_rows_constant": (
            "N/(N - 1) (n - 1)/(n - K_w - 1), within only: one constant counts",
            lambda units, rows, rank: units / (units - 1.0) * ((rows - 1.0) / (rows - rank - 1.0)),
        ),
        "units_and_rows_intercepts": (
            "N/(N - 1) (n - 1)/(n - N - K_w), within only: every unit intercept counts",
            lambda units, rows, rank: units / (units - 1.0) * ((rows - 1.0) / (rows - rank - units)),
        ),
        "units_and_rank": ("N/(N - K)", lambda units, rows, rank: units / (units - rank)),
        "jackknife": ("(N - 1)/N", lambda units, rows, rank: (units - 1.0) / units),
    }
)
"""Name -> formula in words, and as a function of units N, rows n (units for `between`) and rank K of the regression."""
WITHIN_ONLY = ("units_and_rows_constant", "units_and_rows_intercepts")
DEFAULTS = {"CR0": "none", "CR1": "units", "CR2": "none", "CR3": "none"}


@dataclass(frozen=True, slots=True, eq=False)
class RobustCovariance:
    """A robust covariance of the coefficients of one route.

    Attributes
    ----------
    terms : tuple of str
        Coefficients.
    kind : str
        ``CR0`` ... ``CR3`` or ``two_way``.
    side, psi
        Regression it belongs to: ``curve`` at this ratio, ``within`` or ``between``.
    covariance_array : ndarray of shape (p, p)
        In the units of the data; NaN for coefficients without a covariance.
    multiplier : str
        Name of the multiplier, as in `MULTIPLIERS`.
    multiplier_values : mapping of str to float
        Its value for each sum: ``unit``; for ``two_way`` also ``period`` and ``row``.
    root : str
        For CR2 on the curve which root is used, else ``none``.
    df : ndarray of shape (p,)
        Satterthwaite degrees of freedom of each coefficient for CR2, else NaN.
    expectation : ndarray of shape (p,)
        CR2: expected over true variance under the working model; one unless a generalised inverse was needed.
    units : int
        Units N.
    status : str
        ``computed``; where a unit carries a direction alone ``partly zero: ...`` (CR0, CR1), ``generalised
        inverse: ...`` (CR2), ``partly not defined: ...`` (CR3); two-way ``not non-negative definite: ...``.
    notes : tuple of str
        What a reader of the figures should know.
    """

    terms: tuple[str, ...]
    kind: str
    side: str
    psi: float
    covariance_array: FloatArray
    multiplier: str
    multiplier_values: Mapping[str, float]
    root: str
    df: FloatArray
    expectation: FloatArray
    units: int
    status: str
    notes: tuple[str, ...]
    regression: Regression = field(repr=False)

    def __post_init__(self) -> None:
        """Make arrays and mappings read-only."""
        for array in (self.covariance_array, self.df, self.expectation):
            array.setflags(write=False)
        object.__setattr__(self, "multiplier_values", MappingProxyType(dict(self.multiplier_values)))

    @property
    def covariance(self) -> pd.DataFrame:
        """Covariance of the coefficients, by term."""
        return pd.DataFrame(self.covariance_array.copy(), index=list(self.terms), columns=list(self.terms))

    @property
    def standard_errors(self) -> pd.Series:
        """Square roots of the diagonal; NaN where there is none, or where a variance is negative (see `status`)."""
        variances = np.diag(self.covariance_array)
        values = np.sqrt(np.where(variances >= 0.0, variances, np.nan))
        return pd.Series(values, index=list(self.terms), name=self.kind)

    @property
    def degrees_of_freedom(self) -> pd.Series:
        """Satterthwaite degrees of freedom of each coefficient (CR2), else NaN."""
        return pd.Series(self.df.copy(), index=list(self.terms), name="df")

    def satterthwaite_df(self, combinations: ArrayLike) -> FloatArray:
        """Return the degrees of freedom of CR2 for linear combinations of the coefficients.

        Parameters
        ----------
        combinations : array_like of shape (p,) or (c, p)
            Weights of the coefficients, in the order of `terms`.

        Returns
        -------
        ndarray of shape (c,)
            One pass over the unit products for all combinations together.
        """
        if self.kind != "CR2":
            raise OptionError(
                f"Satterthwaite degrees of freedom belong to CR2, this covariance is {self.kind}."
            )
        weights = np.atleast_2d(np.asarray(combinations, dtype=float))
        if weights.ndim != 2 or weights.shape[1] != len(self.terms) or not np.isfinite(weights).all():
            raise OptionError(
                f"a combination has one finite weight for each of the {len(self.terms)} coefficients."
            )
        _refuse_undetermined(self.terms, self.regression, weights)
        return adjust(self.regression, "CR2", self.root, self.regression.root.T @ weights.T).df


def robust_covariance(
    curve: Curve,
    products: UnitProducts,
    point: float | str | Fit,
    *,
    kind: str = "CR1",
    multiplier: str | None = None,
    root: str = "pustejovsky_tipton",
    between: str = "size_weighted",
) -> RobustCovariance:
    """Compute a covariance that is robust to any dependence and any variances within units.

    Parameters
    ----------
    curve : Curve
    products : UnitProducts
        Of the same rows.
    point : float, str or Fit
        Variance ratio (0: pooled; infinite: within), ``"between"``, or a fit of any route but
        `first_difference`.
    kind : {'CR0', 'CR1', 'CR2', 'CR3'}
    multiplier : str, optional
        One of `MULTIPLIERS`; ``units`` for CR1 and ``none`` for the others unless given. CR0 has none, CR1 some.
    root : {'pustejovsky_tipton', 'quasi_demeaned'}
        Adjustment of CR2 where ψ is positive and finite.
    between : {'size_weighted', 'unweighted'}
        Weights of unit means for ``"between"``.

    Returns
    -------
    RobustCovariance
    """
    if kind not in KINDS:
        raise OptionError.not_among("kind", kind, KINDS)
    if root not in ROOTS:
        raise OptionError.not_among("root", root, ROOTS)
    name = DEFAULTS[kind] if multiplier is None else multiplier
    regression = regression_of(curve, products, point, between)
    factor = multiplier_value(name, regression.side, products.units, regression.rows, regression.rank)
    if (kind == "CR0") != (name == "none") and kind in ("CR0", "CR1"):
        raise OptionError(
            f"{kind} with multiplier={name!r}: CR0 is the sum without a multiplier, CR1 the one with."
        )
    if products.units < 2:
        raise IdentificationError("a covariance by unit needs at least two units.")
    terms = curve.names
    notes = _notes(products, regression, name, factor)
    status, lost = _carried(kind, regression, terms)
    df = np.full(len(terms), np.nan)
    expectation = np.full(len(terms), np.nan)
    if kind in ("CR2", "CR3"):
        each = regression.root[~lost] if kind == "CR2" else regression.root[:0]
        adjusted = adjust(regression, kind, root, each.T)
        scores = adjusted.scores
        if kind == "CR2":
            df[~lost], expectation[~lost] = adjusted.df, adjusted.expectation
    else:
        scores = regression.scores()
    covariance = _sandwich(regression, scores, factor, lost)
    if kind == "CR2":
        low = [f"{terms[j]} {df[j]:.3g}" for j in np.flatnonzero(df < FEW)]
        if low:
            notes += (
                f"degrees of freedom below {FEW:g} for {', '.join(low)}: few units carry them, a t reference is rough",
            )
        same = "CR2: both roots are the same here"
        notes += (f"CR2 with the root {root}" if regression.correlated else same,)
    return RobustCovariance(
        terms=terms,
        kind=kind,
        side=regression.side,
        psi=regression.psi,
        covariance_array=covariance,
        multiplier=name,
        multiplier_values={"unit": factor},
        root=root if kind == "CR2" else "none",
        df=df,
        expectation=expectation,
        units=products.units,
        status=status,
        notes=notes,
        regression=regression,
    )


def multiplier_value(name: str, side: str, units: int, rows: int, rank: int) -> float:
    """Return the value of a multiplier; refuses one that does not belong to the regression or is not positive."""
    allowed = [key for key in MULTIPLIERS if side == "within" or key not in WITHIN_ONLY]
    if name not in allowed:
        raise OptionError.not_among("multiplier", name, allowed)
    formula, value = MULTIPLIERS[name]
    if units < 2:
        raise IdentificationError(f"robust covariances need at least two clusters; there is {units}.")
    try:
        factor = value(units, rows, rank)
    except ZeroDivisionError:
        factor = np.inf
    if not 0.0 < factor < np.inf:
        raise IdentificationError(
            f"multiplier {name!r} = {formula} with N = {units}, n = {rows}, K = {rank}: no degrees of freedom."
        )
    return float(factor)


def _sandwich(
    regression: Regression, scores: FloatArray, factor: float, lost: NDArray[np.bool_]
) -> FloatArray:
    """Return ``factor root (sum s s') root'``, NaN where lost."""
    spread = scores @ regression.root.T
    covariance = factor * (spread.T @ spread)
    covariance[lost] = np.nan
    covariance[:, lost] = np.nan
    return np.asarray(covariance)


def _refuse_undetermined(terms: tuple[str, ...], regression: Regression, weights: FloatArray) -> None:
    used = (weights != 0.0).any(axis=0) & ~regression.free
    if used.any():
        raise IdentificationError(
            f"the {regression.side} regression does not determine {_listed(terms, used)}."
        )
    if not (weights != 0.0).any(axis=1).all():
        raise OptionError("a combination has only zero weights.")


def _notes(products: UnitProducts, regression: Regression, multiplier: str, factor: float) -> tuple[str, ...]:
    units, rank = products.units, regression.rank
    named = f"multiplier {multiplier} = {MULTIPLIERS[multiplier][0]} = {factor:.6g}"
    notes: tuple[str, ...] = ("no multiplier" if multiplier == "none" else named,)
    if regression.correlated:
        notes += ("the variance ratio counts as known",)
    if regression.side == "within":
        alone = int((products.sizes == 1).sum())
        if alone:
            notes += (f"{alone} of {units} units have one row: they count in N and add nothing to the sum",)
    if units <= rank:
        notes += (f"{units} units for {rank} coefficients: the covariance has rank below {rank}",)
    return notes


def _carried(kind: str, regression: Regression, terms: tuple[str, ...]) -> tuple[str, NDArray[np.bool_]]:
    """Say which units carry a direction alone, and which coefficients have no covariance for it or another reason."""
    at, directions = carried_alone(regression)
    lost = ~regression.free
    if not at.size:
        return COMPUTED, lost
    length = np.sqrt((regression.root**2).sum(axis=1))
    part = regression.root @ directions
    touched = regression.free & (np.abs(part).max(axis=1, initial=0.0) > TOUCHED * length)
    whole = touched & (
        np.sqrt(((regression.root - part @ directions.T) ** 2).sum(axis=1)) <= TOUCHED * length
    )
    keys = regression.products.keys[at]
    shown = ", ".join(str(key) for key in keys[:5]) + (f" and {at.size - 5} more" if at.size > 5 else "")
    cause = f"without unit {shown} the columns are dependent"
    if kind == "CR3":
        names = _listed(terms, touched)
        return (
            f"partly not defined: {cause}, so that deleting it leaves no estimate of {names}",
            lost | touched,
        )
    text = f"{cause}, and its residuals are zero in that direction whatever the outcome"
    named = []
    if (touched & ~whole).any():
        named.append(f"understated for {_listed(terms, touched & ~whole)}")
    if whole.any():
        named.append(f"not defined for {_listed(terms, whole)}")
    return (
        f"{'generalised inverse' if kind == 'CR2' else 'partly zero'}: {text}; {', '.join(named)}",
        lost | whole,
    )


def _listed(terms: tuple[str, ...], which: NDArray[np.bool_]) -> str:
    return ", ".join(term for term, hit in zip(terms, which, strict=True) if hit)
