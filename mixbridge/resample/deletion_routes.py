"""Every curve route, and `between`, fitted to many panels along common axes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.deletion_axes import pack
from mixbridge.resample.deletion_batch import Batch, Solved, solved
from mixbridge.resample.deletion_bounds import Neighbourhood
from mixbridge.resample.deletion_components import COMPONENTS, between_df, solve_pairs, within_df
from mixbridge.resample.deletion_likelihood import find_optima
from mixbridge.resample.deletion_sums import Sums
from mixbridge.routes import FITTED, NOT_POSITIVE, TRUNCATED
from mixbridge.routes.fitting import LIKELIHOOD, named_route
from mixbridge.routes.record import NO_DF, Fit

__all__ = ["Centre", "Refits", "fit_batch"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.intp]
StatusArray = NDArray[np.object_]

GONE = 1e-3
"""Share of a sum of squares of all units below which what a subtraction leaves has lost three digits."""
DOUBT = 1e-6
"""Idiosyncratic variance, as a share of ``r / n``, whose sign is settled by the route's own code."""


@dataclass(frozen=True, slots=True, eq=False)
class Refits:
    """One route on m panels.

    Attributes
    ----------
    coefficients, standard_errors : ndarray of shape (m, p)
        In the units of the data, NaN where there are none; standard errors are model-based.
    unit_variance_raw, idiosyncratic_variance, ratio : ndarray of shape (m,)
        As in `Fit`: the unit variance before truncation, the ratio after it.
    status : ndarray of str, shape (m,)
        As in `Fit`.
    certified : ndarray of bool, shape (m,)
        For `ml` and `reml` whether the optimum is certified; True elsewhere.
    exact : ndarray of bool, shape (m,)
        Whether the panel was put together from the units that are left, instead of subtracting.
    """

    coefficients: FloatArray
    standard_errors: FloatArray
    unit_variance_raw: FloatArray
    idiosyncratic_variance: FloatArray
    ratio: FloatArray
    status: StatusArray
    certified: BoolArray
    exact: BoolArray

    @classmethod
    def empty(cls, panels: int, terms: int) -> Refits:
        """Return refits to be filled: NaN, `fitted`."""
        return cls(
            coefficients=np.full((panels, terms), np.nan),
            standard_errors=np.full((panels, terms), np.nan),
            unit_variance_raw=np.full(panels, np.nan),
            idiosyncratic_variance=np.full(panels, np.nan),
            ratio=np.full(panels, np.nan),
            status=np.full(panels, FITTED, dtype=object),
            certified=np.ones(panels, dtype=bool),
            exact=np.zeros(panels, dtype=bool),
        )

    def put(self, at: slice | IntArray, other: Refits) -> None:
        """Copy the refits of some panels into their places."""
        for field in fields(self):
            getattr(self, field.name)[at] = getattr(other, field.name)

    def take(self, at: IntArray) -> Refits:
        """Return the refits of some panels, in this order."""
        return Refits(*(getattr(self, field.name)[at] for field in fields(self)))

    def freeze(self) -> Refits:
        """Make all arrays read-only."""
        for field in fields(self):
            getattr(self, field.name).setflags(write=False)
        return self

    def put_alone(self, at: int, fit: Fit | str) -> None:
        """Take one panel from a fit of its own, or why there is none."""
        if isinstance(fit, str):
            self.put(np.array([at]), Refits.empty(1, self.coefficients.shape[1]))
            self.status[at], self.exact[at] = fit, True
            return
        self.coefficients[at] = fit.beta
        with np.errstate(invalid="ignore"):
            self.standard_errors[at] = np.sqrt(np.diag(fit.covariance_array))
        self.unit_variance_raw[at] = fit.unit_variance_raw
        self.idiosyncratic_variance[at] = fit.idiosyncratic_variance
        self.ratio[at] = fit.ratio
        self.status[at] = fit.status
        self.certified[at] = fit.certificate is None or fit.certificate.excluded
        self.exact[at] = True


@dataclass(frozen=True, slots=True, eq=False)
class Centre:
    """The panel of all units: where its panels without some are looked for, and what digits are measured against.

    Attributes
    ----------
    optima : mapping of str to (float, float)
        By likelihood route, the ratio at the optimum and its standard deviation.
    near : mapping of str to Neighbourhood or None
        By likelihood route.
    marks : mapping of str to ndarray
        By route, the sums of squares that it rests on.
    """

    optima: Mapping[str, tuple[float, float]]
    near: Mapping[str, Neighbourhood | None]
    marks: Mapping[str, FloatArray]


def fit_batch(
    batch: Batch,
    routes: Mapping[str, Mapping[str, object]],
    centre: Centre,
    lost: BoolArray,
    own_within: FloatArray | None = None,
) -> dict[str, tuple[Refits, BoolArray, FloatArray]]:
    """Fit every route.

    Parameters
    ----------
    batch : Batch
    routes : mapping of str to mapping
        Conventions of each route, resolved.
    centre : Centre
    lost : ndarray of bool, shape (m,)
        Panels that have lost digits or a direction; see `Sums.thin`.
    own_within : ndarray of shape (h, m), optional
        Packed within products of the unit that each panel lacks.

    Returns
    -------
    dict
        By route: the refits, which of them need a fit of their own (no degrees of freedom, digits lost, a sign or an
        optimum in doubt), and the sums of squares that they rest on.
    """
    sums = Sums(batch)
    found = {}
    for key, conventions in routes.items():
        result = Refits.empty(batch.size, batch.axes.curve.rank)
        route = named_route(key)[0]
        if route in LIKELIHOOD:
            doubt, marks = _likelihood(
                sums, key, conventions, centre, usable=~lost, own_within=own_within, result=result
            )
        elif route in COMPONENTS:
            doubt, marks = _quadratic(sums, route, conventions, result)
        else:
            doubt, marks = _line(sums, route, conventions, result)
        if key in centre.marks:
            doubt |= ~(marks >= GONE * centre.marks[key][:, None]).all(axis=0)
        doubt |= lost | (sums.rows <= batch.axes.curve.rank)
        found[key] = (result, doubt, marks)
    return found


def _line(
    sums: Sums, route: str, conventions: Mapping[str, object], result: Refits
) -> tuple[BoolArray, FloatArray]:
    """Fit `pooled`, `within` or `between`."""
    axes = sums.batch.axes
    curve = axes.curve
    if route == "pooled":
        line, at, df, free = sums.pooled, sums.every, sums.rows - curve.rank, np.ones(curve.rank, dtype=bool)
        result.unit_variance_raw[:] = result.ratio[:] = 0.0
    elif route == "within":
        line, at, df, free = sums.within, axes.inner, within_df(sums, conventions), curve.free_within
        result.ratio[:] = np.inf
    else:
        line, at = sums.between(conventions["between"] == "size_weighted"), axes.outer
        df, free = between_df(sums, conventions), curve.free_between
    none = df < 1
    scale = line.residual / np.where(none, np.nan, df)
    result.status[none] = NO_DF
    if route != "between":
        result.idiosyncratic_variance[:] = scale * axes.worth
    _report(sums, line, scale, at=at, free=free, result=result)
    # without degrees of freedom the residual is rounding and nothing rests on it
    return np.full(none.size, at.size == 0), np.where(none, np.inf, line.residual)[None]


def _quadratic(
    sums: Sums, route: str, conventions: Mapping[str, object], result: Refits
) -> tuple[BoolArray, FloatArray]:
    pairs = COMPONENTS[route](sums, conventions)
    idiosyncratic, unit, safe = solve_pairs(pairs)
    positive = idiosyncratic > 0.0
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.where(safe & positive, np.maximum(unit, 0.0) / idiosyncratic, 0.0)
    line = _curve_line(sums, ratio)
    doubt = ~safe | (np.abs(idiosyncratic) < DOUBT * line.residual / sums.rows)
    _on_curve(sums, line, ratio, idiosyncratic=idiosyncratic, conventions=conventions, result=result)
    worth = sums.batch.axes.worth
    result.unit_variance_raw[:] = unit * worth
    result.idiosyncratic_variance[:] = idiosyncratic * worth
    result.status[unit < 0.0] = TRUNCATED
    result.status[~positive] = NOT_POSITIVE
    lost = ~(safe & positive)
    result.ratio[lost] = np.nan
    result.coefficients[lost] = np.nan
    result.standard_errors[lost] = np.nan
    residual = np.where(
        positive, line.residual, np.inf
    )  # without a positive variance there is nothing on the curve
    return doubt, np.vstack([pairs.values, residual])


def _likelihood(
    sums: Sums,
    route: str,
    conventions: Mapping[str, object],
    centre: Centre,
    *,
    usable: BoolArray,
    own_within: FloatArray | None,
    result: Refits,
) -> tuple[BoolArray, FloatArray]:
    curve = sums.batch.axes.curve
    inside = sums.within.residual
    least = GONE * centre.marks[route][0] if route in centre.marks else 0.0
    usable = usable & (sums.rows - sums.units - curve.rank_within >= 1) & (inside > least)
    if route == "reml":
        usable &= sums.units > curve.rank_constant
    kind = LIKELIHOOD[route]
    psi, certified = find_optima(
        sums, kind, usable, centre=centre.optima[route], near=centre.near.get(route), own_within=own_within
    )
    ratio = np.where(usable, psi, 0.0)
    line = _curve_line(sums, ratio)
    idiosyncratic = line.residual / (sums.residual_df if route == "reml" else sums.rows)
    _on_curve(sums, line, ratio, idiosyncratic=idiosyncratic, conventions=conventions, result=result)
    worth = sums.batch.axes.worth
    result.unit_variance_raw[:] = ratio * idiosyncratic * worth
    result.idiosyncratic_variance[:] = idiosyncratic * worth
    result.certified[:] = certified
    return ~certified, np.vstack([inside, line.residual])


def _curve_line(sums: Sums, ratio: FloatArray) -> Solved:
    """Return generalised least squares, each panel at its own ratio."""
    sizes = sums.sizes[:, None]
    pull = sizes / (1.0 + sizes * ratio)
    return solved(sums.batch.within + sums.batch.sums(pull), sums.order, sums.every)


def _on_curve(
    sums: Sums,
    line: Solved,
    ratio: FloatArray,
    *,
    idiosyncratic: FloatArray,
    conventions: Mapping[str, object],
    result: Refits,
) -> None:
    scale = idiosyncratic
    if conventions.get("scale") == "gls_residuals":
        scale = line.residual / sums.residual_df
    elif conventions.get("scale") == "gls_residuals_n":
        scale = line.residual / sums.rows
    result.ratio[:] = ratio
    free = np.ones(sums.every.size, dtype=bool)
    _report(sums, line, scale, at=sums.every, free=free, result=result)


def _report(
    sums: Sums, line: Solved, scale: FloatArray, *, at: IntArray, free: BoolArray, result: Refits
) -> None:
    """Bring coefficients and standard errors to the units of the data."""
    axes = sums.batch.axes
    part = axes.to_data[:, at]
    result.coefficients[:] = axes.origin + (part @ line.slope).T
    result.coefficients[:, ~free] = np.nan
    if at.size == 0:
        return
    rows, columns, _ = pack(at.size)
    twice = np.where(rows == columns, 1.0, 2.0)
    variances = ((part[:, rows] * part[:, columns]) * twice) @ line.inverse[rows, columns]
    with np.errstate(invalid="ignore"):
        result.standard_errors[:] = np.sqrt(variances * scale).T
    result.standard_errors[:, ~free] = np.nan
