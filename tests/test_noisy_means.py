"""Reliability of unit means and the correction: closed forms, errors-in-variables by definition, simulation with known truth."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import mixbridge
from mixbridge.correlated.mundlak import mundlak
from mixbridge.correlated.noisy_means import APPLIED, noisy_means
from mixbridge.correlated.reliability import mean_reliability, period_columns
from mixbridge.errors import OptionError
from mixbridge.routes import fit_route

#: Between two evaluations in double precision of well-conditioned expressions of a few hundred rows.
ROUNDING = 1e-9


def prepared(formula, frame, route="swamy_arora", **options):
    study = mixbridge.crosscheck(formula, frame, unit="unit", **options)
    wide = mundlak(study.panel, study.opened, study.moments)
    return study, wide, fit_route(wide.curve, route, {}, "not needed")


def one_covariate(sizes, seed=3, tau=0.7):
    rng = np.random.default_rng(seed)
    unit = np.repeat(np.arange(len(sizes)), sizes)
    level = tau * rng.normal(size=len(sizes))
    x = level[unit] + rng.normal(size=unit.size)
    y = 0.5 * x + 1.5 * level[unit] + rng.normal(size=len(sizes))[unit] + rng.normal(size=unit.size)
    return pd.DataFrame({"unit": unit, "x": x, "y": y})


def anova(frame, name):
    """Variance components of one column by the analysis of variance, from its sums of squares."""
    groups = frame.groupby("unit")[name]
    sizes, means, n = groups.size(), groups.mean(), len(frame)
    inside = float(((frame[name] - groups.transform("mean")) ** 2).sum()) / (n - len(sizes))
    outside = float((sizes * (means - frame[name].mean()) ** 2).sum()) / (len(sizes) - 1)
    effective = (n - (sizes**2).sum() / n) / (len(sizes) - 1)
    return (outside - inside) / effective, inside


@pytest.mark.parametrize("sizes", [(4,) * 30, (1, 2, 3, 5, 8) * 6])
def test_components_are_those_of_the_analysis_of_variance(sizes):
    frame = one_covariate(sizes)
    study, _, _ = prepared("y ~ x", frame)
    found = mean_reliability(study.moments, "x")
    between, inside = anova(frame, "x")
    np.testing.assert_allclose(
        [found.between_variance, found.within_variance], [between, inside], rtol=ROUNDING
    )
    np.testing.assert_allclose(
        found.at(np.array([1.0, 4.0])), between / (between + inside / np.array([1.0, 4.0]))
    )


def test_any_route_gives_components_and_reliability_is_its_shrinkage():
    frame = one_covariate((1, 2, 3, 5, 8) * 6)
    study, wide, fit = prepared("y ~ x", frame)
    direct = mixbridge.crosscheck("x ~ 1", frame, unit="unit").fit("reml")
    found = mean_reliability(study.moments, "x", route="reml")
    np.testing.assert_allclose(found.between_variance, direct.unit_variance, rtol=ROUNDING)
    table = noisy_means(wide, fit, route="reml").reliability
    np.testing.assert_allclose(table["reliability"], direct.shrinkage.to_numpy(), rtol=ROUNDING)


def test_one_covariate_with_equal_sizes_is_divided_by_the_reliability():
    """The closed form: contextual over reliability, between = within + that (Lüdtke et al. 2008)."""
    frame = one_covariate((5,) * 40)
    _, wide, fit = prepared("y ~ x", frame)
    found = noisy_means(wide, fit)
    between, inside = anova(frame, "x")
    reliability = between / (between + inside / 5)
    table = found.correction.set_index("coefficient")
    np.testing.assert_allclose(found.reliability["reliability"], reliability, rtol=ROUNDING)
    np.testing.assert_allclose(found.signal, reliability, rtol=ROUNDING)
    row = table.loc["contextual"]
    np.testing.assert_allclose(row["corrected"], row["estimate"] / reliability, rtol=ROUNDING)
    assert table.loc["within", "corrected"] == table.loc["within", "estimate"] == fit.coefficients["x"]
    total = table.loc["within", "corrected"] + row["corrected"]
    np.testing.assert_allclose(table.loc["between", "corrected"], total, rtol=ROUNDING)
    # units of the size at hand show what was estimated
    np.testing.assert_allclose(found.by_size["contextual"], row["estimate"], rtol=ROUNDING)
    np.testing.assert_allclose(found.by_size["between"], table.loc["between", "estimate"], rtol=ROUNDING)
    # the regression line still goes through the grand means
    grand = frame["y"].mean() - total * frame["x"].mean()
    np.testing.assert_allclose(table.loc["own", "corrected"], grand, rtol=ROUNDING)


def two_covariates(rng, units=300):
    """Two correlated covariates, one unit-constant column related to their levels; contextual (1, -0.7)."""
    sizes = rng.integers(2, 7, size=units)
    unit = np.repeat(np.arange(units), sizes)
    levels = rng.normal(size=(units, 2)) @ np.array([[1.0, 0.4], [0.0, 0.8]])
    z = 0.6 * levels[:, 0] + rng.normal(size=units)
    noise = rng.normal(size=(unit.size, 2)) @ np.array([[1.2, -0.5], [0.0, 1.5]])
    x = levels[unit] + noise
    y = 2.0 + x @ [0.5, 0.3] + levels[unit] @ [1.0, -0.7] + 0.8 * z[unit]
    y += rng.normal(size=units)[unit] + rng.normal(size=unit.size)
    return pd.DataFrame({"unit": unit, "x1": x[:, 0] + 3.0, "x2": x[:, 1], "z": z[unit], "y": y})


def test_errors_in_variables_by_definition():
    """Per unit, dense: S and N from the unit means, weights T / (1 + T psi), leverages of the regression on Z."""
    frame = two_covariates(np.random.default_rng(8), 80)
    _, wide, fit = prepared("y ~ x1 + x2 + z", frame)
    found = noisy_means(wide, fit, population=50.0)
    assert found.status == APPLIED
    means, sizes = frame.groupby("unit").mean(), frame.groupby("unit").size().to_numpy(dtype=float)
    weight = sizes / (1.0 + sizes * fit.ratio)
    x, z = means[["x1", "x2"]].to_numpy(), np.column_stack([np.ones(len(means)), means["z"]])
    root = np.sqrt(weight)[:, None] * z
    hat = root @ np.linalg.solve(root.T @ root, root.T)
    g = np.linalg.solve(root.T @ root, root.T @ (np.sqrt(weight)[:, None] * x))
    net = np.sqrt(weight)[:, None] * (x - z @ g)
    inside = frame[["x1", "x2"]] - frame.groupby("unit")[["x1", "x2"]].transform("mean")
    s_w = (inside.T @ inside).to_numpy() / (len(frame) - len(means))
    n = s_w * (weight * (1.0 - np.diag(hat)) * (1.0 / sizes - 1.0 / 50.0)).sum()
    s = net.T @ net
    raw = fit.coefficients[["mean(x1)", "mean(x2)"]].to_numpy()
    d = np.linalg.solve(s - n, s @ raw)
    table = found.correction.set_index(["coefficient", "term"])["corrected"]
    np.testing.assert_allclose(table["contextual"].to_numpy(), d, rtol=ROUNDING)
    own = fit.coefficients[["Intercept", "z"]].to_numpy() - g @ (d - raw)
    np.testing.assert_allclose(table["own"].to_numpy(), own, rtol=ROUNDING)
    level = (s - n) / (weight * (1.0 - np.diag(hat))).sum()
    share = 1.0 / 2.0 - 1.0 / 50.0
    expected = np.linalg.solve(level + s_w * share, level @ d)
    at_two = found.by_size[found.by_size["size"] == 2].set_index("term")["contextual"]
    np.testing.assert_allclose(at_two[["x1", "x2"]], expected, rtol=ROUNDING)


def test_the_correction_recovers_the_truth_and_the_estimate_does_not():
    """Simulation: means over replicates within four Monte Carlo standard errors of the truth, seeded."""
    rng = np.random.default_rng(20)
    truth = {
        ("contextual", "x1"): 1.0,
        ("contextual", "x2"): -0.7,
        ("between", "x1"): 1.5,
        ("between", "x2"): -0.4,
        ("own", "z"): 0.8,
        ("own", "Intercept"): 2.0 - 3.0 * 1.5,  # x1 is measured from 3 below its zero
    }
    raw, corrected, errors = [], [], []
    for _ in range(150):
        _, wide, fit = prepared("y ~ x1 + x2 + z", two_covariates(rng))
        table = noisy_means(wide, fit).correction.set_index(["coefficient", "term"])
        raw.append(table.loc[list(truth), "estimate"].to_numpy())
        corrected.append(table.loc[list(truth), "corrected"].to_numpy())
        errors.append(table.loc[list(truth), "corrected_se"].to_numpy())
    target = np.array(list(truth.values()))
    spread = np.std(corrected, axis=0, ddof=1)
    monte_carlo = spread / np.sqrt(len(corrected))
    assert (np.abs(np.mean(corrected, axis=0) - target) <= 4.0 * monte_carlo).all()
    off = np.abs(np.mean(raw, axis=0) - target) / (np.std(raw, axis=0, ddof=1) / np.sqrt(len(raw)))
    assert (off > 10.0).all()
    # a standard deviation over 150 replicates has itself a relative error of 1/sqrt(300); three of them
    ratio = np.sqrt(np.mean(np.square(errors), axis=0)) / spread
    assert (np.abs(ratio - 1.0) <= 3.0 / np.sqrt(300)).all()


def test_all_rows_of_the_population_need_no_correction():
    frame = one_covariate((4,) * 30)
    _, wide, fit = prepared("y ~ x", frame)
    found = noisy_means(wide, fit, population=4)
    assert found.reliability["reliability"].eq(1.0).all()
    table = found.correction
    np.testing.assert_allclose(table["corrected"], table["estimate"], rtol=ROUNDING)
    assert "does not apply" in found.statement
    with pytest.raises(OptionError, match="fewer rows than were seen"):
        noisy_means(wide, fit, population=3)


def test_without_between_variation_nothing_is_corrected():
    frame = one_covariate((4,) * 30)
    means = frame.groupby("unit")["x"].transform("mean")
    frame["x"] = frame["x"] - 0.9 * means
    _, wide, fit = prepared("y ~ x", frame)
    found = noisy_means(wide, fit)
    assert found.status.startswith("not corrected")
    assert "no more" in found.status
    assert found.reliability["between_variance"].lt(0.0).all()
    assert found.reliability["reliability"].eq(0.0).all()
    assert found.correction["corrected"].isna().all()
    assert found.correction["estimate"].notna().all()


def test_routes_and_forms_that_cannot_be_corrected_say_why():
    frame = two_covariates(np.random.default_rng(4), 60)
    study, wide, _ = prepared("y ~ x1 + x2 + z", frame)
    within = noisy_means(wide, fit_route(wide.curve, "within", {}, "not needed"))
    assert "no finite variance ratio" in within.status
    part = mundlak(study.panel, study.opened, study.moments, means_of=["x1"])
    found = noisy_means(part, fit_route(part.curve, "reml", {}, "not needed"))
    assert "not in the model" in found.status
    with pytest.raises(OptionError, match="not one of the panel"):
        noisy_means(wide, study.fit("reml"))


def test_period_indicators_carry_no_noise():
    """Columns with one value in each period are taken as they are; their part in a covariate is no noise either."""
    data = mixbridge.demo.apiaries()
    study = mixbridge.crosscheck("honey ~ forage + feeding + C(season)", data, unit="apiary", period="season")
    timed = period_columns(study.panel, study.panel.names[1:])
    assert set(timed) == {name for name in study.panel.names if name.startswith("C(season)")}
    wide = mundlak(study.panel, study.opened, study.moments)
    found = noisy_means(wide, fit_route(wide.curve, "reml", {}, "not needed"))
    assert found.terms == ("forage", "feeding")
    assert "Taken without noise: C(season)" in found.statement
    assert mundlak(study.panel, study.opened, study.moments).augmented.dropped == {}
    frame = data.loc[study.panel.row_labels]
    x, _ = study.panel.matrix()
    chosen = [study.panel.names.index(name) for name in timed]
    inside = x - pd.DataFrame(x).groupby(frame["apiary"].to_numpy()).transform("mean").to_numpy()
    forage = inside[:, study.panel.names.index("forage")]
    rest = forage - inside[:, chosen] @ np.linalg.lstsq(inside[:, chosen], forage, rcond=None)[0]
    df = study.panel.n - study.panel.N - len(chosen)
    expected = float(rest @ rest) / df
    within = found.reliability.set_index("column").loc["forage", "within_variance"].iloc[0]
    np.testing.assert_allclose(within, expected, rtol=ROUNDING)


def test_offsets_and_units_move_the_constant_alone():
    """Covariates around a million, outcome in other units: an offset of 1e6 costs six of sixteen digits, no more."""
    frame = two_covariates(np.random.default_rng(5), 60)
    moved = frame.assign(x1=frame["x1"] + 1e6, x2=64.0 * frame["x2"] - 1e6, y=frame["y"] * 2.0**-26)
    tables = []
    for data in (frame, moved):
        _, wide, fit = prepared("y ~ x1 + x2 + z", data)
        tables.append(noisy_means(wide, fit).correction)
    slopes = tables[0]["term"] != "Intercept"
    factor = 2.0**26 * np.where(tables[0]["term"] == "x2", 64.0, 1.0)[slopes]
    for column in ("corrected", "corrected_se"):
        np.testing.assert_allclose(
            tables[1].loc[slopes, column] * factor, tables[0].loc[slopes, column], rtol=1e-8
        )
