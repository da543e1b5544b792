"""What no route may depend on: order and names of rows, origins and units of measurement, coordinates of X."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from allowance import EPS, at_ratio, conditions
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from mixbridge.moments import Moments
from mixbridge.ratio import curve_of
from mixbridge.routes import ROUTES, Fit, Profile, fit_route
from mixbridge.routes.conventions import CURVE_ROUTES

KEYS = tuple(
    key
    for route in ("pooled", "within", "between", *CURVE_ROUTES[1:])
    for key in (("minque_0", "minque_1") if route == "minque" else (route,))
)


@dataclass(frozen=True)
class Data:
    """Rows of a panel: a constant, a covariate that varies both ways, one within units, one between them."""

    X: np.ndarray
    y: np.ndarray
    units: np.ndarray

    @property
    def error(self) -> float:
        """Relative rounding of a fit: eta times the square of the condition (see allowance.py), both fits counted."""
        c = conditions(self.X, self.y, self.units)
        spread = float(np.sqrt(c.y @ c.y / at_ratio(c, 1.0, np.zeros(c.x.shape[1])).residual_form))
        return 4 * c.n * c.eta * c.combined**2 * spread


@st.composite
def panels(draw):
    rng = np.random.default_rng(draw(st.integers(0, 10**6)))
    shape = draw(st.sampled_from(["balanced", "unbalanced", "singletons"]))
    N = draw(st.integers(6, 14))
    sizes = {
        "balanced": np.full(N, draw(st.integers(2, 5))),
        "unbalanced": rng.integers(2, 9, size=N),
        "singletons": np.concatenate([np.ones(3, dtype=int), rng.integers(2, 7, size=N)]),
    }[shape]
    units = np.repeat(np.arange(len(sizes)), sizes)
    n, N = len(units), len(sizes)
    x = rng.normal(size=n) + rng.normal(size=N)[units]
    X = np.column_stack([np.ones(n), x, rng.normal(size=n), rng.normal(size=N)[units]])
    psi = draw(st.sampled_from([0.0, 0.3, 2.0, 50.0]))
    y = X @ np.array([1.0, 0.5, -1.0, 2.0]) + np.sqrt(psi) * rng.normal(size=N)[units] + rng.normal(size=n)
    data = Data(X, y, units)
    assume(data.error < 1e-7)  # what is left must be tight enough to mean something
    return data


def fits(data: Data) -> dict[str, Fit]:
    curve = curve_of(Moments.from_arrays(data.X, data.y, data.units, ("c", "x", "w", "b")))
    return {key: fit_route(curve, key, {}, "not asked for") for key in KEYS}


def same_sign_or_rounding(one: Fit, other: Fit, error: float) -> bool:
    """Whether statuses agree; the sign of a component that is zero to rounding is not determined."""
    if one.status == other.status:
        return True
    size = max(one.idiosyncratic_variance, abs(one.unit_variance_raw))
    return min(abs(one.unit_variance_raw), abs(one.idiosyncratic_variance)) <= error * size


def ratio_error(fit: Fit, data: Data) -> float:
    """How far the ratio may be off for relative errors of size `error` in what it is computed from."""
    error = data.error
    if fit.certificate is None:
        # sigma_a^2 = difference of forms of the size of sigma_u^2 + T sigma_a^2, over at least one row of 1
        # + T psi
        return error * (1.0 + fit.ratio) * (1.0 + abs(fit.unit_variance_raw) / fit.idiosyncratic_variance)
    if fit.ratio == 0.0:
        return 0.0
    curve = curve_of(Moments.from_arrays(data.X, data.y, data.units))
    v = Profile(curve, fit.certificate.kind).values(np.array([fit.ratio]))
    return error * (v.m * abs(float(v.r1[0] / v.r[0])) + abs(float(v.g1[0]))) / abs(float(v.bend[0]))


def assert_same(one: Fit, other: Fit, data: Data, *, c: float = 1.0, to_beta=None, shift=None) -> None:
    """Compare `other`, a fit to transformed data, with `one`.

    Expected: beta -> c R beta + shift with R = to_beta; variances -> c^2; the ratio as it is. A ratio that
    is off by delta moves beta_j by at most ``delta T_max / (1 + T_max psi) sqrt(n) se_j`` and its
    covariance by that relative factor.
    """
    error = data.error
    assert same_sign_or_rounding(one, other, error), f"{one.route}: {one.status} against {other.status}"
    if one.status != other.status or not np.isfinite(one.scale):
        return
    p = len(one.beta)
    R = np.eye(p) if to_beta is None else to_beta
    lost = np.isnan(one.beta)
    if to_beta is not None and lost.any():
        return  # which combinations are estimable is tested apart
    off, pull = 0.0, 0.0
    if np.isfinite(one.ratio):
        off = ratio_error(one, data)
        size = float(np.bincount(data.units).max())
        pull = off * size / (1 + size * one.ratio)
        assert abs(other.ratio - one.ratio) <= off + error * one.ratio
    relative = 4 * (error + pull)
    assert other.scale == pytest.approx(c**2 * one.scale, rel=relative)
    if np.isfinite(one.idiosyncratic_variance):
        assert other.idiosyncratic_variance == pytest.approx(c**2 * one.idiosyncratic_variance, rel=relative)
    if np.isfinite(one.unit_variance_raw):
        limit = c**2 * (off + relative * (1 + abs(one.ratio))) * one.idiosyncratic_variance
        assert other.unit_variance_raw == pytest.approx(c**2 * one.unit_variance_raw, abs=limit)
        if np.isfinite(one.components_covariance).all():
            spread = c**2 * np.sqrt(np.diag(one.components_covariance))
            # traces that depend on the ratio through (1 + T psi)^2 and on sigma_u^4
            gap = np.abs(other.components_covariance - c**4 * one.components_covariance)
            assert (gap <= 8 * (relative + off * size) * np.outer(spread, spread)).all()
    beta, cov = R @ np.nan_to_num(one.beta) * c, c**2 * R @ np.nan_to_num(one.covariance_array) @ R.T
    if shift is not None:
        beta = beta + shift
    se = np.sqrt(np.diag(cov))
    reach = np.abs(R) @ (
        abs(c)
        * (
            np.abs(np.nan_to_num(one.beta))
            + np.sqrt(one.rows) * np.sqrt(np.diag(np.nan_to_num(one.covariance_array)))
        )
    )
    reach = reach + (0.0 if shift is None else np.abs(shift))
    assert (np.isnan(other.beta) == lost).all()
    free = ~lost
    assert (np.abs(other.beta - beta)[free] <= (relative * (reach + np.sqrt(one.rows) * se))[free]).all()
    wide = np.abs(R) @ np.sqrt(np.diag(np.nan_to_num(c**2 * one.covariance_array)))
    assert (
        np.abs(other.covariance_array - cov)[np.ix_(free, free)]
        <= relative * np.outer(wide, wide)[np.ix_(free, free)]
    ).all()
    if np.isfinite(one.log_likelihood):
        m = one.rows - (p if one.route == "reml" else 0)
        moved = one.log_likelihood - m * np.log(abs(c))
        assert other.log_likelihood == pytest.approx(
            moved, abs=relative * m + 64 * EPS * m * (1 + abs(np.log(abs(c))))
        )


def each(data: Data, changed: Data, **expected) -> None:
    before, after = fits(data), fits(changed)
    for key in KEYS:
        assert_same(before[key], after[key], data, **expected)


def test_every_route_is_here():
    assert {key.split("_0")[0].split("_1")[0] for key in KEYS} == set(ROUTES) - {"first_difference"}


@settings(max_examples=12)
@given(panels(), st.integers(0, 10**6))
def test_row_order(data, seed):
    order = np.random.default_rng(seed).permutation(len(data.y))
    each(data, Data(data.X[order], data.y[order], data.units[order]))


@settings(max_examples=12)
@given(panels(), st.integers(0, 10**6))
def test_unit_labels(data, seed):
    labels = np.random.default_rng(seed).permutation(500)[: data.units.max() + 1]
    each(data, Data(data.X, data.y, labels[data.units]))


@settings(max_examples=12)
@given(panels(), st.floats(-8, 8), st.booleans())
def test_scale_of_the_outcome(data, power, negative):
    c = (-1.0 if negative else 1.0) * 10.0**power
    each(data, Data(data.X, c * data.y, data.units), c=c)


@settings(max_examples=12)
@given(panels(), st.sampled_from([-1e6, -3.0, 0.125, 1e4, 1e9]))
def test_shift_of_the_outcome(data, far):
    """A power of two as the grain of y keeps the shifted outcome exact."""
    grain = 2.0**-16
    y = np.round(data.y / grain) * grain
    each(Data(data.X, y, data.units), Data(data.X, y + far, data.units), shift=np.array([far, 0.0, 0.0, 0.0]))


@settings(max_examples=12)
@given(panels(), st.tuples(*(st.integers(-8, 8) for _ in range(3))))
def test_scale_of_covariates(data, powers):
    d = np.concatenate([[1.0], 10.0 ** np.array(powers)])
    before, after = fits(data), fits(Data(data.X * d, data.y, data.units))
    moved = -float(np.log(d).sum())
    for key in KEYS:
        one, other = before[key], after[key]
        assert_same(one, other, data, to_beta=np.diag(1 / d))
        lost = np.isnan(one.beta)
        assert (np.isnan(other.beta) == lost).all()
        # within slopes have no intercept beside them, so their own scaling can be checked too
        error = 4 * data.error * (np.abs(one.beta) + np.sqrt(one.rows * np.diag(one.covariance_array)))
        assert (np.abs(other.beta * d - one.beta)[~lost] <= (error + 4 * ratio_move(one, data))[~lost]).all()
    assert np.isfinite(moved)


def ratio_move(fit: Fit, data: Data) -> np.ndarray:
    """Bound for coefficients whose ratio is off by `ratio_error`; zero where there is no finite ratio."""
    if not np.isfinite(fit.ratio):
        return np.zeros(len(fit.beta))
    size = float(np.bincount(data.units).max())
    return (
        ratio_error(fit, data)
        * size
        / (1 + size * fit.ratio)
        * np.sqrt(fit.rows * np.diag(fit.covariance_array))
    )


@settings(max_examples=12)
@given(panels(), st.sampled_from([-1e6, 5.0, 1e3, 1e9]), st.integers(1, 3))
def test_shift_of_a_covariate(data, far, column):
    """Slopes stay, the intercept takes -far times the slope; covariates on a grain so that shifting is exact."""
    grain = 2.0**-16
    X = np.round(data.X / grain) * grain
    moved = X.copy()
    moved[:, column] += far
    R = np.eye(4)
    R[0, column] = -far
    each(Data(X, data.y, data.units), Data(moved, data.y, data.units), to_beta=R)


@settings(max_examples=12)
@given(panels(), st.integers(0, 10**6))
def test_recombined_columns(data, seed):
    """X -> XR: coefficients become R^-1 beta; components, ratio and REML with its constant stay; without it, REML
    shifts by -log|det R|."""
    rng = np.random.default_rng(seed)
    R = np.eye(4)
    R[0, 1:] = np.round(rng.normal(size=3) * 8) / 8
    R[1:3, 1:3] = np.round(rng.normal(size=(2, 2)) * 8) / 8 + 2 * np.eye(2)  # within-varying columns mix
    R[3, 1:] = [*np.round(rng.normal(size=2) * 8) / 8, rng.choice([-2.0, 0.5, 3.0])]
    assume(np.linalg.cond(R) < 50)
    changed = Data(data.X @ R, data.y, data.units)
    assume(changed.error < 1e-7)
    worse = data if data.error > changed.error else changed  # rounding is that of the worse coordinates
    curves = [curve_of(Moments.from_arrays(item.X, item.y, item.units)) for item in (data, changed)]
    inverse = np.linalg.inv(R)
    for key in KEYS:
        one, other = (fit_route(curve, key, {}, "") for curve in curves)
        assert_same(one, other, Data(worse.X, data.y, data.units), to_beta=inverse)
        if np.isnan(one.beta).any() and np.isfinite(one.scale):
            assert other.scale == pytest.approx(one.scale, rel=4 * worse.error)
    omitted = [fit_route(curve, "reml", {"reml_constant": "omitted"}, "") for curve in curves]
    if omitted[0].certificate is not None:
        shift = -float(np.log(abs(np.linalg.det(R))))
        limit = worse.error * one.rows * 4
        assert omitted[1].log_likelihood - omitted[0].log_likelihood == pytest.approx(shift, abs=limit)
        included = [fit_route(curve, "reml", {}, "").log_likelihood for curve in curves]
        assert included[1] == pytest.approx(included[0], abs=limit)
    estimable = [fit_route(curve, "within", {}, "") for curve in curves]
    # fitted deviations are those of one column space: compare them where coefficients are not comparable
    inside = []
    for item, fit in zip((data, changed), estimable, strict=True):
        means = np.array([item.X[item.units == u].mean(axis=0) for u in np.unique(item.units)])
        inside.append((item.X - means[item.units]) @ np.nan_to_num(fit.beta))
    if not np.isnan(estimable[1].beta[1:3]).any():
        size = np.abs(inside[0]).max() + np.sqrt(estimable[0].scale)
        np.testing.assert_allclose(inside[1], inside[0], rtol=0, atol=4 * worse.error * size)


@settings(max_examples=12)
@given(panels(), st.integers(2, 4))
def test_duplicated_units(data, times):
    """Each unit several times under new names: sums of squares multiply, so ML and least squares keep their optimum."""
    N = data.units.max() + 1
    more = Data(
        np.tile(data.X, (times, 1)),
        np.tile(data.y, times),
        np.concatenate([data.units + k * N for k in range(times)]),
    )
    before, after = fits(data), fits(more)
    error = data.error * times
    for key in ("pooled", "within", "between"):
        one, other = before[key], after[key]
        free = ~np.isnan(one.beta)
        unit = np.abs(one.beta) + np.sqrt(one.rows * np.diag(one.covariance_array))
        assert (np.abs(other.beta - one.beta)[free] <= (4 * error * unit)[free]).all()
        # RSS grows by the number of copies, and so does X'X; only degrees of freedom differ
        assert other.scale * other.residual_df == pytest.approx(
            times * one.scale * one.residual_df, rel=4 * error
        )
    one, other = before["ml"], after["ml"]
    off = ratio_error(one, data) * times
    assert abs(other.ratio - one.ratio) <= off + error * one.ratio
    size = float(np.bincount(data.units).max())
    relative = 4 * (error + off * size / (1 + size * one.ratio))
    assert other.log_likelihood == pytest.approx(times * one.log_likelihood, abs=relative * more.y.size)
    assert other.idiosyncratic_variance == pytest.approx(one.idiosyncratic_variance, rel=relative)
    unit = np.abs(one.beta) + np.sqrt(one.rows * np.diag(one.covariance_array))
    assert (np.abs(other.beta - one.beta) <= relative * unit).all()
    gap = np.abs(times * other.covariance_array - one.covariance_array)
    se = np.sqrt(np.diag(one.covariance_array))
    assert (gap <= relative * np.outer(se, se)).all()


@settings(max_examples=12)
@given(panels(), st.integers(1, 6), st.integers(0, 10**6))
def test_units_with_one_row_leave_the_within_slopes(data, extra, seed):
    rng = np.random.default_rng(seed)
    more = Data(
        np.vstack([data.X, np.column_stack([np.ones(extra), 10 * rng.normal(size=(extra, 3))])]),
        np.concatenate([data.y, 10 * rng.normal(size=extra)]),
        np.concatenate([data.units, data.units.max() + 1 + np.arange(extra)]),
    )
    assume(more.error < 1e-6)
    before, after = (
        fit_route(curve_of(Moments.from_arrays(item.X, item.y, item.units)), "within", {}, "")
        for item in (data, more)
    )
    error = 4 * (data.error + more.error)
    free = ~np.isnan(before.beta)
    unit = np.abs(before.beta) + np.sqrt(before.rows * np.diag(before.covariance_array))
    assert (np.isnan(after.beta) == ~free).all()
    assert (np.abs(after.beta - before.beta)[free] <= (error * unit)[free]).all()
    assert after.scale == pytest.approx(before.scale, rel=error)
    assert after.residual_df == before.residual_df
    assert after.shrinkage.index.tolist()[0] == 1


@settings(max_examples=12)
@given(panels())
def test_quasi_demeaned_rows_give_the_same_coefficients(data):
    """Least squares on z - lambda_i zbar_i, one lambda per unit size, reproduces each route on the curve."""
    for key, fit in fits(data).items():
        if key in ("within", "between") or not np.isfinite(fit.ratio):
            continue
        weight = fit.quasi_demeaning.reindex(np.bincount(data.units)).to_numpy()[data.units]
        z = np.column_stack([data.X, data.y])
        means = np.array([z[data.units == u].mean(axis=0) for u in range(data.units.max() + 1)])[data.units]
        rows = z - weight[:, None] * means
        beta = np.linalg.lstsq(rows[:, :-1], rows[:, -1], rcond=None)[0]
        # ordinary least squares on rows: condition below 1e3 here, once more for the residual
        unit = np.abs(beta) + np.sqrt(fit.rows * np.diag(fit.covariance_array))
        assert (np.abs(beta - fit.beta) <= (4 * data.error + 1e-11) * unit).all()
        s = fit.shrinkage
        lam = fit.quasi_demeaning
        np.testing.assert_allclose(s, lam * (2 - lam), rtol=0, atol=8 * EPS)


def test_the_allowance_is_small():
    """On ordinary panels relative rounding is below 1e-9, so that the properties above say something."""
    rng = np.random.default_rng(1)
    units = np.repeat(np.arange(10), 4)
    X = np.column_stack([np.ones(40), rng.normal(size=(40, 2)), rng.normal(size=10)[units]])
    assert Data(X, rng.normal(size=40), units).error < 1e-9
