"""Draws in moment space have the law of rows, and batches of fits are the fits, one by one."""

from dataclasses import replace
from functools import cache
from itertools import pairwise

import numpy as np
import pytest
from panels import BY_NAME
from scipy import stats

import mixbridge.resample.replicates as running
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.moments import Moments
from mixbridge.ratio import curve_of
from mixbridge.resample import Truth, bootstrap, replicate, truth_of, zero_tests
from mixbridge.resample.batch import STATUSES, estimate, plan
from mixbridge.resample.gaps import gap_noise
from mixbridge.resample.moment_draws import BLOCK, Draws, coordinates_of, draw, moments_of
from mixbridge.resample.optima import GRADIENT, optima
from mixbridge.resample.products import drawn_products
from mixbridge.resample.simulated import BEYOND, quantiles, share_at_least
from mixbridge.resample.spectral import SpectralDeviances, modes_of
from mixbridge.routes import LEDGER_ROUTES, fit_route, log_likelihood

EPS = np.finfo(float).eps
NO_ORDER = "rows have no order here"

PANELS = (
    "balanced_both",
    "balanced_periods_both",
    "balanced_hidden",
    "balanced_no_intercept",
    "two_units_balanced",
    "mild_one_way",
    "mild_both",
    "mild_between",
    "mild_closed",
    "mild_no_intercept",
    "mild_all_periods",
    "mild_hidden_no_intercept",
    "singletons_between",
    "singletons_no_intercept",
    "singletons_hidden",
    "huge_unit_between",
    "two_units",
    "many_sizes_periods",
    "psi_huge_mild",
    "negative_mild",
    "offset_both_1e6",
    "scale_both",
    "ill_within",
    "ill_between",
    "two_minima_reml_zero_a",
    "two_minima_both",
)
LAWS = ("balanced_both", "mild_between", "singletons_no_intercept", "many_sizes_periods", "huge_unit")


@cache
def made(name):
    panel = BY_NAME[name]
    curve = curve_of(Moments.from_arrays(panel.X, panel.y, panel.units, panel.names))
    fits = {key: fit_route(curve, key, {}, NO_ORDER) for key in LEDGER_ROUTES}
    return panel, curve, fits


def truth_near(fits, psi):
    """A model with the size of the data: coefficients and total variance of the pooled fit."""
    scale = fits["pooled"].scale / (1.0 + psi)
    return Truth(fits["pooled"].beta.copy(), psi * scale, scale)


def white_rows(panel, space):
    """X in whitened coordinates, row by row."""
    return panel.X @ space.to_beta


def unit_means(columns, units):
    sizes = np.bincount(units)
    if columns.ndim == 1:
        return np.bincount(units, columns) / sizes
    return np.column_stack([np.bincount(units, column) for column in columns.T]) / sizes[:, None]


def draws_of_rows(panel, space, e):
    """The numbers that are drawn, computed from row-level errors through bases of the column spaces."""
    x, units = white_rows(panel, space), panel.units
    sizes = np.bincount(units)
    means, ebar = unit_means(x, units), unit_means(e, units)
    inside = space.within_order
    coordinates, rest = np.zeros(space.order), np.zeros(1 + len(space.curve.sizes))
    deviations = e - ebar[units]
    basis = (x - means[units]) @ np.linalg.pinv(space.x[:inside], rcond=1e-9)  # QX = basis R_w
    coordinates[:inside] = basis.T @ deviations
    rest[0] = deviations @ deviations - coordinates[:inside] @ coordinates[:inside]
    for at, size in enumerate(space.curve.sizes):
        here, rows = sizes == size, space.block == at
        orthonormal = _basis(np.sqrt(size) * means[here], space.x[rows])
        scaled = np.sqrt(size) * ebar[here]
        coordinates[rows] = orthonormal.T @ scaled
        rest[1 + at] = scaled @ scaled - coordinates[rows] @ coordinates[rows]
    return Draws(coordinates[None], np.maximum(rest, 0.0)[None])


def _basis(means, factor):
    """Orthonormal Q with ``means = Q factor``; any completion where the factor is singular."""
    left, singular, right = np.linalg.svd(factor, full_matrices=False)
    live = singular > 1e-9 * singular.max(initial=1e-300)
    known = means @ right[live].T / singular[live]
    others = np.linalg.svd(known, full_matrices=True)[0][:, live.sum() :][:, : factor.shape[0] - live.sum()]
    dead = np.linalg.svd(left[:, live], full_matrices=True)[0][:, live.sum() :]
    return known @ left[:, live].T + others @ dead.T


def statistics_of_draws(space, draws):
    """``W_xy, W_yy`` and per size ``sum xbar ybar, sum ybar^2`` of the errors, as rows."""
    inside = space.within_order
    parts = [draws.e[:, :inside] @ space.x[:inside]]
    parts.append((draws.e[:, :inside] ** 2).sum(axis=1)[:, None] + draws.rest[:, :1])
    for at, size in enumerate(space.curve.sizes):
        rows = space.block == at
        parts.append(draws.e[:, rows] @ space.x[rows] / size)
        parts.append(((draws.e[:, rows] ** 2).sum(axis=1)[:, None] + draws.rest[:, [1 + at]]) / size)
    return np.hstack(parts)


def statistics_of_rows(panel, space, e):
    """The same from rows; e of shape (R, n)."""
    x, units = white_rows(panel, space), panel.units
    sizes = np.bincount(units)
    spread = np.zeros((len(units), len(sizes)))
    spread[np.arange(len(units)), units] = 1.0 / sizes[units]
    means, ebar = spread.T @ x, e @ spread
    deviations = e - ebar[:, units]
    parts = [deviations @ (x - means[units]), (deviations**2).sum(axis=1)[:, None]]
    for size in space.curve.sizes:
        here = sizes == size
        parts.append(ebar[:, here] @ means[here])
        parts.append((ebar[:, here] ** 2).sum(axis=1)[:, None])
    return np.hstack(parts)


@pytest.mark.parametrize("name", LAWS)
def test_row_level_normals_mapped_through_give_the_same_statistics_and_moments(name):
    panel, curve, fits = made(name)
    space, truth = coordinates_of(curve), truth_near(fits, 0.8)
    rng = np.random.default_rng(11)
    for _ in range(3):
        effect = np.sqrt(truth.unit) * rng.standard_normal(curve.units)
        e = effect[panel.units] + np.sqrt(truth.idiosyncratic) * rng.standard_normal(curve.n)
        draws = draws_of_rows(panel, space, e)
        ours, rows = statistics_of_draws(space, draws)[0], statistics_of_rows(panel, space, e[None])[0]
        # asked for: 1e-9 of the errors' length (columns of X have length one in these coordinates)
        assert np.abs(ours - rows).max() <= 1e-9 * (e @ e + np.sqrt(e @ e))
        assert np.abs(ours).max() > 1e-3 * np.sqrt(e @ e)
        # the moments of the replicate give what the rows give, route by route
        fitted = curve_of(moments_of(space, truth, draws, 0))
        from_rows = curve_of(
            Moments.from_arrays(panel.X, panel.X @ truth.coefficients + e, panel.units, panel.names)
        )
        for key in ("swamy_arora", "reml", "between"):
            one, two = (fit_route(each, key, {}, NO_ORDER) for each in (fitted, from_rows))
            assert one.status == two.status
            np.testing.assert_allclose(
                one.beta, two.beta, rtol=1e-9, atol=1e-9 * np.abs(two.beta[np.isfinite(two.beta)]).max()
            )
            assert one.ratio == pytest.approx(two.ratio, rel=1e-9, abs=1e-9, nan_ok=True)


def p_values_of_laws(names, spoil=lambda draws: draws):
    """Two-sample tests of every statistic, of their squares' sum and of projections, rows against draws."""
    p = []
    for name in names:
        panel, curve, fits = made(name)
        space, truth, count = coordinates_of(curve), truth_near(fits, 0.8), 20_000
        ours = statistics_of_draws(space, spoil(draw(space, truth, 5, 0, count)))
        rng = np.random.default_rng(17)
        effect = np.sqrt(truth.unit) * rng.standard_normal((count, curve.units))
        e = effect[:, panel.units] + np.sqrt(truth.idiosyncratic) * rng.standard_normal((count, curve.n))
        rows = statistics_of_rows(panel, space, e)
        live = rows.std(axis=0) > 1e-9 * rows.std(axis=0).max()
        ours, rows = ours[:, live], rows[:, live]
        ours, rows = (
            (ours - rows.mean(axis=0)) / rows.std(axis=0),
            (rows - rows.mean(axis=0)) / rows.std(axis=0),
        )
        # one statistic at a time, then combinations and products of pairs, which see the dependence
        turn = rng.standard_normal((ours.shape[1], 10))
        pairs = rng.integers(0, ours.shape[1], (2, 20))
        for a, b in (
            (ours, rows),
            (ours @ turn, rows @ turn),
            (ours[:, pairs[0]] * ours[:, pairs[1]], rows[:, pairs[0]] * rows[:, pairs[1]]),
        ):
            p += [stats.ks_2samp(one, two).pvalue for one, two in zip(a.T, b.T, strict=True)]
    return np.array(p)


def test_draws_have_the_joint_law_of_row_level_simulation():
    # family-wise error rate 0.1 % over all designs and statistics (Bonferroni, valid under dependence); seeds are fixed
    p = p_values_of_laws(LAWS)
    assert p.size > 100
    assert p.min() > 0.001 / p.size


@pytest.mark.parametrize("fault", ["variance", "degrees", "dependence"])
def test_the_comparison_of_laws_sees_faults(fault):
    def spoil(draws):
        e, rest = draws.e.copy(), draws.rest.copy()
        if fault == "variance":
            e *= 1.05
        elif fault == "degrees":
            rest *= 1.1
        else:
            e = np.sort(e, axis=1)
        return Draws(e, rest)

    p = p_values_of_laws(("many_sizes_periods",), spoil)
    assert p.min() < 0.001 / p.size


@pytest.mark.parametrize("by", ["spectrum", "products"])
@pytest.mark.parametrize("name", PANELS)
def test_batched_fits_are_the_fits_of_the_rebuilt_moments(name, by):
    """Every route, component, ratio, coefficient and standard error, on draws with and without a unit effect."""
    _, curve, fits = made(name)
    space = coordinates_of(curve)
    compared = 0
    for psi in (0.0, 0.7):
        truth = truth_near(fits, psi)
        prepared = plan(space, fits, psi, spectral=10**9 if by == "spectrum" else -1)
        draws = draw(space, truth, 3, 0, 8)
        found = estimate(prepared, draws)
        for i in range(8):
            rebuilt = curve_of(moments_of(space, truth, draws, i))
            for key, here in found.items():
                fit = fit_route(rebuilt, key, {}, NO_ORDER)
                assert STATUSES[here.status[i]] == fit.status, key
                assert here.certified[i]
                _same_numbers(here, truth, i, fit)
                compared += 1
    assert compared >= 16 * 9


def _same_numbers(here, truth, i, fit):
    beta, error = here.coefficients[i] + truth.coefficients, np.sqrt(fit.scale * (fit.root**2).sum(axis=1))
    known = np.isfinite(fit.beta)
    assert (np.isfinite(beta) == known).all()
    # 1e-9 of a standard error, and the rounding of the rebuilt outcome that carries the coefficients and their level
    size = np.abs(truth.coefficients).max() if np.isfinite(fit.beta).any() else 0.0
    unit = error if fit.scale > 0 else np.abs(fit.beta)
    assert (
        np.abs(beta - fit.beta)[known] <= (1e-9 * unit + 16 * EPS * (np.abs(fit.beta) + size))[known]
    ).all()
    if fit.scale > 0 and known.any():
        np.testing.assert_allclose(here.standard_errors[i][known], error[known], rtol=1e-9)
    whole = fit.idiosyncratic_variance + abs(np.nan_to_num(fit.unit_variance_raw))
    for name in ("unit_variance_raw", "idiosyncratic_variance"):
        one, two = getattr(here, name)[i], getattr(fit, name)
        assert (np.isnan(one) and np.isnan(two)) or abs(one - two) <= 1e-9 * abs(whole)
    assert here.ratio[i] == pytest.approx(fit.ratio, rel=1e-9, abs=1e-12, nan_ok=True)
    assert (here.ratio[i] == 0.0) == (fit.ratio == 0.0)


@pytest.mark.parametrize(
    ("key", "given"),
    [
        ("swamy_arora", {"between": "harmonic"}),
        ("swamy_arora", {"between": "unweighted", "scale": "gls_residuals"}),
        ("reml", {"scale": "gls_residuals_n"}),
        ("wallace_hussain", {"expectation": "short"}),
        ("nerlove", {"divisor": "units"}),
        ("between", {"between": "unweighted", "count": "columns"}),
        ("within", {"count": "columns"}),
        ("minque", {"prior": 3.5}),
    ],
)
def test_conventions_are_those_of_the_fit(key, given):
    _, curve, fits = made("singletons_hidden")
    space, truth = coordinates_of(curve), truth_near(fits, 0.7)
    chosen = {"it": fit_route(curve, key, given, NO_ORDER)}
    draws = draw(space, truth, 4, 0, 5)
    found = estimate(plan(space, chosen, 0.7), draws)["it"]
    for i in range(5):
        _same_numbers(
            found, truth, i, fit_route(curve_of(moments_of(space, truth, draws, i)), key, given, NO_ORDER)
        )


def test_what_cannot_be_refitted_is_left_out_with_its_reason():
    panel, curve, _ = made("singletons_between")
    trimmed = curve_of(curve.moments.without_one_row_units())
    fits = {
        "reml": fit_route(curve, "reml", {}, NO_ORDER),
        "first_difference": fit_route(curve, "first_difference", {}, NO_ORDER),
        "trimmed": fit_route(trimmed, "ml", {"one_row_units": "dropped"}, NO_ORDER),
    }
    found = bootstrap(curve, fits, replicates=400)
    assert set(found.left_out) == {"first_difference", "trimmed"}
    assert "order of rows" in found.left_out["first_difference"]
    with pytest.raises(IdentificationError, match="order of rows"):
        found.interval(panel.names[0], "first_difference")
    with pytest.raises(IdentificationError, match="one-row units"):
        found.gap_noise(panel.names[0], "reml", "trimmed")


def test_routes_without_a_fit_are_left_out_with_its_status():
    rng = np.random.default_rng(3)
    x = np.column_stack([np.ones(9), rng.standard_normal(9)])
    curve = curve_of(Moments.from_arrays(x, rng.standard_normal(9), np.arange(9)))
    fits = {key: fit_route(curve, key, {}, NO_ORDER) for key in ("pooled", "within", "reml")}
    found = bootstrap(curve, fits, "pooled", replicates=400)
    assert found.left_out["reml"] == "likelihood flat"
    assert found.left_out["within"].startswith("not estimable")
    with pytest.raises(IdentificationError, match="likelihood flat"):
        truth_of(fits["reml"])


@pytest.mark.parametrize("workers", [2, 3, 7])
def test_results_are_the_same_to_the_bit_for_any_number_of_workers(workers):
    _, curve, fits = made("mild_between")
    truth = truth_of(fits["reml"])
    one = replicate(curve, fits, truth, 950, 9, workers=1, batch=100)
    two = replicate(curve, fits, truth, 950, 9, workers=workers, batch=100)
    for key, found in one.routes.items():
        for name in found.__slots__:
            np.testing.assert_array_equal(getattr(found, name), getattr(two.routes[key], name))


def test_results_depend_on_batches_by_rounding_only_and_more_replicates_begin_with_the_same():
    _, curve, fits = made("mild_between")
    truth = truth_of(fits["reml"])
    large = replicate(curve, fits, truth, 1_000, 9, batch=1_000)
    small = replicate(curve, fits, truth, 1_000, 9, batch=1)
    fewer = replicate(curve, fits, truth, 330, 9)
    other = replicate(curve, fits, truth, 330, 10)
    for key in ("swamy_arora", "reml", "between"):
        b = large.routes[key].coefficients
        np.testing.assert_allclose(small.routes[key].coefficients, b, rtol=1e-11, atol=1e-11)
        np.testing.assert_allclose(fewer.routes[key].coefficients, b[:330], rtol=1e-11, atol=1e-11)
        assert np.abs(other.routes[key].coefficients - b[:330]).min() > 1e-9


def test_blocks_have_streams_of_their_own():
    _, curve, fits = made("mild_both")
    space, truth = coordinates_of(curve), truth_near(fits, 0.5)
    whole = draw(space, truth, 1, 0, 3 * BLOCK)
    last = draw(space, truth, 1, 2 * BLOCK, 3 * BLOCK)
    np.testing.assert_array_equal(whole.e[2 * BLOCK :], last.e)
    np.testing.assert_array_equal(whole.rest[2 * BLOCK :], last.rest)
    assert np.abs(np.corrcoef(whole.e[:BLOCK].ravel(), last.e.ravel())[0, 1]) < 5 / np.sqrt(
        last.e.size
    )  # 5 sd of no correlation


def test_optima_are_certified_by_a_gradient_and_are_global():
    _, curve, fits = made("two_minima_both")
    space, truth = coordinates_of(curve), truth_of(fits["reml"])
    draws = draw(space, truth, 2, 0, 3_000)
    modes = modes_of(space)
    deviances = SpectralDeviances(modes, "reml", modes.squares(draws), draws.rest[:, 0], truth.ratio)
    found = optima(deviances)
    assert found.certified.all()
    assert found.slope.max() <= GRADIENT
    several = found.minima > 1
    assert 10 < several.sum() < 1_500  # the design is one where two minima occur
    psi = np.concatenate([[0.0], np.logspace(-6, 6, 2_000)])
    grid = deviances.on_grid(psi)
    at_best = deviances.at(np.arange(3_000), found.psi, True)
    # rounding of m log r + g: 32 eps times the sum of the sizes of the terms
    floor = 32 * EPS * (np.abs(grid.m * np.log(grid.r)).max() + np.abs(grid.g).max())
    assert (at_best.deviance <= grid.deviance.min(axis=1) + floor).all()
    zero = found.psi == 0.0
    assert 0 < zero.sum() < 3_000
    np.testing.assert_allclose(found.fall, grid.deviance[:, 0] - at_best.deviance, atol=floor)


def test_spectrum_and_products_find_the_same_optima():
    _, curve, fits = made("many_sizes")
    space, truth = coordinates_of(curve), truth_near(fits, 0.2)
    draws = draw(space, truth, 2, 0, 2_000)
    modes = modes_of(space)
    common = np.array(
        [space.x[space.block == at].T @ space.x[space.block == at] for at in range(-1, len(curve.sizes))]
    )
    for kind in ("ml", "reml"):
        one = SpectralDeviances(modes, kind, modes.squares(draws), draws.rest[:, 0], truth.ratio)
        two = drawn_products(space, kind, draws, common.reshape(len(common), -1), one.limit)
        psi = np.array([0.0, 0.01, 0.4, 3.0, 200.0])
        for name in ("r", "r1", "r2", "g", "g1", "g2"):
            a, b = (np.broadcast_to(getattr(each.on_grid(psi), name), (2_000, 5)) for each in (one, two))
            np.testing.assert_allclose(
                a, b, rtol=1e-8, atol=1e-13
            )  # r'' by products loses digits at large ratios
        a, b = optima(one), optima(two)
        np.testing.assert_allclose(a.psi, b.psi, rtol=1e-9, atol=1e-13)
        assert a.certified.all()
        assert b.certified.all()


def test_unsettled_optima_are_counted_as_not_certified(monkeypatch):
    _, curve, fits = made("two_minima_both")
    monkeypatch.setattr("mixbridge.resample.optima.MAX_ROUNDS", 1)
    found = replicate(curve, {"reml": fits["reml"]}, truth_of(fits["reml"]), 500, 1)
    assert 0 < found.statuses("reml")["not certified"] < 500
    monkeypatch.undo()
    found = replicate(curve, {"reml": fits["reml"]}, truth_of(fits["reml"]), 500, 1)
    assert found.statuses("reml")["not certified"] == 0


@cache
def balanced(psi):
    """A balanced closed panel, 12 units of 5 rows, and 20,000 replicates at psi."""
    rng = np.random.default_rng(21)
    units = np.repeat(np.arange(12), 5)
    step = np.tile(np.arange(5.0) - 2.0, 12)
    x = np.column_stack(
        [np.ones(60), step * (1 + rng.integers(0, 3, 12))[units], rng.integers(0, 9, 12)[units]]
    )
    y = x.sum(axis=1) + rng.standard_normal(12)[units] + rng.standard_normal(60)
    curve = curve_of(Moments.from_arrays(x, y, units, ["Intercept", "inside", "outside"]))
    fits = {key: fit_route(curve, key, {}, NO_ORDER) for key in LEDGER_ROUTES}
    return curve, fits, bootstrap(curve, fits, Truth(np.array([1.0, 2.0, -1.0]), 2.0 * psi, 2.0), 20_000, 77)


def test_balanced_components_have_their_chi_square_laws():
    curve, _, found = balanced(0.4)
    df_w, df_b, size = curve.df_within, curve.units - 2, 5.0
    here = found.replicates.routes["swamy_arora"]
    p = [stats.kstest(here.idiosyncratic_variance * df_w / 2.0, stats.chi2(df_w).cdf).pvalue]
    between = size * here.unit_variance_raw + here.idiosyncratic_variance  # the between mean square
    p.append(stats.kstest(between * df_b / (2.0 + size * 0.8), stats.chi2(df_b).cdf).pvalue)
    # exact t laws: within by n - N - K_w, the purely between coefficients by N - K_p
    for term, df in ((0, df_b), (1, df_w), (2, df_b)):
        each = found.replicates.routes["within" if term == 1 else "between"]
        t = (each.coefficients[:, term] - found.replicates.truth.coefficients[term]) / each.standard_errors[
            :, term
        ]
        p.append(stats.kstest(t, stats.t(df).cdf).pvalue)
    assert min(p) > 0.001 / len(p)  # family-wise error rate 0.1 %, seed fixed
    assert abs(np.corrcoef(here.idiosyncratic_variance, between)[0, 1]) < 4 / np.sqrt(
        20_000
    )  # independent: 4 sd


@pytest.mark.parametrize("psi", [0.0, 0.1, 0.4])
def test_balanced_probability_of_a_zero_estimate_is_an_f_probability(psi):
    curve, _, found = balanced(psi)
    df_w, df_b = curve.df_within, curve.units - 2
    expected = {
        # truncated where the ratio of mean squares is at most 1; ML compares with N/(N - K_p) and (n - N)/(n - N - K_w)
        "swamy_arora": stats.f.cdf(1.0 / (1.0 + 5 * psi), df_b, df_w),
        "reml": stats.f.cdf(1.0 / (1.0 + 5 * psi), df_b, df_w),
        "ml": stats.f.cdf((12 / df_b) * (df_w / 48) / (1.0 + 5 * psi), df_b, df_w),
    }
    for key, probability in expected.items():
        share = float((found.replicates.routes[key].ratio == 0.0).mean())
        error = np.sqrt(probability * (1 - probability) / 20_000)
        assert abs(share - probability) < 4 * error, key  # 4 sd of a binomial share


def test_reml_is_the_unbiased_estimate_or_zero_in_a_balanced_closed_panel():
    _, _, found = balanced(0.1)
    reml, unbiased = found.replicates.routes["reml"], found.replicates.routes["swamy_arora"]
    inner = unbiased.unit_variance_raw > 0.0
    np.testing.assert_allclose(
        reml.unit_variance_raw[inner], unbiased.unit_variance_raw[inner], rtol=1e-9, atol=1e-12
    )
    assert (reml.unit_variance_raw[~inner] == 0.0).all()
    assert 100 < (~inner).sum() < 19_900


def test_summaries_agree_with_theory_and_with_the_replicates():
    curve, fits, found = balanced(0.4)
    table = found.components().set_index(["route", "quantity"])
    row = table.loc[("swamy_arora", "unit_variance_raw")]
    df_w, df_b = curve.df_within, curve.units - 2
    # Var of (MS_b - MS_w)/T
    sd = np.sqrt(2 * (2 + 5 * 0.8) ** 2 / df_b + 2 * 2.0**2 / df_w) / 5
    assert abs(row["bias"]) < 4 * row["bias_error"]
    assert row["standard_error"] == pytest.approx(
        sd, rel=0.05
    )  # 20,000 draws of a skew law: 4 sd is about 4 %
    truncated = table.loc[("swamy_arora", "unit_variance")]
    assert truncated["mean"] > row["mean"]
    assert truncated["rmse"] < row["rmse"]
    assert row["rmse"] ** 2 == pytest.approx(
        row["standard_error"] ** 2 + row["bias"] ** 2, rel=1e-3
    )  # divisors R - 1 and R
    ml = table.loc[("ml", "idiosyncratic_variance")]
    assert ml["bias"] < -4 * ml["bias_error"]
    coefficients = found.coefficients().set_index(["route", "term"])
    assert (coefficients["bias"].abs() < 4.5 * coefficients["bias_error"]).all()
    assert ("within", "outside") not in coefficients.index
    within = coefficients.loc[("within", "inside")]
    assert within["model_standard_error"] == pytest.approx(within["standard_error"], rel=0.03)
    statuses = found.statuses().set_index("route")
    assert (
        statuses.loc["swamy_arora", "unit variance truncated"]
        == (found.replicates.routes["swamy_arora"].unit_variance_raw < 0).sum()
    )
    assert (statuses["not certified"] == 0).all()
    assert set(fits) - set(statuses.index) == {"first_difference"}


def test_intervals_are_exact_where_the_law_is_known():
    curve, fits, found = balanced(0.4)
    # between slope: t with N - K_p, so the bootstrap-t interval is the classical one up to Monte Carlo error
    fit, at = fits["between"], curve.names.index("outside")
    low, high = found.interval("outside", "between", "t")
    half = stats.t.isf(0.025, curve.units - 2) * float(fit.standard_errors.iloc[at])
    assert (low - fit.beta[at]) / half == pytest.approx(
        -1.0, abs=0.06
    )  # 4 sd of a 2.5 % quantile of 20,000 draws
    assert (high - fit.beta[at]) / half == pytest.approx(1.0, abs=0.06)
    # percentile: normal with the true variance
    low, high = found.interval("outside", "between", "percentile", confidence=0.9)
    sd = float(fit.standard_errors.iloc[at]) / np.sqrt(fit.scale) * np.sqrt(2 + 5 * 0.8)
    assert (high - low) / (2 * stats.norm.isf(0.05) * sd) == pytest.approx(1.0, abs=0.04)  # 4 sd likewise
    table = found.component_intervals("reml").set_index("quantity")
    assert table.loc["ratio", "lower"] == 0.0
    df_w = curve.df_within
    expected = stats.chi2.ppf([0.025, 0.975], df_w) * 2.0 / df_w
    swamy = (
        found.component_intervals("swamy_arora")
        .set_index("quantity")
        .loc["idiosyncratic_variance", ["lower", "upper"]]
    )
    np.testing.assert_allclose(swamy.to_numpy(dtype=float), expected, rtol=0.03)  # 4 sd likewise
    both = found.intervals("reml")
    assert list(both["method"]) == ["percentile", "t"] * 3
    assert (both["lower"] < both["estimate"]).all()
    assert (both["estimate"] < both["upper"]).all()


def test_percentile_interval_of_the_route_drawn_from_is_made_of_its_replicates():
    _, curve, fits = made("mild_both")
    found = bootstrap(curve, fits, "reml", 2_000, 3)
    values = found.replicates.routes["reml"].coefficients[:, 1]
    np.testing.assert_allclose(
        found.interval(curve.names[1], method="percentile"), quantiles(values, [0.025, 0.975], "x")
    )


def test_gap_noise_between_within_and_between_is_known():
    curve, fits, found = balanced(0.4)
    # the same coefficient by two routes that agree with identical weights: no gap on any replicate
    none = found.gap_noise("inside", "reml", "within")
    assert none.sd <= none.resolution
    assert np.isnan(none.in_sd)
    assert none.share.value == 1.0
    # in an open panel, the within slope against pooled: Hausman's variance with known components, Var(b_w) - ... by rows
    panel, curve, fits = made("mild_both")
    truth = truth_near(fits, 0.8)
    found = bootstrap(curve, fits, truth, 20_000, 5)
    z = (panel.units[:, None] == np.arange(curve.units)).astype(float)
    v = truth.idiosyncratic * np.eye(curve.n) + truth.unit * z @ z.T
    deviations = panel.X - (z / z.sum(axis=0)) @ (z.T @ panel.X)
    gap = np.linalg.pinv(deviations, rcond=1e-9)[1] - np.linalg.pinv(panel.X)[1]
    sd = float(np.sqrt(gap @ v @ gap))
    noise = found.gap_noise(curve.names[1], "within", "pooled", levels=(0.05, 0.5, 0.95))
    assert noise.sd == pytest.approx(sd, rel=4 / np.sqrt(2 * 20_000))  # 4 sd of a normal standard deviation
    assert noise.quantiles[0.95] == pytest.approx(stats.norm.ppf(0.95) * sd, rel=0.06)  # 4 sd of the quantile
    p = 2 * stats.norm.sf(abs(noise.observed) / sd)
    assert abs(noise.share.value - p) < 4 * np.sqrt(p * (1 - p) / 20_000) + 1 / 20_000
    assert noise.in_sd == noise.observed / noise.sd
    table = found.gaps("pooled").set_index(["term", "route"])
    assert table.loc[(curve.names[1], "within"), "sd"] == noise.sd
    assert ("Intercept", "within") not in table.index


def test_classes_are_those_of_the_ledger():
    from mixbridge.reconcile.agreement import Interval, Thresholds, ledger  # noqa: PLC0415

    _, curve, fits = made("singletons_between")
    truth = truth_near(fits, 0.5)
    weak = replace(truth, coefficients=0.3 * fits["pooled"].standard_errors.to_numpy() * 3)
    space = coordinates_of(curve)
    found = bootstrap(curve, fits, weak, 60, 8)
    draws = draw(space, weak, 8, 0, 60)
    counts = dict.fromkeys(("identical", "immaterial", "visible", "conflicting"), 0)
    for i in range(60):
        rebuilt = curve_of(moments_of(space, weak, draws, i))
        pair = {key: fit_route(rebuilt, key, {}, NO_ORDER) for key in ("reml", "nerlove")}
        half = stats.t.isf(0.025, curve.n - curve.rank)
        intervals = {
            key: {
                term: Interval(b, s, b - half * s, b + half * s)
                for term, b, s in zip(fit.terms, fit.beta, fit.standard_errors, strict=True)
            }
            for key, fit in pair.items()
        }
        table = ledger(rebuilt, pair, intervals, "reml", Thresholds())
        row = table[(table["route"] == "nerlove") & (table["term"] == curve.names[1])]
        counts[row["verdict"].item()] += 1
    ours = found.classes("nerlove", "reml").set_index("term").loc[curve.names[1]]
    assert {name: round(60 * ours[name]) for name in counts} == counts
    assert sum(count > 0 for count in counts.values()) >= 3
    assert counts["conflicting"] > 0
    total = found.classes("nerlove", "reml")
    np.testing.assert_allclose(total[[*counts, "not_available"]].sum(axis=1), 1.0, rtol=1e-12)


def test_zero_tests_are_the_f_test_where_that_is_the_same_order():
    curve, fits, _ = balanced(0.4)
    table = zero_tests(curve, fits, 20_000, 4).set_index("route")
    df_w, df_b = curve.df_within, curve.units - 2
    f = 1 + 5 * fits["swamy_arora"].unit_variance_raw / fits["swamy_arora"].idiosyncratic_variance
    p = stats.f.sf(f, df_b, df_w)
    for key in ("swamy_arora", "reml", "ml", "nerlove"):  # all increasing in F in a balanced closed panel
        assert abs(table.loc[key, "p_value"] - p) < 4 * np.sqrt(p * (1 - p) / 20_000) + 1 / 20_000, key
    assert table.loc["reml", "share_zero"] == pytest.approx(
        stats.f.cdf(1, df_b, df_w), abs=4 * 0.5 / np.sqrt(20_000)
    )
    assert "pooled" not in table.index


def test_zero_tests_have_their_level():
    """p-values of panels drawn at zero are uniform, whatever the coefficients and the scale."""
    _, curve, fits = made("mild_between")
    space, truth = coordinates_of(curve), Truth(7.0 * np.ones(curve.rank), 0.0, 30.0)
    draws = draw(space, truth, 6, 0, 200)
    null = replicate(curve, fits, Truth(np.zeros(curve.rank), 0.0, 1.0), 4_000, 20_050)
    reference = null.routes["reml"].fall
    statistics = estimate(plan(space, {"reml": fits["reml"]}, 0.0), draws)["reml"].fall
    p = np.array([share_at_least(reference, value, "x").value for value in statistics])
    assert stats.binomtest(int((p <= 0.1).sum()), 200, 0.1).pvalue > 0.001  # error rate 0.1 %, seed fixed
    table = zero_tests(curve, {"reml": fits["reml"]}, 4_000).set_index("route")
    gain = fits["reml"].log_likelihood - log_likelihood(curve, "reml", 0.0)
    assert table.loc["reml", "value"] == pytest.approx(
        2.0 * gain, abs=1e-9
    )  # 2e4 times the rounding of log-likelihoods near 10


def test_quantiles_need_replicates_beyond_them():
    with pytest.raises(OptionError, match=r"too few for a quantile at 0\.025"):
        quantiles(np.arange(399.0), [0.025, 0.975], "x")
    low, high = quantiles(np.arange(1.0, 400.0 + 1), [0.025, 0.975], "x")
    assert (low, high) == pytest.approx((0.025 * 401, 0.975 * 401))
    assert BEYOND == 10
    with pytest.raises(IdentificationError, match="no replicate"):
        quantiles(np.full(9, np.nan), [0.5], "x")
    assert share_at_least(np.array([1.0, 2.0, 3.0, np.nan, np.inf]), 3.0, "x").value == 3 / 5


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"replicates": 0}, "replicates=0"),
        ({"replicates": 2.5}, "replicates=2.5"),
        ({"seed": -1}, "seed=-1"),
        ({"workers": 0}, "workers=0"),
        ({"batch": True}, "batch=True"),
        ({"confidence": 1.0}, "confidence=1.0"),
        ({"under": "remI"}, "under='remI' is not known"),
        ({"under": "within"}, "no unit variance"),
        ({"under": Truth(np.zeros(9), 1.0, 1.0)}, "9 coefficients"),
    ],
)
def test_arguments_are_checked(arguments, message):
    _, curve, fits = made("mild_both")
    with pytest.raises(OptionError, match=message):
        bootstrap(curve, fits, **{"replicates": 100, **arguments})


def test_questions_are_checked():
    _, curve, fits = made("mild_both")
    found = bootstrap(curve, fits, replicates=100)
    for ask, message in (
        (lambda: found.interval("Intercept"), "too few"),
        (lambda: found.interval("nothing"), "term='nothing'"),
        (lambda: found.interval("Intercept", "reml", "basic"), "method='basic'"),
        (lambda: found.interval("Intercept", "nothing"), "route='nothing'"),
        (lambda: found.classes("ml", rule="satterthwaite"), "rule='satterthwaite'"),
        (lambda: found.classes("ml", gap=-1.0), "gap=-1.0"),
        (lambda: found.gap_noise("Intercept", "ml", "reml", levels=(1.5,)), "level=1.5"),
        (lambda: zero_tests(curve, {"within": fits["within"]}), "no route"),
    ):
        with pytest.raises(OptionError, match=message):
            ask()
    with pytest.raises(IdentificationError, match="does not estimate 'Intercept'"):
        found.interval("Intercept", "within")
    with pytest.raises(IdentificationError, match="no unit variance"):
        found.component_intervals("within")
    with pytest.raises(OptionError, match="a variance above 0"):
        Truth(np.zeros(2), 1.0, 0.0)
    with pytest.raises(OptionError, match="at least 0"):
        Truth(np.zeros(2), -1.0, 1.0)


def test_progress_is_told_past_the_quiet_time_only_and_an_interruption_stops(monkeypatch):
    _, curve, fits = made("mild_both")
    told = []
    bootstrap(curve, fits, replicates=300, batch=100, workers=1, progress=lambda *each: told.append(each))
    assert told == []  # this takes far less than two seconds
    monkeypatch.setattr(running, "QUIET", 0.0)
    bootstrap(curve, fits, replicates=250, batch=100, workers=1, progress=lambda *each: told.append(each))
    assert told == [(100, 250), (200, 250), (250, 250)]
    told.clear()
    bootstrap(curve, fits, replicates=250, batch=100, workers=2, progress=lambda *each: told.append(each))
    assert [total for _, total in told] == [250] * 3
    assert all(a < b for (a, _), (b, _) in pairwise(told))

    def stop(done, total):
        raise KeyboardInterrupt

    for workers in (1, 2):
        with pytest.raises(KeyboardInterrupt):
            bootstrap(curve, fits, replicates=5_000, batch=100, workers=workers, progress=stop)


def test_records_cannot_be_changed():
    _, curve, fits = made("mild_both")
    found = bootstrap(curve, fits, replicates=100)
    with pytest.raises(ValueError, match="read-only"):
        found.replicates.routes["reml"].ratio[0] = 1.0
    with pytest.raises(TypeError):
        found.replicates.routes["reml"] = None
    with pytest.raises(AttributeError):
        found.under = "ml"


def test_gaps_of_routes_that_fail_on_the_data_are_refused():
    _, curve, fits = made("mild_both")
    lost = replace(fits["ml"], beta=np.full(curve.rank, np.nan))
    found = replicate(curve, {**fits, "ml": lost}, truth_of(fits["reml"]), 100, 1)
    with pytest.raises(IdentificationError, match="no gap"):
        gap_noise(found, "Intercept", "reml", "ml", ())
