"""What theory says must agree, asked of the oracle: closed column spaces, balance, ends of the curve.

`TIGHT` = 1e-12 is some thousand roundings of a double; components are compared against the size of what they
are differences of, because a unit variance near zero keeps no more digits than that.
"""

import numpy as np
import pytest
import statsmodels.api as sm
from mp_likelihood import mp_optimum
from oracle import ROUTES, oracle_first_difference, oracle_fit
from oracle.fit import dense_panel
from panels import BY_NAME, PANELS, Panel, tagged

TIGHT = 1e-12
UNBIASED = (
    ("swamy_arora", {}),
    ("wansbeek_kapteyn", {}),
    ("wallace_hussain", {}),
    ("fitting_constants", {}),
    ("minque", {"prior": 0.0}),
    ("minque", {"prior": 1.0}),
)
NOT_EXTREME = [p for p in PANELS if not p.tags & {"psi_huge", "offset", "scale", "ill", "two_minima"}]


def fit(panel: Panel, route: str, **conventions):
    return oracle_fit(panel.X, panel.y, panel.units, route, exact=True, **conventions)


def components(result) -> np.ndarray:
    return np.array([result.unit_variance_raw, result.idiosyncratic_variance])


def named(panels) -> dict:
    panels = list(panels)
    return {"argvalues": panels, "ids": [p.name for p in panels]}


def _share(result) -> float:
    """Size of a raw unit variance against what it is a difference of: the digits that are left."""
    return abs(result.unit_variance_raw) + result.idiosyncratic_variance


@pytest.mark.parametrize("panel", **named(tagged("balanced", "closed")))
def test_balanced_closed_unbiased_routes_and_reml_agree(panel):
    first = fit(panel, "swamy_arora")
    for route, conventions in [
        *UNBIASED,
        ("minque", {"prior": 7.0}),
        ("swamy_arora", {"between": "unweighted"}),
    ]:
        other = fit(panel, route, **conventions)
        np.testing.assert_allclose(components(other), components(first), rtol=0, atol=TIGHT * _share(first))
        np.testing.assert_allclose(other.component_cov, first.component_cov, rtol=1e-11)
    reml = mp_optimum(panel.X, panel.y, panel.units, "reml")
    if first.unit_variance_raw > 0:
        np.testing.assert_allclose(
            [reml.unit_variance, reml.idiosyncratic_variance],
            components(first),
            rtol=0,
            atol=TIGHT * _share(first),
        )
    else:
        assert reml.psi == 0.0


@pytest.mark.parametrize("panel", **named(tagged("balanced", "closed")))
def test_balanced_closed_ml_is_amemiya_is_short_wallace_hussain(panel):
    """Maximum likelihood in closed form: the two sums of squares over n - N and N."""
    one, two = fit(panel, "amemiya"), fit(panel, "wallace_hussain", expectation="short")
    np.testing.assert_allclose(components(one), components(two), rtol=0, atol=TIGHT * _share(one))
    ml = mp_optimum(panel.X, panel.y, panel.units, "ml")
    if one.unit_variance_raw > 0:
        np.testing.assert_allclose(
            [ml.unit_variance, ml.idiosyncratic_variance], components(one), rtol=0, atol=TIGHT * _share(one)
        )
    else:
        assert ml.psi == 0.0


@pytest.mark.parametrize("panel", **named(tagged("closed")))
def test_closed_four_routes_agree(panel):
    first = fit(panel, "swamy_arora")
    for route in ("wallace_hussain", "wansbeek_kapteyn", "fitting_constants"):
        other = fit(panel, route)
        np.testing.assert_allclose(components(other), components(first), rtol=0, atol=TIGHT * _share(first))
    if not panel.tags & {
        "balanced",
        "few",
    }:  # two units: no weights to choose
        assert fit(panel, "minque").unit_variance_raw != pytest.approx(first.unit_variance_raw, rel=1e-6)


def test_not_closed_routes_differ():
    values = [fit(BY_NAME["mild_both"], route).unit_variance_raw for route, _ in UNBIASED[:4]]
    assert len({round(v, 6) for v in values}) == 4


@pytest.mark.parametrize("panel", **named(tagged("balanced")))
def test_balanced_wallace_hussain_is_minque_at_zero_and_harmonic_is_size_weighted(panel):
    one, two = fit(panel, "wallace_hussain"), fit(panel, "minque", prior=0.0)
    np.testing.assert_allclose(components(one), components(two), rtol=0, atol=TIGHT * _share(one))
    one, two = fit(panel, "swamy_arora"), fit(panel, "swamy_arora", between="harmonic")
    np.testing.assert_allclose(components(one), components(two), rtol=0, atol=TIGHT * _share(one))


@pytest.mark.parametrize("panel", **named(tagged("singletons")))
def test_one_row_units_leave_the_within_slopes_unchanged(panel):
    kept, dropped = fit(panel, "within"), fit(panel, "within", one_row_units="dropped")
    np.testing.assert_allclose(dropped.beta, kept.beta, rtol=TIGHT)
    assert kept.df == dropped.df
    np.testing.assert_allclose(dropped.scale, kept.scale, rtol=TIGHT)
    assert fit(panel, "pooled").df > fit(panel, "pooled", one_row_units="dropped").df


@pytest.mark.parametrize("panel", **named([p for p in tagged("two_periods") if "periods" not in p.tags]))
def test_two_periods_first_differences_are_within(panel):
    difference = oracle_first_difference(panel.X, panel.y, panel.units, panel.periods, exact=True)
    within = fit(panel, "within")
    np.testing.assert_allclose(difference.beta, within.beta, rtol=TIGHT)
    np.testing.assert_allclose(difference.cov, within.cov, rtol=TIGHT)


def test_gaps_are_not_differenced_over():
    panel = BY_NAME["mild_gaps"]
    difference = oracle_first_difference(panel.X, panel.y, panel.units, panel.periods)
    at = {(u, t): k for k, (u, t) in enumerate(zip(panel.units, panel.periods, strict=True))}
    pairs = [(at[u, t - 1], k) for (u, t), k in at.items() if (u, t - 1) in at]
    assert difference.rows == len(pairs) < len(panel.y) - len(np.unique(panel.units))
    D = np.array([panel.X[b] - panel.X[a] for a, b in pairs])
    d = np.array([panel.y[b] - panel.y[a] for a, b in pairs])
    ols = sm.OLS(d, D[:, 1]).fit()
    assert difference.beta[1] == pytest.approx(ols.params[0], rel=TIGHT)
    assert difference.cov[1, 1] == pytest.approx(ols.cov_params()[0, 0], rel=1e-11)
    assert np.isnan(difference.beta[[0, 2]]).all()


@pytest.mark.parametrize("panel", **named(NOT_EXTREME[::5]))
def test_counting_columns_changes_degrees_of_freedom_only(panel):
    dense, _ = dense_panel(panel.X, panel.y, panel.units)
    same_w = dense.K_w == panel.X.shape[1] - dense.constant_in_units.sum()
    for route in ROUTES:
        ranks, columns = fit(panel, route), fit(panel, route, count="columns")
        np.testing.assert_array_equal(ranks.q, columns.q)
        if same_w and dense.K_p == panel.X.shape[1]:
            np.testing.assert_array_equal(ranks.beta, columns.beta)


def test_counting_columns_loses_the_period_indicators():
    panel = BY_NAME["balanced_periods"]
    assert (
        fit(panel, "between").df - fit(panel, "between", count="columns").df == 4
    )  # three indicators, one purely within
    ranks, columns = fit(panel, "swamy_arora"), fit(panel, "swamy_arora", count="columns")
    assert columns.unit_variance_raw > ranks.unit_variance_raw
