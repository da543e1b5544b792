"""A study from moments alone gives the figures of the study with rows, and says what it cannot give."""

import numpy as np
import pandas as pd
import pytest

import mixbridge
from mixbridge.routes import LEDGER_ROUTES

FORMULA = "honey ~ forage + feeding + altitude"


@pytest.fixture(scope="module")
def data():
    return mixbridge.demo.apiaries()


@pytest.fixture(scope="module")
def study(data):
    return mixbridge.crosscheck(FORMULA, data, unit="apiary", period="season")


@pytest.fixture(scope="module")
def rowless(study):
    return mixbridge.from_moments(study.moments, unit="apiary", period="season", terms=study.panel.terms)


@pytest.mark.parametrize("route", [key for key in LEDGER_ROUTES if key != "first_difference"])
def test_every_route_of_the_moments_is_the_route_of_the_rows(study, rowless, route):
    a, b = study.fit(route), rowless.fit(route)
    assert a.status == b.status
    np.testing.assert_array_equal(a.beta, b.beta)
    np.testing.assert_array_equal(a.covariance_array, b.covariance_array)


def test_differences_are_said_not_to_be_in_the_moments(rowless):
    assert "not hold the order" in rowless.fit("first_difference").status


@pytest.mark.parametrize("ask", ["ledger", "components", "identities"])
def test_tables_are_the_same(study, rowless, ask):
    a, b = getattr(study, ask), getattr(rowless, ask)
    off = "first_difference"
    if "route" in a:
        a, b = a[a["route"] != off].reset_index(drop=True), b[b["route"] != off].reset_index(drop=True)
    pd.testing.assert_frame_equal(a, b)


def test_unit_means_need_closed_moments_only(study, rowless):
    a, b = study.correlated("mundlak"), rowless.correlated("mundlak")
    np.testing.assert_array_equal(a.fit("reml").beta, b.fit("reml").beta)
    np.testing.assert_array_equal(a.coordinates().estimates, b.coordinates().estimates)
    assert b.slope_certificate().holds
    with pytest.raises(mixbridge.DataError, match="means of every unit"):
        b.noisy_means()


def test_contrasts_say_which_row_is_missing(study, rowless):
    a, b = study.contrasts(), rowless.contrasts()
    keep = ~a["variance"].str.startswith("cluster")
    pd.testing.assert_frame_equal(a[keep], b.iloc[:-1], check_dtype=False)
    assert "not at hand" in b["note"].iloc[-1]


@pytest.mark.parametrize(
    "ask",
    [
        lambda s: s.unit_effects("reml"),
        lambda s: s.fit("reml", covariance="CR1"),
        lambda s: s.fit("reml", covariance="two_way"),
        lambda s: s.leave_one_out(),
        lambda s: s.quasi_demeaned("reml"),
        lambda s: s.compare(s),
    ],
)
def test_what_needs_rows_or_units_is_refused_with_a_reason(rowless, ask):
    with pytest.raises(mixbridge.DataError, match=r"not kept|not at hand"):
        ask(rowless)


def test_the_audit_says_row_by_row_what_it_cannot_assess(rowless):
    statuses = {item.key: item.status for item in rowless.audit().findings}
    assert statuses["unit_means_model"] == "computed"
    for key in ("variance_wald", "serial_differences", "unit_means_robust"):
        assert statuses[key].startswith("not assessable: ")


def test_open_moments_keep_what_needs_units(study):
    again = mixbridge.from_moments(study.opened, unit="apiary")
    np.testing.assert_allclose(again.fit("reml").beta, study.fit("reml").beta, rtol=1e-12)
    effects = again.unit_effects("reml")
    assert len(effects) == study.panel.N


def test_the_screen_says_where_the_moments_come_from(rowless):
    assert "the rows are not at hand" in str(rowless)


def test_impossible_confidence_is_refused(study):
    with pytest.raises(mixbridge.OptionError, match="between 0 and 1"):
        mixbridge.from_moments(study.moments, confidence=1.5)


def test_inference_has_every_rule_of_the_model(study, rowless):
    one, two = study.inference("feeding", robust=()), rowless.inference("feeding")
    pd.testing.assert_frame_equal(one, two)
