"""Correlated effects as a user meets them: one call from the study, and what the demonstration shows."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

import mixbridge
from mixbridge.inference.contrasts import contrasts
from mixbridge.inference.robust import robust_covariance
from mixbridge.routes import REFERENCE_ROUTES


@pytest.fixture(scope="module")
def study():
    data = mixbridge.demo.apiaries()
    return mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary", period="season")


@pytest.fixture(scope="module")
def with_means(study):
    return study.correlated("mundlak")


def test_it_is_another_study_of_the_same_rows(study, with_means):
    assert isinstance(with_means, mixbridge.Study)
    assert with_means.panel.n == study.panel.n
    assert set(with_means.curve.names) - set(study.curve.names) == {"mean(forage)", "mean(feeding)"}
    assert len(str(with_means).split("\n")) <= 40
    rows = with_means.quasi_demeaned("reml")
    solved = np.linalg.lstsq(rows[list(with_means.curve.names)], rows["honey"], rcond=None)[0]
    np.testing.assert_allclose(solved, with_means.fit("reml").beta, rtol=1e-9)  # condition about 1e2, squared


def test_slopes_are_the_within_slopes_to_ten_digits_by_every_route(study, with_means):
    within = study.fit("within").coefficients[["forage", "feeding"]]
    for key, fit in with_means.fits.items():
        if key not in REFERENCE_ROUTES:
            np.testing.assert_allclose(
                fit.coefficients[["forage", "feeding"]], within, rtol=1e-10, err_msg=key
            )
    assert with_means.slope_certificate().holds


def test_feeding_is_seen_to_be_related_to_quality_and_altitude_to_stay_between(study, with_means):
    table = with_means.coordinates().table.set_index("term")
    assert table.loc["feeding", "contextual_p"] < 1e-6
    assert table.loc["forage", "contextual_p"] > 0.1
    np.testing.assert_allclose(
        table["between"] - table["within"], table["contextual"], rtol=1e-9
    )  # one fit in two coordinates
    constant = with_means.unit_constant().set_index(["term", "route"])
    assert constant.loc[("altitude", "reml"), "estimate"] == study.fit("reml").coefficients["altitude"]
    assert np.isnan(constant.loc[("altitude", "within"), "estimate"])


def test_wald_test_of_the_means_is_the_contrast(study, with_means):
    joint = with_means.mean_tests().iloc[0]
    assert joint["wald"] == pytest.approx(joint["contrast"], rel=1e-9)
    robust = with_means.mean_tests(covariance="CR1").iloc[0]
    contrast = study.contrasts()
    clustered = contrast[contrast["variance"].str.startswith("cluster-robust")]["statistic"]
    assert len(clustered) == 3
    # the ratios of the two studies differ, and with them the weights of unit means
    assert robust["wald"] == pytest.approx(clustered.iloc[0], rel=0.2)


def test_partial_forms_say_what_they_assume(study):
    partial = study.correlated("mundlak", means_of=["feeding"])
    assert partial.unit_means.augmented.partial
    assert "forage" in partial.unit_means.augmented.statement
    assert not partial.slope_certificate().holds


def test_cluster_robust_contrast_is_the_wald_test_of_the_means_at_one_ratio(study, with_means):
    """Arellano 1993: residuals of the regression with unit means and one multiplier."""
    fit = with_means.fit("reml")
    found = contrasts(study.curve, fit_at(study, fit.ratio), study.products)
    clustered = next(item for item in found if item.variance.startswith("cluster-robust"))
    covariance = robust_covariance(
        with_means.curve, with_means.products, fit.ratio, kind="CR1"
    ).covariance_array
    at = [with_means.curve.names.index(name) for name in ("mean(forage)", "mean(feeding)")]
    gap = with_means.curve.at(fit.ratio).beta[at]
    wald = gap @ np.linalg.solve(covariance[np.ix_(at, at)], gap)
    np.testing.assert_allclose(clustered.statistic, wald, rtol=1e-9)


def fit_at(study, ratio):
    """Return a fit of the study moved to a given ratio."""
    return replace(study.fit("reml"), ratio=ratio)


def test_noise_is_reported_beside_never_instead(with_means):
    found = with_means.noisy_means()
    table = found.correction.set_index(["term", "coefficient"])
    plain = with_means.coordinates().table.set_index("term")
    np.testing.assert_allclose(
        table.loc[("feeding", "contextual"), "estimate"], plain.loc["feeding", "contextual"]
    )
    assert abs(table.loc[("feeding", "contextual"), "corrected"]) > abs(plain.loc["feeding", "contextual"])


def test_internal_instruments_need_names_and_say_roles(study):
    found = study.instrumented("hausman_taylor", ["forage"])
    assert found.table.set_index("term").loc["altitude", "role"].startswith("unit-constant")
    np.testing.assert_allclose(
        found.table.set_index("term").loc["feeding", "estimate"],
        study.fit("within").coefficients["feeding"],
        rtol=1e-9,
    )  # just identified: slopes on varying columns are the within slopes
    assert "balanced" in study.instrumented("amemiya_macurdy", ["forage"]).status


def test_questions_without_unit_means_say_where_to_get_them(study, with_means):
    with pytest.raises(mixbridge.OptionError, match="correlated"):
        study.coordinates()
    with pytest.raises(mixbridge.OptionError, match="already"):
        with_means.correlated("mundlak")
    with pytest.raises(mixbridge.OptionError, match="mundlak"):
        study.correlated("fixed")
