"""Routes fitted to many replicates of one panel at once: X is common, only the outcome changes.

What does not depend on the outcome is computed once (`plan`): the forms and systems of the quadratic routes as linear
maps of the numbers drawn, the coefficient maps of `pooled`, `within` and `between`, the spectrum of the likelihoods.
Each replicate then has its own ψ by each route, and generalised least squares at exactly that ψ: batched solves of
``A_xx(psi)``, refined once from the residuals, so that digits are lost only to the condition of the weighted columns.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.moment_draws import Coordinates, Draws
from mixbridge.resample.optima import optima
from mixbridge.resample.products import ProductDeviances, drawn_products
from mixbridge.resample.spectral import Modes, SpectralDeviances, modes_of
from mixbridge.routes import FITTED, NOT_POSITIVE, TRUNCATED, Fit
from mixbridge.routes.fitting import LIKELIHOOD, named_route
from mixbridge.routes.forms import Form
from mixbridge.routes.quadratic import QUADRATIC, Pair, remainder_form
from mixbridge.routes.record import NO_DF

__all__ = ["STATUSES", "Estimates", "Plan", "estimate", "plan"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

STATUSES = (FITTED, TRUNCATED, NOT_POSITIVE, NO_DF)
"""Statuses of a route on a replicate, by code."""

SPECTRAL_ORDER = 2000
"""Largest number of coordinates for which the spectrum is taken; above it, products by size are summed instead."""

POOR = 1e5
"""Trace of the inverse of scaled products from which they are not trusted: 1e-16 times it is lost."""

ON_LINES = ("pooled", "within", "between")


@dataclass(frozen=True, slots=True)
class Estimates:
    """One route on many replicates.

    Attributes
    ----------
    coefficients, standard_errors : ndarray of shape (R, p)
        In the units of the data, NaN where there are none; standard errors are model-based.
    unit_variance_raw, idiosyncratic_variance, ratio, scale : ndarray of shape (R,)
        As in `Fit`: the unit variance before truncation, the ratio after it.
    status : ndarray of int8, shape (R,)
        Place in `STATUSES`.
    certified : ndarray of bool, shape (R,)
        For `ml` and `reml`: whether the optimum is certified; True elsewhere.
    fall : ndarray of shape (R,)
        For `ml` and `reml`: likelihood ratio statistic of ψ = 0; NaN elsewhere.
    """

    coefficients: FloatArray
    standard_errors: FloatArray
    unit_variance_raw: FloatArray
    idiosyncratic_variance: FloatArray
    ratio: FloatArray
    scale: FloatArray
    status: NDArray[np.int8]
    certified: BoolArray
    fall: FloatArray

    @classmethod
    def empty(cls, replicates: int, terms: int) -> Estimates:
        """Return estimates to be filled, NaN and `fitted`."""
        return cls(
            coefficients=np.full((replicates, terms), np.nan),
            standard_errors=np.full((replicates, terms), np.nan),
            unit_variance_raw=np.full(replicates, np.nan),
            idiosyncratic_variance=np.full(replicates, np.nan),
            ratio=np.full(replicates, np.nan),
            scale=np.full(replicates, np.nan),
            status=np.zeros(replicates, dtype=np.int8),
            certified=np.ones(replicates, dtype=bool),
            fall=np.full(replicates, np.nan),
        )

    def put(self, start: int, other: Estimates) -> None:
        """Copy estimates of a batch into their place."""
        for name in self.__slots__:
            part = getattr(other, name)
            getattr(self, name)[start : start + len(part)] = part

    def freeze(self) -> Estimates:
        """Make all arrays read-only."""
        for name in self.__slots__:
            getattr(self, name).setflags(write=False)
        return self


@dataclass(frozen=True, slots=True)
class _Line:
    """A regression whose coefficients are one linear map of the draws: ``b = (e base) root'``."""

    base: FloatArray
    root: FloatArray
    weight: FloatArray
    rest: FloatArray
    df: int
    free: BoolArray


@dataclass(frozen=True, slots=True)
class _Form:
    """A quadratic form: weights on the squares of the residuals of one linear estimator, and on what is left."""

    residual: int
    weight: FloatArray
    rest: FloatArray


@dataclass(frozen=True, slots=True)
class Plan:
    """What the routes need and the outcome does not change.

    Attributes
    ----------
    space : Coordinates
    routes : mapping of str to Fit
        The routes that are refitted, by key, with their conventions.
    left_out : mapping of str to str
        The others, with the reason.
    """

    space: Coordinates
    routes: Mapping[str, Fit]
    left_out: Mapping[str, str]
    near: float
    products: FloatArray
    squares: FloatArray
    residuals: tuple[tuple[FloatArray, FloatArray], ...] = ()
    lines: Mapping[str, _Line] = field(default_factory=dict)
    pairs: Mapping[str, tuple[_Form, _Form, FloatArray]] = field(default_factory=dict)
    modes: Modes | None = None
    limit: _Form | None = None


def plan(space: Coordinates, fits: Mapping[str, Fit], near: float, spectral: int = SPECTRAL_ORDER) -> Plan:
    """Prepare routes for replicates.

    Parameters
    ----------
    space : Coordinates
    fits : mapping of str to Fit
        Routes to refit, fitted to the panel, with their conventions.
    near : float
        The ratio drawn under.
    spectral : int
        Largest order at which the spectrum is taken.

    Returns
    -------
    Plan
    """
    curve, p = space.curve, space.curve.rank
    reasons = {key: _why_left_out(space, fit) for key, fit in fits.items()}
    left_out = {key: reason for key, reason in reasons.items() if reason}
    routes = {key: fit for key, fit in fits.items() if key not in left_out}
    collected = _Collector(space)
    lines, pairs = {}, {}
    collected.add(Form("", 1.0, np.ones(len(curve.sizes)), *_pooled(p), np.ones(len(curve.sizes))))
    for key, fit in routes.items():
        route = named_route(fit.route)[0]
        if route in ON_LINES:
            lines[key] = _line(space, route, fit)
        elif route in QUADRATIC:
            pair: Pair = QUADRATIC[route](curve, fit.conventions)
            first, second = (collected.add(form) for form in pair.forms)
            pairs[key] = (first, second, pair.system)
    likelihood = any(named_route(fit.route)[0] in LIKELIHOOD for fit in routes.values())
    by_spectrum = space.order <= spectral
    limit = collected.add(remainder_form(curve, weighted=False)) if likelihood and not by_spectrum else None
    blocks = np.array([_products(space, space.block == at) for at in (-1, *range(len(curve.sizes)))])
    return Plan(
        space=space,
        routes=routes,
        left_out=left_out,
        near=near,
        products=blocks.reshape(len(blocks), -1),
        squares=np.einsum("ij,ik->jki", space.to_beta, space.to_beta).reshape(p * p, p),
        residuals=tuple(collected.residuals),
        lines=lines,
        pairs=pairs,
        modes=modes_of(space) if likelihood and by_spectrum else None,
        limit=limit,
    )


def estimate(prepared: Plan, draws: Draws) -> dict[str, Estimates]:
    """Fit every route to the replicates of one batch; coefficients are those of the errors drawn.

    Parameters
    ----------
    prepared : Plan
    draws : Draws

    Returns
    -------
    dict of str to Estimates
        By route. Coefficients are errors of estimation: the true coefficients are taken to be zero.
    """
    left = [_residual(draws.e, base, gain) for base, gain in prepared.residuals]
    for array in left:
        np.square(array, out=array)
    whole = left[0].sum(axis=1) + draws.rest.sum(axis=1)  # pooled residual sum of squares
    found: dict[str, Estimates] = {}
    for key, fit in prepared.routes.items():
        route = named_route(fit.route)[0]
        result = Estimates.empty(len(draws.e), prepared.space.curve.rank)
        if key in prepared.lines:
            _fit_line(prepared, draws, prepared.lines[key], route, result)
        elif key in prepared.pairs:
            first, second, system = prepared.pairs[key]
            q = np.array([_value(form, left, draws) for form in (first, second)])
            _components(q, system, 1e-13 * whole / prepared.space.curve.n, result)
            _on_curve(prepared, draws, str(fit.conventions.get("scale")), result)
        else:
            _likelihood(prepared, draws, left, route, result)
            _on_curve(prepared, draws, str(fit.conventions.get("scale")), result)
        found[key] = result
    return found


def _why_left_out(space: Coordinates, fit: Fit) -> str:
    """Say why a route cannot be refitted to moments with another outcome; empty if it can."""
    if fit.route == "first_difference":
        return "differences need the order of rows, which is not in the moments"
    if fit.rows != space.curve.n:
        return "the fit leaves out one-row units that the panel has; take the moments without them"
    if fit.status in STATUSES:
        return ""
    return fit.status


class _Collector:
    """Gathers forms, keeping one entry per distinct linear estimator."""

    def __init__(self, space: Coordinates) -> None:
        self.space = space
        self.residuals: list[tuple[FloatArray, FloatArray]] = []
        self._known: dict[tuple[bytes, ...], int] = {}

    def add(self, form: Form) -> _Form:
        """Return a form in the residuals of its estimator."""
        space = self.space
        base = space.x @ form.basis
        slope = space.x @ form.slope_between.T
        slope[: space.within_order] = space.x[: space.within_order] @ form.slope_within.T
        gain = slope * space.spread(1.0, form.on_between)[:, None]
        key = (base.tobytes(), gain.tobytes())
        if key not in self._known:
            self._known[key] = len(self.residuals)
            self.residuals.append((base, gain))
        weight = space.spread(form.on_within, form.on_means)
        return _Form(self._known[key], weight, np.append(form.on_within, form.on_means))


def _pooled(p: int) -> tuple[FloatArray, FloatArray, FloatArray]:
    one = np.eye(p)
    return one, one, one


def _residual(e: FloatArray, base: FloatArray, gain: FloatArray) -> FloatArray:
    left = e - (e @ gain) @ base.T
    left -= (left @ gain) @ base.T  # the second turn refines: H X H = H
    return left


def _line(space: Coordinates, route: str, fit: Fit) -> _Line:
    """Prepare a regression off the curve, or its end at zero."""
    curve, ones = space.curve, np.ones(len(space.curve.sizes))
    every = np.ones(curve.rank, dtype=bool)
    if route == "pooled":
        return _Line(
            space.x,
            np.eye(curve.rank),
            space.spread(1.0, ones),
            np.append(1.0, ones),
            int(fit.residual_df),
            every,
        )
    if route == "within":
        root, on_within, on_means, free = curve.within_root, 1.0, 0.0 * ones, curve.free_within
    else:
        weighted = fit.conventions["between"] == "size_weighted"
        root = curve.between_root if weighted else curve.unweighted_root
        on_within, on_means, free = 0.0, ones if weighted else 1.0 / curve.sizes, curve.free_between
    weight = space.spread(on_within, on_means)
    return _Line(space.x @ root, root, weight, np.append(on_within, on_means), int(fit.residual_df), free)


def _fit_line(prepared: Plan, draws: Draws, line: _Line, route: str, result: Estimates) -> None:
    space = prepared.space
    slope = (draws.e * line.weight) @ line.base
    left = draws.e - slope @ line.base.T
    more = (left * line.weight) @ line.base
    left -= more @ line.base.T
    residual = (left**2) @ line.weight + draws.rest @ line.rest
    to_beta = space.to_beta @ line.root
    result.coefficients[:] = (slope + more) @ to_beta.T
    scale = residual / line.df if line.df > 0 else np.full(residual.size, np.nan)
    result.scale[:] = scale
    result.standard_errors[:] = np.sqrt(scale[:, None] * (to_beta**2).sum(axis=1))
    result.coefficients[:, ~line.free] = np.nan
    result.standard_errors[:, ~line.free] = np.nan
    if route != "between":
        result.idiosyncratic_variance[:] = scale
        result.ratio[:] = np.inf if route == "within" else 0.0
    if route == "pooled":
        result.unit_variance_raw[:] = 0.0
    if line.df < 1:
        result.status[:] = STATUSES.index(NO_DF)


def _value(form: _Form, left: list[FloatArray], draws: Draws) -> FloatArray:
    return np.asarray(left[form.residual] @ form.weight + draws.rest @ form.rest)


def _components(q: FloatArray, system: FloatArray, floor: FloatArray, result: Estimates) -> None:
    """Solve ``q = C (sigma_u^2, sigma_a^2)'`` for every replicate, truncate, and give statuses."""
    scale = np.abs(system).max(axis=1)[:, None]
    idiosyncratic, unit = np.linalg.solve(system / scale, q / scale)
    positive = idiosyncratic > floor
    result.unit_variance_raw[:] = unit
    result.idiosyncratic_variance[:] = idiosyncratic
    result.ratio[positive] = np.maximum(unit[positive], 0.0) / idiosyncratic[positive]
    result.status[unit < 0.0] = STATUSES.index(TRUNCATED)
    result.status[~positive] = STATUSES.index(NOT_POSITIVE)


def _likelihood(prepared: Plan, draws: Draws, left: list[FloatArray], route: str, result: Estimates) -> None:
    kind = LIKELIHOOD[route]
    inside = draws.rest[:, 0]
    deviances: SpectralDeviances | ProductDeviances
    if prepared.modes is not None:
        deviances = SpectralDeviances(
            prepared.modes, kind, prepared.modes.squares(draws), inside, prepared.near
        )
    else:
        assert prepared.limit is not None
        deviances = drawn_products(
            prepared.space, kind, draws, prepared.products, _value(prepared.limit, left, draws)
        )
    found = optima(deviances)
    idiosyncratic = found.residual / deviances.m
    result.ratio[:] = found.psi
    result.idiosyncratic_variance[:] = idiosyncratic
    result.unit_variance_raw[:] = found.psi * idiosyncratic
    result.certified[:] = found.certified
    result.fall[:] = found.fall


def _on_curve(prepared: Plan, draws: Draws, convention: str, result: Estimates) -> None:
    """Take coefficients and standard errors from the curve, each replicate at its own ψ."""
    space, curve = prepared.space, prepared.space.curve
    p = curve.rank
    live = np.isfinite(result.ratio)
    psi, e, rest = result.ratio[live], draws.e[live], draws.rest[live]
    weight = 1.0 / (1.0 + np.multiply.outer(psi, curve.sizes))
    a = (prepared.products[0] + weight @ prepared.products[1:]).reshape(-1, p, p)
    length = np.sqrt(np.diagonal(a, axis1=1, axis2=2))
    inverse = np.linalg.inv(a / (length[:, :, None] * length[:, None, :]))
    spread = space.spread(1.0, weight)
    poor = np.flatnonzero(~(np.trace(inverse, axis1=1, axis2=2) < POOR))
    inverse /= length[:, :, None] * length[:, None, :]
    if poor.size:
        inverse[poor] = _from_rows(space.x, spread[poor], length[poor])
    slope = _times(inverse, (e * spread) @ space.x)
    left = e - slope @ space.x.T
    slope += _times(inverse, (left * spread) @ space.x)
    scale = result.idiosyncratic_variance[live]
    if convention.startswith("gls_residuals"):
        left = e - slope @ space.x.T
        residual = (
            np.einsum("rd,rd->r", left**2, spread) + rest[:, 0] + np.einsum("rg,rg->r", rest[:, 1:], weight)
        )
        scale = residual / (curve.n if convention == "gls_residuals_n" else curve.n - p)
    result.scale[live] = scale
    result.coefficients[live] = slope @ space.to_beta.T
    variance = inverse.reshape(len(psi), -1) @ prepared.squares
    result.standard_errors[live] = np.sqrt(scale[:, None] * variance)


def _from_rows(x: FloatArray, spread: FloatArray, length: FloatArray) -> FloatArray:
    """Return ``A_xx^-1`` through QR of the weighted rows: half as many digits are lost as through products."""
    p = x.shape[1]
    made = np.empty((len(spread), p, p))
    step = max(2**20 // x.size, 1)
    for at in range(0, len(spread), step):
        here = np.s_[at : at + step]
        upper = np.linalg.qr(np.sqrt(spread[here])[:, :, None] * x / length[here, None, :], mode="r")
        root = np.linalg.inv(upper) / length[here, :, None]
        made[here] = np.matmul(root, root.transpose(0, 2, 1))
    return made


def _times(matrices: FloatArray, vectors: FloatArray) -> FloatArray:
    return np.asarray(np.matmul(matrices, vectors[:, :, None])[:, :, 0])


def _products(space: Coordinates, rows: BoolArray) -> FloatArray:
    return np.asarray(space.x[rows].T @ space.x[rows])
