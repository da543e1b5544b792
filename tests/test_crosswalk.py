"""The crosswalk: every value from one ratio, every name in each field, the clash of symbols included."""

from __future__ import annotations

import numpy as np
import pytest

import mixbridge
from mixbridge.errors import OptionError
from mixbridge.reconcile.crosswalk import FIELDS, crosswalk

ROUTES = ("pooled", "within", "swamy_arora", "nerlove", "minque_1", "ml", "reml")


@pytest.fixture(scope="module")
def study():
    return mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary"
    )


@pytest.mark.parametrize("route", ROUTES)
def test_values_follow_from_one_ratio(study, route):
    fit = study.fit(route)
    table = crosswalk(fit, study.moments.counts)
    value = table.set_index(["quantity", "at"])["value"]
    psi, error = fit.ratio, fit.idiosyncratic_variance
    assert value["variance ratio", ""] == psi
    assert value["idiosyncratic variance", ""] == error
    assert value["idiosyncratic standard deviation", ""] == pytest.approx(error**0.5, rel=1e-15)
    if np.isfinite(psi):
        # two divisions between them
        assert value["unit variance", ""] == pytest.approx(psi * error, rel=1e-14)
        assert value["unit standard deviation", ""] ** 2 == pytest.approx(psi * error, rel=1e-14)
        assert value["total variance, given the covariates", ""] == pytest.approx(
            error * (1 + psi), rel=1e-14
        )
    else:
        assert np.isnan(value["unit variance", ""])
    icc = value["intraclass correlation, given the covariates", ""]
    assert icc == fit.icc
    sizes = np.repeat(study.moments.sizes, study.moments.counts)
    for at, size in (("min", sizes.min()), ("median", np.median(sizes)), ("max", sizes.max())):
        weight, shrinkage = value["quasi-demeaning weight", at], value["shrinkage", at]
        assert table.loc[table["at"] == at, "size"].unique().tolist() == [size]
        assert weight == pytest.approx(fit.quasi_demeaning[size], rel=1e-13, abs=1e-15)
        assert shrinkage == pytest.approx(fit.shrinkage[size], rel=1e-13, abs=1e-15)
        assert shrinkage == pytest.approx(weight * (2 - weight), rel=1e-12)  # the bridge
        assert value["design effect of a unit-constant covariate", at] == pytest.approx(1 + (size - 1) * icc)
        if np.isfinite(psi):
            root = value["variance of a unit mean's error, times its size", at]
            assert root == pytest.approx(error + size * psi * error, rel=1e-14)
            assert 1 - (error / root) ** 0.5 == pytest.approx(weight, rel=1e-12, abs=1e-15)


def test_one_symbol_with_two_meanings_is_shown_with_both_values(study):
    fit = study.fit("reml")
    table = crosswalk(fit)
    clash = table[table["quantity"].str.startswith("the printed symbol σ_u²")]
    assert clash["value"].tolist() == [fit.unit_variance, fit.idiosyncratic_variance]
    assert set(clash["economics_symbol"]) == {"σ_u²"}
    named = table.set_index("quantity")
    assert "σ_u²" in named.loc["unit variance", "economics_symbol"]
    assert "σ_u²" in named.loc["idiosyncratic variance", "economics_symbol"]


def test_every_quantity_has_a_name_in_every_field(study):
    table = crosswalk(study.fit("reml"), study.moments.counts)
    plain = table[~table["quantity"].str.startswith("the printed symbol")]
    for field in FIELDS:
        assert (plain[field].str.len() > 0).all()
    own = plain[plain["quantity"] != "quasi-demeaning weight"]
    for field in FIELDS:
        assert (own[f"{field}_symbol"].str.len() > 0).all()
    assert (plain["formula"].str.len() > 0).all()
    assert not table.duplicated(["quantity", "at"]).any()


def test_coefficients_are_named_by_route(study):
    for route, word in (
        ("reml", "random-effects"),
        ("within", "fixed-effects (within)"),
        ("pooled", "pooled OLS"),
    ):
        fit = study.fit(route)
        rows = crosswalk(fit).set_index("quantity")
        for term, value in fit.coefficients.items():
            row = rows.loc[f"coefficient of {term}"]
            assert word in row["economics"]
            assert "fixed effect" in row["biostatistics"]
            np.testing.assert_equal(row["value"], value)


def test_the_median_without_counts_is_labelled(study):
    table = crosswalk(study.fit("reml"))
    row = table[table["at"] == "median of distinct sizes"]
    assert (row["size"] == np.median(study.moments.sizes)).all()
    assert np.median(study.moments.sizes) != np.median(np.repeat(study.moments.sizes, study.moments.counts))


def test_what_has_no_ratio_is_refused(study):
    with pytest.raises(OptionError, match="between"):
        crosswalk(study.fit("between"))
    with pytest.raises(OptionError, match="counts"):
        crosswalk(study.fit("reml"), [1, 2])
