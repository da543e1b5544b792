"""Relative efficiency of the quadratic routes: literal traces, closed forms, and what no unbiased form can beat."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from oracle import information_covariance
from oracle import routes as stages
from oracle.fit import component_covariance, dense_panel
from panels import BY_NAME, PANELS, tagged

from mixbridge.errors import OptionError
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.reconcile.efficiency import information_bound, relative_efficiency
from mixbridge.routes import LEDGER_ROUTES, Fit, fit_route

UNBIASED = ("swamy_arora", "wansbeek_kapteyn", "wallace_hussain", "fitting_constants", "minque_0", "minque_1")
FIRST_STAGE = {
    "swamy_arora": (stages.swamy_arora, {"between": "size_weighted"}),
    "wansbeek_kapteyn": (stages.wansbeek_kapteyn, {}),
    "wallace_hussain": (stages.wallace_hussain, {"expectation": "exact"}),
    "amemiya": (stages.amemiya, {}),
    "nerlove": (stages.nerlove, {"divisor": "units_minus_one"}),
    "pooled_minus_within": (stages.pooled_minus_within, {}),
    "fitting_constants": (stages.fitting_constants, {}),
    "minque_0": (stages.minque, {"prior": 0.0}),
    "minque_1": (stages.minque, {"prior": 1.0}),
}
ORDINARY = [panel for panel in PANELS if not panel.tags & {"ill", "psi_huge", "offset", "scale"}]
"""Panels on which traces carry ten digits: condition below 1e4, ratio below 1e3."""


@cache
def curve_for(name: str) -> Curve:
    panel = BY_NAME[name]
    codes = np.unique(panel.units, return_inverse=True)[1]
    return curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))


@cache
def fits_for(name: str) -> dict[str, Fit]:
    return {key: fit_route(curve_for(name), key, {}, "no order of rows") for key in LEDGER_ROUTES}


@pytest.mark.parametrize("panel", ORDINARY, ids=lambda panel: panel.name)
def test_against_literal_traces(panel):
    curve, fits = curve_for(panel.name), fits_for(panel.name)
    reml = fits["reml"]
    unit, error = reml.unit_variance, reml.idiosyncratic_variance
    table = relative_efficiency(curve, fits, reml).set_index("route")
    bound = information_covariance(panel.X, panel.y, panel.units, unit, error, "reml", exact=True)
    np.testing.assert_allclose(
        information_bound(curve, error, unit), bound, rtol=1e-9, atol=1e-9 * bound.max()
    )
    dense, _ = dense_panel(panel.X, panel.y, panel.units, exact=True)
    gradient = np.array([1.0, -unit / error]) / error
    compared = 0
    for route, (function, kw) in FIRST_STAGE.items():
        first = function(dense, stages.degrees(dense, "rank"), **kw)
        row = table.loc[route]
        if first.to_components is None or row["reason"]:
            assert row[["unit_variance", "ratio"]].isna().all()
            assert row["reason"]
            continue
        compared += 1
        cov = component_covariance(dense, first, error, unit).astype(float)
        expectation = np.array([stages.literal_expectation(dense, F) for F in first.factors], dtype=float)
        mean = first.to_components.astype(float) @ (expectation @ np.array([error, unit]))
        bias = mean - np.array([unit, error])
        if route in UNBIASED:
            assert np.abs(bias).max() <= 1e-9 * (unit + error)
            bias = np.zeros(2)
            assert row["measure"] == "variance"
        losses = np.append(np.diag(cov) + bias**2, gradient @ cov @ gradient + (gradient @ bias) ** 2)
        best = np.append(np.diag(bound), gradient @ bound @ gradient)
        figures = row[["unit_variance", "idiosyncratic_variance", "ratio"]].to_numpy(float)
        np.testing.assert_allclose(figures, best / losses, rtol=1e-8)
        biases = row[["unit_variance_bias", "idiosyncratic_variance_bias", "ratio_bias"]].to_numpy(float)
        np.testing.assert_allclose(
            biases,
            np.append(bias, gradient @ bias),
            rtol=1e-8,
            atol=1e-9 * (unit + error) * max(1.0, 1 / error),
        )
    assert compared >= 5


@pytest.mark.parametrize("panel", ORDINARY, ids=lambda panel: panel.name)
def test_no_unbiased_route_beats_the_bound(panel):
    table = relative_efficiency(curve_for(panel.name), fits_for(panel.name), fits_for(panel.name)["reml"])
    rows = table[table["route"].isin(UNBIASED) & (table["reason"] == "")]
    figures = rows[["unit_variance", "idiosyncratic_variance", "ratio"]].to_numpy(float)
    assert figures.size
    assert figures.max() <= 1.0 + 1e-9  # two traces, each to about 1e-10
    assert figures.min() > 0.0


def test_minque_at_the_true_ratio_reaches_the_bound():
    curve, fits = curve_for("many_sizes"), fits_for("many_sizes")
    reml = fits["reml"]
    there = fit_route(curve, "minque", {"prior": reml.ratio}, "none")
    table = relative_efficiency(curve, {"minque": there}, reml).set_index("route")
    figures = table.loc["minque", ["unit_variance", "idiosyncratic_variance", "ratio"]].to_numpy(float)
    np.testing.assert_allclose(figures, 1.0, rtol=1e-10)
    # and the bound is the sampling covariance that the fit itself states
    by_fit = np.diag(reml.components_covariance) ** 0.5
    shown = table.loc["bound", ["unit_variance_sd", "idiosyncratic_variance_sd"]].to_numpy(float)
    np.testing.assert_allclose(shown, by_fit, rtol=1e-10)


@pytest.mark.parametrize("panel", tagged("balanced", "closed"), ids=lambda panel: panel.name)
def test_balanced_closed_forms(panel):
    """Two independent mean squares: Var = 2 s^4 / df for each; all unbiased routes are the same and lose nothing."""
    curve, fits = curve_for(panel.name), fits_for(panel.name)
    reml = fits["reml"]
    unit, error, size = reml.unit_variance, reml.idiosyncratic_variance, curve.sizes[0]
    df_within, df_between = curve.df_within, curve.units - curve.rank_between
    table = relative_efficiency(curve, fits, reml).set_index("route")
    within = 2.0 * error**2 / df_within
    between = 2.0 * (error + size * unit) ** 2 / df_between
    row = table.loc["bound"]
    assert row["idiosyncratic_variance_sd"] == pytest.approx(np.sqrt(within), rel=1e-10)
    assert row["unit_variance_sd"] == pytest.approx(np.sqrt(within + between) / size, rel=1e-10)
    for route in UNBIASED:
        if not table.loc[route, "reason"]:
            figures = table.loc[route, ["unit_variance", "idiosyncratic_variance", "ratio"]].to_numpy(float)
            np.testing.assert_allclose(figures, 1.0, rtol=1e-9)
    amemiya = table.loc["amemiya"]
    # amemiya: within sum of squares over n - N, between sum of squares over N
    bias = error * (df_within / (curve.n - curve.units) - 1.0)
    assert amemiya["idiosyncratic_variance_bias"] == pytest.approx(bias, rel=1e-9, abs=1e-12 * error)
    share = df_between / curve.units
    mean = (share * (error + size * unit) - (error + bias)) / size
    assert amemiya["unit_variance_bias"] == pytest.approx(mean - unit, rel=1e-9)
    assert amemiya["measure"] == "mean squared error"


def test_conventions_count_and_failures_are_named():
    curve, fits = curve_for("mild_between"), fits_for("mild_between")
    harmonic = fit_route(curve, "swamy_arora", {"between": "harmonic"}, "none")
    table = relative_efficiency(curve, {"swamy_arora": harmonic}, fits["reml"]).set_index("route")
    assert table.loc["swamy_arora", "measure"] == "mean squared error"
    assert table.loc["swamy_arora", "unit_variance_bias"] != 0.0
    assert table.loc["swamy_arora", "idiosyncratic_variance_bias"] == 0.0
    few = curve_for("two_units")
    lost = relative_efficiency(few, fits_for("two_units"), fits_for("two_units")["reml"]).set_index("route")
    named = lost[lost["reason"] != ""]
    assert set(named.index) >= {"swamy_arora"}
    assert named["unit_variance"].isna().all()
    with pytest.raises(OptionError, match="within"):
        relative_efficiency(curve, fits, fits["within"])
