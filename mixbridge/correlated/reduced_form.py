"""The unrestricted reduced form of a balanced panel: each period's outcome on the covariates of all periods.

    y_t = R p_t + v_t,  t = 1..T,   R = [1, unit-constant columns, x_1, ..., x_T],  one row per unit

(Chamberlain 1982; 1984). With Q an orthonormal basis of the columns of R, the coefficients in its coordinates are
``rho_t = Q'y_t``, and their covariance robust to any heteroscedasticity and any dependence within units is

    Omega = sum_i (v_i v_i') kron (q_i q_i')

without a multiplier. The restrictions of the random-intercept model with the unit effect projected on x_1, ..., x_T are
``rho_t = Q'Z_t theta``: Z_t holds the design columns at period t and the columns of the projection.
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

__all__ = ["ReducedForm", "reduced_form", "require_balanced"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)
WHAT = "minimum distance on the reduced form"
UNITS_AT_ONCE = 1024


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
        Length of each parameter's column: ``theta = scaled / scale``.
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

    def outer_factor(self) -> FloatArray:
        """Return F with ``F'F = Omega``, from rows ``v_i kron q_i``; shape (T r, T r)."""
        size = self.moments
        factor = np.zeros((size, size))
        for start in range(0, self.units, UNITS_AT_ONCE):
            part = slice(start, start + UNITS_AT_ONCE)
            rows = np.einsum("it,ir->itr", self.residuals[part], self.basis[part])
            factor = stack_factors(factor, factor_from_rows(rows.reshape(rows.shape[0], size)))
        return factor


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
        raise IdentificationError(f"{WHAT} needs two periods; there is one.")
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
    offered = np.column_stack([np.ones(units), z.reshape(units, periods * width)])
    basis = _basis(offered)
    if basis.shape[1] >= units:
        raise IdentificationError(
            f"each period's regression has {basis.shape[1]} columns for {units} units: the reduced form is not "
            "identified. Use correlated('mundlak')."
        )
    rho = np.einsum("ir,it->tr", basis, y)
    residuals = y - basis @ rho.T
    residuals -= basis @ (basis.T @ residuals)
    stacked = np.einsum("ir,itp->trp", basis, z)
    flat = stacked.reshape(-1, width)
    length = np.sqrt((flat**2).sum(axis=0))
    floor = 64.0 * EPS * np.sqrt(units * periods) * np.abs(z).max(axis=(0, 1))
    span = span_of(flat, floor, 1e-10)
    kept = np.array(span.kept, dtype=np.intp)
    lost = {names[j]: "a combination of other columns" for j in range(width) if j not in set(span.kept)}
    scale = length[kept]
    return ReducedForm(
        coefficients=rho,
        basis=basis,
        residuals=residuals,
        restrictions=stacked[:, :, kept] / scale,
        scale=scale,
        names=names,
        kept=kept,
        lost=lost,
    )


def _outcomes(panel: Panel, opened: OpenMoments, table: PeriodTable) -> FloatArray:
    """Return the outcome by unit and period, measured from the grand mean of the units."""
    assert panel.period_ordinals is not None, "checked by the table of the design columns"
    period = np.searchsorted(table.periods, panel.period_ordinals)
    unit = opened.keys.get_indexer(panel.unit_keys)[panel.codes]
    values = np.empty(table.present.shape)
    for start, _, y in panel.blocks():
        rows = slice(start, start + y.size)
        values[unit[rows], period[rows]] = y
    return values


def _basis(offered: FloatArray) -> FloatArray:
    """Return an orthonormal basis of columns, the first being the constant; combinations are left out."""
    centre = offered.mean(axis=0)
    centred = offered - centre
    centred[:, 0] = 1.0
    floor = 64.0 * EPS * np.sqrt(offered.shape[0]) * np.abs(offered).max(axis=0)
    floor[0] = 0.0
    span = span_of(centred, floor, 1e-10)
    picked = centred[:, list(span.kept)]
    return np.asarray(np.linalg.qr(picked / np.sqrt((picked**2).sum(axis=0)))[0])
