"""Contrasts, predicted effects, criteria and variance explained, against dense algebra and published figures."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from panels import PANELS
from scipy.stats import chi2

import mixbridge
from mixbridge.inference.comparison import criteria, same_column_space, variance_explained
from mixbridge.inference.contrasts import contrast_terms, contrasts, shared_directions
from mixbridge.inference.effects import effect_variances, estimated_intercepts, predicted_effects

EPS = np.finfo(float).eps
PLAIN = [p for p in PANELS if not p.tags & {"ill", "offset", "scale", "psi_huge"}]


def study_of(panel):
    frame = pd.DataFrame(panel.X, columns=[f"x{j}" for j in range(panel.X.shape[1])])
    frame["y"], frame["unit"] = panel.y, panel.units
    return mixbridge.crosscheck("y ~ 0 + " + " + ".join(frame.columns[:-2]), frame, unit="unit")


def of(found, name, variance="one idiosyncratic variance", weights=None):
    return next(
        item
        for item in found
        if item.name == name and item.variance == variance and weights in (None, item.weights)
    )


@pytest.fixture(scope="module")
def grunfeld():
    data = sm.datasets.grunfeld.load_pandas().data
    return mixbridge.crosscheck(
        "invest ~ value + capital", data[data["firm"] != "American Steel"], unit="firm"
    )


def test_published_contrasts(grunfeld):
    """Baltagi, Econometric Analysis of Panel Data, 5th ed. (2013), sec. 4.2; digits from memory, recomputed."""
    found = contrasts(grunfeld.curve, grunfeld.fit("swamy_arora"))
    common, own = of(found, "within - gls"), of(found, "within - gls", "each route's own")
    assert abs(common.statistic - 2.131) <= 0.0005
    assert abs(own.statistic - 2.33) <= 0.005
    assert common.df == own.df == 2
    assert common.p_value == pytest.approx(chi2.sf(common.statistic, 2), rel=1e-14)


@pytest.mark.parametrize("panel", PLAIN, ids=lambda p: p.name)
def test_one_chi_square_for_all_contrasts(panel):
    """Identity 5: one ratio, one idiosyncratic variance, and between weights T / (1 + T psi)."""
    study = study_of(panel)
    curve, fit = study.curve, study.fit("fitting_constants")
    found = contrasts(curve, fit)
    if not found:
        assert curve.rank_between == curve.rank_constant or not np.isfinite(fit.ratio) or curve.df_within < 1
        return
    base = of(found, "unit means")
    assert base.df == curve.rank_between - curve.rank_constant == shared_directions(curve).shape[1]
    for name in ("within - gls", "gls - between", "within - between"):
        item = of(found, name, weights=None if name == "within - gls" else "T / (1 + T psi)")
        # a difference of covariances keeps eps over its smallest relative eigenvalue
        allowed = 1e3 * EPS * curve.condition**2 / min(item.smallest, 1.0)
        np.testing.assert_allclose(item.statistic, base.statistic, rtol=allowed)


@pytest.mark.parametrize("panel", PLAIN[::3], ids=lambda p: p.name)
def test_within_minus_gls_against_dense_algebra(panel):
    """The Wald statistic of the unit means, from the regression on X and all unit means of X at the same V."""
    study = study_of(panel)
    fit = study.fit("fitting_constants")
    found = contrasts(study.curve, fit)
    if not found:
        pytest.skip("no shared direction")
    labels = np.unique(panel.units)
    z = (panel.units[:, None] == labels).astype(float)
    average = z @ np.linalg.solve(z.T @ z, z.T)
    v = np.eye(len(panel.y)) + fit.ratio * z @ z.T
    root = np.linalg.cholesky(np.linalg.inv(v)).T

    def rest(columns):
        slope = np.linalg.lstsq(root @ columns, root @ panel.y, rcond=1e-10)[0]
        return float(((root @ (panel.y - columns @ slope)) ** 2).sum())

    drop = rest(panel.X) - rest(np.hstack([panel.X, average @ panel.X]))
    expected = drop / fit.idiosyncratic_variance
    scale = rest(panel.X) / fit.idiosyncratic_variance
    # a difference of two residual sums of squares
    assert abs(of(found, "unit means").statistic - expected) <= 1e-10 * scale


def test_balanced_panels_do_not_depend_on_the_weights_of_the_between_fit(grunfeld):
    found = contrasts(grunfeld.curve, grunfeld.fit("reml"))
    values = [
        item.statistic
        for item in found
        if item.name == "within - between" and item.variance.startswith("one")
    ]
    assert len(values) == 3
    np.testing.assert_allclose(values, values[0], rtol=1e-10)


def test_a_difference_that_is_no_covariance_gives_no_statistic():
    """Own variances: drawn until the difference has a negative eigenvalue, which happens in small panels."""
    for seed in range(200):
        rng = np.random.default_rng(seed)
        unit = np.repeat(np.arange(6), 3)
        x = rng.normal(size=18) + rng.normal(size=6)[unit]
        y = 3 * np.bincount(unit, x)[unit] / 3 + rng.normal(size=18) + 2 * rng.normal(size=6)[unit]
        frame = pd.DataFrame({"unit": unit, "x": x, "y": y})
        study = mixbridge.crosscheck("y ~ x", frame, unit="unit")
        item = of(contrasts(study.curve, study.fit("swamy_arora")), "within - gls", "each route's own")
        if item.smallest < 0.0:
            assert np.isnan(item.statistic)
            assert np.isnan(item.p_value)
            assert "no covariance" in item.note
            return
    pytest.fail("no negative eigenvalue in 200 panels")


def test_both_sides_per_covariate(grunfeld):
    within, gls = grunfeld.fit("within"), grunfeld.fit("swamy_arora")
    table = contrast_terms(grunfeld.curve, gls, within).set_index("term")
    assert table.loc["Intercept", "reason"] == "does not vary within units"
    row = table.loc["capital"]
    square = within.covariance.loc["capital", "capital"] - gls.covariance.loc["capital", "capital"]
    np.testing.assert_allclose(row["difference_se"], np.sqrt(square), rtol=1e-10)
    np.testing.assert_allclose(row["z"], row["difference"] / row["difference_se"], rtol=1e-14)


@pytest.mark.parametrize("panel", PLAIN[::2], ids=lambda p: p.name)
def test_effects_and_prediction_errors_solve_the_mixed_model_equations(panel):
    """Henderson's equations, dense: effects, and the lower block of the inverse as prediction error variance."""
    study = study_of(panel)
    fit = study.fit("fitting_constants")
    if not (fit.estimated and fit.ratio > 0.0):
        pytest.skip("no positive ratio")
    labels = np.unique(panel.units)
    z = (panel.units[:, None] == labels).astype(float)
    w = np.hstack([panel.X, z])
    penalty = np.diag(np.r_[np.zeros(panel.X.shape[1]), np.full(len(labels), 1.0 / fit.ratio)])
    inverse = np.linalg.inv(w.T @ w + penalty)
    solved = inverse @ (w.T @ panel.y)
    table = predicted_effects(study.opened, fit).loc[labels]
    p = panel.X.shape[1]
    scale = np.abs(solved[p:]).max() + np.sqrt(fit.idiosyncratic_variance)
    np.testing.assert_allclose(table["effect"], solved[p:], atol=1e-10 * scale)
    errors = np.sqrt(fit.idiosyncratic_variance * np.diag(inverse)[p:])
    np.testing.assert_allclose(table["prediction_se"], errors, rtol=1e-9)  # an inverse of condition up to 1e5
    assert sorted(table["rank"]) == list(range(1, len(labels) + 1))
    assert table["effect"].idxmax() == table["rank"].idxmin()


def test_three_variances_side_by_side(grunfeld):
    fit = grunfeld.fit("reml")
    table = effect_variances(grunfeld.curve, grunfeld.opened, fit).set_index("quantity")["value"]
    assert table["unit variance"] == fit.unit_variance
    assert table["predicted effects"] < table["unit variance"]
    data = grunfeld.panel
    x, y = data.matrix()
    dummies = (data.codes[:, None] == np.arange(data.N)).astype(float)
    ols = sm.OLS(y, np.hstack([x[:, 1:], dummies])).fit()
    np.testing.assert_allclose(
        estimated_intercepts(grunfeld.curve, grunfeld.opened), ols.params[2:], rtol=1e-9
    )
    np.testing.assert_allclose(table["intercepts as parameters"], np.var(ols.params[2:], ddof=1), rtol=1e-9)


def test_criteria_and_their_counts(grunfeld):
    table = criteria(grunfeld.curve, dict(grunfeld.fits)).set_index("likelihood")
    ml = table.loc["ml"]
    assert ml["parameters"] == 5
    np.testing.assert_allclose(ml["aic"], -2 * grunfeld.fit("ml").log_likelihood + 10, rtol=1e-14)
    np.testing.assert_allclose(ml["bic_rows"] - ml["bic_units"], 5 * np.log(200 / 10), rtol=1e-10)
    reml = table.loc["reml, with half log|X'X|", "log_likelihood"]
    x, _ = grunfeld.panel.matrix()
    np.testing.assert_allclose(
        reml - table.loc["reml, without it", "log_likelihood"], np.linalg.slogdet(x.T @ x)[1] / 2, rtol=1e-10
    )


def test_column_spaces_are_compared_by_what_they_span():
    data = mixbridge.demo.apiaries()
    one = mixbridge.crosscheck("honey ~ forage + feeding", data, unit="apiary").curve
    turned = mixbridge.crosscheck(
        "honey ~ I(forage + feeding) + I(forage - 2 * feeding)", data, unit="apiary"
    ).curve
    other = mixbridge.crosscheck("honey ~ forage + altitude", data, unit="apiary").curve
    assert same_column_space(one, turned)
    assert not same_column_space(one, other)


def test_variance_explained_by_definition():
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary"
    )
    fit = study.fit("reml")
    x, y = study.panel.matrix()
    fitted = x @ fit.beta
    frame = pd.DataFrame({"unit": study.panel.codes, "f": fitted, "y": y})
    means = frame.groupby("unit").mean()
    inside = frame[["f", "y"]] - means.loc[frame["unit"]].to_numpy()
    table = variance_explained(study.curve, fit).set_index("measure")["value"]
    np.testing.assert_allclose(table["within"], np.corrcoef(inside["f"], inside["y"])[0, 1] ** 2, rtol=1e-10)
    np.testing.assert_allclose(table["between"], np.corrcoef(means["f"], means["y"])[0, 1] ** 2, rtol=1e-10)
    np.testing.assert_allclose(table["overall"], np.corrcoef(fitted, y)[0, 1] ** 2, rtol=1e-10)
    share = np.var(fitted, ddof=1)
    total = share + fit.unit_variance + fit.idiosyncratic_variance
    np.testing.assert_allclose(table["marginal"], share / total, rtol=1e-10)
    np.testing.assert_allclose(table["conditional"], (share + fit.unit_variance) / total, rtol=1e-10)
