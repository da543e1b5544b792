"""Bad input: each case its own error or status, through the main call. What the panel refuses is tested beside it."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import mixbridge
from mixbridge.routes import LEDGER_ROUTES


@pytest.fixture
def frame():
    rng = np.random.default_rng(5)
    unit = np.repeat(np.arange(20), 4)
    frame = pd.DataFrame(
        {
            "unit": unit,
            "time": np.tile(np.arange(4), 20),
            "x": rng.normal(size=80),
            "w": rng.normal(size=20)[unit],
        }
    )
    frame["y"] = frame["x"] + rng.normal(size=20)[unit] + rng.normal(size=80)
    return frame


def statuses(study):
    return study.components.set_index("route")["status"]


def test_exact_collinearity_names_columns_and_dependency(frame):
    frame["x3"] = 2.0 * frame["x"] - frame["w"]
    with pytest.raises(mixbridge.IdentificationError, match=r"x3 = 2·x - w"):
        mixbridge.crosscheck("y ~ x + w + x3", frame, unit="unit")


@pytest.mark.parametrize("value", [0.0, 3.0])
def test_a_column_of_one_value_is_collinear_with_the_intercept(frame, value):
    frame["z"] = value
    with pytest.raises(mixbridge.IdentificationError, match=r"z = (0|3·Intercept)"):
        mixbridge.crosscheck("y ~ x + z", frame, unit="unit")


def test_unit_constant_covariates_are_kept_and_said(frame):
    study = mixbridge.crosscheck("y ~ x + w", frame, unit="unit")
    assert study.fit("within").not_estimable["w"] == "does not vary within units"
    assert np.isfinite(study.fit("reml").coefficients["w"])
    assert study.columns_report.set_index("column").loc["w", "level"] == "between"


def test_perfect_fit_is_refused(frame):
    with pytest.raises(mixbridge.IdentificationError, match="perfect fit"):
        mixbridge.crosscheck("y ~ x", frame.assign(y=2.0 * frame["x"] + 1.0), unit="unit")


def test_perfect_fit_within_units_stops_only_what_needs_it(frame):
    study = mixbridge.crosscheck("y ~ x", frame.assign(y=2.0 * frame["x"] + 7.0 * frame["w"]), unit="unit")
    status = statuses(study)
    assert status["reml"] == status["ml"] == "likelihood unbounded"
    assert status["swamy_arora"] == "idiosyncratic variance not positive"
    assert status["pooled"] == status["between"] == "fitted"
    assert str(study)


def test_units_of_one_row_leave_what_can_be_left(frame):
    study = mixbridge.crosscheck("y ~ x", frame.assign(unit=np.arange(80)), unit="unit")
    status = statuses(study)
    assert status["reml"] == status["ml"] == "likelihood flat"
    assert status["pooled"] == "fitted"
    for route in ("within", "swamy_arora", "wallace_hussain", "nerlove", "minque_0"):
        assert status[route].startswith("not estimable: ")
    assert "one row" in study.fit("reml").notes[0]


def test_no_degrees_of_freedom_is_refused_with_the_counts(frame):
    with pytest.raises(mixbridge.IdentificationError, match="3 rows for 3 coefficients"):
        mixbridge.crosscheck("y ~ x + w", frame.iloc[[0, 1, 4]], unit="unit")


def test_one_unit_is_refused(frame):
    with pytest.raises(mixbridge.DataError, match="one unit"):
        mixbridge.crosscheck("y ~ x", frame.assign(unit=1), unit="unit")


def test_negative_unit_variance_is_kept_and_zero_used(frame):
    inside = frame["y"] - frame.groupby("unit")["y"].transform("mean")
    study = mixbridge.crosscheck("y ~ x", frame.assign(y=inside), unit="unit")
    fit = study.fit("swamy_arora")
    assert fit.status == "unit variance truncated"
    assert fit.unit_variance_raw < 0.0 == fit.unit_variance == fit.ratio
    pooled = study.fit("pooled")
    np.testing.assert_allclose(fit.coefficients, pooled.coefficients, rtol=1e-12)
    assert "zero used" in str(study)


def test_negative_idiosyncratic_variance_is_kept_without_coefficients():
    """`wallace_hussain` on a panel drawn until it happens, which awkward panels do often."""
    for seed in range(300):
        rng = np.random.default_rng(seed)
        unit = np.repeat(np.arange(8), [1, 1, 1, 2, 1, 1, 2, 1])
        frame = pd.DataFrame({"unit": unit, "x": rng.normal(size=10), "y": 30 * rng.normal(size=8)[unit]})
        frame["y"] += rng.normal(size=10)
        fit = mixbridge.crosscheck("y ~ x", frame, unit="unit").fit("wallace_hussain")
        if fit.idiosyncratic_variance < 0.0:
            assert fit.status == "idiosyncratic variance not positive"
            assert fit.coefficients.isna().all()
            assert "is not positive" in fit.notes[0]
            return
    pytest.fail("no negative idiosyncratic variance in 300 panels")


@pytest.mark.parametrize("route", LEDGER_ROUTES)
def test_an_unknown_convention_is_refused_with_those_there_are(frame, route):
    study = mixbridge.crosscheck("y ~ x", frame, unit="unit")
    with pytest.raises(mixbridge.OptionError, match="has no convention 'devisor'"):
        study.fit(route, devisor="units")


def test_a_value_that_a_convention_does_not_have_is_refused(frame):
    study = mixbridge.crosscheck("y ~ x", frame, unit="unit")
    with pytest.raises(mixbridge.OptionError, match="harmonic"):
        study.fit("swamy_arora", between="geometric")
    with pytest.raises(mixbridge.OptionError, match="any finite number >= 0"):
        study.fit("minque", prior=-1.0)
    with pytest.raises(mixbridge.OptionError, match="any finite number >= 0"):
        study.fit("minque", prior=float("inf"))


def test_an_unknown_route_is_refused_with_the_known_ones(frame):
    with pytest.raises(mixbridge.OptionError, match="'swamy_arora'"):
        mixbridge.crosscheck("y ~ x", frame, unit="unit", primary="swamy_aurora")


def test_first_differences_without_periods_say_so(frame):
    study = mixbridge.crosscheck("y ~ x", frame, unit="unit")
    assert "no period given" in study.fit("first_difference").status
    with_period = mixbridge.crosscheck("y ~ x", frame, unit="unit", period="time")
    assert with_period.fit("first_difference").status == "fitted"
    assert (
        "no two rows of a unit are 9 period steps apart" in with_period.fit("first_difference", step=9).status
    )


def test_near_collinearity_is_said_on_the_screen(frame):
    rng = np.random.default_rng(0)
    frame["x3"] = 2.0 * frame["x"] - frame["w"] + 1e-7 * rng.normal(size=80)
    study = mixbridge.crosscheck("y ~ x + w + x3", frame, unit="unit")
    assert study.curve.condition > 1e6
    assert "nearly collinear" in str(study)
    assert "x3" in str(study)


def test_a_constant_column_of_another_value_keeps_its_unit(frame):
    """Without an intercept a column of twos is a column like others: half the coefficient of a column of ones."""
    frame["one"], frame["two"] = 1.0, 2.0
    ones = mixbridge.crosscheck("y ~ 0 + one + x", frame, unit="unit")
    twos = mixbridge.crosscheck("y ~ 0 + x + two", frame, unit="unit")
    for key in ("pooled", "between", "swamy_arora", "reml"):
        left, right = ones.fit(key), twos.fit(key)
        np.testing.assert_allclose(right.coefficients["two"], left.coefficients["one"] / 2.0, rtol=1e-12)
        np.testing.assert_allclose(right.coefficients["x"], left.coefficients["x"], rtol=1e-11)
        assert right.ratio == pytest.approx(left.ratio, rel=1e-10, nan_ok=True)
    np.testing.assert_allclose(twos.curve.log_det, ones.curve.log_det + np.log(4.0), rtol=1e-12)
