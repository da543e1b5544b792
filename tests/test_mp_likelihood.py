"""The 50-digit likelihood against dense algebra, closed forms and the REML equations; two minima."""

import numpy as np
import pytest
from mp_likelihood import mp_optimum, mp_profile, mp_slopes
from oracle import information_covariance, oracle_fit, reml_first_order
from panels import PANELS, Panel, tagged
from two_minima import search_two_minima

TIGHT = 1e-12  # some thousand roundings of a double
NOT_EXTREME = [p for p in PANELS if not p.tags & {"psi_huge", "offset", "scale", "ill", "two_minima"}]


def fit(panel: Panel, route: str, **conventions):
    return oracle_fit(panel.X, panel.y, panel.units, route, exact=True, **conventions)


def components(result) -> np.ndarray:
    return np.array([result.unit_variance_raw, result.idiosyncratic_variance])


def named(panels) -> dict:
    panels = list(panels)
    return {"argvalues": panels, "ids": [p.name for p in panels]}


@pytest.mark.parametrize("kind", ["reml", "ml"])
@pytest.mark.parametrize("panel", **named(NOT_EXTREME[::6]))
def test_profile_slope_and_dense_likelihood(panel, kind):
    formula, numeric = mp_slopes(panel.X, panel.y, panel.units, 0.7, kind)
    assert abs(formula - numeric) <= 1e-20 * (1 + abs(formula))  # central difference, step 1e-15, 50 digits
    best = mp_optimum(panel.X, panel.y, panel.units, kind)
    V = best.idiosyncratic_variance * np.eye(len(panel.y))
    V += best.unit_variance * (panel.units[:, None] == panel.units[None, :])
    W = np.linalg.inv(V)
    A = panel.X.T @ W @ panel.X
    e = panel.y - panel.X @ best.beta
    n, p = panel.X.shape
    value = np.linalg.slogdet(V)[1] + e @ W @ e
    xx = np.linalg.slogdet(panel.X.T @ panel.X)[1]
    value += (
        (n - p) * np.log(2 * np.pi) + np.linalg.slogdet(A)[1] if kind == "reml" else n * np.log(2 * np.pi)
    )
    # double precision; log-likelihoods are tens, conditions below 1e3
    assert best.log_likelihood_omitted == pytest.approx(-value / 2, rel=1e-10)
    assert best.log_likelihood == pytest.approx((-value + (xx if kind == "reml" else 0)) / 2, rel=1e-10)
    np.testing.assert_allclose(best.cov, np.linalg.inv(A), rtol=1e-8, atol=1e-12)
    for psi in (0.0, *np.logspace(-3, 3, 13)):
        assert mp_profile(panel.X, panel.y, panel.units, psi, kind) >= best.deviance - 1e-13 * abs(
            best.deviance
        )


@pytest.mark.parametrize("panel", **named(NOT_EXTREME[::6]))
def test_reml_equations_and_minque_at_the_optimum(panel):
    best = mp_optimum(panel.X, panel.y, panel.units, "reml")
    pair = (best.unit_variance, best.idiosyncratic_variance)
    za, zt, ra, rt = reml_first_order(panel.X, panel.y, panel.units, *pair, exact=True)
    if best.psi > 0:
        assert za == pytest.approx(zt, rel=TIGHT)
        assert ra == pytest.approx(rt, rel=TIGHT)
        again = fit(panel, "minque", prior=best.psi)
        np.testing.assert_allclose(components(again), pair, rtol=1e-11)
        # at its own prior the covariance of MINQUE is the inverse expected information of REML
        information = information_covariance(panel.X, panel.y, panel.units, *pair, "reml", exact=True)
        np.testing.assert_allclose(again.component_cov, information, rtol=1e-10)
    else:
        assert za <= zt


@pytest.mark.parametrize("panel", **named([p for p in tagged("balanced", "closed") if p.X.shape[1] == 1]))
def test_ml_information_in_closed_form(panel):
    """Balanced one-way: ML information is that of two mean squares with N and N(T - 1) degrees of freedom."""
    N, T = len(np.unique(panel.units)), np.bincount(panel.units)[0]
    s, a = 1.7, 0.6
    both, total = 2 * s**2 / (N * (T - 1)), 2 * (s + T * a) ** 2 / N
    expected = [[(total + both) / T**2, -both / T], [-both / T, both]]
    got = information_covariance(panel.X, panel.y, panel.units, a, s, "ml", exact=True)
    np.testing.assert_allclose(got, expected, rtol=TIGHT)


# Two minima.


@pytest.mark.parametrize("panel", **named(tagged("two_minima")))
def test_two_minima_are_two_and_the_lower_is_where_it_should_be(panel):
    for kind in ("reml", "ml"):
        best = mp_optimum(panel.X, panel.y, panel.units, kind)
        assert len(best.minima) == (2 if f"{kind}_two" in panel.tags else 1)
        if f"{kind}_two" in panel.tags:
            (low, d_low), (high, d_high) = best.minima
            assert d_low + 0.05 < d_high  # deviances: far apart against any rounding
            assert min(low, high) == 0.0 < max(low, high)
            assert (low == 0.0) == (f"lowest_zero_{kind}" in panel.tags)
            assert (low > 0.0) == (f"lowest_interior_{kind}" in panel.tags)
            assert len(best.stationary) == 2
            assert best.slope_at_zero > 0


def test_the_search_finds_them():
    found = search_two_minima(seed=1, tries=300)
    assert [f.attempt for f in found if "reml" in f.kinds] == [182]
    assert (299, ("ml",), (True,)) in {(f.attempt, f.kinds, f.lowest_at_zero) for f in found}


def test_kinds_of_two_minima_are_all_there():
    tags = {tag for panel in tagged("two_minima") for tag in panel.tags}
    assert {"lowest_zero_reml", "lowest_interior_reml", "lowest_zero_ml", "lowest_interior_ml"} <= tags
    assert len(tagged("two_minima")) >= 6
