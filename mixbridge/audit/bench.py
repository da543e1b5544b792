"""What the checks of an audit share: sorted rows, residuals of both kinds, the route taken as primary, wording."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from mixbridge.audit.power import detectable_f
from mixbridge.audit.record import StudyView
from mixbridge.audit.regress import WaldTest
from mixbridge.audit.rows import Links, Rows, links_of, rows_of
from mixbridge.errors import IdentificationError
from mixbridge.moments import column_table
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["Bench", "Gls"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
OFF_CURVE = ("between", "first_difference", "within")


@dataclass(frozen=True, slots=True, eq=False)
class Gls:
    """Residuals of generalised least squares at one ratio.

    Attributes
    ----------
    psi : float
        Variance ratio.
    deviation : ndarray of shape (n,)
        Residual minus its unit mean.
    mean : ndarray of shape (N,)
        Unit mean of the residual: the unit remainder.
    root : ndarray of shape (p, p)
        J with ``JJ' = (X'V_0^-1 X)^-1``, for the columns of `Rows`.
    idiosyncratic_variance : float
        Of the fit.
    """

    psi: float
    deviation: FloatArray
    mean: FloatArray
    root: FloatArray
    idiosyncratic_variance: float


@dataclass(frozen=True, eq=False)
class Bench:
    """One study under audit.

    Attributes
    ----------
    study : StudyView
    level, power : float
        Level of the tests and power of the detectable departures.
    seed : int
        Of simulated reference laws.
    show_units : bool
        Whether outlying units and rows are named.
    """

    study: StudyView
    level: float = 0.05
    power: float = 0.8
    seed: int = 20_080
    show_units: bool = True

    @property
    def curve(self) -> Curve:
        """The curve of the study."""
        return self.study.curve

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the design columns."""
        return self.curve.names

    @cached_property
    def constant(self) -> int | None:
        """Place of the column of ones, or of another constant column."""
        name = self.curve.moments.constant
        return None if name is None else self.names.index(name)

    @cached_property
    def rows(self) -> Rows:
        """Rows sorted by unit and period."""
        return rows_of(self.study.panel, self.constant)

    @cached_property
    def links(self) -> Links:
        """Neighbouring rows one period step apart."""
        found = links_of(self.rows)
        if found is None:
            raise IdentificationError("no unit has two rows")
        return found

    @cached_property
    def primary(self) -> Fit:
        """The primary route if it has a finite ratio, else REML, else the first route shown that has one."""
        for key in dict.fromkeys([self.study.primary, "reml", *self.study.fits]):
            fit = self.study.fits.get(key) or self.study.fit(key)
            if usable(fit):
                return fit
        raise IdentificationError(
            "no route gives a finite variance ratio and a positive idiosyncratic variance"
        )

    @cached_property
    def x_within(self) -> FloatArray:
        """Design columns minus their unit means; columns constant within units exactly zero."""
        deviation = self.rows.groups.demean(self.rows.x)
        deviation[:, ~self.varying] = 0.0
        return deviation

    @cached_property
    def sd_within(self) -> FloatArray:
        """Within standard deviation of each design column, divisor n - N; zero where it is rounding."""
        table = column_table(self.curve.moments).set_index("column")["sd_within"]
        return np.asarray(table.loc[list(self.names)], dtype=float)

    @property
    def varying(self) -> NDArray[np.bool_]:
        """Which design columns vary within units beyond rounding."""
        return self.sd_within > 0.0

    @cached_property
    def within_basis(self) -> FloatArray:
        """``H`` with orthonormal columns that span QX, shape (n, K_w)."""
        columns = self.x_within[:, self.curve.within_span.kept]
        if columns.shape[1] == 0:
            return columns
        length = np.sqrt((columns**2).sum(axis=0))
        return np.asarray(np.linalg.qr(columns / length)[0])

    @cached_property
    def within_residual(self) -> FloatArray:
        """Residual of the within regression, in the order of `rows`."""
        y = self.rows.groups.demean(self.rows.y)
        basis = self.within_basis
        rest = y - basis @ (basis.T @ y)
        return np.asarray(rest - basis @ (basis.T @ rest))

    @property
    def within_variance(self) -> float:
        """``RSS_w / (n - N - K_w)``."""
        if self.curve.df_within < 1:
            raise IdentificationError("no degrees of freedom within units (n - N - K_w < 1)")
        return float(self.within_residual @ self.within_residual) / self.curve.df_within

    @cached_property
    def gls(self) -> Gls:
        """Residuals of the primary route."""
        return self.gls_at(self.primary.ratio, self.primary.idiosyncratic_variance)

    def gls_at(self, psi: float, variance: float) -> Gls:
        """Return residuals of generalised least squares at a finite ratio."""
        rows = self.rows
        shrink = self.quasi(psi, rows.groups.sizes)
        quasi = rows.x - rows.groups.spread(shrink[:, None] * self.x_means)
        target = rows.y - rows.groups.spread(shrink * rows.groups.mean(rows.y))
        length = np.sqrt((quasi**2).sum(axis=0))
        q, r = np.linalg.qr(quasi / length)
        beta = np.linalg.solve(r, q.T @ target) / length
        residual = rows.y - rows.x @ beta
        mean = rows.groups.mean(residual)
        root = np.linalg.inv(r) / length[:, None]
        return Gls(psi, residual - rows.groups.spread(mean), mean, root, variance)

    @cached_property
    def x_means(self) -> FloatArray:
        """Unit means of the columns of `rows`."""
        return self.rows.groups.mean(self.rows.x)

    @staticmethod
    def quasi(psi: float, sizes: IntArray | FloatArray) -> FloatArray:
        """Return ``1 - (1 + T psi)^(-1/2)``."""
        return np.asarray(1.0 - 1.0 / np.sqrt(1.0 + np.asarray(sizes, dtype=float) * psi))

    def verdict(self, p: float, found: str, otherwise: str) -> str:
        """Return the conclusion: rejected and what of it, or not rejected and what could have been seen."""
        if not np.isfinite(p):
            return otherwise
        if p <= self.level:
            return f"Rejected at {self.level:g}: {found} {otherwise}"
        return (
            f"Not rejected at {self.level:g}; not rejecting is not evidence for the assumption. {otherwise}"
        )

    def detectable(self, error: float, unit: str, test: WaldTest | None = None) -> tuple[str, float]:
        """Say which value of one coefficient the test of it alone would find with the stated power."""
        df = test.df[1] + test.df[0] - 1 if test is not None else 10**6
        size = float(np.sqrt(detectable_f(1, df, self.level, self.power))) * error
        return f"Detectable with probability {self.power:g}: {size:.3g} {unit}.", size


def usable(fit: Fit) -> bool:
    """Whether a fit has coefficients, a finite ratio and a positive idiosyncratic variance."""
    return bool(fit.estimated and np.isfinite(fit.ratio) and fit.idiosyncratic_variance > 0.0)
