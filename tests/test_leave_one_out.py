"""Deletions of units against fits of the rows that are left: every unit, every route, every panel."""

import numpy as np
import pandas as pd
import pytest
from panels import BY_NAME, PANELS

from mixbridge.errors import DataError, IdentificationError, MixbridgeError, OptionError
from mixbridge.inference.robust import robust_covariance
from mixbridge.moments import Moments
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import curve_of
from mixbridge.reconcile.agreement import Interval, Thresholds, ledger
from mixbridge.resample import deletion_likelihood
from mixbridge.resample.deletion import DELETED_ROUTES, NO_ORDER, centre_of, given_routes
from mixbridge.resample.deletion_axes import unit_axes
from mixbridge.resample.deletion_batch import Batch, deletions
from mixbridge.resample.deletion_bounds import neighbourhood
from mixbridge.resample.deletion_components import COMPONENTS
from mixbridge.resample.deletion_rest import moments_of
from mixbridge.resample.deletion_values import evaluate
from mixbridge.resample.jackknife import fits_of, leave_one_out
from mixbridge.resample.jackknife_sets import leave_one_period_out, leave_two_out
from mixbridge.resample.jackknife_verdicts import CLASSES
from mixbridge.routes import REFERENCE_ROUTES, fit_route
from mixbridge.routes.fitting import named_route
from mixbridge.routes.quadratic import QUADRATIC

# Asked for: 1e-9 times the leverage of the unit, that is the 1/(1 - h) by which taking it off amplifies rounding. Above
# h = 0.99 nothing is taken off, the rest is summed: there the factor stays at 100. Coefficients in standard errors.
CLOSE = 1e-9
VARIANTS = {
    "swamy_arora": [{"between": "harmonic"}, {"between": "unweighted"}, {"count": "columns"}],
    "between": [{"between": "unweighted"}, {"count": "columns"}],
    "within": [{"count": "columns"}],
    "wallace_hussain": [{"expectation": "short"}],
    "nerlove": [{"divisor": "units"}],
    "minque": [{"prior": 0.3}, {"prior": 50.0}],
    "wansbeek_kapteyn": [{"scale": "gls_residuals"}],
    "reml": [{"scale": "gls_residuals_n"}],
    "ml": [{"scale": "gls_residuals"}],
}


def coded(panel):
    return np.unique(panel.units, return_inverse=True)[1]


def taken(X, y, codes, names=None):
    return curve_of(Moments.from_arrays(X, y, codes, names)), UnitProducts.from_arrays(X, y, codes, names)


def of(panel):
    return taken(panel.X, panel.y, coded(panel), panel.names)


def rows_fit(X, y, codes, names, routes):
    """Fit every route to rows; a sentence where the design is not identified."""
    try:
        curve = curve_of(Moments.from_arrays(X, y, np.unique(codes, return_inverse=True)[1], names))
    except MixbridgeError as error:
        return str(error)
    return {
        key: fit_route(curve, named_route(key)[0], conventions, NO_ORDER)
        for key, conventions in routes.items()
    }


def leverages(X, codes):
    """Return the largest share of any direction that each unit has, within units or between their means."""
    scale = np.abs(X).max(axis=0)
    z = (codes[:, None] == np.unique(codes)).astype(float)
    means = z.T @ (X / scale) / z.sum(axis=0)[:, None]
    parts = [X / scale - z @ means, z @ means, z @ (means / np.sqrt(z.sum(axis=0))[:, None])]
    found = np.zeros(z.shape[1])
    for part in parts:
        u, s, _ = np.linalg.svd(part, full_matrices=False)
        u = u[:, s > 1e-9 * s.max(initial=1e-300)]
        for i in range(z.shape[1]):
            rows = u[z[:, i] > 0]
            found[i] = max(found[i], np.linalg.svd(rows, compute_uv=False).max(initial=0.0) ** 2)
    return found


def agrees(refits, at, fit, allowed, beta_rounding):
    """Assert that one deletion is what a fit of the rows gives."""
    assert refits.status[at] == fit.status
    if not fit.estimated:
        assert not np.isfinite(refits.coefficients[at]).any()
        return
    assert (np.isnan(refits.coefficients[at]) == np.isnan(fit.beta)).all()
    assert (np.isnan(refits.standard_errors[at]) == np.isnan(fit.standard_errors.to_numpy())).all()
    live = np.isfinite(fit.beta)
    scale = fit.scale if np.isfinite(fit.scale) else 1.0
    error = np.sqrt(scale * (fit.root**2).sum(axis=1))[live]
    gap = np.abs(refits.coefficients[at] - fit.beta)[live]
    assert (gap <= allowed * error + beta_rounding[live]).all()
    if np.isfinite(fit.scale):
        np.testing.assert_allclose(refits.standard_errors[at][live], error, rtol=allowed)
    if np.isfinite(fit.unit_variance_raw) and np.isfinite(fit.idiosyncratic_variance):
        total = abs(fit.unit_variance_raw) + abs(fit.idiosyncratic_variance)
        assert abs(refits.unit_variance_raw[at] - fit.unit_variance_raw) <= allowed * total
        assert abs(refits.idiosyncratic_variance[at] - fit.idiosyncratic_variance) <= allowed * total
    if np.isfinite(fit.ratio):
        assert abs(refits.ratio[at] - fit.ratio) <= allowed * (fit.ratio + 1.0 / fit.sizes[-1])
        assert (refits.ratio[at] == 0.0) == (fit.ratio == 0.0)


def check(panel, keys, conventions=None):
    curve, products = of(panel)
    found = leave_one_out(curve, products, keys, keys[0], conventions=conventions)
    routes = given_routes(curve, keys, conventions)
    codes, shares = coded(panel), leverages(panel.X, coded(panel))
    # two roundings of the level of the outcome, which an intercept holds, and of the origins that it collects
    levels = np.abs(panel.y).max() + 0.0 * np.ones(curve.rank)
    for i in range(products.units):
        keep = codes != i
        fits = rows_fit(panel.X[keep], panel.y[keep], codes[keep], panel.names, routes)
        allowed = CLOSE * min(1.0 / max(1.0 - shares[i], 1e-2), 100.0)
        for key in keys:
            refits = found.refits[key]
            if isinstance(fits, str):
                assert refits.status[i].startswith("not estimable")
                assert np.isnan(refits.coefficients[i]).all()
            elif refits.status[i].startswith("not estimable with all units"):
                assert not found.fits[key].estimated
                assert not fits[key].estimated
            else:
                size = np.abs(np.nan_to_num(fits[key].beta))
                agrees(refits, i, fits[key], allowed, 4e-16 * (size + levels * (size > 0.01 * levels)))
                if refits.ratio[i] > 0.0 or key in ("ml", "reml"):
                    assert refits.certified[i] or not np.isfinite(refits.ratio[i])


@pytest.mark.parametrize("panel", PANELS, ids=lambda panel: panel.name)
def test_every_unit_and_route_of_every_panel_against_the_rows_left(panel):
    check(panel, DELETED_ROUTES)


@pytest.mark.parametrize("variant", range(3))
@pytest.mark.parametrize(
    "name",
    ["mild_both", "mild_between", "singletons_both", "balanced_hidden", "many_sizes", "mild_no_intercept"],
)
def test_conventions(name, variant):
    conventions = {key: rows[variant] for key, rows in VARIANTS.items() if variant < len(rows)}
    check(BY_NAME[name], tuple(conventions), conventions)


def test_no_quadratic_route_is_missing():
    assert set(COMPONENTS) == set(QUADRATIC)


def made(units=400, seed=1, psi=0.8, columns=3, sizes=9):
    rng = np.random.default_rng(seed)
    T = rng.integers(1, sizes, units)
    codes = np.repeat(np.arange(units), T)
    n = codes.size
    X = np.column_stack(
        [np.ones(n), rng.normal(size=(n, columns)) + rng.normal(size=(units, columns))[codes]]
    )
    y = X @ rng.normal(size=columns + 1) + np.sqrt(psi) * rng.normal(size=units)[codes] + rng.normal(size=n)
    return X, y, codes


@pytest.mark.parametrize("psi", [0.0, 0.05, 0.8, 30.0])
@pytest.mark.parametrize("key", ["reml", "ml"])
def test_many_units_are_certified_next_to_the_optimum_without_a_search(psi, key, monkeypatch):
    X, y, codes = made(units=2500, psi=psi, seed=4)
    curve, products = taken(X, y, codes)
    searched = []
    original = deletion_likelihood.optima
    monkeypatch.setattr(deletion_likelihood, "optima", lambda d: searched.append(d.m.size) or original(d))
    found = leave_one_out(curve, products, (key,), key)
    assert found.refits[key].certified.all()
    assert not found.refits[key].exact.any()
    # units far from the others and, for a ratio next to zero, those that move it to zero are searched for
    assert sum(searched) <= (0.2 if psi > 0.05 or found.fits[key].ratio == 0.0 else 1.0) * products.units
    shares = leverages(X, codes)
    for i in range(0, 2500, 125):
        fits = rows_fit(
            X[codes != i], y[codes != i], codes[codes != i], None, given_routes(curve, (key,), None)
        )
        agrees(found.refits[key], i, fits[key], CLOSE / (1.0 - shares[i]), np.zeros(4))


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("kind", ["reml", "ml"])
def test_what_the_bounds_exclude_is_not_there(seed, kind):
    """Where a deletion is certified cheaply, D' has the signs claimed on a finer grid."""
    X, y, codes = made(units=250, seed=seed, psi=[0.0, 0.3, 2.0][seed % 3], sizes=[3, 12][seed % 2])
    curve, products = taken(X, y, codes)
    optimum = fit_route(curve, kind, {}, NO_ORDER).ratio
    axes = unit_axes(curve, products, optimum)
    near = neighbourhood(axes, kind, optimum)
    if near is None:
        pytest.skip("more than one stationary point, or hardly one")
    batch, own = deletions(axes, slice(None))
    m = batch.rows - (curve.rank if kind == "reml" else 0)
    found = leave_one_out(curve, products, (kind, "within", "nerlove"), kind)
    residual = np.array([found.refits["within"].idiosyncratic_variance]).ravel() / axes.worth
    residual = residual * (batch.rows - batch.units - curve.rank_within)
    nerlove = found.refits["nerlove"].unit_variance_raw / axes.worth * (batch.units - 1.0)
    shown = near.excludes(batch, own, m, residual, nerlove)
    assert shown.any()
    ratios = np.concatenate([[0.0], np.logspace(-5, 4, 400)])
    slopes = np.array([evaluate(batch, kind, np.array([psi]), m).slope for psi in ratios])
    bends = np.array([evaluate(batch, kind, np.array([psi]), m).bend for psi in ratios])
    assert (slopes[ratios <= near.a][:, shown] < 0.0).all() or near.a == 0.0
    assert (slopes[ratios >= near.b][:, shown] > 0.0).all()
    inside = (ratios >= near.a) & (ratios <= near.b)
    if near.plain:
        assert (bends[inside][:, shown] > 0.0).all()


def test_second_derivative_of_g_is_above_that_of_all_units():
    """The bound that the interlacing of eigenvalues gives."""
    curve, products = taken(*made(units=40, seed=9))
    axes = unit_axes(curve, products, 1.0)
    whole = Batch(
        axes, axes.within[:, None], axes.between, curve.counts[:, None], None, np.zeros(0, dtype=int)
    )
    batch, _ = deletions(axes, slice(None))
    for kind in ("reml", "ml"):
        for psi in (0.0, 0.2, 3.0, 100.0):
            at = np.array([psi])
            assert (
                evaluate(batch, kind, at, batch.rows).g2 >= evaluate(whole, kind, at, whole.rows).g2[0]
            ).all()


def test_one_minimum_among_two_is_the_lower_one_after_each_deletion():
    for panel in PANELS:
        if "two_minima" in panel.tags:
            curve, products = of(panel)
            routes = given_routes(curve, ("reml", "ml"), None)
            _, centre = centre_of(curve, products, fits_of(curve, routes), routes, "reml")
            lost = [kind for kind in ("reml", "ml") if f"{kind}_two" in panel.tags]
            assert all(centre.near[kind] is None for kind in lost)  # searched in full


def test_a_duplicated_unit_is_left_out_to_the_original_data():
    X, y, codes = made(units=15, seed=2)
    again = codes == 7
    twice = np.concatenate([codes, np.full(again.sum(), 15)])
    curve, products = taken(np.vstack([X, X[again]]), np.concatenate([y, y[again]]), twice)
    found = leave_one_out(curve, products)
    original = fits_of(curve_of(Moments.from_arrays(X, y, codes)), given_routes(curve, DELETED_ROUTES, None))
    for key, fit in original.items():
        for at in (7, 15):
            agrees(found.refits[key], at, fit, CLOSE, np.zeros(4))


@pytest.mark.parametrize("factor", [1e3, 1e6])
def test_a_unit_that_dominates_is_left_out_without_loss(factor):
    X, y, codes = made(units=30, seed=5, columns=2)
    big = codes == np.bincount(codes).argmax()
    X[big, 1:] *= factor
    y[big] *= factor
    curve, products = taken(X, y, codes)
    at = int(codes[big][0])
    found = leave_one_out(curve, products)
    fits = rows_fit(X[~big], y[~big], codes[~big], None, given_routes(curve, DELETED_ROUTES, None))
    for key, fit in fits.items():
        assert found.refits[key].exact[at]
        # what is stored of the others is rounded next to the big unit, at 1e-16 of the scale of the columns
        agrees(found.refits[key], at, fit, max(CLOSE, 1e-14 * factor), np.zeros(3))
    assert any("fitted anew" in note for note in found.notes)


def test_a_column_that_goes_with_its_unit():
    X, y, codes = made(units=12, seed=6, columns=2)
    own = (codes == 3).astype(float)
    curve, products = taken(np.column_stack([X, own]), y, codes, ["Intercept", "x", "w", "own"])
    found = leave_one_out(curve, products, ("reml", "pooled"))
    for key in ("reml", "pooled"):
        assert "own = 0" in found.refits[key].status[3]
        assert np.isnan(found.refits[key].coefficients[3]).all()
        assert (found.refits[key].status[np.arange(12) != 3] == "fitted").all()
    table = found.jackknife()
    assert table["standard_error"].isna().all()
    assert (table["reason"] == "1 deletion(s) leave no estimate").all()
    assert found.deciding()["unit"].iloc[0] == 3


@pytest.mark.parametrize("name", ["mild_both", "mild_between", "many_sizes", "balanced_both"])
def test_jackknife_at_a_fixed_ratio_is_cr3(name):
    curve, products = of(BY_NAME[name])
    found = leave_one_out(curve, products, ("pooled", "within", "between"), "pooled")
    for key in ("pooled", "within", "between"):
        expected = robust_covariance(curve, products, found.fits[key], kind="CR3").covariance_array
        got = found.jackknife_covariance(key, multiplier="none").to_numpy()[: curve.rank, : curve.rank]
        live = np.isfinite(np.diag(expected))
        length = np.sqrt(np.diag(expected))[live]
        # leverages of up to 0.9 in these panels: a dozen roundings times 1/(1 - h)^2
        assert (np.abs(got - expected)[np.ix_(live, live)] <= 1e-11 * np.outer(length, length)).all()
        assert np.isnan(np.diag(got)[~live]).all()
        errors = found.jackknife(key)["standard_error"].to_numpy()[: curve.rank][live]
        units = products.units
        np.testing.assert_allclose(errors, length * np.sqrt((units - 1) / units), rtol=1e-11)


def test_jackknife_by_its_definition():
    X, y, codes = made(units=14, seed=8, columns=2)
    curve, products = taken(X, y, codes)
    found = leave_one_out(curve, products, ("reml", "swamy_arora"))
    for key in ("reml", "swamy_arora"):
        routes = given_routes(curve, (key,), None)
        fits = [
            rows_fit(X[codes != i], y[codes != i], codes[codes != i], None, routes)[key] for i in range(14)
        ]
        values = np.array([[*fit.beta, fit.ratio] for fit in fits])
        whole = found.fits[key]
        moved = values - np.append(whole.beta, whole.ratio)
        table = found.jackknife(key)
        assert table["quantity"].tolist() == [*curve.names, "ratio"]
        # differences of estimates: their rounding, 1e-9, next to what they are
        np.testing.assert_allclose(
            table["standard_error"], np.sqrt(13 / 14 * (moved**2).sum(axis=0)), rtol=1e-8
        )
        np.testing.assert_allclose(table["bias"], 13 * moved.mean(axis=0), rtol=1e-7, atol=1e-9)
        influence = found.influence(key)
        errors = found.fits["reml"].standard_errors.to_numpy()
        np.testing.assert_allclose(influence.to_numpy(), moved[:, :-1] / errors, atol=1e-9)


@pytest.mark.parametrize("name", ["mild_both", "singletons_between", "negative_mild", "huge_unit"])
def test_classes_are_those_of_the_ledger(name):
    panel = BY_NAME[name]
    curve, products = of(panel)
    found = leave_one_out(curve, products, names=True)
    codes = coded(panel)
    routes = given_routes(curve, DELETED_ROUTES, None)
    for i in range(products.units):
        keep = codes != i
        left = curve_of(
            Moments.from_arrays(
                panel.X[keep], panel.y[keep], np.unique(codes[keep], return_inverse=True)[1], panel.names
            )
        )
        fits = {key: fit_route(left, key, {}, NO_ORDER) for key in routes}
        intervals = {}
        for key, fit in fits.items():
            errors = fit.standard_errors.to_numpy()
            half = found.multipliers[key] * errors
            intervals[key] = {
                term: Interval(fit.beta[j], errors[j], fit.beta[j] - half[j], fit.beta[j] + half[j])
                for j, term in enumerate(curve.names)
            }
        table = ledger(left, fits, intervals, "reml", Thresholds())
        for key in routes:
            here = table[table["route"] == key].set_index("term")["verdict"]
            if key == "reml" or key in REFERENCE_ROUTES:
                continue
            assert found.classes(key).iloc[i].to_dict() == here.to_dict()
            assert set(here) <= set(CLASSES)


def outlier(seed=3):
    """Return a panel in which one unit makes a slope differ from zero, and a ratio above zero."""
    rng = np.random.default_rng(seed)
    codes = np.repeat(np.arange(20), 4)
    x = rng.normal(size=80) + rng.normal(size=20)[codes]
    y = rng.normal(size=80) + 1.2 * rng.normal(size=20)[codes]
    x[codes == 11] += 12.0
    y[codes == 11] += 9.0
    return np.column_stack([np.ones(80), x]), y, codes


def test_the_unit_that_decides_is_named_first():
    X, y, codes = outlier()
    curve, products = taken(X, y, codes, ["Intercept", "slope"])
    found = leave_one_out(curve, products)
    table = found.deciding()
    assert table["unit"].iloc[0] == 11
    here = table[(table["unit"] == 11) & (table["conclusion"] == "interval against zero")]
    row = here[here["term"] == "slope"].iloc[0]
    assert (row["with_all_units"], row["without_the_unit"]) == ("above zero", "holding zero")
    rest = rows_fit(
        X[codes != 11], y[codes != 11], codes[codes != 11], None, given_routes(curve, ("reml",), None)
    )["reml"]
    whole = found.fits["reml"]
    expected = (rest.beta[1] - whole.beta[1]) / whole.standard_errors.iloc[1]
    assert row["influence"] == pytest.approx(expected, rel=1e-9)
    others = leave_one_out(curve, products, multipliers={"reml": 50.0}).deciding()
    assert not (others["conclusion"] == "interval against zero").any()  # no interval is away from zero then


def test_without_names_nothing_tells_a_unit():
    X, y, codes = outlier()
    names = pd.Index([f"clinic {i}" for i in range(20)])
    products = UnitProducts.from_arrays(X, y, codes)
    products = UnitProducts(**{**{f: getattr(products, f) for f in products.__slots__}, "keys": names})
    curve = curve_of(Moments.from_arrays(X, y, codes))
    named = leave_one_out(curve, products)
    found = leave_one_out(curve, products, names=False)
    assert found.units.tolist() == [f"unit {i}" for i in range(1, 21)]
    assert found.sizes is None
    texts = [found.deciding().to_string(), found.influence().to_string(), str(found.notes), repr(found.units)]
    assert not any("clinic" in text for text in texts)
    assert "clinic 11" in named.deciding().to_string()
    sizes = np.abs(found.influence().to_numpy()).max(axis=1)
    assert (np.diff(sizes) <= 0.0).all()
    order = np.argsort(-np.abs(named.influence().to_numpy()).max(axis=1), kind="stable")
    np.testing.assert_array_equal(found.influence().to_numpy(), named.influence().to_numpy()[order])
    assert found.jackknife()["standard_error"].tolist() == pytest.approx(
        named.jackknife()["standard_error"].tolist(), rel=1e-13
    )  # the same terms in another order


def test_without_names_reasons_hold_no_numbers_of_rows():
    curve, products = of(BY_NAME["two_units"])
    named, found = leave_one_out(curve, products), leave_one_out(curve, products, names=False)
    before = [str(status) for refits in named.refits.values() for status in refits.status]
    assert any(c.isdigit() for c in "".join(before))
    for refits in found.refits.values():
        assert not any(any(c.isdigit() for c in str(s)) for s in refits.status)


def test_progress_ends_with_all_units():
    curve, products = taken(*made(units=1500, seed=3))
    seen = []
    leave_one_out(
        curve, products, ("pooled",), "pooled", progress=lambda done, total: seen.append((done, total))
    )
    assert seen[-1] == (1500, 1500)
    assert len(seen) > 1
    assert seen == sorted(seen)


def test_units_beyond_the_limit_of_own_fits_say_so():
    curve, products = of(BY_NAME["mild_periods"])
    found = leave_one_out(curve, products, ("reml",), own_fits=2)
    status = found.refits["reml"].status
    assert sum(str(s).startswith("not fitted") for s in status) == found.refits["reml"].exact.sum() - 2
    assert any("raise own_fits" in note for note in found.notes)


@pytest.mark.parametrize("name", ["mild_both", "singletons_between", "offset_both_1e9", "ill_between"])
def test_pairs_against_the_rows_left(name):
    panel = BY_NAME[name]
    curve, products = of(panel)
    codes = coded(panel)
    found = leave_two_out(curve, products, [1, 4, 5])
    assert list(found.without) == ["1 + 4", "1 + 5", "4 + 5"]
    routes = given_routes(curve, DELETED_ROUTES, None)
    for i, j in ((1, 4), (1, 5), (4, 5)):
        keep = (codes != i) & (codes != j)
        fits = rows_fit(panel.X[keep], panel.y[keep], codes[keep], panel.names, routes)
        got = found.without[f"{i} + {j}"]
        for key, fit in fits.items():
            assert got[key].status == fit.status
            if fit.estimated and np.isfinite(fit.scale):
                error = fit.standard_errors.to_numpy()
                gap = np.abs(got[key].beta - fit.beta) - 4e-16 * (np.abs(fit.beta) + np.abs(panel.y).max())
                assert (gap[np.isfinite(gap)] <= 1e-8 * error[np.isfinite(gap)]).all()  # leverages up to 0.9
    table = found.table()
    row = table[(table["route"] == "reml") & (table["left_out"] == "1 + 4")].iloc[0]
    assert row["moved"] == row["estimate"] - found.fits["reml"].beta[0]


def blocks_of(panel, codes, periods, size=7):
    def blocks():
        for start in range(0, len(codes), size):
            part = slice(start, start + size)
            yield codes[part], panel.X[part], panel.y[part], periods[part]

    return blocks


@pytest.mark.parametrize("name", ["mild_both", "shuffled_gaps", "balanced_both"])
def test_periods_against_the_rows_left(name):
    panel = BY_NAME[name]
    curve, products = of(panel)
    codes = coded(panel)
    labels, periods = np.unique(panel.periods, return_inverse=True)
    keys = pd.RangeIndex(products.units)
    found = leave_one_period_out(curve, blocks_of(panel, codes, periods), keys, labels.tolist())
    routes = given_routes(curve, DELETED_ROUTES, None)
    for at, label in enumerate(labels):
        keep = periods != at
        fits = rows_fit(panel.X[keep], panel.y[keep], codes[keep], panel.names, routes)
        for key, fit in fits.items():
            got = found.without[str(label)][key]
            assert got.status == fit.status
            # the same code on the same rows, summed in other blocks: a few roundings
            np.testing.assert_allclose(got.beta, fit.beta, rtol=1e-11)


def test_a_period_goes_with_its_indicator():
    panel = BY_NAME["balanced_periods"]
    curve, products = of(panel)
    labels, periods = np.unique(panel.periods, return_inverse=True)
    keys = pd.RangeIndex(products.units)
    found = leave_one_period_out(
        curve, blocks_of(panel, coded(panel), periods), keys, labels.tolist(), routes=("reml",)
    )
    assert "period_2 = 0" in found.without["2"]
    table = found.table()
    gone = table[table["left_out"] == "2"]
    assert gone["estimate"].isna().all()
    assert gone["status"].str.contains("collinear").all()
    with pytest.raises(OptionError, match="61 periods"):
        leave_one_period_out(curve, blocks_of(panel, coded(panel), periods), keys, range(61))


@pytest.mark.parametrize("panel", PANELS[::5], ids=lambda panel: panel.name)
def test_moments_of_products_are_those_of_the_rows(panel):
    codes, (curve, products) = coded(panel), of(panel)
    rng = np.random.default_rng(0)
    times = rng.integers(0, 3, products.units)
    times[:3] = [1, 2, 1]
    rows = np.concatenate(
        [np.flatnonzero(codes == i) for i in range(products.units) for _ in range(times[i])]
    )
    repeated = np.repeat(np.arange(times.sum()), np.repeat(products.sizes, times))
    routes = given_routes(curve, DELETED_ROUTES, None)
    expected = rows_fit(panel.X[rows], panel.y[rows], repeated, panel.names, routes)
    if isinstance(expected, str):
        with pytest.raises(MixbridgeError):
            curve_of(moments_of(products, times))
        return
    left = curve_of(moments_of(products, times))
    assert (left.n, left.units, left.rank_within, left.rank_between) == (
        rows.size,
        times.sum(),
        expected["pooled"].rank - (left.rank - left.rank_within),
        left.between_span.rank,
    )
    for key, fit in expected.items():
        got = fit_route(left, named_route(key)[0], routes[key], NO_ORDER)
        assert got.status == fit.status
        if fit.estimated and np.isfinite(fit.scale):
            # ill panels lose two digits more; a draw that fits exactly has no standard error to measure by
            gap = np.abs(got.beta - fit.beta) - 1e-14 * (np.abs(fit.beta) + np.abs(panel.y).max())
            error = fit.standard_errors.to_numpy()
            assert (gap[np.isfinite(gap)] <= 1e-8 * error[np.isfinite(gap)]).all()


def test_refusals():
    curve, products = of(BY_NAME["mild_both"])
    with pytest.raises(OptionError, match="first_difference"):
        leave_one_out(curve, products, ("first_difference",))
    with pytest.raises(OptionError, match="rmel"):
        leave_one_out(curve, products, ("reml",), "rmel")
    with pytest.raises(OptionError, match="covariance"):
        leave_one_out(curve, products, ("reml",), conventions={"reml": {"covariance": "CR1"}})
    with pytest.raises(OptionError, match="conventions for route"):
        leave_one_out(curve, products, ("reml",), conventions={"ml": {}})
    with pytest.raises(OptionError, match="multipliers"):
        leave_one_out(curve, products, ("reml",), multipliers={"reml": [1.0, 2.0]})
    with pytest.raises(DataError, match="not of the same rows"):
        leave_one_out(curve, of(BY_NAME["mild_between"])[1], ("reml",))
    single, alone = of(BY_NAME["singletons_both"])
    with pytest.raises(OptionError, match="one-row units"):
        leave_one_out(single, alone, ("reml",), conventions={"reml": {"one_row_units": "dropped"}})
    X, y, codes = made(units=1, sizes=40, columns=1)
    with pytest.raises(IdentificationError, match="one unit"):
        leave_one_out(*taken(X, y, codes))
    with pytest.raises(OptionError, match="no such unit"):
        leave_two_out(curve, products, [1, 99])
    with pytest.raises(OptionError, match="different ones"):
        leave_two_out(curve, products, [1])
    found = leave_one_out(curve, products, ("reml", "ml", "pooled"))
    with pytest.raises(OptionError, match="compare"):
        found.classes("pooled")
    with pytest.raises(OptionError, match="multiplier"):
        found.jackknife(multiplier="n")
