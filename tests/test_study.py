"""The main job end to end: one call, every route, one ledger, one screen."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

import mixbridge
from mixbridge.reconcile.agreement import CLASSES, LEDGER_COLUMNS
from mixbridge.routes import AXES, LEDGER_ROUTES, REFERENCE_ROUTES

FORMULA = "honey ~ forage + feeding + altitude"


@pytest.fixture(scope="module")
def study():
    return mixbridge.crosscheck(FORMULA, mixbridge.demo.apiaries(), unit="apiary", period="season")


def test_ledger_has_one_row_per_term_and_route_and_the_columns_of_the_design(study):
    assert list(study.ledger.columns) == LEDGER_COLUMNS
    assert len(study.ledger) == 4 * len(LEDGER_ROUTES)
    assert set(study.ledger["verdict"]) <= {"primary", "reference point", "not available", *CLASSES}
    assert (study.ledger.loc[study.ledger["route"] == "reml", "gap"] == 0.0).all()


def test_no_undefined_number_leaves_without_a_reason(study):
    lost = study.ledger[study.ledger["estimate"].isna()]
    assert len(lost) > 0
    assert (lost["verdict"] == "not available").all()
    assert (lost["reason"].str.len() > 5).all()


def test_every_row_is_accounted_for_in_every_output(study):
    frame = mixbridge.demo.apiaries()
    table = study.accounting.set_index("cause")["rows"]
    dropped = study.panel.accounting.rows_dropped
    assert dropped == int(frame[["honey", "forage"]].isna().any(axis=1).sum()) > 0
    assert table["rows given"] == len(frame)
    assert table["rows used"] == len(frame) - dropped == study.fit("pooled").rows
    assert -table["missing outcome"] - table["missing covariate"] == dropped
    assert f"{len(frame) - dropped} of {len(frame)} used" in str(study)
    assert study.to_dict()["accounting"]["rows_used"] == len(frame) - dropped


@pytest.mark.parametrize("route", [key for key in LEDGER_ROUTES if key not in REFERENCE_ROUTES])
def test_least_squares_on_quasi_demeaned_rows_reproduces_the_coefficients(study, route):
    rows = study.quasi_demeaned(route)
    fit = study.fit(route)
    names = list(study.panel.names)
    ols = sm.OLS(rows[study.panel.outcome], rows[names]).fit()
    # condition of the scaled columns is about 10; 1e-10 leaves five digits above eps times its square
    np.testing.assert_allclose(ols.params, fit.coefficients, rtol=1e-10)
    residual_scaled = study.fit(route, scale="gls_residuals")
    np.testing.assert_allclose(ols.bse, residual_scaled.standard_errors, rtol=1e-10)


def test_weights_and_shrinkage_are_one_number_in_two_dresses(study):
    fit = study.fit("reml")
    weight = fit.quasi_demeaning
    assert list(weight.index) == sorted(set(study.moments.sizes.tolist()))
    np.testing.assert_allclose(fit.shrinkage, weight * (2.0 - weight), rtol=1e-14)


def test_first_stage_forms_give_the_components(study):
    for key in (
        "swamy_arora",
        "wansbeek_kapteyn",
        "wallace_hussain",
        "amemiya",
        "nerlove",
        "fitting_constants",
    ):
        fit = study.fit(key)
        system = fit.forms[["on_idiosyncratic_variance", "on_unit_variance"]].to_numpy()
        solved = np.linalg.solve(system, fit.forms["value"].to_numpy())
        np.testing.assert_allclose(solved, [fit.idiosyncratic_variance, fit.unit_variance_raw], rtol=1e-12)


def test_ledger_can_be_asked_again_with_other_thresholds(study):
    strict = study.agreement(immaterial=1e-6, half_width=1e-6)
    loose = study.agreement(immaterial=100.0, half_width=100.0)
    votes = ~strict["verdict"].isin(["primary", "reference point", "not available", "identical"])
    assert not (strict.loc[votes, "verdict"] == "immaterial").any()
    assert (loose.loc[votes, "verdict"] == "immaterial").all()


def test_conflicting_means_that_the_interval_against_zero_changes(study):
    table = study.ledger.set_index(["term", "route"])
    for (term, _), row in table[table["verdict"].isin(["visible", "conflicting"])].iterrows():
        base = table.loc[(term, "reml")]
        sides = [int(row_["lower"] > 0) - int(row_["upper"] < 0) for row_ in (base, row)]
        assert (sides[0] != sides[1]) == (row["verdict"] == "conflicting")


def test_record_is_json_and_unrounded(study):
    record = json.loads(json.dumps(study.to_dict(), allow_nan=False))
    assert record["format"] == "mixbridge-study"
    assert record["fits"]["reml"]["coefficients"]["feeding"] == study.fit("reml").coefficients["feeding"]
    again = mixbridge.Moments.from_record(record["moments"])
    assert again.to_record() == study.moments.to_record()


def test_screen_fits_and_hides_nothing_silently():
    rng = np.random.default_rng(11)
    frame = pd.DataFrame(
        rng.normal(size=(200, 15)), columns=[f"a_rather_long_covariate_name_{j}" for j in range(15)]
    )
    frame["unit"] = np.repeat(np.arange(40), 5)
    frame["outcome"] = frame.iloc[:, 0] + rng.normal(size=40)[frame["unit"]] + rng.normal(size=200)
    formula = "outcome ~ " + " + ".join(frame.columns[:15])
    text = str(mixbridge.crosscheck(formula, frame, unit="unit"))
    lines = text.split("\n")
    assert len(lines) <= 40
    assert max(map(len, lines)) <= 100
    assert "more terms" in text
    assert "study.ledger shows all" in text


@pytest.mark.parametrize("seed", range(4))
def test_screen_is_at_most_forty_lines_of_a_hundred_columns_on_odd_panels(seed):
    rng = np.random.default_rng(seed)
    sizes = rng.integers(1, 4, 12)
    unit = np.repeat(np.arange(12), sizes)
    frame = pd.DataFrame({"unit": unit, "x": rng.normal(size=unit.size), "y": rng.normal(size=unit.size)})
    if seed == 0:
        frame["unit"] = np.arange(len(frame))
    study = mixbridge.crosscheck("y ~ x", frame, unit="unit", routes=LEDGER_ROUTES[seed:])
    lines = str(study).split("\n")
    assert len(lines) <= 40
    assert max(map(len, lines)) <= 100


def test_one_row_units_can_be_left_out_and_do_not_move_the_within_slopes(study):
    kept, dropped = study.fit("within"), study.fit("within", one_row_units="dropped")
    np.testing.assert_allclose(kept.coefficients, dropped.coefficients, rtol=1e-12)
    assert dropped.units == kept.units - study.singletons
    assert study.singletons > 0
    assert study.fit("reml", one_row_units="dropped").ratio != study.fit("reml").ratio


def test_fits_are_frozen(study):
    fit = study.fit("reml")
    with pytest.raises(AttributeError):
        fit.ratio = 1.0
    with pytest.raises(ValueError, match="read-only"):
        fit.beta[0] = 0.0
    table = fit.coefficients
    table.iloc[0] = 0.0
    assert fit.coefficients.iloc[0] != 0.0


def test_objects_with_an_arrow_stream_are_data(study):
    pa = pytest.importorskip("pyarrow")

    class Stream:
        def __init__(self, table):
            self.table = table

        def __arrow_c_stream__(self, requested_schema=None):
            return self.table.__arrow_c_stream__(requested_schema)

    stream = Stream(pa.Table.from_pandas(mixbridge.demo.apiaries()))
    again = mixbridge.crosscheck(FORMULA, stream, unit="apiary", period="season")
    pd.testing.assert_frame_equal(again.ledger, study.ledger)


def test_the_caller_s_names_can_be_used_in_a_formula(study):
    metres = 100.0
    again = mixbridge.crosscheck(
        "honey ~ forage + feeding + I(altitude / metres)", mixbridge.demo.apiaries(), unit="apiary"
    )
    # one division by a number and one multiplication: two roundings, amplified by a condition of about 10
    np.testing.assert_allclose(
        again.fit("reml").coefficients.iloc[3],
        metres * study.fit("reml").coefficients["altitude"],
        rtol=1e-12,
    )


@pytest.mark.parametrize("route", [key for key in LEDGER_ROUTES if key != "first_difference"])
@pytest.mark.parametrize("axis", ["covariance", "reference"])
def test_conventions_of_inference_never_move_the_estimates(study, route, axis):
    values = next(item for item in AXES if item.name == axis).values
    base = study.fit(route)
    for value in values[1:]:
        if (value == "kenward_roger" and route != "reml") or (value == "two_way" and route == "between"):
            continue
        fit = study.fit(route, **{axis: value})
        np.testing.assert_array_equal(fit.beta, base.beta)
        assert fit.ratio == base.ratio or np.isnan(base.ratio)
        moved = not np.array_equal(fit.covariance_array, base.covariance_array, equal_nan=True)
        assert moved == (axis == "covariance")


def test_a_named_reference_is_used_for_intervals(study):
    normal = study.intervals(study.fit("reml", reference="normal"))["feeding"]
    np.testing.assert_allclose(normal.half_width / normal.standard_error, 1.959963984540054, rtol=1e-12)
    few = study.intervals(study.fit("reml", reference="t_between"))["feeding"]
    assert few.half_width > normal.half_width
    adjusted = study.intervals(study.fit("reml", reference="kenward_roger"))["feeding"]
    assert adjusted.standard_error > normal.standard_error
