"""Fit one route: components, ratio, coefficients, status. The registry of routes is here."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import OptionError
from mixbridge.ratio import Curve, Point
from mixbridge.routes.certificate import certify
from mixbridge.routes.conventions import Value, resolve
from mixbridge.routes.forms import value
from mixbridge.routes.least_squares import (
    Differences,
    LeastSquares,
    between,
    first_difference,
    pooled,
    within,
)
from mixbridge.routes.likelihood import Kind, Profile, log_likelihood_at
from mixbridge.routes.quadratic import (
    QUADRATIC,
    NotEstimableError,
    minque_pair,
    remainder_form,
    solve,
)
from mixbridge.routes.record import FITTED, NO_DF, NOT_POSITIVE, TRUNCATED, Fit

__all__ = ["LEDGER_ROUTES", "REFERENCE_ROUTES", "ROUTES", "fit_route", "named_route"]

FloatArray = NDArray[np.float64]
Conventions = Mapping[str, Value]

REFERENCE_ROUTES = ("pooled", "within", "between", "first_difference")
"""Routes that answer other questions: reference points, not votes."""

LIKELIHOOD: dict[str, Kind] = {"ml": "ml", "reml": "reml"}
"""Each likelihood route by key, with the kind of its likelihood."""

ROUTES = (*REFERENCE_ROUTES, *QUADRATIC, *LIKELIHOOD)
"""Every route that `study.fit` knows."""

LEDGER_ROUTES = (
    *REFERENCE_ROUTES,
    *(key for key in QUADRATIC if key != "minque"),
    "minque_0",
    "minque_1",
    *LIKELIHOOD,
)
"""Routes shown side by side unless the user chooses."""


def named_route(key: str) -> tuple[str, dict[str, object]]:
    """Split a ledger key into route and conventions: ``minque_1`` is `minque` with ``prior=1``.

    Parameters
    ----------
    key : str
        Key of a route, or ``minque_`` and a prior ratio.

    Returns
    -------
    route : str
    conventions : dict
        Those that the key implies.

    Raises
    ------
    OptionError
        If there is no such route.
    """
    if key in ROUTES:
        return key, {}
    if key.startswith("minque_"):
        try:
            return "minque", {"prior": float(key.removeprefix("minque_"))}
        except ValueError:
            pass
    raise OptionError.not_among("route", key, LEDGER_ROUTES)


def fit_route(
    curve: Curve,
    key: str,
    given: Mapping[str, object],
    differences: Callable[[int | None], Differences] | str,
) -> Fit:
    """Fit one route.

    Parameters
    ----------
    curve : Curve
        The panel, one-row units included.
    key : str
        Route, or a ledger key such as ``minque_1``.
    given : mapping
        Conventions that differ from the defaults.
    differences : callable or str
        Gives the products of differences for a step; or the reason why there are none.

    Returns
    -------
    Fit
        With a status; a route that cannot be computed says why and stops nothing else.
    """
    route, implied = named_route(key)
    conventions = resolve(route, {**implied, **given})
    blank = Fit(
        route=key,
        conventions=conventions,
        status=FITTED,
        notes=(),
        terms=curve.names,
        beta=np.full(curve.rank, np.nan),
        root=np.zeros((curve.rank, 0)),
        not_estimable={},
        sizes=curve.moments.sizes,
        rows=curve.n,
        units=curve.units,
    )
    try:
        if route in LIKELIHOOD:
            return _likelihood(curve, LIKELIHOOD[route], conventions, blank)
        if route in QUADRATIC:
            return _quadratic(curve, route, conventions, blank)
        return _least_squares(curve, route, conventions, differences, blank)
    except NotEstimableError as reason:
        lost = dict.fromkeys(curve.names, str(reason))
        return replace(blank, status=f"not estimable: {reason}", not_estimable=lost)


def _least_squares(
    curve: Curve,
    route: str,
    conventions: Conventions,
    differences: Callable[[int | None], Differences] | str,
    blank: Fit,
) -> Fit:
    fit: LeastSquares
    notes: tuple[str, ...] = ()
    unit, ratio = np.nan, np.nan
    if route == "pooled":
        fit, unit, ratio = pooled(curve), 0.0, 0.0
        notes = ("takes the unit variance to be zero",)
    elif route == "within":
        fit, ratio = within(curve, conventions), np.inf
        notes = ("treats unit effects as fixed: no unit variance",)
    elif route == "between":
        fit = between(curve, conventions)
    else:
        if isinstance(differences, str):
            raise NotEstimableError(differences)
        step = conventions["step"]
        products = differences(step if isinstance(step, int) else None)
        fit = first_difference(curve, products)
        pairs = f"{products.count} differences over {products.step} period step(s)"
        notes = (f"{pairs}, {products.gaps} gaps left out",)
    scale, status = fit.residual / fit.df if fit.df > 0 else np.nan, FITTED
    if fit.df < 1:
        status = NO_DF
        notes = (*notes, f"{fit.form}: degrees of freedom {fit.df}, so no scale and no standard errors")
    covariance = np.full((2, 2), np.nan)
    if route in ("pooled", "within") and fit.df > 0:
        exact_df = curve.df_within if route == "within" else fit.df
        covariance[1, 1] = 2.0 * scale**2 * exact_df / fit.df**2
    return replace(
        blank,
        status=status,
        notes=notes,
        beta=fit.beta,
        root=fit.root,
        not_estimable=fit.reasons,
        unit_variance_raw=unit,
        unit_variance=unit,
        idiosyncratic_variance=scale if route in ("pooled", "within") else np.nan,
        ratio=ratio,
        components_covariance=covariance,
        components_method="exact under normality and this route's model, estimate plugged in",
        scale=scale,
        residual_df=float(fit.df),
        rank=fit.rank,
        forms_table=((fit.form, fit.residual, float(fit.df), np.nan),),
    )


def _quadratic(curve: Curve, route: str, conventions: Conventions, blank: Fit) -> Fit:
    pair = QUADRATIC[route](curve, conventions)
    components = solve(curve, pair)
    idiosyncratic, unit = components.idiosyncratic, components.unit
    table = tuple(
        (form.name, float(q), float(row[0]), float(row[1]))
        for form, q, row in zip(pair.forms, components.values, pair.system, strict=True)
    )
    fit = replace(
        blank,
        unit_variance_raw=unit,
        unit_variance=max(unit, 0.0),
        idiosyncratic_variance=idiosyncratic,
        forms_table=table,
    )
    floor = 1e-13 * curve.unit / curve.n
    if not idiosyncratic > floor:
        note = (
            f"idiosyncratic variance {idiosyncratic:.6g} is not positive: kept as it is, "
            "no generalised least squares step"
        )
        lost = dict.fromkeys(curve.names, NOT_POSITIVE)
        return replace(fit, status=NOT_POSITIVE, notes=(note,), not_estimable=lost)
    notes: tuple[str, ...] = ()
    status = FITTED
    if unit < 0.0:
        status = TRUNCATED
        used = "kept as unit_variance_raw, ratio 0 used in the coefficients"
        notes = (f"unit variance {unit:.6g} is negative: {used}",)
    if not pair.unbiased:
        notes = (*notes, "solved with the divisors of this convention, not with exact expectations")
    covariance = components.sampling_covariance(curve)
    method = "exact formula for quadratic forms under normality, estimates plugged in"
    fit = replace(fit, status=status, notes=notes, components_covariance=covariance, components_method=method)
    return _on_curve(curve, fit, curve.at(max(unit, 0.0) / idiosyncratic), conventions)


def _likelihood(curve: Curve, route: Kind, conventions: Conventions, blank: Fit) -> Fit:
    flat = _flat(curve, route)
    if flat is not None:
        status, note = flat
        return replace(blank, status=status, notes=(note,), not_estimable=dict.fromkeys(curve.names, note))
    limit = value(curve, remainder_form(curve, weighted=False)) / curve.unit
    certificate = certify(Profile(curve, route), curve.within_residual, limit)
    psi = certificate.psi
    m = curve.n - (curve.rank if route == "reml" else 0)
    point = curve.at(psi)
    idiosyncratic = point.residual / m
    information = _information(curve, route, psi, idiosyncratic)
    notes: tuple[str, ...] = ()
    if psi == 0.0:
        notes = (
            "the estimate lies on the boundary, unit variance 0: "
            "standard errors of components are not the usual ones there",
        )
    if not certificate.excluded:
        notes = (*notes, "the certificate is incomplete: see certificate.lines()")
    fit = replace(
        blank,
        notes=notes,
        unit_variance_raw=psi * idiosyncratic,
        unit_variance=psi * idiosyncratic,
        idiosyncratic_variance=idiosyncratic,
        components_covariance=information,
        components_method="inverse expected information",
        certificate=certificate,
        log_likelihood=log_likelihood_at(curve, route, point, conventions.get("reml_constant") != "omitted"),
    )
    return _on_curve(curve, fit, point, conventions)


def _flat(curve: Curve, route: Kind) -> tuple[str, str] | None:
    """Tell why a likelihood has no maximum, if it has none."""
    if curve.n == curve.units:
        only = "the likelihood depends on the sum of the two variances only"
        return "likelihood flat", f"every unit has one row: {only}"
    if route == "reml" and curve.units <= curve.rank_constant:
        used = f"N = {curve.units} units for K_c = {curve.rank_constant} unit-constant directions"
        return "likelihood flat", f"{used}: nothing is left between units"
    if curve.df_within < 1:
        where = f"n - N - K_w = {curve.df_within}: the within regression leaves no error"
        if route == "ml":
            return (
                "likelihood unbounded",
                f"{where}, and the likelihood grows without bound as the ratio grows",
            )
        if len(curve.sizes) == 1:
            return "likelihood flat", f"{where}, and with one unit size the restricted likelihood is flat"
        raise NotEstimableError(f"{where}, so nothing bounds the restricted likelihood from above")
    if not curve.within_residual > 0.0:
        return (
            "likelihood unbounded",
            "the within regression fits exactly: the likelihood grows without bound as the ratio grows",
        )
    return None


def _information(curve: Curve, route: Kind, psi: float, idiosyncratic: float) -> FloatArray:
    """Return the inverse expected information of (unit, idiosyncratic), ``2 sigma_u^4 M^-1``.

    REML: M is ``[tr P_0P_0, tr P_0P_0 ZZ'; ., tr P_0ZZ'P_0ZZ']``; ML: the same with ``V_0^-1`` in place of
    P_0.
    """
    if route == "reml":
        matrix = minque_pair(curve, psi).system
    else:
        shrink = 1.0 / (1.0 + curve.sizes * psi)
        cross = float(curve.counts @ (curve.sizes * shrink**2))
        matrix = np.array(
            [
                [curve.n - curve.units + float(curve.counts @ shrink**2), cross],
                [cross, float(curve.counts @ (curve.sizes * shrink) ** 2)],
            ]
        )
    scale = np.sqrt(np.diag(matrix))
    inverse = np.linalg.inv(matrix / np.outer(scale, scale)) / np.outer(scale, scale)
    return np.asarray(2.0 * idiosyncratic**2 * inverse[::-1, ::-1])


def _on_curve(curve: Curve, fit: Fit, point: Point, conventions: Conventions) -> Fit:
    """Take coefficients and their covariance from a point of the curve."""
    df = curve.n - curve.rank
    scale = fit.idiosyncratic_variance
    if conventions.get("scale") == "gls_residuals":
        scale = point.residual / df
    elif conventions.get("scale") == "gls_residuals_n":
        scale = point.residual / curve.n
    return replace(
        fit,
        beta=point.beta,
        root=point.root,
        ratio=point.psi,
        scale=scale,
        residual_df=float(df),
        rank=curve.rank,
    )
