"""Reconciliation as a user meets it: attribution, path, efficiency, requirement, words."""

from __future__ import annotations

import numpy as np
import pytest

import mixbridge


@pytest.fixture(scope="module")
def study():
    data = mixbridge.demo.apiaries()
    return mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary", period="season")


def test_attribution_speaks_of_the_gap_in_the_ledger(study):
    row = study.ledger.set_index(["term", "route"]).loc[("feeding", "swamy_arora")]
    found = study.attribution("feeding", "swamy_arora")
    assert f"{row['estimate']:.5g}" in str(found)
    causes = found.causes
    assert len(causes) > 1
    harmonic = study.attribution("feeding", study.fit("swamy_arora", between="harmonic"), "swamy_arora")
    assert "swamy_arora" in str(harmonic)


def test_path_holds_every_route_and_ends_where_pooled_and_within_are(study):
    path = study.path("feeding")
    low, high = path.range_all
    for key in ("pooled", "within", "reml", "nerlove"):
        assert low - 1e-9 <= study.fit(key).coefficients["feeding"] <= high + 1e-9
    assert path.coefficient[0] == pytest.approx(study.fit("pooled").coefficients["feeding"], rel=1e-10)


def test_requirement_names_every_route_compared(study):
    assert study.require("forage")["agrees"].all()
    with pytest.raises(mixbridge.DisagreementError) as raised:
        study.require("feeding")
    for key in study.fits:
        assert key in str(raised.value)


def test_efficiency_never_beats_the_bound_without_bias(study):
    table = study.efficiency()
    unbiased = table[table["measure"] == "variance"]
    assert (unbiased[["unit_variance", "idiosyncratic_variance"]] <= 1.0 + 1e-10).all().all()


def test_crosswalk_gives_the_numbers_of_the_fit(study):
    table = study.crosswalk("ml").set_index("quantity")
    fit = study.fit("ml")
    assert table.loc["unit variance", "value"] == fit.unit_variance
    np.testing.assert_allclose(table.loc["variance ratio", "value"], fit.ratio)
    assert len(mixbridge.crosswalk(fit)) > 10


def test_a_gap_is_given_on_three_scales(study):
    table = study.agreement(margin={"feeding": 0.2}, noise=study.bootstrap(400, seed=1)).set_index(
        ["term", "route"]
    )
    row = table.loc[("feeding", "swamy_arora")]
    np.testing.assert_allclose(row["gap_in_margin"], row["gap"] / 0.2, rtol=1e-12)
    assert not row["within_margin"]
    assert table.loc[("feeding", "ml"), "within_margin"]
    np.testing.assert_allclose(row["gap_in_noise"], row["gap"] / row["noise_sd"], rtol=1e-12)
    assert np.isnan(table.loc[("forage", "ml"), "margin"])


def test_the_first_screen_names_causes_that_add_up(study):
    (line,) = [line for line in str(study).split("\n") if line.strip().startswith("why: feeding")]
    gap = study.ledger.set_index(["term", "route"]).loc[("feeding", "swamy_arora"), "gap_in_se"]
    causes = study.attribution("feeding", "swamy_arora").causes
    np.testing.assert_allclose(causes["in_se"].sum(), gap, rtol=1e-9)
    for cause in causes.loc[causes["in_se"].abs() >= 0.05, "cause"]:
        assert cause in line


def test_the_half_width_is_split_between_covariance_types_too(study):
    found = study.attribution("feeding", study.fit("swamy_arora", covariance="CR2"), "reml")
    total = np.log(
        study.intervals(study.fit("swamy_arora", covariance="CR2"))["feeding"].half_width
        / study.intervals(study.fit("reml"))["feeding"].half_width
    )
    parts = found.half_width
    np.testing.assert_allclose(parts.select_dtypes("number").iloc[:, 0].sum(), total, rtol=1e-9)
    assert "covariance type" in str(found)
