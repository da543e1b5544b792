"""Units drawn with replacement, and residuals of units multiplied by signs, against plain work on the rows."""

import itertools

import numpy as np
import pytest
from panels import BY_NAME

from mixbridge.errors import IdentificationError, MixbridgeError, OptionError
from mixbridge.inference.robust import robust_covariance
from mixbridge.moments import Moments
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import curve_of
from mixbridge.resample.deletion import DELETED_ROUTES, NO_ORDER, given_routes
from mixbridge.resample.unit_bootstrap import multiplicities, unit_bootstrap
from mixbridge.resample.wild import WEIGHTS, unit_weights, wild_bootstrap
from mixbridge.routes import fit_route
from mixbridge.routes.fitting import named_route

# Both sides solve least squares in double precision on panels whose columns are no worse conditioned than a few
# hundred; a unit drawn several times or one that dominates costs up to two digits more.
CLOSE = 1e-9


def taken(X, y, codes, names=None):
    return curve_of(Moments.from_arrays(X, y, codes, names)), UnitProducts.from_arrays(X, y, codes, names)


def of(panel):
    return taken(panel.X, panel.y, np.unique(panel.units, return_inverse=True)[1], panel.names)


def made(units=40, seed=1, psi=0.8, columns=2, sizes=7):
    rng = np.random.default_rng(seed)
    T = rng.integers(1, sizes, units)
    codes = np.repeat(np.arange(units), T)
    n = codes.size
    X = np.column_stack(
        [np.ones(n), rng.normal(size=(n, columns)) + rng.normal(size=(units, columns))[codes]]
    )
    y = X @ rng.normal(size=columns + 1) + np.sqrt(psi) * rng.normal(size=units)[codes] + rng.normal(size=n)
    return X, y, codes


def check_draws(X, y, codes, names, replicates):
    curve, products = taken(X, y, codes, names)
    found = unit_bootstrap(curve, products, replicates=replicates, seed=5)
    routes = given_routes(curve, DELETED_ROUTES, None)
    exact = 0
    for draw in range(replicates):
        times = multiplicities(products.units, 5, draw)
        assert times.sum() == products.units
        rows = np.concatenate(
            [np.flatnonzero(codes == i) for i in range(products.units) for _ in range(times[i])]
        )
        again = np.repeat(np.arange(times.sum()), np.repeat(products.sizes, times))
        try:
            left = curve_of(Moments.from_arrays(X[rows], y[rows], again, names))
        except MixbridgeError:
            assert all(of.status[draw].startswith("not estimable") for of in found.refits.values())
            continue
        for key in DELETED_ROUTES:
            refits = found.refits[key]
            fit = fit_route(left, named_route(key)[0], routes[key], NO_ORDER)
            if refits.status[draw].startswith("not estimable with all units"):
                assert not found.fits[key].estimated
                continue
            exact += refits.exact[draw]
            assert refits.status[draw] == fit.status
            if not fit.estimated:
                continue
            error = fit.standard_errors.to_numpy()
            if np.isfinite(fit.scale):
                gap = np.abs(refits.coefficients[draw] - fit.beta) - 1e-14 * (
                    np.abs(fit.beta) + np.abs(y).max()
                )
                assert (gap[np.isfinite(gap)] <= CLOSE * error[np.isfinite(gap)]).all()
                if fit.scale > 1e-18 * y.var():  # less is rounding: few different units fit exactly
                    np.testing.assert_allclose(refits.standard_errors[draw], error, rtol=1e-8)
            if np.isfinite(fit.ratio):
                assert abs(refits.ratio[draw] - fit.ratio) <= 1e-8 * (fit.ratio + 1.0 / fit.sizes[-1])
    return found, exact


@pytest.mark.parametrize(
    "name",
    [
        "balanced_both", "mild_both", "mild_between", "mild_hidden", "mild_no_intercept", "singletons_both",
        "singletons_between", "huge_unit", "many_sizes", "mild_periods", "psi_huge_mild", "negative_mild",
        "offset_x_1e9", "two_minima_reml_zero_c", "balanced_periods_both",
    ],
)  # fmt: skip
def test_every_draw_against_the_rows_of_the_units_drawn(name):
    panel = BY_NAME[name]
    check_draws(panel.X, panel.y, np.unique(panel.units, return_inverse=True)[1], panel.names, 12)


def test_draws_of_many_units_need_no_fit_of_their_own():
    found, exact = check_draws(*made(units=60), None, 20)
    assert exact == 0
    assert all(refits.certified.all() for refits in found.refits.values())


def test_the_same_draws_for_any_number_of_workers_and_replicates():
    curve, products = taken(*made())
    one = unit_bootstrap(curve, products, ("reml", "ml"), replicates=700, seed=3)
    two = unit_bootstrap(curve, products, ("reml", "ml"), replicates=700, seed=3, workers=2)
    np.testing.assert_array_equal(one.refits["reml"].coefficients, two.refits["reml"].coefficients)
    few = unit_bootstrap(curve, products, ("reml",), replicates=40, seed=3)
    # other batches: sums of the same terms in another order
    np.testing.assert_allclose(few.refits["reml"].ratio, one.refits["reml"].ratio[:40], rtol=1e-9, atol=1e-12)
    other = unit_bootstrap(curve, products, ("reml",), replicates=40, seed=4)
    assert not np.allclose(few.refits["reml"].ratio, other.refits["reml"].ratio)


def test_tables_by_their_definition():
    curve, products = taken(*made(seed=2))
    found = unit_bootstrap(curve, products, ("reml", "pooled", "between"), replicates=450, seed=1)
    table = found.table().set_index(["route", "quantity"])
    values = found.refits["reml"].coefficients[:, 1]
    row = table.loc[("reml", "x1")]
    assert row["estimate"] == found.fits["reml"].beta[1]
    assert row["standard_error"] == pytest.approx(values.std(ddof=1), rel=1e-12)
    assert row["bias"] == pytest.approx(values.mean() - found.fits["reml"].beta[1], abs=1e-12)
    low, high = found.interval("x1", "reml", 0.9)
    rank = np.sort(values)  # (R + 1) p = 451 x 0.05 = 22.55
    assert low == pytest.approx(rank[21] + 0.55 * (rank[22] - rank[21]), rel=1e-12)
    assert high == pytest.approx(rank[428] - 0.55 * (rank[428] - rank[427]), rel=1e-12)
    gap = found.gap("x1", "pooled", "reml", 0.9)
    moved = found.refits["pooled"].coefficients[:, 1] - values
    assert gap["gap"] == found.fits["pooled"].beta[1] - found.fits["reml"].beta[1]
    assert gap["standard_error"] == pytest.approx(moved.std(ddof=1), rel=1e-12)
    assert found.statuses().set_index("route").loc["reml", "not certified"] == 0
    with pytest.raises(OptionError, match="too few"):
        found.interval("x1", "reml", 0.99)
    with pytest.raises(OptionError, match="quantity"):
        found.interval("x9", "reml")
    with pytest.raises(OptionError, match="route"):
        found.interval("x1", "ml")


def test_standard_errors_are_near_the_jackknife_ones():
    """The two agree to first order in 1/N; with 150 units and 400 draws to within a quarter (4 Monte Carlo errors)."""
    X, y, codes = made(units=150, seed=6)
    curve, products = taken(X, y, codes)
    found = unit_bootstrap(curve, products, ("pooled",), replicates=400, seed=2).table().set_index("quantity")
    robust = robust_covariance(curve, products, 0.0, kind="CR3").standard_errors
    for term in curve.names:
        assert 0.75 < found.loc[term, "standard_error"] / robust[term] < 1.25


def test_refusals_of_the_unit_bootstrap():
    curve, products = taken(*made(units=8))
    with pytest.raises(OptionError, match="replicates"):
        unit_bootstrap(curve, products, replicates=1)
    with pytest.raises(OptionError, match="seed"):
        unit_bootstrap(curve, products, replicates=9, seed=-1)
    with pytest.raises(OptionError, match="first_difference"):
        unit_bootstrap(curve, products, ("first_difference",))
    X, y, codes = made(units=1, sizes=40, columns=1)
    with pytest.raises(IdentificationError, match="one unit"):
        unit_bootstrap(*taken(X, y, codes), replicates=9)


def transformed(X, y, codes, point):
    """Return the rows of the regression behind a route and the unit of each, by its definition."""
    z = (codes[:, None] == np.unique(codes)).astype(float)
    size = z.sum(axis=0)
    both = np.column_stack([X, y])
    means = z.T @ both / size[:, None]
    if point == "between":
        return np.sqrt(size)[:, None] * means, np.unique(codes)
    share = np.ones(size.size) if np.isinf(point) else 1.0 - 1.0 / np.sqrt(1.0 + size * point)
    return both - z @ (share[:, None] * means), codes


def plain(rows, units, a, value, weights, restricted):
    """Return observed and replicated statistics, row by row: one regression for each vector of weights."""
    x, y = rows[:, :-1], rows[:, -1]
    labels = np.unique(units)
    factor = len(labels) / (len(labels) - 1.0)
    bread = np.linalg.pinv(x.T @ x, rcond=1e-10)

    def statistic(outcome, centre):
        beta = bread @ (x.T @ outcome)
        left = outcome - x @ beta
        meat = sum(np.outer(s, s) for s in (x[units == i].T @ left[units == i] for i in labels))
        return (a @ beta - centre) / np.sqrt(factor * (a @ bread @ meat @ bread @ a))

    beta = bread @ (x.T @ y)
    start, centre = beta, a @ beta
    if restricted:
        start, centre = beta - bread @ a * (a @ beta - value) / (a @ bread @ a), value
    left = y - x @ start
    place = np.searchsorted(labels, units)
    replicated = [statistic(x @ start + v[place] * left, centre) for v in weights]
    return statistic(y, value), np.array(replicated)


@pytest.mark.parametrize("restricted", [True, False])
@pytest.mark.parametrize("kind", ["rademacher", "webb"])
@pytest.mark.parametrize("point", [0.0, 0.7, 40.0, np.inf, "between"])
@pytest.mark.parametrize("name", ["made", "mild_both", "many_sizes", "singletons_both"])
def test_wild_statistics_against_the_rows(name, point, kind, restricted):
    if name == "made":
        X, y, codes = made(units=17, seed=7)
        names = ["x0", "x1", "x2"]
    else:
        panel = BY_NAME[name]
        X, y, codes, names = panel.X, panel.y, np.unique(panel.units, return_inverse=True)[1], panel.names
    curve, products = taken(X, y, codes, names)
    term = names[1]
    found = wild_bootstrap(
        curve, products, point, term, value=0.4, replicates=60, seed=9, weights=kind, restricted=restricted
    )
    weights = unit_weights(kind, products.units, 0, 60, seed=9, listed=False)
    rows, units = transformed(X, y, codes, point)
    observed, expected = plain(rows, units, np.eye(X.shape[1])[1], 0.4, weights, restricted)
    assert found.statistic == pytest.approx(observed, rel=CLOSE)
    # a statistic whose variance is a small part of the squares it is taken from loses digits: no more than three here
    np.testing.assert_allclose(found.statistics, expected, rtol=1e-8, atol=1e-9)
    count = (np.abs(expected) >= abs(observed)).sum()
    assert found.p_value == pytest.approx((1 + count) / 61, rel=1e-12)


def test_a_combination_and_a_fit_as_the_point():
    X, y, codes = made(units=16, seed=3)
    curve, products = taken(X, y, codes)
    fit = fit_route(curve, "reml", {}, NO_ORDER)
    found = wild_bootstrap(curve, products, fit, {"x1": 1.0, "x2": -2.0}, value=0.3, replicates=50, seed=1)
    weights = unit_weights("rademacher", 16, 0, 50, seed=1, listed=False)
    rows, units = transformed(X, y, codes, fit.ratio)
    observed, expected = plain(rows, units, np.array([0.0, 1.0, -2.0]), 0.3, weights, True)
    assert found.hypothesis == "1 x1 + -2 x2"
    assert found.estimate == pytest.approx(fit.beta[1] - 2.0 * fit.beta[2], rel=1e-12)
    assert found.statistic == pytest.approx(observed, rel=CLOSE)
    np.testing.assert_allclose(found.statistics, expected, rtol=1e-8, atol=1e-9)
    assert "the variance ratio counts as known" in found.notes


@pytest.mark.parametrize("point", [0.0, 1.5, np.inf, "between"])
def test_standard_error_is_cr1(point):
    curve, products = taken(*made(units=20, seed=5))
    found = wild_bootstrap(curve, products, point, "x2", replicates=20)
    expected = robust_covariance(curve, products, point, kind="CR1").standard_errors["x2"]
    assert found.standard_error == pytest.approx(expected, rel=1e-11)
    other = wild_bootstrap(curve, products, point, "x2", replicates=20, multiplier="units_and_rows")
    assert other.p_value == found.p_value  # one factor for all statistics


def test_all_weights_are_listed_when_they_fit():
    curve, products = taken(*made(units=7, seed=2))
    found = wild_bootstrap(curve, products, 0.5, "x1", value=0.2, replicates=128)
    assert found.listed
    assert found.replicates == 128
    assert found.weights == "rademacher"
    weights = unit_weights("rademacher", 7, 0, 128, seed=0, listed=True)
    assert sorted(map(tuple, weights)) == sorted(itertools.product([-1.0, 1.0], repeat=7))
    at = np.flatnonzero((weights == 1.0).all(axis=1))[0]
    assert found.statistics[at] == pytest.approx(found.statistic, rel=CLOSE)
    np.testing.assert_allclose(
        found.statistics[::-1], -found.statistics, rtol=1e-9, atol=1e-12
    )  # all signs exchanged
    assert found.p_value == (np.abs(found.statistics) >= abs(found.statistic) * (1 - 1e-9)).mean()
    assert found.p_value >= 2 / 128
    again = wild_bootstrap(curve, products, 0.5, "x1", value=0.2, replicates=5000, seed=77)
    assert again.p_value == found.p_value  # nothing is random
    drawn = wild_bootstrap(curve, products, 0.5, "x1", value=0.2, replicates=127)
    assert not drawn.listed
    assert drawn.weights == "webb"  # few units
    six = wild_bootstrap(curve, products, 0.5, "x1", value=0.2, replicates=300_000, weights="webb")
    assert six.listed
    assert six.replicates == 6**7


def test_weights_have_mean_zero_and_variance_one():
    for values in WEIGHTS.values():
        assert values.mean() == pytest.approx(0.0, abs=1e-16)
        assert (values**2).mean() == pytest.approx(1.0, rel=1e-15)
    drawn = unit_weights("webb", 500, 0, 400, seed=3, listed=False)
    shares = np.array([(drawn == value).mean() for value in WEIGHTS["webb"]])
    # 200,000 draws: standard error of a share sqrt(1/6 x 5/6 / 200000) = 0.00083, five of them
    assert np.abs(shares - 1 / 6).max() < 5 * 0.00083


def test_replicates_do_not_depend_on_workers_or_on_how_many_there_are():
    curve, products = taken(*made())
    one = wild_bootstrap(curve, products, 1.0, "x1", replicates=333, seed=8)
    two = wild_bootstrap(curve, products, 1.0, "x1", replicates=333, seed=8, workers=2)
    np.testing.assert_array_equal(one.statistics, two.statistics)
    more = wild_bootstrap(curve, products, 1.0, "x1", replicates=500, seed=8)
    np.testing.assert_allclose(more.statistics[:333], one.statistics, rtol=1e-12)


def test_the_interval_holds_what_the_test_does_not_reject():
    curve, products = taken(*made(units=25, seed=4))
    found = wild_bootstrap(curve, products, 0.8, "x1", replicates=999, seed=6)
    low, high = found.interval(0.9)
    assert low < found.estimate < high
    width = high - low
    for value, inside in (
        (low + 1e-6 * width, True),
        (low - 1e-6 * width, False),
        (high - 1e-6 * width, True),
    ):
        p = wild_bootstrap(curve, products, 0.8, "x1", value=value, replicates=999, seed=6).p_value
        assert (p > 0.1) == inside
    free = wild_bootstrap(curve, products, 0.8, "x1", replicates=999, seed=6, restricted=False)
    half = free.critical_value(0.1) * free.standard_error
    assert free.interval(0.9) == (free.estimate - half, free.estimate + half)
    sizes = np.sort(np.abs(free.statistics))
    assert free.critical_value(0.1) == pytest.approx(sizes[899], rel=1e-12)  # 0.9 x 1000 = the 900th


def test_too_few_replicates_or_units_for_a_level():
    curve, products = taken(*made(units=25, seed=4))
    found = wild_bootstrap(curve, products, 0.8, "x1", replicates=150)
    with pytest.raises(OptionError, match="need 200"):
        found.interval(0.95)
    assert np.isfinite(found.interval(0.9)).all()
    few, alike = taken(*made(units=5, seed=11))
    listed = wild_bootstrap(few, alike, 0.0, "x1", replicates=99)
    with pytest.raises(IdentificationError, match="no p-value is below"):
        listed.interval(0.95)


def test_refusals_of_the_wild_bootstrap():
    curve, products = taken(*made(units=12))
    with pytest.raises(OptionError, match="weights"):
        wild_bootstrap(curve, products, 0.0, "x1", weights="mammen")
    with pytest.raises(OptionError, match="x9"):
        wild_bootstrap(curve, products, 0.0, "x9")
    with pytest.raises(OptionError, match="not all of them zero"):
        wild_bootstrap(curve, products, 0.0, {"x1": 0.0})
    with pytest.raises(OptionError, match="value"):
        wild_bootstrap(curve, products, 0.0, "x1", value=np.nan)
    with pytest.raises(OptionError, match="replicates"):
        wild_bootstrap(curve, products, 0.0, "x1", replicates=0)
    with pytest.raises(IdentificationError, match="does not determine x0"):
        wild_bootstrap(curve, products, np.inf, "x0")
    _, y, codes = made(units=12, seed=3)
    only = codes == np.bincount(codes).argmax()
    own = np.where(only, np.arange(codes.size), 0.0)
    own[only] -= own[only].mean()
    alone = taken(np.column_stack([np.ones(codes.size), own]), y, codes)
    with pytest.raises(IdentificationError, match="CR1 variance"):
        _ = wild_bootstrap(*alone, np.inf, "x1", replicates=50).statistic


def test_the_level_is_kept_with_few_units_where_cr1_with_a_normal_reference_does_not():
    """Twelve units, effects with a variance that depends on x: rejections at 10% in 300 panels.

    The restricted bootstrap should be near 0.1: 300 panels give a standard error of 0.017, three of them are allowed.
    """
    rng = np.random.default_rng(12)
    codes = np.repeat(np.arange(12), 5)
    wild, normal = 0, 0
    for _ in range(300):
        x = rng.normal(size=12)[codes] + 0.5 * rng.normal(size=60)
        effect = (rng.normal(size=12) * (0.5 + np.abs(np.bincount(codes, x) / 5)))[codes]
        y = effect + rng.normal(size=60)
        curve, products = taken(np.column_stack([np.ones(60), x]), y, codes)
        found = wild_bootstrap(curve, products, 0.5, "x1", replicates=399, seed=1)
        wild += found.p_value <= 0.1
        normal += abs(found.statistic) > 1.6449
    assert abs(wild / 300 - 0.1) < 3 * 0.0173
    assert normal / 300 > 0.15
