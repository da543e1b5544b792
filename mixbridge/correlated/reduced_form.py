"""The unrestricted reduced form of a balanced panel: each period's outcome on the covariates of all periods.

    y_t = R p_t + v_t,  t = 1..T,   R = [1, unit-constant columns, x_1, ..., x_T],  one row per unit

(Chamberlain 1982; 1984). With Q an orthonormal basis of the columns of R, the coefficients in its coordinates are
``rho_t = Q'y_t``, and their covariance robust to any heteroscedasticity and any dependence within units is

    Omega = sum_i (v_i v_i') kron (q_i q_i')

without a multiplier. The restrictions of the random-intercept model with the unit effect projected on x_1, ..., x_T are
``rho_t = Q'Z_t theta``: Z_t holds the design columns at period t and the columns of the projection. In the coordinates
of the columns themselves this is ``Pi = I_T kron b' + 1 l'`` beside intercepts; period indicators and deterministic
trends are intercepts of periods and no columns of R. With a constant in the model, columns and outcome are measured
from their grand means, and parameters are given for the columns as they are.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from mixbridge.correlated.period_table import PeriodTable, period_table, periods_of_panel
from mixbridge.correlated.projection import Projection
from mixbridge.errors import IdentificationError
from mixbridge.moments import OpenMoments, span_of
from mixbridge.moments.factors import factor_from_rows, stack_factors
from mixbridge.panel import Panel

__all__ = ["LARGEST", "ReducedForm", "outer_rows", "reduced_form", "require_balanced"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)
WHAT = "minimum distance on the reduced form"
UNITS_AT_ONCE = 1024
LARGEST = 4_000
"""Rows of the largest square matrix that is formed: 128 MB."""


@dataclass(frozen=True, slots=True, eq=False)
class ReducedForm:
    """The reduced form in orthonormal coordinates, and the model's restrictions on it.

    Attributes
    ----------
    coefficients : ndarray of shape (T, r)
        ``rho_t``.
    basis : ndarray of shape (N, r)
        Q.
    residuals : ndarray of shape (N, T)
        ``v_it``.
    restrictions : ndarray of shape (T, r, p)
        ``Q'Z_t`` for the parameters that are kept, columns scaled by `scale`.
    scale : ndarray of shape (p,)
        Length of each parameter's column.
    centre : ndarray of shape (p,)
        Grand means of the columns; zero without a constant.
    origin : float
        Grand mean of the outcome; zero without a constant.
    constant : int or None
        Place of the constant among the kept parameters.
    vanishing : tuple of int
        Ordinals of periods whose residuals are zero to rounding.
    apart : tuple of str
        Columns that are intercepts of periods: one value in each period for all units.
    names : tuple of str
        Every column of the model with its projection.
    kept : ndarray of int
        Places of the identified parameters among `names`.
    lost : mapping of str to str
        Parameter that is not identified -> reason.
    """

    coefficients: FloatArray
    basis: FloatArray = field(repr=False)
    residuals: FloatArray = field(repr=False)
    restrictions: FloatArray = field(repr=False)
    scale: FloatArray = field(repr=False)
    centre: FloatArray = field(repr=False)
    origin: float
    constant: int | None
    vanishing: tuple[int, ...]
    apart: tuple[str, ...]
    names: tuple[str, ...]
    kept: NDArray[np.intp]
    lost: dict[str, str]

    @property
    def units(self) -> int:
        """Number of units N."""
        return int(self.basis.shape[0])

    @property
    def moments(self) -> int:
        """Number of reduced-form coefficients, ``T r``."""
        return int(self.coefficients.size)

    @property
    def left(self) -> int:
        """Residual degrees of freedom of each period's regression, ``N - r``."""
        return self.units - int(self.basis.shape[1])

    def outer_factor(self) -> FloatArray:
        """Return F with ``F'F = Omega``, from rows ``v_i kron q_i``; shape (T r, T r)."""
        size = self.moments
        factor = np.zeros((size, size))
        step = max(UNITS_AT_ONCE, size)
        for start in range(0, self.units, step):
            rows = outer_rows(self.residuals[start : start + step], self.basis[start : start + step])
            factor = stack_factors(factor, factor_from_rows(rows))
        return factor

    def in_data_units(self, scaled: FloatArray, root: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return parameters and a root of their covariance, for the columns and the outcome as they are.

        Parameters
        ----------
        scaled : ndarray of shape (p,)
        root : ndarray of shape (p, k)
            Of columns that are scaled and measured from `centre`.
        """
        theta, root = scaled / self.scale, root / self.scale[:, None]
        if self.constant is not None:
            theta[self.constant] += self.origin - self.centre @ theta
            root[self.constant] -= self.centre @ root
        return theta, root


def outer_rows(residuals: FloatArray, basis: FloatArray) -> FloatArray:
    """Return the rows ``v_i kron q_i``, shape (N, T r)."""
    rows = residuals[:, :, None] * basis[:, None, :]
    return rows.reshape(residuals.shape[0], -1)


def require_balanced(panel: Panel, opened: OpenMoments) -> None:
    """Refuse a panel in which some unit misses a period.

    Raises
    ------
    IdentificationError
        With the numbers.
    OptionError
        If there are no ordered periods.
    """
    periods, units = periods_of_panel(panel, WHAT).size, len(opened.keys)
    if periods < 2:
        raise IdentificationError(
            f"{WHAT} needs two periods; there is one, in which unit effect and error cannot be told apart. Use the "
            "route 'pooled' with a robust covariance, and say so."
        )
    if panel.n < units * periods:
        raise IdentificationError(
            f"{WHAT} needs every unit in every period; of {units} x {periods} cells {units * periods - panel.n} are "
            "missing. Use correlated('chamberlain') or correlated('mundlak_sizes'), which take what is seen, or keep "
            "the units that are complete, which may select them."
        )


def reduced_form(panel: Panel, opened: OpenMoments, projection: Projection) -> ReducedForm:
    """Estimate the reduced form of a balanced panel.

    Parameters
    ----------
    panel, opened
        Of the study without the projection.
    projection : Projection
        The projection on all periods of the same study.

    Returns
    -------
    ReducedForm

    Raises
    ------
    IdentificationError
        If the panel has holes, or units are no more than the columns of R.
    """
    wide = projection.augmented
    names = wide.panel.names
    require_balanced(panel, opened)
    table = period_table(wide.panel, wide.kept(), names, WHAT)
    y = _outcomes(panel, opened, table)
    z = table.values  # units, periods, parameters
    units, periods, width = z.shape
    size = np.abs(z).max(axis=(0, 1))
    floor = 64.0 * EPS * np.sqrt(units * periods) * size
    loss = 64.0 * EPS * np.sqrt(units) * float(np.abs(y).max())
    centre, origin = np.zeros(width), 0.0
    if wide.panel.constant is not None:
        centre, origin = z.mean(axis=(0, 1)), float(y.mean())
        centre[wide.panel.constant] = 0.0
        z, y = z - centre, y - origin
    # columns of the projection are among the values of all periods
    varying = [j for j, name in enumerate(names) if name in projection.augmented.varying]
    own = [j for j, name in enumerate(names) if j not in varying and name not in projection.origins]
    offered = np.column_stack(
        [np.ones(units), z[:, 0, own], z[:, :, varying].reshape(units, periods * len(varying))]
    )
    basis = _basis(offered, np.r_[1.0, size[own], np.tile(size[varying], periods)])
    if basis.shape[1] >= units:
        raise IdentificationError(
            f"each period's regression has {basis.shape[1]} columns for {units} units: the reduced form is not "
            "identified. Use correlated('mundlak')."
        )
    rho = np.einsum("ir,it->tr", basis, y)
    residuals = y - basis @ rho.T
    residuals -= basis @ (basis.T @ residuals)
    dead = np.sqrt((residuals**2).sum(axis=0)) <= loss
    if dead.all():
        raise IdentificationError(
            f"the covariates of all periods fit {panel.outcome} exactly: no residual is left to judge anything by. "
            "Look for a covariate that is made from the outcome."
        )
    stacked = np.einsum("ir,itp->trp", basis, z)
    flat = stacked.reshape(-1, width)
    length = np.sqrt((flat**2).sum(axis=0))
    span = span_of(flat, floor, 1e-10)
    kept = np.array(span.kept, dtype=np.intp)
    lost = {names[j]: "a combination of other columns" for j in range(width) if j not in set(span.kept)}
    place = {int(j): at for at, j in enumerate(kept)}
    scale = length[kept]
    return ReducedForm(
        coefficients=rho,
        basis=basis,
        residuals=residuals,
        restrictions=stacked[:, :, kept] / scale,
        scale=scale,
        centre=centre[kept],
        origin=origin,
        constant=None if wide.panel.constant is None else place[wide.panel.constant],
        vanishing=tuple(int(t) for t in table.periods[dead]),
        apart=tuple(names[j] for j in np.flatnonzero(table.same_for_all) if j != wide.panel.constant),
        names=names,
        kept=kept,
        lost=lost,
    )


def _outcomes(panel: Panel, opened: OpenMoments, table: PeriodTable) -> FloatArray:
    """Return the outcome by unit and period, shape (N, T)."""
    assert panel.period_ordinals is not None, "checked by the table of the design columns"
    period = np.searchsorted(table.periods, panel.period_ordinals)
    unit = opened.keys.get_indexer(panel.unit_keys)[panel.codes]
    values = np.empty(table.present.shape)
    for start, _, y in panel.blocks():
        rows = slice(start, start + y.size)
        values[unit[rows], period[rows]] = y
    return values


def _basis(offered: FloatArray, size: FloatArray) -> FloatArray:
    """Return an orthonormal basis of columns, the first being the constant; combinations are left out.

    `size` is the largest absolute value of each column as given, which rounding is measured by.
    """
    centred = offered - offered.mean(axis=0)
    centred[:, 0] = 1.0
    floor = 64.0 * EPS * np.sqrt(offered.shape[0]) * size
    floor[0] = 0.0
    span = span_of(centred, floor, 1e-10)
    picked = centred[:, list(span.kept)]
    return np.asarray(np.linalg.qr(picked / np.sqrt((picked**2).sum(axis=0)))[0])
