"""Spectrum and null laws of the likelihood ratios against dense matrices, brute force and closed forms."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from oracle.dense import Dense
from panels import BY_NAME, PANELS, Panel
from scipy import stats

import mixbridge.inference.spectrum as spectrum_module
from mixbridge.errors import DataError, OptionError
from mixbridge.inference.likelihood_ratio import (
    NullLaw,
    draw_squares,
    mixture_p,
    null_laws,
    observed_ratio,
    suprema,
)
from mixbridge.inference.pivot import no_pivot
from mixbridge.inference.spectrum import spectrum_of
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import Profile, fit_route

KINDS = ("ml", "reml")
SMALL = (
    "mild_both",
    "singletons_both",
    "huge_unit",
    "two_units",
    "balanced_both",
    "mild_hidden",
    "two_minima_both",
)


@cache
def curve(name: str) -> Curve:
    panel = BY_NAME[name]
    codes = np.unique(panel.units, return_inverse=True)[1]
    return curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))


def settled(panel: Panel) -> np.ndarray:
    """Move X to the origin, exactly, and scale it to unit length: the same column space."""
    x = panel.X.copy()
    if panel.has_intercept:
        free = np.array([name != "Intercept" for name in panel.names])
        x[:, free] -= x[0, free]
        x[:, free] -= x[:, free].mean(axis=0)
    return x / np.sqrt((x**2).sum(axis=0))


@cache
def dense(name: str) -> tuple[np.ndarray, np.ndarray]:
    """Eigenvalues of K'ZZ'K, increasing, and the coordinates of y in its eigenvectors; everything n by n."""
    panel = BY_NAME[name]
    x = settled(panel)
    basis = np.linalg.qr(x, mode="complete")[0][:, x.shape[1] :]
    z = Dense(panel.X, panel.y, panel.units).Z
    values, vectors = np.linalg.eigh(basis.T @ z @ z.T @ basis)
    return values, vectors.T @ (basis.T @ (panel.y - panel.y[0] * panel.has_intercept))


@pytest.mark.parametrize("name", [panel.name for panel in PANELS])
def test_spectrum_is_that_of_the_dense_matrix(name):
    s = spectrum_of(curve(name))
    expected = dense(name)[0]
    mine = np.concatenate([np.zeros(s.zeros), np.repeat(s.values, s.multiplicities.astype(int))])
    # both sides round relative to the largest eigenvalue; near-collinear panels (kappa 1e5) lose five digits
    # of sixteen
    np.testing.assert_allclose(mine, expected, rtol=0, atol=1e-10 * expected[-1])
    assert s.multiplicities.sum() == curve(name).units - curve(name).rank_constant
    assert s.n - s.rank == s.multiplicities.sum() + s.zeros


def test_spectrum_of_many_units_needs_no_large_matrix():
    rng = np.random.default_rng(5)
    sizes = rng.permutation(np.repeat(np.arange(1, 21), 500))
    codes = np.repeat(np.arange(sizes.size), sizes)
    x = np.column_stack(
        [np.ones(codes.size), rng.normal(size=codes.size), rng.normal(size=sizes.size)[codes]]
    )
    big = curve_of(Moments.from_arrays(x, rng.normal(size=codes.size), codes))
    s = spectrum_of(big)
    assert s.values.size <= 20 + 20 * 3
    assert s.multiplicities.sum() == sizes.size - 2
    # the trace without any eigenvalue: n - tr (X'X)^-1 X'ZZ'X
    totals = np.column_stack([np.bincount(codes, column) for column in x.T])
    trace = codes.size - np.trace(np.linalg.solve(x.T @ x, totals.T @ totals))
    assert s.trace == pytest.approx(trace, rel=1e-12)  # two sums of 1e5 terms, pairwise


def test_too_many_ranks_are_refused_with_their_number(monkeypatch):
    monkeypatch.setattr(spectrum_module, "RANK_LIMIT", 5)
    with pytest.raises(
        DataError,
        match=r"ranks adding up to 8 over 7 distinct unit sizes; exact null laws are taken up to 5",
    ):
        spectrum_of(curve("mild_both"))


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("name", SMALL)
def test_deviance_in_spectral_form_is_the_profile(name, kind):
    s = spectrum_of(curve(name))
    values, coordinates = dense(name)
    psi = np.array([0.0, 1e-3, 0.1, 1.0, 30.0])
    r = (coordinates**2 / (1.0 + np.multiply.outer(psi, np.maximum(values, 0.0)))).sum(axis=1)
    roots, powers = (s.values, s.multiplicities) if kind == "reml" else (s.sizes, s.counts)
    m = s.n - (s.rank if kind == "reml" else 0)
    spectral = m * np.log(r / r[0]) + np.log1p(np.multiply.outer(psi, roots)) @ powers
    profile = Profile(curve(name), kind).values(psi).deviance
    # deviances of order 100, sixteen digits less the condition of these panels (below 1e3)
    np.testing.assert_allclose(profile - profile[0], spectral, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize(
    "name", [panel.name for panel in PANELS if not panel.tags & {"offset", "ill", "psi_huge"}]
)
def test_supremum_of_the_data_is_the_certified_optimum(name, kind):
    c = curve(name)
    if no_pivot(c):
        pytest.skip(no_pivot(c))
    fit = fit_route(c, kind, {}, "not needed")
    s = spectrum_of(c)
    _, coordinates = dense(name)
    squares = coordinates[s.zeros :] ** 2
    first = np.concatenate([[0], np.cumsum(s.multiplicities.astype(int))[:-1]])
    between = np.add.reduceat(squares, first)[None, :]
    within = np.array([(coordinates[: s.zeros] ** 2).sum()])
    found = suprema(s, between, within, kind)
    # the height is right to second order in psi: both optima agree to the certificate's own epsilon
    assert found.value[0] == pytest.approx(observed_ratio(c, kind, fit.ratio), abs=1e-8)
    assert found.psi[0] == pytest.approx(
        fit.ratio, rel=1e-5, abs=1e-12
    )  # after a Newton step shorter than 1e-3
    assert (found.psi[0] == 0.0) == (fit.ratio == 0.0)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("name", SMALL)
def test_suprema_are_not_below_a_fine_grid_and_not_much_above(name, kind):
    s = spectrum_of(curve(name))
    between, within = next(draw_squares(s, 150, np.random.default_rng(3)))
    found = suprema(s, between, within, kind).value
    roots, powers = (s.values, s.multiplicities) if kind == "reml" else (s.sizes, s.counts)
    m = s.n - (s.rank if kind == "reml" else 0)
    grid = np.concatenate([[0.0], np.logspace(-6, 8, 20_001)])
    share = 1.0 / (1.0 + np.multiply.outer(s.values, grid))
    r = within[:, None] + between @ share
    height = m * np.log(r[:, :1] / r) - np.log1p(np.multiply.outer(grid, roots)) @ powers
    best = height.max(axis=1)
    assert (found >= best - 1e-9).all()
    # neighbours on the fine grid differ by 1.6e-3 in log psi; a maximum with bend |f''| <= m in log psi is
    # missed by at most m (1.6e-3)^2 / 8
    assert (found <= best + m * 1.6e-3**2 / 8).all()


@pytest.mark.parametrize("name", ["mild_both", "singletons_both"])
def test_null_law_is_that_of_refitted_data(name):
    """Two-sample tests against refitted rows; a right program fails any of them about once in a thousand."""
    panel, draws = BY_NAME[name], 400
    codes = np.unique(panel.units, return_inverse=True)[1]
    rng = np.random.default_rng(11)
    refitted: dict[str, list[float]] = {kind: [] for kind in KINDS}
    for _ in range(draws):
        c = curve_of(Moments.from_arrays(panel.X, 3.0 + 2.0 * rng.normal(size=codes.size), codes))
        for kind, values in refitted.items():
            values.append(observed_ratio(c, kind, fit_route(c, kind, {}, "not needed").ratio))
    laws = null_laws(spectrum_of(curve(name)), 40_000, 12)
    for kind in KINDS:
        mine, theirs = laws[kind].sorted, np.array(refitted[kind])
        zero = (theirs == 0.0).mean()
        error = np.sqrt(zero * (1.0 - zero) / draws)
        assert abs(laws[kind].zero - zero) < 4.0 * error
        assert stats.ks_2samp(mine[mine > 0.0], theirs[theirs > 0.0]).pvalue > 2.5e-4


def test_null_law_in_closed_form_where_all_eigenvalues_are_equal():
    """The statistic is a function of F; distance bounded by Dvoretzky, Kiefer and Wolfowitz."""
    s = spectrum_of(curve("balanced_one_way"))
    assert s.values.size == 1
    k, z, m = s.multiplicities[0], s.zeros, s.n - s.rank
    f = np.linspace(1.0, 12.0, 200)
    statistic = m * np.log((k * f / z + 1.0) / (1.0 + k / z)) - k * np.log(f)
    draws = 50_000
    law = null_laws(s, draws, 7)["reml"]
    share = np.searchsorted(law.sorted, statistic, side="right") / draws
    bound = np.sqrt(np.log(2.0 / 1e-6) / (2.0 * draws))  # exceeded once in a million
    assert np.abs(share - stats.f.cdf(f, k, z)).max() < bound
    assert abs(law.zero - stats.f.cdf(1.0, k, z)) < bound


def test_draws_have_the_law_they_should():
    s = spectrum_of(curve("many_sizes"))
    psi, draws = 0.7, 30_000
    parts = list(draw_squares(s, draws, np.random.default_rng(2), psi))
    between = np.vstack([b for b, _ in parts]) / (1.0 + s.values * psi)
    assert between.shape == (draws, s.values.size)
    error = np.sqrt(2.0 * s.multiplicities / draws)
    assert (np.abs(between.mean(axis=0) - s.multiplicities) < 4.5 * error).all()
    within = np.concatenate([w for _, w in parts])
    assert stats.kstest(within, stats.chi2(s.zeros).cdf).pvalue > 1e-4


def test_draws_are_repeatable_and_tell_their_progress():
    s = spectrum_of(curve("mild_both"))
    seen: list[tuple[int, int]] = []
    one = null_laws(s, 12_345, 9, progress=lambda done, of: seen.append((done, of)))
    two = null_laws(s, 12_345, 9)
    for kind in KINDS:
        np.testing.assert_array_equal(one[kind].sorted, two[kind].sorted)
    assert seen[-1] == (12_345, 12_345)
    assert [done for done, _ in seen] == sorted({done for done, _ in seen})
    assert (null_laws(s, 12_345, 10)["ml"].sorted != one["ml"].sorted).any()


@pytest.mark.parametrize("draws", [0, -1, 1.5, True])
def test_draws_must_be_a_positive_whole_number(draws):
    with pytest.raises(OptionError, match=r"draws=.*positive integer"):
        null_laws(spectrum_of(curve("mild_both")), draws)


def test_p_value_counts_draws_not_below():
    law = NullLaw("reml", np.array([0.0, 0.0, 1.0, 2.0]), 1)
    assert law.zero == 0.5
    assert law.p_value(0.0) == (1.0, 0.0)
    assert law.p_value(1.0)[0] == pytest.approx(3 / 5)
    assert law.p_value(2.5)[0] == pytest.approx(1 / 5)
    assert mixture_p(0.0) == 1.0
    assert mixture_p(2.705543454095404) == pytest.approx(0.05, rel=1e-12)
