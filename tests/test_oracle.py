"""The oracle checked against closed forms, exact rational arithmetic, other least-squares code and theory.

Tolerances: the oracle computes in long double (eps 1e-19 on x86, where the digits were measured) on shifted
columns and reports doubles. `TIGHT` = 1e-12 is some thousand roundings of a double; where a check passes
through double precision linear algebra the allowance is eps x condition, said at the place.
"""

from fractions import Fraction

import numpy as np
import pytest
import statsmodels.api as sm
from oracle import (
    GLS_ROUTES,
    oracle_fit,
)
from oracle.fit import _FIRST_STAGE, dense_panel
from oracle.routes import degrees
from panels import BY_NAME, PANELS, Panel, tagged

TIGHT = 1e-12
UNBIASED = (
    ("swamy_arora", {}),
    ("wansbeek_kapteyn", {}),
    ("wallace_hussain", {}),
    ("fitting_constants", {}),
    ("minque", {"prior": 0.0}),
    ("minque", {"prior": 1.0}),
)
VARIANTS = (
    *UNBIASED,
    ("swamy_arora", {"between": "harmonic"}),
    ("swamy_arora", {"between": "unweighted"}),
    ("wallace_hussain", {"expectation": "short"}),
    ("amemiya", {}),
    ("nerlove", {}),
    ("nerlove", {"divisor": "units"}),
    ("pooled_minus_within", {}),
)
NOT_EXTREME = [p for p in PANELS if not p.tags & {"psi_huge", "offset", "scale", "ill", "two_minima"}]


def fit(panel: Panel, route: str, **conventions):
    return oracle_fit(panel.X, panel.y, panel.units, route, exact=True, **conventions)


def components(result) -> np.ndarray:
    return np.array([result.unit_variance_raw, result.idiosyncratic_variance])


def named(panels) -> dict:
    panels = list(panels)
    return {"argvalues": panels, "ids": [p.name for p in panels]}


# The panels are what they say.


def test_enough_panels_with_distinct_names():
    assert len(PANELS) >= 60
    assert len(BY_NAME) == len(PANELS)
    assert max(len(p.y) for p in PANELS) <= 60


@pytest.mark.parametrize("panel", **named(PANELS))
def test_tags_are_true(panel):
    dense, _ = dense_panel(panel.X, panel.y, panel.units, exact=True)
    sizes = np.unique(panel.units, return_counts=True)[1]
    assert ("balanced" in panel.tags) == (len(set(sizes)) == 1)
    closed = np.linalg.matrix_rank(np.column_stack([dense.P @ dense.X, dense.QX]).astype(float)) == dense.K
    if (
        "ill" not in panel.tags and "scale" not in panel.tags
    ):  # a double-precision rank would be a guess there
        assert ("closed" in panel.tags) == closed
    assert panel.X.shape[1] == dense.K
    assert dense.unit_constant.rank == dense.unit_constant_unweighted.rank == dense.K - dense.K_w
    if "singletons" in panel.tags:
        assert (sizes == 1).mean() > 0.5
    if "huge" in panel.tags:
        assert sizes.max() >= 0.7 * sizes.sum()
    if "hidden" in panel.tags:
        assert dense.K_w < panel.X.shape[1] - dense.constant_in_units.sum()
    if "balanced" in panel.tags and "periods" in panel.tags and panel.has_intercept:
        assert dense.K_p < panel.X.shape[1]
    rows = set(zip(panel.units.tolist(), panel.periods.tolist(), strict=True))
    assert len(rows) == len(panel.y)


@pytest.mark.parametrize("panel", **named(tagged("negative")))
def test_negative_panels_are_negative_everywhere(panel):
    for route, conventions in UNBIASED:
        result = fit(panel, route, **conventions)
        assert result.unit_variance_raw < 0 < result.idiosyncratic_variance
        assert result.status == "unit variance truncated"
        assert result.psi == result.unit_variance == 0.0
        np.testing.assert_allclose(result.beta, fit(panel, "pooled").beta, rtol=TIGHT)


# Expectations.


@pytest.mark.parametrize("panel", **named(PANELS))
@pytest.mark.parametrize(("route", "conventions"), [*UNBIASED, ("swamy_arora", {"between": "unweighted"})])
def test_unbiased_routes_are_unbiased(panel, route, conventions):
    result = fit(panel, route, **conventions)
    if result.status == "not estimable":
        assert route == "swamy_arora"
        assert "N - K_p = 0" in result.reason
        return
    # to_components maps E q = C (idiosyncratic, unit)' to (unit, idiosyncratic). The factors are rounded to
    # double, their product cancels: the allowance is a hundred roundings of the terms that cancel.
    terms = np.abs(result.to_components) @ np.abs(result.expectation)
    error = result.to_components @ result.expectation - [[0, 1], [1, 0]]
    assert np.all(np.abs(error) <= 1e-14 * (1 + terms))


@pytest.mark.parametrize("panel", **named([p for p in NOT_EXTREME if len(p.y) <= 32][:12]))
@pytest.mark.parametrize(("route", "conventions"), VARIANTS)
def test_expectations_are_sums_of_the_form_over_unit_vectors(panel, route, conventions):
    """Whatever A is, tr A = sum of q(e_k) and tr AZZ' = sum of q(Z e_i)."""
    result = oracle_fit(panel.X, panel.y, panel.units, route, **conventions)
    if result.status == "not estimable":
        pytest.skip(result.reason)
    dense, _ = dense_panel(panel.X, panel.y, panel.units)

    def forms(y):
        return forms_by_residuals(route, panel.X, y, panel.units, **conventions)

    by_vectors = np.column_stack(
        [sum(forms(e) for e in np.eye(len(panel.y))), sum(forms(dense.Z[:, i]) for i in range(dense.N))]
    )
    # double precision, condition below 1e3: a thousand roundings of numbers up to n
    np.testing.assert_allclose(result.expectation, by_vectors, rtol=1e-11, atol=1e-11)
    np.testing.assert_allclose(result.q, forms(panel.y), rtol=1e-10)


def forms_by_residuals(route, X, y, units, **conventions):
    """Compute the forms as one would by hand: regressions and sums of squared residuals, no n x n matrix."""
    labels, index = np.unique(units, return_inverse=True)
    sizes = np.bincount(index)

    def means(v):
        return np.array([v[index == i].mean(axis=0) for i in range(len(labels))])

    def residual(A, b):
        return b - A @ np.linalg.lstsq(A, b, rcond=1e-9)[0]

    QX, Qy = X - means(X)[index], y - means(y)[index]
    QX = np.where(np.abs(QX).max(axis=0) > 1e-12, QX, 0.0)
    b_w = np.linalg.lstsq(QX, Qy, rcond=1e-9)[0]
    rss_w = ((Qy - QX @ b_w) ** 2).sum()
    rss = (residual(X, y) ** 2).sum()
    root = np.sqrt(sizes)
    if route == "swamy_arora":
        weight = (
            root if conventions.get("between", "size_weighted") == "size_weighted" else np.ones(len(labels))
        )
        return np.array([rss_w, (residual(means(X) * weight[:, None], means(y) * weight) ** 2).sum()])
    if route == "wallace_hussain":
        e = residual(X, y)
        between = means(e)
        return np.array([((e - between[index]) ** 2).sum(), (sizes * between**2).sum()])
    if route == "fitting_constants":
        return np.array([rss_w, rss - rss_w])
    if route == "pooled_minus_within":
        return np.array([rss_w, rss])
    if route == "minque":
        psi = conventions["prior"]
        V = np.eye(len(y)) + psi * (index[:, None] == index[None, :])
        W = np.linalg.inv(V)
        r = W @ (y - X @ np.linalg.lstsq(X.T @ W @ X, X.T @ W @ y, rcond=1e-12)[0])
        return np.array([r @ r, (np.bincount(index, r) ** 2).sum()])
    _, s, vt = np.linalg.svd(QX)
    rank = int((s > 1e-9 * max(s.max(), 1.0)).sum())
    S = means(X) @ vt[rank:].T  # unit-constant vectors in the columns of X, one row per unit
    remainders = means(y - X @ b_w)
    if route in {"wansbeek_kapteyn", "amemiya"}:
        return np.array([rss_w, (residual(S * root[:, None], remainders * root) ** 2).sum()])
    assert route == "nerlove"
    left = residual(S, remainders) if S.shape[1] else remainders
    return np.array([rss_w, (left**2).sum()])


@pytest.mark.parametrize("panel", **named(PANELS))
def test_forms_do_not_see_the_coefficients(panel):
    """AX = 0: the forms of y and of y + Xb are the same; of Xb alone they are zero to rounding."""
    b = 1.0 + np.arange(panel.X.shape[1])
    dense, _ = dense_panel(panel.X, panel.y, panel.units, exact=True)
    signal = dense.X @ (b / dense.reference)
    for route, conventions in VARIANTS:
        result = oracle_fit(
            dense.X.astype(float), signal.astype(float), panel.units, route, exact=True, **conventions
        )
        if len(result.q):
            # the signal is rounded to double, and E q of an error with variance v is tr A v: here v is four
            # roundings of the signal, squared; near collinearity 1e-5 leaves long double itself with 1e-14
            error = 1e-14 if "ill" in panel.tags else 4 * 2.0**-53
            assert np.all(result.q <= error**2 * float(signal @ signal) * result.expectation[:, 0])


@pytest.mark.parametrize("panel", **named(tagged("hidden")))
def test_components_do_not_depend_on_the_basis_of_the_columns(panel):
    """With x and x + c in X, c is unit-constant though no column is: the forms must regress it out too."""
    R = np.triu(np.arange(1.0, 1 + panel.X.shape[1] ** 2).reshape(panel.X.shape[1], -1))
    for route, conventions in VARIANTS:
        one = fit(panel, route, **conventions)
        other = oracle_fit(panel.X @ R, panel.y, panel.units, route, exact=True, **conventions)
        np.testing.assert_allclose(components(one), components(other), rtol=1e-10)  # XR is rounded to double
        np.testing.assert_allclose(R @ other.beta, one.beta, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("panel", **named(NOT_EXTREME[::7]))
@pytest.mark.parametrize(("route", "conventions"), VARIANTS)
def test_expectations_and_covariances_are_the_traces_of_the_definition(panel, route, conventions):
    """With A = F'F written out: E q = tr AV, Cov(q_i, q_j) = 2 tr(A_i V A_j V), mapped to the components."""
    dense, _ = dense_panel(panel.X, panel.y, panel.units)
    function, defaults = _FIRST_STAGE[route]
    first = function(dense, degrees(dense, "rank"), **{**defaults, **conventions})
    result = oracle_fit(panel.X, panel.y, panel.units, route, **conventions)
    if not np.isfinite(result.psi):
        pytest.skip(result.status)
    V = dense.V(result.idiosyncratic_variance, result.unit_variance)
    A = [F.T @ F for F in first.factors]
    # double precision, well-conditioned panels, numbers of the order of n
    np.testing.assert_allclose(
        result.expectation, [[np.trace(a), np.trace(a @ dense.ZZ)] for a in A], atol=1e-10
    )
    cov_q = np.array([[2 * np.trace(a @ V @ b @ V) for b in A] for a in A])
    expected = result.to_components @ cov_q @ result.to_components.T
    np.testing.assert_allclose(result.component_cov, expected, rtol=1e-9, atol=1e-10)
    for a, F in zip(A, first.factors, strict=True):
        np.testing.assert_allclose(a, a.T, atol=1e-13)
        assert np.abs(F @ dense.X).max() <= 1e-11 * np.abs(dense.X).max()


# Closed forms and other code.


@pytest.mark.parametrize("panel", **named([p for p in tagged("balanced", "closed") if p.X.shape[1] == 1]))
def test_balanced_one_way_closed_form(panel):
    N, T = len(np.unique(panel.units)), np.bincount(panel.units)[0]
    y = panel.y.reshape(N, T)
    msw = ((y - y.mean(axis=1, keepdims=True)) ** 2).sum() / (N * (T - 1))
    msb = T * ((y.mean(axis=1) - y.mean()) ** 2).sum() / (N - 1)
    unit = (msb - msw) / T
    for route, conventions in UNBIASED:
        result = fit(panel, route, **conventions)
        np.testing.assert_allclose(
            components(result), [unit, msw], rtol=1e-10
        )  # the closed form is in double
        total = result.idiosyncratic_variance + T * result.unit_variance
        both = 2 * result.idiosyncratic_variance**2 / (N * (T - 1))
        variance = np.array([[2 * total**2 / (N - 1) / T**2 + both / T**2, -both / T], [-both / T, both]])
        np.testing.assert_allclose(result.component_cov, variance, rtol=1e-10)
        np.testing.assert_allclose(result.beta, [y.mean()], rtol=TIGHT)
        np.testing.assert_allclose(result.cov, [[total / (N * T)]], rtol=TIGHT)


@pytest.mark.parametrize(
    "panel", **named([p for p in NOT_EXTREME if not p.tags & {"periods", "hidden"}][::3])
)
def test_least_squares_routes_against_other_code(panel):
    pooled = fit(panel, "pooled")
    ols = sm.OLS(panel.y, panel.X).fit()
    np.testing.assert_allclose(pooled.beta, ols.params, rtol=1e-10)  # double, condition below 1e3
    np.testing.assert_allclose(pooled.cov, ols.cov_params(), rtol=1e-9, atol=1e-12)
    within = fit(panel, "within")
    keep = ~np.isnan(within.beta)
    if keep.any():
        Z = (panel.units[:, None] == np.unique(panel.units)).astype(float)
        dummies = sm.OLS(panel.y, np.column_stack([panel.X[:, keep], Z])).fit()
        np.testing.assert_allclose(within.beta[keep], dummies.params[: keep.sum()], rtol=1e-9)
        assert within.df == dummies.df_resid
        np.testing.assert_allclose(within.scale, dummies.ssr / dummies.df_resid, rtol=1e-10)
    labels, counts = np.unique(panel.units, return_counts=True)
    means = np.array([np.column_stack([panel.X, panel.y])[panel.units == i].mean(axis=0) for i in labels])
    if len(labels) > panel.X.shape[1]:
        for kind, weights in (("size_weighted", counts), ("unweighted", np.ones(len(labels)))):
            between = fit(panel, "between", between=kind)
            if np.isnan(between.beta).any():
                continue
            wls = sm.WLS(means[:, -1], means[:, :-1], weights=weights).fit()
            assert between.df == wls.df_resid
            np.testing.assert_allclose(between.beta, wls.params, rtol=1e-9)
            np.testing.assert_allclose(between.cov, wls.cov_params(), rtol=1e-8, atol=1e-12)


@pytest.mark.parametrize("panel", **named([p for p in NOT_EXTREME if "balanced_periods" in p.name]))
def test_period_indicators_are_not_estimable_between(panel):
    between = fit(panel, "between")
    lost = [n for n, b in zip(panel.names, between.beta, strict=True) if np.isnan(b)]
    no_means = [n for n in panel.names if n.startswith("pure_")]  # zero unit means
    assert lost == ["Intercept", *no_means, *(n for n in panel.names if n.startswith("period_"))]
    assert between.df == len(np.unique(panel.units)) - (panel.X.shape[1] - len(lost) + 1)


@pytest.mark.parametrize("panel", **named(NOT_EXTREME[::4]))
def test_gls_step_with_an_explicit_inverse(panel):
    for route in GLS_ROUTES:
        result = fit(panel, route)
        if np.isnan(result.psi):
            continue
        V = np.eye(len(panel.y)) + result.psi * (panel.units[:, None] == panel.units[None, :])
        W = np.linalg.inv(V)
        A = np.linalg.inv(panel.X.T @ W @ panel.X)
        beta = A @ panel.X.T @ W @ panel.y
        e = panel.y - panel.X @ beta
        # double precision, condition of X below 1e3 and of V below 1e3
        np.testing.assert_allclose(result.beta, beta, rtol=1e-8)
        np.testing.assert_allclose(result.cov, result.idiosyncratic_variance * A, rtol=1e-8, atol=1e-12)
        n, p = panel.X.shape
        for scale, divisor in (("gls_residuals", n - p), ("gls_residuals_n", n)):
            assert fit(panel, route, scale=scale).scale == pytest.approx(e @ W @ e / divisor, rel=1e-8)


# Exactness at offsets: rational arithmetic on the stored doubles.


def rational_solve(A, b):
    size = len(A)
    M = [[*row, v] for row, v in zip(A, b, strict=True)]
    for k in range(size):
        pivot = next(i for i in range(k, size) if M[i][k] != 0)
        M[k], M[pivot] = M[pivot], M[k]
        M[k] = [v / M[k][k] for v in M[k]]
        for i in range(size):
            if i != k:
                M[i] = [a - M[i][k] * c for a, c in zip(M[i], M[k], strict=True)]
    return [row[-1] for row in M]


def rational_least_squares(columns, y):
    normal = [[sum(a * b for a, b in zip(u, v, strict=True)) for v in columns] for u in columns]
    right = [sum(a * b for a, b in zip(u, y, strict=True)) for u in columns]
    beta = rational_solve(normal, right)
    rss = sum(v * v for v in y) - sum(b * c for b, c in zip(beta, right, strict=True))
    return beta, rss


def rational_means(v, units):
    total = {i: Fraction(0) for i in units}
    for i, value in zip(units, v, strict=True):
        total[i] += value
    return [total[i] / units.count(i) for i in units]


@pytest.mark.parametrize("panel", **named([*tagged("offset"), *tagged("scale"), *tagged("ill")]))
def test_exact_mode_has_twelve_digits(panel):
    units = panel.units.tolist()
    X = [[Fraction(float(v)) for v in column] for column in panel.X.T]
    y = [Fraction(float(v)) for v in panel.y]
    beta, rss = rational_least_squares(X, y)
    pooled = fit(panel, "pooled")
    n, p = panel.X.shape
    np.testing.assert_allclose(pooled.beta, [float(b) for b in beta], rtol=TIGHT)
    np.testing.assert_allclose(pooled.scale, float(rss / (n - p)), rtol=TIGHT)
    means = [rational_means(c, units) for c in X]
    Q = [[a - b for a, b in zip(c, m, strict=True)] for c, m in zip(X, means, strict=True)]
    my = rational_means(y, units)
    varying = [j for j in range(p) if any(Q[j])]
    b_w, rss_w = rational_least_squares([Q[j] for j in varying], [a - b for a, b in zip(y, my, strict=True)])
    within = fit(panel, "within")
    np.testing.assert_allclose(within.beta[varying], [float(b) for b in b_w], rtol=TIGHT)
    b_b, rss_b = rational_least_squares(means, my)
    between = fit(panel, "between")
    np.testing.assert_allclose(between.beta, [float(b) for b in b_b], rtol=TIGHT)
    result = fit(panel, "fitting_constants")
    np.testing.assert_allclose(result.q, [float(rss_w), float(rss - rss_w)], rtol=TIGHT)
    np.testing.assert_allclose(fit(panel, "swamy_arora").q, [float(rss_w), float(rss_b)], rtol=TIGHT)
