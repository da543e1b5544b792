"""Coverage of coefficient intervals, small and seeded: exact rules hold, rules that cannot hold are seen failing."""

import numpy as np
import pandas as pd
import pytest

from benchmarks import calibration_variance
from benchmarks.calibration import Part, page, passes
from benchmarks.calibration_coefficients import (
    BETA,
    TERMS,
    Design,
    calibrate,
    covered,
    draw,
    outcomes_of,
    reduce,
)
from mixbridge.inference.references import Robust, inference_table
from mixbridge.inference.robust import robust_covariance
from mixbridge.routes import fit_route

FEW = Design("6 units of 4", (4,) * 6, ("within", "between"), 5.0)
UNEQUAL = Design("9 units, sizes 1 to 7", (1, 2, 2, 3, 4, 5, 5, 6, 7), TERMS, 0.5)
BALANCED = Design("12 units of 10", (10,) * 12, ("within", "between"), 5.0)
LIMIT = 3.5
"""Monte Carlo errors; a rule that holds is beyond it once in 2,000 tables of one figure."""


@pytest.fixture(scope="module")
def table() -> pd.DataFrame:
    return calibrate([FEW, BALANCED], 300, seed=11)


def one(table: pd.DataFrame, **labels: str) -> pd.DataFrame:
    picked = table
    for name, value in labels.items():
        picked = picked[picked[name] == value]
    assert len(picked), labels
    return picked


def test_rules_marked_as_exact_lie_within_monte_carlo_error(table):
    exact = table[table["exact"] == 1.0]
    found = set(zip(exact["route"], exact["rule"], exact["term"], strict=True))
    assert {
        ("within", "t_within", "within"),
        ("swamy_arora", "satterthwaite", "within"),
        ("swamy_arora", "by_level", "between"),
        ("reml", "kenward_roger", "between"),
    } <= found
    assert (exact["z"].abs() <= LIMIT).all(), exact.to_string()


def test_the_normal_rule_fails_between_few_units(table):
    for route in ("reml", "swamy_arora"):
        for covariance in ("model", "CR0", "CR1", "CR2"):
            row = one(
                table, design=FEW.name, term="between", route=route, covariance=covariance, rule="normal"
            )
            assert (row["z"] < -LIMIT).all(), row.to_string()


def test_the_pooled_covariance_fails_where_units_differ(table):
    pooled = one(table, term="between", route="pooled", covariance="model", rule="t_rows")
    assert (pooled["z"] < -LIMIT).all(), pooled.to_string()


@pytest.mark.parametrize("design", [FEW, UNEQUAL], ids=lambda design: design.name)
def test_intervals_and_verdicts_are_those_of_the_table_that_users_see(design):
    draws = draw(design, 4, seed=5)
    x, codes = design.arrays()
    for at, y in enumerate(outcomes_of(design, 4, seed=5)):
        curve, products = reduce(x, y, codes, design.names)
        fits = {route: fit_route(curve, route, {}, "none") for route in draws.estimates}
        for route, fit in fits.items():
            given = {}
            for kind in ("CR0", "CR1", "CR2", "CR3"):
                made = robust_covariance(curve, products, fit, kind=kind)
                df = (lambda row, made=made: made.satterthwaite_df(row)[0]) if kind == "CR2" else None
                given[kind] = Robust(made.covariance_array, satterthwaite=df)
            for j, term in enumerate(design.names):
                if term not in TERMS or not np.isfinite(fit.beta[j]):
                    continue
                shown = inference_table(curve, fits, fit, term, robust=given)
                shown = shown[shown["route"] == route].set_index(["covariance", "rule"])
                for key in [key for key in draws.degrees if key[0] == route]:
                    line = shown.loc[key[1:]]
                    half = draws.half_width(key, 0.95)[at, j]
                    # the map from outcomes adds up rounding of n terms; 1e-9 is far above it
                    np.testing.assert_allclose(half, (line["upper"] - line["lower"]) / 2.0, rtol=1e-9)
                    assert bool(draws.exact[key][at, j]) == bool(line["exact"]), (key, term, line["why"])
                    inside = line["lower"] <= BETA[term] <= line["upper"]
                    assert covered(draws, key, 0.95)[at, j] == inside or np.isnan(half)


def test_processes_change_nothing():
    designs = [FEW, UNEQUAL]
    pd.testing.assert_frame_equal(
        calibrate(designs, 3, seed=2), calibrate(designs, 3, seed=2, processes=2), check_exact=True
    )


def test_the_page_shows_its_criterion_and_marks_what_is_off(table):
    variance = calibration_variance.calibrate(calibration_variance.DESIGNS[:2], 50, 3, null_draws=500)
    parts = {"variance": Part(variance, 1.0), "coefficients": Part(table, 1.0)}
    text = page(parts, 300, 1, "here", 0)
    assert "{{" not in text
    worst = one(table, design=FEW.name, term="between", route="reml", covariance="CR0", rule="normal").iloc[0]
    assert f"**{100 * worst['observed']:.1f}** (\u2212{-worst['z']:.1f})" in text
    met = passes(variance, table)
    assert ("**The criterion is met.**" in text) == met
    wrong = table.assign(z=np.where(table["exact"] == 1.0, 9.0, table["z"]))
    assert not passes(variance, wrong)
    assert "NOT MET" in page({**parts, "coefficients": Part(wrong, 1.0)}, 300, 1, "here", 0)
