"""Profile likelihoods: derivatives, optima, components, constants, information, and likelihoods without a maximum."""

from __future__ import annotations

from functools import cache

import numpy as np
import pandas as pd
import pytest
from allowance import EPS, PLAIN, at_ratio, conditions, kappa, moved_ratio
from mp_likelihood import DIGITS, evaluate, mp_optimum, mp_profile, products
from mpmath import mp, mpf
from oracle import information_covariance, reml_first_order
from panels import BY_NAME, PANELS
from statsmodels.regression.mixed_linear_model import MixedLM

from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import Fit, Profile, fit_route, log_likelihood

KINDS = ("reml", "ml")


@cache
def curve_for(name: str) -> Curve:
    panel = BY_NAME[name]
    codes = np.unique(panel.units, return_inverse=True)[1]
    return curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))


@cache
def fit_for(name: str, kind: str) -> Fit:
    return fit_route(curve_for(name), kind, {}, "not asked for")


# -- derivatives -----------------------------------------------------------------------------------

DERIVATIVE_PANELS = (
    "balanced_both",
    "balanced_periods",
    "mild_both",
    "mild_no_intercept",
    "mild_hidden",
    "singletons_between",
    "huge_unit_between",
    "many_sizes",
    "psi_huge_mild",
    "offset_both_1e9",
    "scale_both",
    "ill_within",
    "ill_between",
)
RATIOS = (0.0, 1e-3, 0.3, 10.0, 1e6)


def derivatives_at(name: str, psi: float, kind: str) -> dict[str, float]:
    """r and g with two derivatives each, by central differences at 50 digits, in the engine's units (r(0) = 1)."""
    panel = BY_NAME[name]
    with mp.workdps(2 * DIGITS):  # second differences with h = 1e-20 lose 40 digits
        pack = products(panel.X, panel.y, panel.units)
        zero = evaluate(pack, mpf(0), kind)
        h = mpf(10) ** -20 * (mpf(1) + mpf(psi))
        places = [evaluate(pack, mpf(psi) + k * h, kind) for k in (-1, 0, 1)]
        r = [place.r / zero.r for place in places]
        g = [
            place.log_det_v + (place.log_det_xvx - zero.log_det_xvx if kind == "reml" else 0)
            for place in places
        ]
        return {
            "r": float(r[1]),
            "r1": float((r[2] - r[0]) / (2 * h)),
            "r2": float((r[2] - 2 * r[1] + r[0]) / h**2),
            "g": float(g[1]),
            "g1": float((g[2] - g[0]) / (2 * h)),
            "g2": float((g[2] - 2 * g[1] + g[0]) / h**2),
        }


def derivative_scales(curve: Curve, psi: float) -> tuple[dict[str, float], float]:
    """Size of the terms that each quantity is summed from, and the condition of the system that is solved.

    r = c'Ac, r1 = -c'S_2c, r2 = 2c'S_3c - 2v'A^-1v <= 2c'S_3c with c = (-b, 1), so a relative error in the
    entries of A, S_2, S_3 (and of c, once more the condition) is relative to ``sqrt(c'Sc) sqrt(sum c_j^2
    S_jj)``; g and its derivatives are sums of at most one log, weight or squared weight per unit and
    column.
    """
    p = curve.rank
    weight = curve.sizes / (1 + curve.sizes * psi)
    a, s2, s3 = curve.within_products, curve.weighted_between(weight**2), curve.weighted_between(weight**3)
    a = a + curve.weighted_between(weight)
    c = np.append(-np.linalg.solve(a[:p, :p], a[:p, p]), 1.0)

    def size(s: np.ndarray) -> float:
        return float(np.sqrt(c @ s @ c) * np.sqrt(c**2 @ np.diag(s)))

    logs = float(curve.counts @ np.log1p(curve.sizes * psi)) + np.abs(np.log(np.diag(a)[:p])).sum() + p
    scales = {
        "r": size(a),
        "r1": size(s2),
        "r2": 2 * size(s3),
        "g": logs,
        "g1": 2 * float(curve.counts @ weight),
        "g2": 4 * float(curve.counts @ weight**2),
    }
    length = np.sqrt(np.diag(a)[:p])
    return scales, float(np.linalg.cond(a[:p, :p] / np.outer(length, length)))


@pytest.mark.parametrize("name", DERIVATIVE_PANELS)
def test_profile_and_its_derivatives(name):
    curve = curve_for(name)
    panel = BY_NAME[name]
    c = conditions(panel.X, panel.y, panel.units)
    for kind in KINDS:
        values = Profile(curve, kind).values(np.array(RATIOS))
        for i, psi in enumerate(RATIOS):
            exact = derivatives_at(name, psi, kind)
            scales, solved = derivative_scales(curve, psi)
            # eta per entry of the whitened products, amplified by the whitening and by the solve (see
            # allowance.py)
            relative = 2 * c.eta * c.total * solved
            for what, value in exact.items():
                error = abs(float(getattr(values, what)[i]) - value)
                limit = relative * scales[what] + 2 * EPS * abs(value)
                assert error <= limit, f"{kind} {what} at {psi}: off by {error:.1e}, allowed {limit:.1e}"
                assert limit <= 1e-8 * scales[what] + 2 * EPS * abs(value), (
                    "an allowance that allows everything tests nothing"
                )
        # the parts make up the deviance
        assert values.deviance == pytest.approx(
            Profile(curve, kind).m * np.log(values.r) + values.g, rel=4 * EPS
        )


@pytest.mark.parametrize("kind", KINDS)
def test_deviance_differences_are_those_of_fifty_digits(kind):
    """Without any help of the engine's own units: D(psi) - D(0) against the definition."""
    for name in ("mild_both", "singletons_between", "offset_both_1e9"):
        panel = BY_NAME[name]
        values = Profile(curve_for(name), kind).values(np.array(RATIOS))
        with mp.workdps(DIGITS):
            exact = [mp_profile(panel.X, panel.y, panel.units, psi, kind) for psi in RATIOS]
            steps = np.array([float(d - exact[0]) for d in exact])
        m = Profile(curve_for(name), kind).m
        eta = conditions(panel.X, panel.y, panel.units).eta
        np.testing.assert_allclose(values.deviance - values.deviance[0], steps, rtol=0, atol=8 * m * eta)


@pytest.mark.parametrize("kind", KINDS)
def test_values_do_not_depend_on_what_else_is_evaluated(kind):
    profile = Profile(curve_for("many_sizes"), kind)
    grid = np.logspace(-3, 3, 13)
    together = profile.values(grid)
    for i, psi in enumerate(grid):
        alone = profile.values(np.array([psi]))
        for what in ("r", "r1", "r2", "g", "g1", "g2"):
            # the same sums by another blocking of the matrix product: rounding of at most one term per size
            # and column
            assert getattr(alone, what)[0] == pytest.approx(getattr(together, what)[i], rel=1e3 * EPS)


# -- optima ----------------------------------------------------------------------------------------


def relative_in_deviance(name: str, kind: str, psi: float) -> tuple[float, float]:
    """Bounds for the error of the ratio and, relative, of r at the optimum: slope error over curvature."""
    panel = BY_NAME[name]
    c = conditions(panel.X, panel.y, panel.units)
    v = Profile(curve_for(name), kind).values(np.array([psi]))
    bounds = at_ratio(c, psi, np.zeros(c.x.shape[1]))
    relative = bounds.residual / bounds.residual_form + 2 * c.eta * c.combined
    terms = v.m * abs(float(v.r1[0])) / float(v.r[0]) + abs(float(v.g1[0]))
    return relative * terms / abs(float(v.bend[0])), relative


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("panel", PANELS, ids=lambda panel: panel.name)
def test_optimum_against_fifty_digits(panel, kind):
    best = mp_optimum(panel.X, panel.y, panel.units, kind)
    fit = fit_for(panel.name, kind)
    assert fit.status == "fitted"
    assert fit.certificate is not None
    assert fit.certificate.excluded
    assert (fit.ratio == 0.0) == (best.psi == 0.0)
    off, relative = (0.0, 0.0) if best.psi == 0.0 else relative_in_deviance(panel.name, kind, best.psi)
    c = conditions(panel.X, panel.y, panel.units)
    bounds = at_ratio(c, best.psi, best.beta)
    beta_move, pull = moved_ratio(
        c, best.psi, off, best.cov, best.idiosyncratic_variance, bounds.residual_form
    )
    scale = relative + pull + bounds.residual / bounds.residual_form
    error = np.sqrt(np.diag(best.cov))
    sizes = np.bincount(np.unique(panel.units, return_inverse=True)[1])
    m = len(panel.y) - (panel.X.shape[1] if kind == "reml" else 0)
    # log L holds m log r / 2, log-determinants of at most N + 2p pivots, and constants: relative errors
    # become absolute
    likelihood = m * (scale + EPS * abs(np.log(best.idiosyncratic_variance))) + (
        len(sizes) + 2 * panel.X.shape[1]
    ) * (c.eta * c.combined + 8 * EPS * np.log1p(sizes.max() * (1 + best.psi)))
    figures = {
        "ratio": (fit.ratio, best.psi, off),
        "unit variance": (
            fit.unit_variance,
            best.unit_variance,
            (off + scale * best.psi) * best.idiosyncratic_variance,
        ),
        "idiosyncratic variance": (
            fit.idiosyncratic_variance,
            best.idiosyncratic_variance,
            scale * best.idiosyncratic_variance,
        ),
        "beta": (fit.beta, best.beta, bounds.beta + beta_move),
        "standard errors": (
            fit.standard_errors.to_numpy(),
            best.standard_errors,
            (bounds.inverse + pull + scale) * error,
        ),
        "log-likelihood": (fit.log_likelihood, best.log_likelihood, likelihood),
    }
    outer = np.outer(error, error)
    assert (
        np.abs(fit.covariance_array - best.cov) <= np.maximum(PLAIN, bounds.inverse + pull + scale) * outer
    ).all()
    if kind == "reml":
        omitted = fit_route(curve_for(panel.name), kind, {"reml_constant": "omitted"}, "").log_likelihood
        figures["log-likelihood, constant omitted"] = (omitted, best.log_likelihood_omitted, likelihood)
    plain = 0
    for what, (engine, exact, allowed) in figures.items():
        wrong = np.abs(engine - exact)
        limit = np.maximum(PLAIN * np.abs(exact), allowed)
        assert (wrong <= limit).all(), f"{what}: {engine} against {exact}, allowed {allowed}"
        plain += bool((wrong <= PLAIN * np.abs(exact)).all())
    # a ratio of 1e-4 is a small difference of large sums; everything else carries ten digits on every panel
    assert plain >= len(figures) - (2 if "near_zero" in panel.tags else 0)


def test_likelihoods_at_any_ratio_have_both_constants():
    panel, curve = BY_NAME["mild_both"], curve_for("mild_both")
    X, y = panel.X, panel.y
    for psi in (0.0, 0.4, 25.0):
        same = panel.units[:, None] == panel.units[None, :]
        V = np.eye(len(y)) + psi * same
        inner = X.T @ np.linalg.solve(V, X)
        e = y - X @ np.linalg.solve(inner, X.T @ np.linalg.solve(V, y))
        r = e @ np.linalg.solve(V, e)
        n, p = X.shape
        full = -0.5 * (n * np.log(2 * np.pi * r / n) + n + np.linalg.slogdet(V)[1])
        part = n - p
        omitted = -0.5 * (
            part * np.log(2 * np.pi * r / part) + part + np.linalg.slogdet(V)[1] + np.linalg.slogdet(inner)[1]
        )
        included = omitted + 0.5 * np.linalg.slogdet(X.T @ X)[1]
        # dense solves lose the condition of V, 1 + T psi <= 201, and of X'V^-1X, below 1e3 here
        wanted = 1e-12 * abs(full) * 10
        assert log_likelihood(curve, "ml", psi) == pytest.approx(full, abs=wanted)
        assert log_likelihood(curve, "reml", psi, constant=False) == pytest.approx(omitted, abs=wanted)
        assert log_likelihood(curve, "reml", psi) == pytest.approx(included, abs=wanted)


@pytest.mark.parametrize("panel", PANELS, ids=lambda panel: panel.name)
def test_first_order_conditions_of_reml(panel):
    """At an interior optimum y'PZZ'Py = tr PZZ' and y'PPy = tr P, dense; at zero the first is <=."""
    fit = fit_for(panel.name, "reml")
    unit, idiosyncratic = fit.unit_variance, fit.idiosyncratic_variance
    left, right, left_u, right_u = reml_first_order(
        panel.X, panel.y, panel.units, unit, idiosyncratic, exact=True
    )
    off, relative = (0.0, 0.0) if fit.ratio == 0 else relative_in_deviance(panel.name, "reml", fit.ratio)
    # both sides move with the ratio at most in proportion, quadratic ones twice; the dense side carries 19
    # digits
    allowed = 3 * (off / fit.ratio if fit.ratio else 0.0) + 2 * relative + PLAIN
    c = conditions(panel.X, panel.y, panel.units)
    moved = max(allowed, 4 * c.eta * c.combined)
    if fit.ratio > 0:
        assert left == pytest.approx(right, rel=moved)
        assert left_u == pytest.approx(right_u, rel=moved)
    else:
        assert left <= right * (1 + moved)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("panel", PANELS, ids=lambda panel: panel.name)
def test_component_information(panel, kind):
    fit = fit_for(panel.name, kind)
    exact = information_covariance(
        panel.X, panel.y, panel.units, fit.unit_variance, fit.idiosyncratic_variance, kind, exact=True
    )
    c = conditions(panel.X, panel.y, panel.units)
    size = np.sqrt(np.diag(exact))
    outer = np.outer(size, size)
    # traces of at least N - K_c = 1 out of at most n terms; the 2 x 2 inverse has the condition of their
    # correlation
    condition = 1 / (1 - (exact[0, 1] / (size[0] * size[1])) ** 2)
    allowed = 4 * c.eta * c.combined * c.n * condition
    wrong = np.abs(fit.components_covariance - exact) / outer
    assert (wrong <= max(PLAIN, allowed)).all()
    if not panel.tags & {"ill"}:
        assert (wrong <= PLAIN).all()


# -- another program -------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize(
    "name", ["balanced_both", "mild_both", "mild_between", "singletons_both", "many_sizes"]
)
def test_statsmodels(name, kind):
    panel, curve, fit = BY_NAME[name], curve_for(name), fit_for(name, kind)
    assert fit.ratio > 0
    frame = pd.DataFrame(panel.X, columns=list(panel.names))
    result = MixedLM(panel.y, frame, groups=panel.units).fit(
        reml=kind == "reml", method="bfgs", gtol=1e-9, maxiter=500
    )
    own = fit.log_likelihood
    if kind == "reml":
        own = fit_route(curve, "reml", {"reml_constant": "omitted"}, "").log_likelihood
    deficit = own - result.llf
    rounding = 1e-9  # its log-likelihood: sums of n terms with condition up to 1e3, n |log L| eps 1e3 < 1e-9
    assert -rounding <= deficit <= 1e-6, (
        "never worse; and its optimiser stops where the gradient falls below 1e-5"
    )
    # a deficit in log L is a step in the ratio: D'' step^2 / 2 = 2 deficit; the coefficients move along the
    # curve
    bend = float(Profile(curve, kind).values(np.array([fit.ratio])).bend[0])
    step = np.sqrt(4 * (max(deficit, 0.0) + rounding) / bend)
    ratio = float(np.asarray(result.cov_re)[0, 0]) / result.scale
    assert abs(ratio - fit.ratio) <= 2 * step
    c = conditions(panel.X, panel.y, panel.units)
    form = curve.at(fit.ratio).residual
    move, pull = moved_ratio(c, fit.ratio, 2 * step, fit.covariance_array, fit.scale, form)
    own_beta, own_se = fit.coefficients.to_numpy(), fit.standard_errors.to_numpy()
    assert (np.abs(result.fe_params - own_beta) <= move + 1e-9 * (np.abs(own_beta) + own_se)).all()
    assert result.scale == pytest.approx(fit.idiosyncratic_variance, rel=pull + 1e-9)
    assert np.asarray(result.cov_re)[0, 0] == pytest.approx(
        fit.unit_variance, abs=fit.idiosyncratic_variance * 2 * step + fit.unit_variance * (pull + 1e-9)
    )


# -- likelihoods without a maximum -----------------------------------------------------------------


def fit_arrays(X, y, units, kind: str) -> Fit:
    return fit_route(curve_of(Moments.from_arrays(X, y, units)), kind, {}, "")


def random_panel(seed: int, sizes: tuple[int, ...], slopes: int = 1):
    rng = np.random.default_rng(seed)
    units = np.repeat(np.arange(len(sizes)), sizes)
    X = np.column_stack([np.ones(len(units)), rng.normal(size=(len(units), slopes))])
    return X, rng.normal(size=len(units)) + rng.normal(size=len(sizes))[units], units


@pytest.mark.parametrize("kind", KINDS)
def test_one_row_per_unit_is_flat(kind):
    X, y, units = random_panel(1, (1,) * 8)
    assert fit_arrays(X, y, units, kind).status == "likelihood flat"
    values = [float(mp_profile(X, y, units, psi, kind)) for psi in (0.0, 1.0, 1e6)]
    assert max(values) - min(values) < 1e-12 * max(
        np.abs(values)
    )  # 50 digits, rounded to doubles of size 1e2


def test_reml_with_no_variation_left_between_units_is_flat():
    rng = np.random.default_rng(2)
    units = np.repeat(np.arange(3), (3, 4, 5))
    X = np.column_stack(
        [np.ones(12), rng.normal(size=3)[units], rng.normal(size=3)[units], rng.normal(size=12)]
    )
    y = rng.normal(size=12)
    fit = fit_arrays(X, y, units, "reml")
    assert fit.status == "likelihood flat"
    assert np.isnan(fit.beta).all()
    assert np.isnan(fit.log_likelihood)
    values = [float(mp_profile(X, y, units, psi, "reml")) for psi in (0.0, 1.0, 1e6)]
    assert max(values) - min(values) < 1e-12 * max(np.abs(values))


def test_ml_without_within_error_is_unbounded():
    X, y, units = random_panel(3, (2, 2, 1, 1, 1, 1), slopes=2)
    fit = fit_arrays(X, y, units, "ml")
    assert fit.status == "likelihood unbounded"
    falling = [float(mp_profile(X, y, units, psi, "ml")) for psi in (1e3, 1e6, 1e9, 1e12)]
    # n log r + g = -(n - N) log psi + constant: at least 2 log 1000 lower each time
    assert (np.diff(falling) < -2 * np.log(1000.0) * 0.99).all()
    assert "nothing bounds the restricted likelihood" in fit_arrays(X, y, units, "reml").status


@pytest.mark.parametrize("kind", KINDS)
def test_exact_within_fit_is_unbounded(kind):
    rng = np.random.default_rng(4)
    units = np.repeat(np.arange(6), 4)
    x = np.round(rng.normal(size=24) * 16) / 16
    y = 2.0 * x + np.round(rng.normal(size=6) * 16)[units] / 16
    X = np.column_stack([np.ones(24), x])
    fit = fit_arrays(X, y, units, kind)
    assert fit.status == "likelihood unbounded"
    assert fit.notes
    falling = [float(mp_profile(X, y, units, psi, kind)) for psi in (1e3, 1e6, 1e9)]
    assert (np.diff(falling) < -np.log(1000.0)).all()


def test_a_status_stops_no_other_route():
    X, y, units = random_panel(1, (1,) * 8)
    curve = curve_of(Moments.from_arrays(X, y, units))
    assert fit_route(curve, "pooled", {}, "").status == "fitted"
    assert fit_route(curve, "between", {}, "").status == "fitted"
    assert fit_route(curve, "within", {}, "").status.startswith("not estimable")


def test_conditions_measure_what_they_say():
    """The allowances rest on these numbers, so a blind measurement would hide errors."""
    ill, plain = BY_NAME["ill_within"], BY_NAME["mild_both"]
    assert 1e4 < conditions(ill.X, ill.y, ill.units).within < 1e6
    assert conditions(ill.X, ill.y, ill.units).total < 10
    assert conditions(plain.X, plain.y, plain.units).combined < 10
    far = BY_NAME["offset_both_1e9"]
    assert conditions(far.X, far.y, far.units).total < 10
    assert kappa(np.array([[1.0, 0.0], [0.0, 1e-8]])) == pytest.approx(1.0)
    assert kappa(np.array([[1.0, 1.0], [0.0, 1e-3]])) == pytest.approx(2e3, rel=1e-3)
