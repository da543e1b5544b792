"""Cluster-robust covariances against dense definitions, statsmodels and invariances."""

from dataclasses import replace

import mpmath
import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from dense_robust import absorbed, of_means, on_curve
from panels import BY_NAME, PANELS

from mixbridge.errors import DataError, IdentificationError, OptionError
from mixbridge.inference import robust_adjust
from mixbridge.inference.robust import robust_covariance
from mixbridge.inference.robust_two_way import two_way_covariance
from mixbridge.moments import Moments
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import curve_of
from mixbridge.routes import fit_route

# Double precision on both sides, condition numbers up to 1e5 in the panels called ill: 1e-16 x 1e5 x a few dozen
# operations. The worst case seen is 7e-11, a unit that carries a direction almost alone.
CLOSE = 1e-9
ROOTS = ("pustejovsky_tipton", "quasi_demeaned")
KINDS = [("CR0", "pustejovsky_tipton"), ("CR2", ROOTS[0]), ("CR2", ROOTS[1]), ("CR3", "pustejovsky_tipton")]
SMALL = [panel for panel in PANELS if len(panel.y) <= 60]


def taken(X, y, units, names=None):
    codes = np.unique(units, return_inverse=True)[1]
    return curve_of(Moments.from_arrays(X, y, codes, names)), UnitProducts.from_arrays(X, y, codes, names)


def centred(panel):
    """Return X and y near zero and L with data coefficients = L @ (coefficients after the shift) + constants."""
    X, y, L = panel.X, panel.y, np.eye(panel.X.shape[1])
    if panel.has_intercept:
        j = panel.names.index("Intercept")
        move = X[0].copy()
        move[j] = 0.0
        X, y = X - move, y - y[0]
        L[j] -= move
    return X, y, L


def distance(got, expected):
    """Return the largest difference in units of the standard errors expected, over what is not NaN in `got`."""
    there = np.isfinite(np.diag(got))
    assert there.any()
    length = np.sqrt(np.diag(expected))[there]
    gap = (got - expected)[np.ix_(there, there)] / np.outer(length, length)
    return float(np.abs(gap).max())


def made(seed=3, units=10, sizes=(2, 3, 5), columns=2):
    """Return a panel with an intercept, a covariate that varies both ways, one between units, more of the first kind."""
    rng = np.random.default_rng(seed)
    T = rng.choice(sizes, units)
    codes = np.repeat(np.arange(units), T)
    n = codes.size
    both = rng.normal(size=(n, columns)) + rng.normal(size=(units, columns))[codes]
    X = np.column_stack([np.ones(n), both, rng.normal(size=units)[codes]])
    y = X @ rng.normal(size=X.shape[1]) + rng.normal(size=units)[codes] + rng.normal(size=n)
    period = np.concatenate([np.arange(t) for t in T])
    return X, y, codes, period


@pytest.mark.parametrize("panel", SMALL, ids=lambda panel: panel.name)
@pytest.mark.parametrize(("kind", "root"), KINDS)
def test_curve_by_definition(panel, kind, root):
    curve, products = taken(panel.X, panel.y, panel.units, panel.names)
    X, y, L = centred(panel)
    for psi in (0.0, 0.7, 40.0):
        got = robust_covariance(curve, products, psi, kind=kind, root=root)
        dense = on_curve(X, y, panel.units, psi)
        if not np.isfinite(got.covariance_array).any():  # one unit carries every coefficient
            assert "not defined" in got.status
            continue
        assert distance(got.covariance_array, L @ dense.covariance(kind, root) @ L.T) < CLOSE
        if kind == "CR2":
            for j in range(curve.rank):
                df, expectation = dense.degrees(L[j], root)
                assert got.df[j] == pytest.approx(df, rel=CLOSE)
                assert got.expectation[j] == pytest.approx(expectation, rel=CLOSE)


@pytest.mark.parametrize("name", [p.name for p in SMALL])
@pytest.mark.parametrize(("kind", "root"), [KINDS[0], KINDS[1], KINDS[3]])
def test_within_is_the_regression_with_unit_indicators(name, kind, root):
    panel = BY_NAME[name]
    curve, products = taken(panel.X, panel.y, panel.units, panel.names)
    if not curve.rank_within:
        with pytest.raises(IdentificationError, match="varies within"):
            robust_covariance(curve, products, np.inf)
        return
    got = robust_covariance(curve, products, np.inf, kind=kind)
    X, y, _ = centred(panel)
    kept = curve.within_span.kept
    dense = absorbed(X[:, kept], y, panel.units)
    if kind == "CR3":  # without a unit its indicator goes too: deletion is done on deviations from unit means
        label = np.unique(panel.units, return_inverse=True)[1]
        means = np.array(
            [np.append(X[label == i].mean(0), y[label == i].mean()) for i in range(label.max() + 1)]
        )
        deviations = np.column_stack([X, y]) - means[label]
        dense = on_curve(deviations[:, kept], deviations[:, -1], panel.units, 0.0)
    free = curve.free_within
    assert (np.isnan(np.diag(got.covariance_array)) == ~free).all() or "not defined" in got.status
    if not np.isfinite(got.covariance_array).any():
        return
    expected = np.full((curve.rank, curve.rank), np.nan)
    expected[np.ix_(kept, kept)] = dense.covariance(kind, root)[: kept.size, : kept.size]
    assert distance(got.covariance_array, expected) < CLOSE
    if kind == "CR2":
        for at, j in enumerate(kept):
            if free[j] and np.isfinite(got.df[j]):
                weights = np.eye(kept.size + products.units)[at]
                df, expectation = dense.degrees(weights)
                assert got.df[j] == pytest.approx(df, rel=CLOSE)
                assert got.expectation[j] == pytest.approx(expectation, rel=CLOSE)


@pytest.mark.parametrize("weights", ["size_weighted", "unweighted"])
@pytest.mark.parametrize(("kind", "root"), KINDS)
@pytest.mark.parametrize(
    "name", ["mild_between", "singletons_both", "many_sizes", "mild_no_intercept", "pairs_periods"]
)
def test_between_is_a_regression_on_unit_means(name, kind, root, weights):
    panel = BY_NAME[name]
    curve, products = taken(panel.X, panel.y, panel.units, panel.names)
    got = robust_covariance(curve, products, "between", kind=kind, root=root, between=weights)
    kept = curve.between_span.kept
    X, y, L = centred(panel)
    dense = of_means(X[:, kept], y, panel.units, weights == "size_weighted")
    part = L[np.ix_(kept, kept)]
    expected = np.full((curve.rank, curve.rank), np.nan)
    expected[np.ix_(kept, kept)] = part @ dense.covariance(kind, root) @ part.T
    assert distance(got.covariance_array, expected) < CLOSE
    if kind == "CR2":
        for at, j in enumerate(kept):
            if curve.free_between[j]:
                assert got.df[j] == pytest.approx(dense.degrees(part[at], root)[0], rel=CLOSE)


@pytest.mark.parametrize("root", ROOTS)
def test_series_for_small_leverages_and_decompositions_for_large_ones_agree_with_the_definition(
    root, monkeypatch
):
    X, y, codes, _ = made(seed=5, units=110, columns=1)
    curve, products = taken(X, y, codes)
    assert curve.rank == 3
    psi = 1.3
    dense = on_curve(X, y, codes, psi)
    expected = dense.covariance("CR2", root)
    got = robust_covariance(curve, products, psi, kind="CR2", root=root)
    traces = [np.trace(dense.bread @ dense.weighted(rows).T @ X[rows]) for rows in dense.blocks]
    assert min(traces) < robust_adjust.LEVERAGE < max(traces)  # both ways are used
    assert distance(got.covariance_array, expected) < 1e-12  # well conditioned: some dozens of roundings
    df = [dense.degrees(row, root)[0] for row in np.eye(3)]
    np.testing.assert_allclose(got.df, df, rtol=1e-11)
    for limit in (0.0, 0.2):  # all by decomposition, almost all by series
        monkeypatch.setattr(robust_adjust, "LEVERAGE", limit)
        other = robust_covariance(curve, products, psi, kind="CR2", root=root)
        assert distance(other.covariance_array, expected) < 1e-12
        np.testing.assert_allclose(other.df, df, rtol=1e-11)


@pytest.mark.parametrize("name", ["mild_between", "singletons_both", "huge_unit"])
@pytest.mark.parametrize("psi", [1e-6, 1e4, 1e8])
def test_extreme_ratios_against_fifty_digits(name, psi):
    panel = BY_NAME[name]
    curve, products = taken(panel.X, panel.y, panel.units, panel.names)
    got = robust_covariance(curve, products, psi, kind="CR2")
    with mpmath.workdps(50):
        expected = _fifty_digits(panel, psi)
    # At 1e8 means weigh 1e-4 as much as deviations: next to these they keep twelve of their sixteen digits.
    assert distance(got.covariance_array, expected) < 1e-11


def _fifty_digits(panel, psi):
    """CR2 with the symmetric solution of A C A = V, in multiple precision."""
    X, y = mpmath.matrix(panel.X.tolist()), mpmath.matrix(panel.y.tolist())
    n, p = X.rows, X.cols
    blocks = [np.flatnonzero(panel.units == i).tolist() for i in np.unique(panel.units)]
    parts, bread, right = [], mpmath.zeros(p, p), mpmath.zeros(p, 1)
    for rows in blocks:
        x = mpmath.matrix([[X[i, j] for j in range(p)] for i in rows])
        e = mpmath.matrix([y[i] for i in rows])
        v = mpmath.eye(len(rows)) + mpmath.mpf(psi) * mpmath.ones(len(rows), len(rows))
        inverse = v**-1
        bread += x.T * inverse * x
        right += x.T * inverse * e
        parts.append((x, e, v, inverse))
    m = bread**-1
    beta = m * right
    total = mpmath.zeros(p, p)
    for x, outcome, v, inverse in parts:
        half = _root(v, 1)
        a = half * _root(half * (v - x * m * x.T) * half, -1) * half
        score = m * x.T * inverse * a * (outcome - x * beta)
        total += score * score.T
    assert n == len(panel.y)
    return np.array([[float(total[i, j]) for j in range(p)] for i in range(p)])


def _root(matrix, sign):
    values, vectors = mpmath.eigsy((matrix + matrix.T) / 2)
    return vectors * mpmath.diag([mpmath.sqrt(value) ** sign for value in values]) * vectors.T


@pytest.mark.parametrize("psi", [0.0, 0.4, 6.0])
def test_statsmodels_clusters_on_quasi_demeaned_rows(psi):
    X, y, codes, _ = made(units=14)
    curve, products = taken(X, y, codes)
    size = np.bincount(codes)[codes]
    share = 1 - 1 / np.sqrt(1 + size * psi)

    def demeaned(column):
        return column - share * (np.bincount(codes, column) / np.bincount(codes))[codes]

    rows = np.column_stack([demeaned(column) for column in X.T])
    model = sm.OLS(demeaned(y), rows)
    plain = model.fit(cov_type="cluster", cov_kwds={"groups": codes, "use_correction": False}).cov_params()
    corrected = model.fit(cov_type="cluster", cov_kwds={"groups": codes, "use_correction": True}).cov_params()
    assert distance(robust_covariance(curve, products, psi, kind="CR0").covariance_array, plain) < 1e-11
    one = robust_covariance(curve, products, psi, kind="CR1", multiplier="units_and_rows")
    assert distance(one.covariance_array, corrected) < 1e-11
    assert one.multiplier_values["unit"] == pytest.approx(14 / 13 * (len(y) - 1) / (len(y) - 4), rel=1e-15)


def test_statsmodels_gee_with_the_same_icc():
    X, y, codes, _ = made(seed=8, units=16)
    curve, products = taken(X, y, codes)
    icc = 0.35
    structure = sm.cov_struct.Exchangeable()
    structure.dep_params = icc
    family = sm.families.Gaussian()
    model = sm.GEE(y, X, groups=codes, cov_struct=structure, family=family, update_dep=False)
    result = model.fit(maxiter=200, ctol=1e-12, cov_type="bias_reduced")
    assert structure.dep_params == icc
    got = robust_covariance(curve, products, icc / (1 - icc), kind="CR0")
    # the iteration there stops when its step is below 1e-12, so its residuals agree to about that
    assert distance(got.covariance_array, result.cov_robust) < 1e-10
    deleted = robust_covariance(curve, products, icc / (1 - icc), kind="CR3")
    assert distance(deleted.covariance_array, result.cov_robust_bc) < 1e-10


def test_statsmodels_two_way_at_zero():
    X, y, codes, period = made(seed=4, units=30, sizes=(4, 6, 8))
    curve, products = taken(X, y, codes)
    groups = np.column_stack([codes, period])
    fit = sm.OLS(y, X).fit(cov_type="cluster", cov_kwds={"groups": groups, "use_correction": False})
    got = two_way_covariance(curve, products, 0.0, blocks_of(X, y, codes, period), multiplier="none")
    np.testing.assert_allclose(
        got.covariance_array, fit.cov_params(), rtol=0, atol=1e-12 * np.diag(fit.cov_params()).max()
    )
    fit = sm.OLS(y, X).fit(cov_type="cluster", cov_kwds={"groups": groups, "use_correction": True})
    got = two_way_covariance(
        curve, products, 0.0, blocks_of(X, y, codes, period), multiplier="units_and_rows"
    )
    np.testing.assert_allclose(
        got.covariance_array, fit.cov_params(), rtol=0, atol=1e-12 * np.diag(fit.cov_params()).max()
    )


def blocks_of(X, y, codes, period, rows=7):
    def blocks():
        for start in range(0, len(y), rows):
            at = slice(start, start + rows)
            yield codes[at], X[at], y[at], period[at]

    return blocks


@pytest.mark.parametrize("repeat", [False, True])
@pytest.mark.parametrize("rows", ["quasi_demeaned", "weighted"])
@pytest.mark.parametrize("multiplier", ["none", "units", "units_and_rows", "smallest", "smallest_and_rows"])
def test_two_way_from_rows(rows, multiplier, repeat):
    X, y, codes, period = made(seed=6, units=20, sizes=(4, 6))
    if repeat:
        period = period // 2
    shuffle = np.random.default_rng(0).permutation(len(y))
    X, y, codes, period = X[shuffle], y[shuffle], codes[shuffle], period[shuffle]
    curve, products = taken(X, y, codes)
    psi = 0.8
    got = two_way_covariance(
        curve, products, psi, blocks_of(X, y, codes, period), rows=rows, multiplier=multiplier
    )
    dense = on_curve(X, y, codes, psi)
    e = y - X @ dense.beta
    if rows == "weighted":
        scores = np.linalg.solve(dense.V, X) * e[:, None]
    else:
        values, vectors = np.linalg.eigh(dense.V)
        half = vectors / np.sqrt(values) @ vectors.T
        scores = (half @ X) * (half @ e)[:, None]
    n, p = X.shape
    pair = codes * 1000 + period
    counts = [len(np.unique(label)) for label in (codes, period, pair)]
    expected = 0.0
    for label, count, sign in zip((codes, period, pair), counts, (1, 1, -1), strict=True):
        sums = np.array([scores[label == level].sum(axis=0) for level in np.unique(label)]) @ dense.bread
        g = min(counts) if multiplier.startswith("smallest") else count
        factor = 1.0 if multiplier == "none" else g / (g - 1)
        factor *= (n - 1) / (n - p) if multiplier.endswith("and_rows") else 1.0
        expected = expected + sign * factor * sums.T @ sums
    np.testing.assert_allclose(got.covariance_array, expected, rtol=0, atol=1e-11 * np.abs(expected).max())
    smallest = np.linalg.eigvalsh(expected)[0]
    assert got.status.startswith("not non-negative definite") == (smallest < 0)
    assert any("several rows share" in note for note in got.notes) == repeat


def test_two_way_that_is_not_a_covariance_says_so_and_mends_nothing():
    rng = np.random.default_rng(1)
    codes, period = np.repeat(np.arange(8), 2), np.tile([0, 1], 8)
    y = np.where(period == 0, 1.0, -1.0) * np.repeat(rng.normal(size=8), 2) + 1e-3 * rng.normal(size=16)
    X = np.ones((16, 1))
    curve, products = taken(X, y, codes, ["Intercept"])
    got = two_way_covariance(curve, products, 0.0, blocks_of(X, y, codes, period), multiplier="none")
    e = y - y.mean()
    by_hand = sum(
        sign * sum(e[label == level].sum() ** 2 for level in np.unique(label))
        for label, sign in ((codes, 1), (period, 1), (np.arange(16), -1))
    )
    assert by_hand < 0
    assert got.covariance_array[0, 0] == pytest.approx(by_hand / 256, rel=1e-10)
    assert "negative variance of Intercept" in got.status
    assert np.isnan(got.standard_errors["Intercept"])


def test_two_way_refuses_rows_and_periods_it_cannot_place():
    X, y, codes, period = made(seed=6, units=20, sizes=(4, 6))
    curve, products = taken(X, y, codes)
    with pytest.raises(DataError, match="number the periods"):
        two_way_covariance(curve, products, 0.5, blocks_of(X, y, codes, period + 10**7))
    with pytest.raises(DataError, match="integer from 0"):
        two_way_covariance(curve, products, 0.5, blocks_of(X, y, codes, period - 1))
    with pytest.raises(DataError, match="not those of the unit products"):
        two_way_covariance(curve, products, 0.5, blocks_of(X[1:], y[1:], codes[1:], period[1:]))
    with pytest.raises(DataError, match="do not know"):
        two_way_covariance(curve, products, 0.5, blocks_of(X, y, codes + 1, period))
    with pytest.raises(IdentificationError, match="at least two periods"):
        two_way_covariance(curve, products, 0.5, blocks_of(X, y, codes, 0 * period))
    dense_codes = two_way_covariance(curve, products, 0.5, blocks_of(X, y, codes, period))
    gaps = two_way_covariance(curve, products, 0.5, blocks_of(X, y, codes, 7 * period + 3))
    np.testing.assert_array_equal(gaps.covariance_array, dense_codes.covariance_array)
    assert gaps.notes == dense_codes.notes


def test_two_way_takes_the_units_of_the_products_by_key():
    X, y, codes, period = made(seed=6, units=20, sizes=(1, 4, 6))
    whole = UnitProducts.from_arrays(X, y, codes)
    kept = whole.sizes > 1
    curve, products = curve_of(Moments.from_arrays(X, y, codes).without_one_row_units()), whole.select(kept)
    got = two_way_covariance(curve, products, 0.5, blocks_of(X, y, codes, period), keys=whole.keys)
    here = kept[codes]
    other = taken(X[here], y[here], codes[here])
    expected = two_way_covariance(
        *other, 0.5, blocks_of(X[here], y[here], np.unique(codes[here], return_inverse=True)[1], period[here])
    )
    assert distance(got.covariance_array, expected.covariance_array) < 1e-12


def test_within_two_way_needs_no_unit_effect():
    X, y, codes, period = made(seed=6, units=20, sizes=(4, 6))
    curve, products = taken(X, y, codes)
    got = two_way_covariance(curve, products, np.inf, blocks_of(X, y, codes, period), multiplier="none")
    means = np.array([np.append(X[codes == i].mean(0), y[codes == i].mean()) for i in range(20)])
    d = (np.column_stack([X, y]) - means[codes])[:, [1, 2, 4]]
    fit = sm.OLS(d[:, 2], d[:, :2]).fit(
        cov_type="cluster", cov_kwds={"groups": np.column_stack([codes, period]), "use_correction": False}
    )
    np.testing.assert_allclose(got.covariance_array[1:3, 1:3], fit.cov_params(), rtol=1e-10)
    assert np.isnan(got.covariance_array[0]).all()
    with pytest.raises(OptionError, match="finite ratio"):
        two_way_covariance(curve, products, np.inf, blocks_of(X, y, codes, period), rows="weighted")
    with pytest.raises(OptionError, match="no period"):
        two_way_covariance(curve, products, "between", blocks_of(X, y, codes, period))


@pytest.mark.parametrize("offset", [1e6, 1e9])
@pytest.mark.parametrize(("kind", "root"), KINDS)
def test_offsets_cost_nothing(offset, kind, root):
    X, y, codes, period = made()
    X, y = np.round(X * 2**16) / 2**16, np.round(y * 2**16) / 2**16  # sums with the offset are exact
    far = X.copy()
    far[:, 1:] += offset
    curve, products = taken(X, y, codes)
    moved_curve, moved = taken(far, y - offset, codes)
    for psi in (0.0, 0.7, np.inf):
        here = robust_covariance(curve, products, psi, kind=kind, root=root).covariance_array[1:, 1:]
        there = robust_covariance(moved_curve, moved, psi, kind=kind, root=root).covariance_array[1:, 1:]
        # the same numbers after the shift; the unit means are rounded to about 1e-16 of their distance from the first one
        np.testing.assert_allclose(there, here, rtol=1e-10, atol=1e-12 * np.nanmax(np.abs(here)))
    here = two_way_covariance(curve, products, 0.7, blocks_of(X, y, codes, period)).covariance_array[1:, 1:]
    there = two_way_covariance(
        moved_curve, moved, 0.7, blocks_of(far, y - offset, codes, period)
    ).covariance_array
    np.testing.assert_allclose(there[1:, 1:], here, rtol=1e-10, atol=1e-12 * np.abs(here).max())


@pytest.mark.parametrize(("kind", "root"), KINDS)
@pytest.mark.parametrize("psi", [0.0, 2.0])
def test_rows_units_scale_and_columns_may_be_rearranged(kind, root, psi):
    X, y, codes, _ = made()
    curve, products = taken(X, y, codes)
    base = robust_covariance(curve, products, psi, kind=kind, root=root)
    rng = np.random.default_rng(2)
    shuffle, labels = rng.permutation(len(y)), rng.permutation(10)
    other = robust_covariance(
        *taken(X[shuffle], y[shuffle], labels[codes][shuffle]), psi, kind=kind, root=root
    )
    assert distance(other.covariance_array, base.covariance_array) < 1e-12
    mix = np.array([[1, 0.5, 0, 0], [0, 2, 1, 0], [0, 1, -1, 0.3], [0, 0, 0, 1.5]])
    other = robust_covariance(*taken(X @ mix, -3 * y + X[:, 1], codes), psi, kind=kind, root=root)
    back = mix @ other.covariance_array @ mix.T / 9
    assert distance(back, base.covariance_array) < 1e-11
    if kind == "CR2":
        weights = np.array([[1.0, 2, 0, -1], [0, 1, 1, 0]])
        np.testing.assert_allclose(
            other.satterthwaite_df(weights @ mix), base.satterthwaite_df(weights), rtol=1e-10
        )


@pytest.mark.parametrize("root", ROOTS)
def test_degrees_of_freedom_of_combinations(root):
    X, y, codes, _ = made()
    curve, products = taken(X, y, codes)
    got = robust_covariance(curve, products, 0.9, kind="CR2", root=root)
    dense = on_curve(X, y, codes, 0.9)
    weights = np.array([[0, 1.0, -1, 0], [1, 0.2, 3, -1], [0, 0, 0, 5]])
    np.testing.assert_allclose(
        got.satterthwaite_df(weights), [dense.degrees(w, root)[0] for w in weights], rtol=1e-11
    )
    np.testing.assert_allclose(
        got.satterthwaite_df(weights[0]), got.satterthwaite_df(-7 * weights[0]), rtol=1e-12
    )
    np.testing.assert_allclose(got.satterthwaite_df(np.eye(4)), got.df, rtol=1e-12)


def test_equal_means_have_one_degree_of_freedom_less_than_units():
    codes = np.repeat(np.arange(9), 4)
    y = np.random.default_rng(0).normal(size=36)
    curve, products = taken(np.ones((36, 1)), y, codes, ["Intercept"])
    for psi in (0.0, 0.5, 20.0):
        got = robust_covariance(curve, products, psi, kind="CR2")
        means = y.reshape(9, 4).mean(axis=1)
        assert got.df[0] == pytest.approx(
            8, rel=1e-12
        )  # closed form: a mean of nine equally distributed unit means
        assert got.covariance_array[0, 0] == pytest.approx(means.var(ddof=1) / 9, rel=1e-12)
        deleted = robust_covariance(curve, products, psi, kind="CR3", multiplier="jackknife")
        assert deleted.covariance_array[0, 0] == pytest.approx(means.var(ddof=1) / 9, rel=1e-12)


def test_both_roots_agree_exactly_where_they_should_and_differ_elsewhere():
    panel = BY_NAME["balanced_closed"]
    closed = taken(panel.X, panel.y, panel.units, panel.names)
    X, y, codes, _ = made()
    mixed = taken(X, y, codes)

    def gap(pair, psi):
        first, second = (robust_covariance(*pair, psi, kind="CR2", root=root) for root in ROOTS)
        np.testing.assert_allclose(first.expectation, second.expectation, rtol=1e-12, equal_nan=True)
        there = np.isfinite(np.diag(first.covariance_array))
        return distance(
            first.covariance_array[np.ix_(there, there)], second.covariance_array[np.ix_(there, there)]
        )

    assert gap(closed, 1.0) < 1e-13
    assert gap(mixed, 0.0) == 0.0
    assert gap(mixed, np.inf) == 0.0
    assert gap(mixed, 1.0) > 1e-4


@pytest.mark.parametrize("psi", [0.0, 0.7, np.inf])
def test_a_unit_that_carries_a_column_is_named(psi):
    X, y, codes, _ = made()
    alone = np.where(codes == 4, np.random.default_rng(0).normal(size=len(y)), 0.0)
    X = np.column_stack([X, alone])
    names = ["Intercept", "first", "second", "between", "alone"]
    curve, products = taken(X, y, codes, names)
    deleted = robust_covariance(curve, products, psi, kind="CR3")
    assert deleted.status == (
        "partly not defined: without unit 4 the columns are dependent, so that deleting it leaves no estimate of alone"
    )
    assert np.isnan(deleted.standard_errors["alone"])
    without = np.isfinite(deleted.standard_errors)
    assert without[["first", "second"]].all()
    for root in ROOTS:
        got = robust_covariance(curve, products, psi, kind="CR2", root=root)
        assert got.status.startswith("generalised inverse: without unit 4 the columns are dependent")
        assert got.status.endswith("understated for alone")
        assert (
            got.expectation[-1] < 0.9
        )  # the coefficient's variance is understated and the figure says by how much
        assert got.expectation[1] == pytest.approx(1.0, abs=0.3)
    plain = robust_covariance(curve, products, psi, kind="CR1")
    assert plain.status.startswith("partly zero: without unit 4")


@pytest.mark.parametrize("panel", SMALL, ids=lambda panel: panel.name)
def test_cr3_is_missing_exactly_where_a_deletion_loses_a_coefficient(panel):
    curve, products = taken(panel.X, panel.y, panel.units, panel.names)
    got = robust_covariance(curve, products, 0.7, kind="CR3")
    X, _, L = centred(panel)
    X = X / np.abs(X).max(axis=0)
    lost = np.zeros(curve.rank, dtype=bool)
    for unit in np.unique(panel.units):
        _, values, directions = np.linalg.svd(X[panel.units != unit])
        null = directions[(np.append(values, np.zeros(len(directions) - len(values))) <= 1e-8 * values[0])].T
        lost |= (np.abs((L * (1 / np.abs(centred(panel)[0]).max(axis=0))) @ null) > 1e-6).any(axis=1)
    assert (np.isnan(got.standard_errors.to_numpy()) == lost).all()
    assert got.status.startswith("partly not defined" if lost.any() else "computed")


def test_fits_give_their_ratio_and_convention():
    X, y, codes, _ = made(units=20)
    curve, products = taken(X, y, codes)

    def fitted(key, **given):
        return fit_route(curve, key, given, "no periods")

    reml = fitted("reml")
    same = robust_covariance(curve, products, reml.ratio, kind="CR2")
    np.testing.assert_array_equal(
        robust_covariance(curve, products, reml, kind="CR2").covariance_array, same.covariance_array
    )
    for key, point in (("pooled", 0.0), ("within", np.inf), ("between", "between")):
        np.testing.assert_array_equal(
            robust_covariance(curve, products, fitted(key)).covariance_array,
            robust_covariance(curve, products, point).covariance_array,
        )
    np.testing.assert_array_equal(
        robust_covariance(curve, products, fitted("between", between="unweighted")).covariance_array,
        robust_covariance(curve, products, "between", between="unweighted").covariance_array,
    )
    with pytest.raises(OptionError, match="no order of periods"):
        robust_covariance(curve, products, fitted("first_difference"))
    with pytest.raises(IdentificationError, match="gave no coefficients"):
        robust_covariance(curve, products, replace(reml, beta=np.full(4, np.nan), status="likelihood flat"))
    with pytest.raises(DataError, match="not of the same rows"):
        robust_covariance(curve, products.without_sizes(2), reml)
    other = UnitProducts.from_arrays(X + np.array([0, 1e-3, 0, 0]) * X**2, y, codes)
    with pytest.raises(DataError, match="not of the same rows"):
        robust_covariance(curve, replace(other, shift=products.shift, scale=products.scale), reml)


def test_one_row_units_left_out_in_all_three():
    X, y, codes, _ = made(units=20, sizes=(1, 3, 5))
    curve, products = taken(X, y, codes)
    reml = fit_route(curve, "reml", {}, "no periods")
    smaller, fewer = curve_of(curve.moments.without_one_row_units()), products.without_sizes(1)
    with pytest.raises(DataError, match="the fit uses"):
        robust_covariance(smaller, fewer, reml)
    here = (np.bincount(codes) > 1)[codes]
    expected = robust_covariance(*taken(X[here], y[here], codes[here]), 1.0, kind="CR2")
    got = robust_covariance(smaller, fewer, 1.0, kind="CR2")
    assert distance(got.covariance_array, expected.covariance_array) < 1e-12


def test_multipliers_are_named_and_have_their_value():
    X, y, codes, _ = made(units=12)
    curve, products = taken(X, y, codes)
    n, N = len(y), 12
    for point, K in ((0.5, 4), (np.inf, 2), ("between", 4)):
        zero = robust_covariance(curve, products, point, kind="CR0").covariance_array
        rows = N if point == "between" else n
        values = {
            "units": N / (N - 1),
            "units_and_rows": N / (N - 1) * (rows - 1) / (rows - K),
            "units_and_rank": N / (N - K),
        }
        if point == np.inf:
            values["units_and_rows_constant"] = N / (N - 1) * (n - 1) / (n - 3)
            values["units_and_rows_intercepts"] = N / (N - 1) * (n - 1) / (n - N - 2)
        for name, value in values.items():
            got = robust_covariance(curve, products, point, kind="CR1", multiplier=name)
            np.testing.assert_allclose(got.covariance_array, value * zero, rtol=1e-14)
            assert got.multiplier == name
            assert got.multiplier_values["unit"] == pytest.approx(value, rel=1e-15)
            assert any(
                note == "no multiplier"
                if name == "none"
                else note.startswith(f"multiplier {name} = ") and f"{value:.6g}" in note
                for note in got.notes
            )
    assert robust_covariance(curve, products, 0.5).multiplier == "units"


def test_what_is_not_allowed_is_refused_with_the_allowed_values():
    X, y, codes, _ = made(units=12)
    curve, products = taken(X, y, codes)
    with pytest.raises(OptionError, match="CR0, CR1, CR2, CR3"):
        robust_covariance(curve, products, 0.0, kind="HC1")
    with pytest.raises(OptionError, match="units_and_rows"):
        robust_covariance(curve, products, 0.0, multiplier="rows")
    with pytest.raises(OptionError, match="not known"):
        robust_covariance(curve, products, 0.0, multiplier="units_and_rows_intercepts")
    with pytest.raises(OptionError, match="pustejovsky_tipton, quasi_demeaned"):
        robust_covariance(curve, products, 0.0, kind="CR2", root="other")
    with pytest.raises(OptionError, match="without a multiplier"):
        robust_covariance(curve, products, 0.0, kind="CR1", multiplier="none")
    with pytest.raises(OptionError, match="from 0 to infinity"):
        robust_covariance(curve, products, -0.1)
    with pytest.raises(OptionError, match="between"):
        robust_covariance(curve, products, "within units")
    with pytest.raises(OptionError, match="belong to CR2"):
        robust_covariance(curve, products, 0.0).satterthwaite_df([1, 0, 0, 0])
    two = robust_covariance(curve, products, np.inf, kind="CR2")
    with pytest.raises(IdentificationError, match="does not determine x0"):
        two.satterthwaite_df([1, 1, 0, 0])
    with pytest.raises(OptionError, match="one finite weight"):
        two.satterthwaite_df([1, 1])
    with pytest.raises(OptionError, match="only zero weights"):
        two.satterthwaite_df([0, 0, 0, 0])
    with pytest.raises(ValueError, match="read-only"):
        two.covariance_array[0, 0] = 1.0


def test_few_units_are_said():
    panel = BY_NAME["two_units"]
    curve, products = taken(panel.X, panel.y, panel.units, panel.names)
    got = robust_covariance(curve, products, 0.5, kind="CR2")
    assert any("2 units for 2 coefficients" in note for note in got.notes)
    assert any("degrees of freedom below 4" in note for note in got.notes)
    with pytest.raises(IdentificationError, match="no degrees of freedom"):
        robust_covariance(curve, products, 0.5, multiplier="units_and_rank")
    one = taken(
        panel.X[panel.units == 0], panel.y[panel.units == 0], panel.units[panel.units == 0], panel.names
    )
    with pytest.raises(IdentificationError, match="at least two"):
        robust_covariance(*one, 0.0)


def test_one_row_units_are_counted_and_said_in_within():
    panel = BY_NAME["singletons_both"]
    curve, products = taken(panel.X, panel.y, panel.units, panel.names)
    got = robust_covariance(curve, products, np.inf)
    assert any("7 of 12 units have one row" in note for note in got.notes)


def test_tables_are_by_term():
    panel = BY_NAME["mild_both"]
    curve, products = taken(panel.X, panel.y, panel.units, panel.names)
    got = robust_covariance(curve, products, 1.0, kind="CR2")
    assert list(got.covariance.index) == list(got.covariance.columns) == list(panel.names)
    pd.testing.assert_series_equal(
        got.standard_errors,
        pd.Series(np.sqrt(np.diag(got.covariance_array)), index=list(panel.names), name="CR2"),
    )
    assert list(got.degrees_of_freedom.index) == list(panel.names)
