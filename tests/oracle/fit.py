"""`oracle_fit`: one route on one small panel, each definition followed to the letter with n x n matrices."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from . import routes
from .dense import Dense
from .linear import Columns, coefficients
from .routes import Degrees, FirstStage
from .shift import Shifted, shifted

FITTED = "fitted"
TRUNCATED = "unit variance truncated"
NOT_POSITIVE = "idiosyncratic variance not positive"
NOT_ESTIMABLE = "not estimable"

_FIRST_STAGE: dict[str, tuple[Callable[..., FirstStage], dict[str, object]]] = {
    "swamy_arora": (routes.swamy_arora, {"between": "size_weighted"}),
    "wansbeek_kapteyn": (routes.wansbeek_kapteyn, {}),
    "wallace_hussain": (routes.wallace_hussain, {"expectation": "exact"}),
    "amemiya": (routes.amemiya, {}),
    "nerlove": (routes.nerlove, {"divisor": "units_minus_one"}),
    "pooled_minus_within": (routes.pooled_minus_within, {}),
    "fitting_constants": (routes.fitting_constants, {}),
    "minque": (routes.minque, {"prior": 0.0}),
}
GLS_ROUTES = tuple(_FIRST_STAGE)
ROUTES = ("pooled", "within", "between", *GLS_ROUTES)


@dataclass(frozen=True)
class OracleFit:
    """What a route gives.

    Orders: `q` and the rows of `expectation` by form; columns of `expectation` (idiosyncratic, unit);
    `component_cov` rows and columns (unit, idiosyncratic); `to_components` maps q to (unit, idiosyncratic).
    `expectation` is always the literal (tr A, tr AZZ'), also where the route divides by something else.
    `pooled` has psi 0 and unit variance 0 by definition, `within` psi inf and unit variance nan; `between`
    has neither. There `scale` multiplies the covariance; its sampling variance stands at [1, 1]
    of `component_cov` for `pooled` and `within`. `within` without a column that varies has no coefficient
    (not estimable) and still its variance.
    """

    beta: np.ndarray
    cov: np.ndarray
    scale: float
    unit_variance_raw: float
    unit_variance: float
    idiosyncratic_variance: float
    psi: float
    q: np.ndarray
    expectation: np.ndarray
    to_components: np.ndarray
    component_cov: np.ndarray
    rank: int
    df: float
    status: str
    reason: str = ""


def _blank(panel: Dense, **known: object) -> OracleFit:
    p = panel.X.shape[1]
    nan = float("nan")
    start = OracleFit(
        beta=np.full(p, nan),
        cov=np.full((p, p), nan),
        scale=nan,
        unit_variance_raw=nan,
        unit_variance=nan,
        idiosyncratic_variance=nan,
        psi=nan,
        q=np.zeros(0),
        expectation=np.zeros((0, 2)),
        to_components=np.full((2, 2), nan),
        component_cov=np.full((2, 2), nan),
        rank=0,
        df=nan,
        status=FITTED,
    )
    return replace(start, **known)


def _reported(
    moved: Shifted, solution: np.ndarray, inverse: np.ndarray, scale: np.floating, columns: Columns
) -> tuple[np.ndarray, np.ndarray]:
    """Map coefficients and scale * inverse back to the columns as given; nan where not estimable."""
    beta = moved.coefficients(solution).astype(np.float64)
    cov = (moved.covariance(inverse) * scale).astype(np.float64)
    lost = ~moved.estimable(columns)
    beta[lost] = np.nan
    cov[lost, :] = np.nan
    cov[:, lost] = np.nan
    return beta, cov


def _one_form(
    panel: Dense,
    moved: Shifted,
    F: np.ndarray,
    f: np.ndarray,
    columns: Columns,
    factor: np.ndarray,
    df: int,
    **known: object,
) -> OracleFit:
    """Least squares with its residual form over df as the scale."""
    q = ((factor @ panel.y) ** 2).sum()
    scale = q / df if df >= 1 else panel.X.dtype.type("nan")
    beta, cov = _reported(moved, coefficients(F, f, columns), columns.inverse, scale, columns)
    reason = "" if df >= 1 else f"degrees of freedom {df}"
    if columns.rank == 0:
        known = {**known, "status": NOT_ESTIMABLE}
        reason = "no column varies"
    return _blank(
        panel,
        beta=beta,
        cov=cov,
        scale=float(scale),
        q=np.array([float(q)]),
        expectation=np.array([routes.literal_expectation(panel, factor)], dtype=np.float64),
        rank=columns.rank,
        df=df,
        reason=reason,
        **known,
    )


def _off_curve(panel: Dense, moved: Shifted, route: str, k: Degrees, between: str) -> OracleFit:
    nan = float("nan")
    if route == "pooled":
        fit = _one_form(
            panel, moved, panel.X, panel.y, panel.pooled, panel.M, panel.n - k.K, psi=0.0, unit_variance=0.0
        )
    elif route == "within":
        df = panel.n - panel.N - k.K_w
        fit = _one_form(
            panel,
            moved,
            panel.QX,
            panel.Q @ panel.y,
            panel.within,
            panel.within_residual,
            df,
            psi=float("inf"),
        )
    elif between == "size_weighted":
        factor = panel.P - panel.between.projector
        F, f = panel.P @ panel.X, panel.P @ panel.y
        return _one_form(panel, moved, F, f, panel.between, factor, panel.N - k.K_p)
    elif between == "unweighted":
        columns = panel.between_unweighted
        factor = (np.eye(panel.N, dtype=panel.X.dtype) - columns.projector) @ panel.averaging
        f = panel.averaging @ panel.y
        return _one_form(panel, moved, panel.means, f, columns, factor, panel.N - k.K_p)
    else:
        raise ValueError(between)
    cov = np.full((2, 2), nan)
    if fit.df >= 1:
        cov[1, 1] = 2 * fit.scale**2 * fit.expectation[0, 0] / fit.df**2
    return replace(fit, idiosyncratic_variance=fit.scale, component_cov=cov)


def component_covariance(
    panel: Dense, first: FirstStage, idiosyncratic: np.floating, unit: np.floating
) -> np.ndarray:
    """Return L (2 tr(A_i V A_j V)) L'; the trace is the sum of squares of F_i V F_j'."""
    V = panel.V(idiosyncratic, unit)
    cov_q = np.array([[2 * ((a @ V @ b.T) ** 2).sum() for b in first.factors] for a in first.factors])
    return first.to_components @ cov_q @ first.to_components.T


def _gls(panel: Dense, moved: Shifted, first: FirstStage, k: Degrees, scale: str) -> OracleFit:
    if first.to_components is None:
        return _blank(
            panel, status=NOT_ESTIMABLE, reason=first.reason or "forms do not separate the components"
        )
    q = np.array([((F @ panel.y) ** 2).sum() for F in first.factors], dtype=panel.X.dtype)
    raw, idiosyncratic = first.to_components @ q
    unit = max(raw, panel.X.dtype.type(0))
    common = _blank(
        panel,
        unit_variance_raw=float(raw),
        unit_variance=float(unit),
        idiosyncratic_variance=float(idiosyncratic),
        q=q.astype(np.float64),
        expectation=np.array([routes.literal_expectation(panel, F) for F in first.factors], dtype=np.float64),
        to_components=first.to_components.astype(np.float64),
        rank=panel.K,
        df=first.df,
    )
    if idiosyncratic <= 0:
        return replace(common, status=NOT_POSITIVE)
    psi = unit / idiosyncratic
    solution, inverse, form = panel.gls(psi)
    left = panel.n - k.K
    multiplier = {
        "own": idiosyncratic,
        "gls_residuals": form / left if left >= 1 else panel.X.dtype.type("nan"),
        "gls_residuals_n": form / panel.n,
    }[scale]
    beta, cov = _reported(moved, solution, inverse, multiplier, panel.pooled)
    return replace(
        common,
        beta=beta,
        cov=cov,
        scale=float(multiplier),
        psi=float(psi),
        component_cov=component_covariance(panel, first, idiosyncratic, unit).astype(np.float64),
        df=first.df if scale == "own" else float(left if scale == "gls_residuals" else panel.n),
        status=TRUNCATED if raw < 0 else FITTED,
    )


def dense_panel(
    X: np.ndarray, y: np.ndarray, units: np.ndarray, *, exact: bool = False, one_row_units: str = "kept"
) -> tuple[Dense, Shifted]:
    """Return the dense panel and the map back, one-row units dropped if asked."""
    X, y, units = np.asarray(X), np.asarray(y), np.asarray(units)
    if one_row_units == "dropped":
        _, index, count = np.unique(units, return_inverse=True, return_counts=True)
        keep = count[index] > 1
        X, y, units = X[keep], y[keep], units[keep]
    elif one_row_units != "kept":
        raise ValueError(one_row_units)
    moved = shifted(X, y, exact)
    return Dense(moved.X, moved.y, units), moved


def oracle_fit(
    X: np.ndarray,
    y: np.ndarray,
    units: np.ndarray,
    route: str,
    *,
    exact: bool = False,
    count: str = "rank",
    scale: str = "own",
    one_row_units: str = "kept",
    **conventions: object,
) -> OracleFit:
    """Fit one route by its definition.

    Parameters
    ----------
    X, y, units : array
        n x p design, n responses, n unit labels.
    route : str
        One of `ROUTES`.
    exact : bool
        Work in long double on columns shifted near zero (needs a constant column to shift).
    count, scale, one_row_units
        Conventions shared by routes; `scale` other than "own" is for the feasible GLS routes.
    **conventions
        `between`, `expectation`, `divisor`, `prior` of the route.

    Returns
    -------
    OracleFit
    """
    panel, moved = dense_panel(X, y, units, exact=exact, one_row_units=one_row_units)
    k = routes.degrees(panel, count)
    if route in _FIRST_STAGE:
        function, defaults = _FIRST_STAGE[route]
        if extra := set(conventions) - set(defaults):
            raise ValueError(f"{route} does not take {extra}")
        return _gls(panel, moved, function(panel, k, **{**defaults, **conventions}), k, scale)
    if (
        route not in ROUTES
        or scale != "own"
        or set(conventions) - ({"between"} if route == "between" else set())
    ):
        raise ValueError((route, scale, conventions))
    return _off_curve(panel, moved, route, k, str(conventions.get("between", "size_weighted")))
