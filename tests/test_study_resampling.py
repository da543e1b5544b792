"""Resampling as a user meets it."""

from __future__ import annotations

import numpy as np
import pytest

import mixbridge
from mixbridge.rehearse import Truth


@pytest.fixture(scope="module")
def study():
    data = mixbridge.demo.apiaries()
    return mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary", period="season")


def test_gaps_are_set_against_their_noise_under_the_fitted_model(study):
    found = study.bootstrap(400, seed=1)
    gaps = found.gaps(study.primary).set_index(["term", "route"])
    row = study.ledger.set_index(["term", "route"]).loc[("feeding", "swamy_arora")]
    np.testing.assert_allclose(gaps.loc[("feeding", "swamy_arora"), "gap"], row["gap"], rtol=1e-9)
    # unit effects of these data are related to feeding, so the gap is far outside what the model alone gives
    assert abs(gaps.loc[("feeding", "swamy_arora"), "gap_in_sd"]) > 10
    assert abs(gaps.loc[("forage", "nerlove"), "gap_in_sd"]) < 4


def test_draws_do_not_depend_on_workers(study):
    one, two = (study.bootstrap(400, seed=2, workers=workers) for workers in (1, 2))
    np.testing.assert_array_equal(one.replicates.routes["reml"].ratio, two.replicates.routes["reml"].ratio)


def test_too_few_replicates_for_a_quantile_are_refused(study):
    with pytest.raises(mixbridge.OptionError, match="replicates"):
        study.bootstrap(50, seed=1).interval("feeding", "reml")


def test_zero_tests_reject_where_the_exact_test_does(study):
    table = study.zero_tests(199, seed=3).set_index("route")
    assert table.loc["reml", "p_value"] <= 0.01
    assert study.variance_tests(draws=0).set_index("test").loc["f_unit_intercepts", "p_value"] < 1e-6


def test_leaving_a_unit_out_is_refitting_without_it(study):
    found = study.leave_one_out(("swamy_arora", "reml"))
    data = mixbridge.demo.apiaries()
    at = list(found.units).index("A04")
    again = mixbridge.crosscheck(study.panel.formula, data[data["apiary"] != "A04"], unit="apiary")
    for key in ("swamy_arora", "reml"):
        np.testing.assert_allclose(found.refits[key].coefficients[at], again.fit(key).beta, rtol=1e-8)
    assert len(found.jackknife("reml")) > 0


def test_units_are_not_named_where_names_are_off(study):
    hidden = study.leave_one_out(("reml",), names=False)
    assert all(str(name).startswith("unit ") for name in hidden.units)


def test_pairs_periods_draws_and_wild_weights_answer(study):
    assert len(study.leave_two_out(["A01", "A02", "A03"], ("reml",)).table()) > 0
    assert len(study.leave_one_period_out(("reml",)).table()) > 0
    assert len(study.unit_bootstrap(99, routes=("reml",)).table()) > 0
    wild = study.wild_bootstrap("altitude", replicates=499)
    assert 0.0 < wild.p_value <= 1.0


def test_a_rehearsal_under_related_effects_shows_who_is_biased(study):
    found = study.rehearse(Truth(contextual={"feeding": -2.0}), replicates=200, seed=4)
    assert "within" in str(found)
    again = study.rehearse(Truth(contextual={"feeding": -2.0}), replicates=200, seed=4)
    assert str(found) == str(again)


def test_detectable_departures_shrink_with_the_power_asked(study):
    strong, weak = (study.minimum_detectable(power=power)["departure"].dropna() for power in (0.9, 0.5))
    assert len(strong) > 3
    assert (strong > weak).all()
