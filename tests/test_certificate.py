"""The certificate: bounds that hold, the right one of two minima, and nothing claimed that was not shown."""

from __future__ import annotations

import dataclasses
import itertools
import math
from functools import cache

import numpy as np
import pytest
from mp_likelihood import mp_optimum, mp_profile
from panels import BY_NAME, PANELS, tagged
from two_minima import draw, search_two_minima

from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import Certificate, Profile, certificate, fit_route
from mixbridge.routes.certificate import certify
from mixbridge.routes.forms import value
from mixbridge.routes.likelihood import Values
from mixbridge.routes.quadratic import remainder_form

EPS = float(np.finfo(float).eps)
KINDS = ("reml", "ml")


def curve_of_arrays(X, y, units) -> Curve:
    return curve_of(Moments.from_arrays(X, y, np.unique(units, return_inverse=True)[1]))


@cache
def curve_for(name: str) -> Curve:
    panel = BY_NAME[name]
    return curve_of_arrays(panel.X, panel.y, panel.units)


def limit_of(curve: Curve) -> float:
    """lim psi^2 |r'|: the unweighted form of the unit remainders, in whitened units."""
    return value(curve, remainder_form(curve, weighted=False)) / curve.unit


def certified(curve: Curve, kind: str) -> Certificate:
    return certify(Profile(curve, kind), curve.within_residual, limit_of(curve))


def random_panels(seed: int, count: int):
    """Small unbalanced panels of the kind in which two minima occur, usable by both likelihoods."""
    found = attempt = 0
    while found < count:
        X, y, units = draw(seed, attempt)
        attempt += 1
        if len(y) - len(np.unique(units)) > X.shape[1] and np.linalg.matrix_rank(X) == X.shape[1]:
            curve = curve_of_arrays(X, y, units)
            if curve.units > curve.rank_constant:
                found += 1
                yield X, y, units, curve


# -- bounds ----------------------------------------------------------------------------------------


def bounds_on(v: Values) -> dict[str, float]:
    """The bounds of the module's docstring, written down again, for the interval between two values."""
    (r_a, r_b), (r1_a, r1_b), (r2_a, r2_b) = v.r, v.r1, v.r2
    (g1_a, g1_b), (g2_a, g2_b), g_a = v.g1, v.g2, v.g[0]
    return {
        "value": v.m * math.log(r_b) + g_a,
        "slope low": v.m * r1_a / r_b + g1_b,
        "slope high": v.m * r1_b / r_a + g1_a,
        "bend low": v.m * (r2_b / r_a - (r1_a / r_b) ** 2) + g2_a,
        "bend high": v.m * (r2_a / r_b - (r1_b / r_a) ** 2) + g2_b,
    }


@pytest.mark.parametrize("kind", KINDS)
def test_bounds_hold_inside_random_intervals(kind):
    rng = np.random.default_rng(20)
    for *_, curve in random_panels(20, 60):
        profile = Profile(curve, kind)
        for _ in range(4):
            a, b = np.sort(10.0 ** rng.uniform(-5, 4, size=2) * rng.choice([0.0, 1.0, 1.0, 1.0], size=2))
            inside = profile.values(a + (b - a) * np.sort(rng.random(40)) ** rng.choice([1, 4]))
            bound = bounds_on(profile.values(np.array([a, b])))
            # rounding of sums of m terms at the size of the terms
            slack = 1e3 * EPS * (profile.m * np.abs(inside.r1 / inside.r) + np.abs(inside.g1) + profile.m)
            assert (inside.deviance >= bound["value"] - slack).all()
            assert (inside.slope >= bound["slope low"] - slack).all()
            assert (inside.slope <= bound["slope high"] + slack).all()
            curl = (
                1e3
                * EPS
                * profile.m
                * (inside.r2 / inside.r + (inside.r1 / inside.r) ** 2 + np.abs(inside.g2))
            )
            assert (inside.bend >= bound["bend low"] - curl).all()
            assert (inside.bend <= bound["bend high"] + curl).all()


@pytest.mark.parametrize("kind", KINDS)
def test_settled_intervals_hold_what_they_say(kind):
    """Where the engine calls an interval settled, a fine grid inside shows no more sign changes than its ends."""
    rng = np.random.default_rng(21)
    settled_intervals = open_intervals = 0
    for *_, curve in random_panels(21, 60):
        profile = Profile(curve, kind)
        grid = np.concatenate([[0.0], np.sort(10.0 ** rng.uniform(-4, 4, size=8))])
        ends = profile.values(grid)
        for i, settled in enumerate(certificate._settled(ends)):
            settled_intervals, open_intervals = settled_intervals + settled, open_intervals + (not settled)
            if settled:
                slope = profile.values(np.linspace(grid[i], grid[i + 1], 200)).slope
                scale = np.abs(slope).max()
                signs = np.sign(
                    slope[np.abs(slope) > 1e-9 * scale]
                )  # a zero is where rounding decides the sign
                assert (np.diff(signs) != 0).sum() <= 1
                assert ((np.diff(signs) != 0).sum() == 1) == (signs[0] != signs[-1])
    assert settled_intervals > 100
    assert open_intervals > 50


@pytest.mark.parametrize("kind", KINDS)
def test_tail_bounds_hold(kind):
    for *_, curve in random_panels(22, 60):
        profile, limit = Profile(curve, kind), limit_of(curve)
        for b in (0.1, 1.0, 30.0, 1e4):
            at = profile.values(np.array([b]))
            beyond = profile.values(b * np.logspace(0, 6, 60))
            floor = profile.m * np.log(curve.within_residual) + at.g[0]
            slack = 1e3 * EPS * profile.m * np.abs(floor)
            assert (beyond.deviance >= floor - slack).all()
            low = b * at.g1[0] - profile.m * limit / (b * curve.within_residual)
            assert (beyond.psi * beyond.slope >= low - 1e3 * EPS * (profile.m + np.abs(low))).all()
            if certificate._tail_settled(at, curve.within_residual, limit):
                assert (beyond.slope > 0).all()


@pytest.mark.parametrize("kind", KINDS)
def test_monotone_parts(kind):
    """What the bounds rest on: r falls, is convex, r'' falls; g rises, is concave, g'' rises; r stays above RSS_w."""
    for *_, curve in random_panels(23, 40):
        v = Profile(curve, kind).values(np.concatenate([[0.0], np.logspace(-4, 6, 80)]))
        small = 1e4 * EPS  # whitened: r(0) = 1; derivatives at most of the size at 0
        assert (np.diff(v.r) <= small).all()
        assert (v.r >= curve.within_residual - small).all()
        assert (v.r1 <= 0).all()
        assert (np.diff(v.r1) >= -small * abs(v.r1[0])).all()
        assert (np.diff(v.r2) <= small * v.r2[0]).all()
        assert (np.diff(v.g) >= -small * v.g[-1]).all()
        assert (v.g1 >= -small * v.g1[0]).all()
        assert (np.diff(v.g1) <= small * v.g1[0]).all()
        assert (np.diff(v.g2) >= small * v.g2[0]).all()


def test_limit_is_the_limit():
    for *_, curve in random_panels(24, 20):
        v = Profile(curve, "ml").values(np.array([1e7]))
        # psi^2 |r'| -> L with relative error of order 1 / (T psi) <= 1e-7 times the spread of sizes (at
        # most 20)
        assert -(v.psi[0] ** 2) * v.r1[0] == pytest.approx(limit_of(curve), rel=1e-4)


# -- two minima ------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("panel", tagged("two_minima"), ids=lambda panel: panel.name)
def test_two_minima(panel, kind):
    best = mp_optimum(panel.X, panel.y, panel.units, kind)
    found = certified(curve_for(panel.name), kind)
    minima = sorted(
        (point for point in found.stationary if "minimum" in point.kind), key=lambda point: point.deviance
    )
    assert len(minima) == len(best.minima)
    assert len(minima) == 2 or f"{kind}_two" not in panel.tags
    assert found.psi == minima[0].psi
    for point, (psi, deviance) in zip(minima, best.minima, strict=True):
        # an optimum is located to the square root of rounding by values, to rounding over curvature by
        # slopes: here 1e-9
        assert point.psi == pytest.approx(psi, rel=1e-9, abs=0.0)
        assert point.deviance == pytest.approx(deviance - best.deviance, abs=found.epsilon)
    interior = [point.psi for point in found.stationary if point.kind != "boundary minimum"]
    assert len(interior) == len(best.stationary)
    assert interior == pytest.approx(list(best.stationary), rel=1e-8)
    if f"lowest_zero_{kind}" in panel.tags:
        assert found.psi == 0.0
    if f"lowest_interior_{kind}" in panel.tags:
        assert found.psi > 0.0
    kinds = [point.kind for point in found.stationary]
    assert all(("minimum" in first) != ("minimum" in second) for first, second in itertools.pairwise(kinds))
    assert found.excluded


def test_newly_searched_two_minima_panels():
    """A fresh search finds panels not in the list, and the certificate agrees with a scan at fifty digits."""
    found = [item for item in search_two_minima(seed=11, tries=150) if item.kinds]
    assert found
    for item in found[:2]:
        X, y, units = draw(item.seed, item.attempt)
        for kind in item.kinds:
            best = mp_optimum(X, y, units, kind)
            result = certified(curve_of_arrays(X, y, units), kind)
            assert result.psi == pytest.approx(best.psi, rel=1e-9)
            assert sum("minimum" in point.kind for point in result.stationary) == len(best.minima)


@pytest.mark.parametrize("kind", KINDS)
def test_nothing_on_a_fine_grid_is_better(kind):
    """On random small panels no ratio on a grid over fourteen decades beats the optimum by more than epsilon."""
    for *_, curve in random_panels(25, 120):
        profile = Profile(curve, kind)
        found = certified(curve, kind)
        assert found.excluded
        grid = profile.values(np.concatenate([[0.0], np.logspace(-6, 8, 300)]))
        best = float(profile.values(np.array([found.psi])).deviance[0])
        assert grid.deviance.min() >= best - found.epsilon
        at = np.searchsorted(grid.psi, [point.psi for point in found.stationary if point.psi > 0])
        changes = np.flatnonzero(np.sign(grid.slope[:-1]) != np.sign(grid.slope[1:])) + 1
        assert set(changes) <= set(at)  # every sign change seen was listed


# -- epsilon ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_epsilon_covers_the_rounding_of_the_optimum(kind):
    for panel in PANELS[::9]:
        found = certified(curve_for(panel.name), kind)
        best = mp_optimum(panel.X, panel.y, panel.units, kind)
        reached = float(mp_profile(panel.X, panel.y, panel.units, found.psi, kind))
        assert reached - best.deviance <= found.epsilon
        assert reached - best.deviance >= -1e-12 * abs(
            best.deviance
        )  # the reference is the minimum, rounded to doubles
        assert found.epsilon >= 32 * Profile(curve_for(panel.name), kind).m * EPS
        assert found.epsilon <= 1e-6


def test_epsilon_grows_with_cancellation():
    """A residual that is 1e-5 of the outcome costs ten digits of r, and epsilon says so."""
    rng = np.random.default_rng(5)
    units = np.repeat(np.arange(10), 4)
    x = rng.normal(size=40)
    noise = 0.3 * rng.normal(size=10)[units] + rng.normal(size=40)
    X = np.column_stack([np.ones(40), x])
    far = noise + 1e7 * rng.normal(size=10)[units]
    near, wide = (
        certified(curve_of_arrays(X, noise, units), "ml"),
        certified(curve_of_arrays(X, far, units), "ml"),
    )
    assert wide.epsilon > near.epsilon
    assert wide.psi > 1e10
    assert f"{wide.epsilon:.1g}" in wide.lines()[0]


# -- edges -----------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_zero(kind):
    for panel in tagged("negative"):
        curve = curve_for(panel.name)
        found = certified(curve, kind)
        assert found.psi == 0.0
        assert found.excluded
        assert found.slope_at_zero > 0.0
        assert found.slope_at_zero == float(Profile(curve, kind).values(np.array([0.0])).slope[0])
        assert found.stationary[0].kind == "boundary minimum"
        assert any(line.startswith("zero:") for line in found.lines())
        fit = fit_route(curve, kind, {}, "")
        assert fit.unit_variance == 0.0
        assert any("boundary" in note for note in fit.notes)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("size", [1e3, 1e6, 1e9])
def test_huge_ratio(kind, size):
    """Balanced one-way panels in closed form: psi = (between mean square / within mean square - 1) / T."""
    rng = np.random.default_rng(6)
    units = np.repeat(np.arange(9), 5)
    y = size * rng.normal(size=9)[units] + rng.normal(size=45)
    means = np.bincount(units, y) / 5
    within = ((y - means[units]) ** 2).sum() / 36
    between = 5 * ((means - means.mean()) ** 2).sum() / (8 if kind == "reml" else 9)
    found = certified(curve_of_arrays(np.ones((45, 1)), y, units), kind)
    # the within mean square is formed from rows of size `size` rounded to eps: relative error size * eps *
    # few
    assert found.psi == pytest.approx((between / within - 1) / 5, rel=max(1e-12, 64 * EPS * size))
    assert found.excluded
    assert found.tail_from > 0.0
    assert [point.kind for point in found.stationary if "minimum" in point.kind] == ["minimum"]


def test_closed_form_balanced():
    panel, curve = BY_NAME["balanced_one_way"], curve_for("balanced_one_way")
    found = certified(curve, "reml")
    swamy = fit_route(curve, "swamy_arora", {}, "")
    assert found.psi == pytest.approx(swamy.ratio, rel=1e-12)  # condition one: a mean and two sums of squares
    assert len(panel.y) == 32


# -- it cannot be fooled ---------------------------------------------------------------------------


def coarse_certify(monkeypatch, curve: Curve, kind: str, points: int) -> Certificate:
    """Certify from a starting grid of very few points, which alone would miss minima."""
    plain = np.logspace

    def few(start, stop, num=50, **more):
        return plain(start, stop, points if num == 25 else num, **more)

    monkeypatch.setattr(certificate.np, "logspace", few)
    try:
        return certified(curve, kind)
    finally:
        monkeypatch.setattr(certificate.np, "logspace", plain)


@pytest.mark.parametrize("points", [1, 2, 3])
def test_a_coarse_start_changes_nothing(monkeypatch, points):
    """The grid only saves work: stationary points are found by the bounds, not by luck of the grid."""
    for panel in tagged("two_minima"):
        for kind in KINDS:
            usual = certified(curve_for(panel.name), kind)
            coarse = coarse_certify(monkeypatch, curve_for(panel.name), kind, points)
            assert [point.kind for point in coarse.stationary] == [point.kind for point in usual.stationary]
            assert coarse.psi == pytest.approx(usual.psi, rel=1e-9)
            assert coarse.excluded


def test_without_bounds_a_coarse_start_would_miss_a_minimum(monkeypatch):
    """The counterpart: were every interval called settled, the same coarse grid would lose stationary points."""
    monkeypatch.setattr(certificate, "_settled", lambda v: np.ones(len(v.psi) - 1, dtype=bool))
    lost = 0
    for panel in tagged("two_minima"):
        for kind in KINDS:
            best = mp_optimum(panel.X, panel.y, panel.units, kind)
            if best.slope_at_zero >= 0:
                found = coarse_certify(monkeypatch, curve_for(panel.name), kind, 1)
                lost += len(found.stationary) < len(best.stationary) + 1
    assert lost > 0


def test_no_claim_when_rounds_run_out(monkeypatch):
    """Stopped early, it lists what is open, and does not say that nothing is better."""
    monkeypatch.setattr(certificate, "MAX_ROUNDS", 1)
    panel = tagged("two_minima")[0]
    found = coarse_certify(monkeypatch, curve_for(panel.name), "reml", 1)
    assert found.unresolved
    assert not found.excluded
    text = "\n".join(found.lines())
    assert "did not exclude" in text
    assert "could not be told from zero" in text


def test_an_incomplete_certificate_is_noted_in_the_fit(monkeypatch):
    monkeypatch.setattr(certificate, "MAX_ROUNDS", 1)
    fit = fit_route(curve_for(tagged("two_minima")[0].name), "reml", {}, "")
    assert fit.certificate is not None
    assert not fit.certificate.excluded
    assert any("certificate is incomplete" in note for note in fit.notes)


def test_a_flat_stretch_is_not_certified(monkeypatch):
    """Where the derivative cannot be told from zero, that is listed and nothing is excluded."""

    class Flat(Profile):
        def values(self, psi):
            v = super().values(psi)
            hole = v.psi > 0.1
            level = super().values(np.array([0.1]))
            still = {name: np.where(hole, 0.0, getattr(v, name)) for name in ("r1", "r2", "g1", "g2")}
            stay = {name: np.where(hole, getattr(level, name)[0], getattr(v, name)) for name in ("r", "g")}
            return dataclasses.replace(v, **still, **stay)

    monkeypatch.setattr(certificate, "MAX_ROUNDS", 8)  # every round halves the whole stretch
    curve = curve_for("psi_zero_mild")
    assert certified(curve, "reml").excluded
    found = certify(Flat(curve, "reml"), curve.within_residual, limit_of(curve))
    assert found.unresolved
    assert not found.excluded


@pytest.mark.parametrize("panel", PANELS[::4], ids=lambda panel: panel.name)
def test_record(panel):
    found = certified(curve_for(panel.name), "reml")
    assert found.kind == "reml"
    assert found.evaluations < 400  # "about a hundred", several hundred where two minima nearly merge
    assert min(point.deviance for point in found.stationary if "minimum" in point.kind) == 0.0
    psis = [point.psi for point in found.stationary]
    assert psis == sorted(psis)
    assert found.unresolved == ()
    lines = found.lines()
    assert lines[0].startswith("value: no ratio >= 0 has a REML deviance lower by more than")
    assert lines[1].startswith("location:")
    assert "proof" not in " ".join(lines).lower()
