"""Required agreement: what passes, what is raised, and that no route is left out unseen. Scales of a gap."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import mixbridge
from mixbridge.errors import DisagreementError, OptionError
from mixbridge.reconcile.agreement import CLASSES, Thresholds
from mixbridge.reconcile.require import REQUIRABLE, require
from mixbridge.reconcile.require_scales import gap_scales
from mixbridge.routes import LEDGER_ROUTES, REFERENCE_ROUTES

VOTES = tuple(key for key in LEDGER_ROUTES if key not in REFERENCE_ROUTES)


@pytest.fixture(scope="module")
def study():
    return mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary", period="season"
    )


def test_agreement_returns_the_rows_compared(study):
    found = require(study.ledger, "forage", "immaterial")
    assert list(found["route"]) == [key for key in VOTES if key != "reml"]
    assert found["compared"].all()
    assert found["agrees"].all()
    columns = list(study.ledger.columns)
    kept = study.ledger.query("term == 'forage'").set_index("route").loc[list(found["route"])].reset_index()
    pd.testing.assert_frame_equal(found[columns], kept[columns])


@pytest.mark.parametrize("agree", REQUIRABLE)
@pytest.mark.parametrize("term", ["Intercept", "forage", "feeding", "altitude"])
def test_raised_exactly_where_a_class_is_worse(study, term, agree):
    rows = study.ledger.query(
        "term == @term and verdict in @CLASSES", local_dict={"term": term, "CLASSES": CLASSES}
    )
    worst = max(CLASSES.index(verdict) for verdict in rows["verdict"])
    if worst <= CLASSES.index(agree):
        assert len(require(study.ledger, term, agree)) == len(rows)
    else:
        with pytest.raises(DisagreementError):
            require(study.ledger, term, agree)


def test_the_message_explains_and_lists_every_route(study):
    with pytest.raises(DisagreementError) as raised:
        require(study.ledger, "feeding", explain=lambda route: f"BECAUSE OF {route}")
    text = str(raised.value)
    for route in LEDGER_ROUTES:
        assert route in text
    rows = study.ledger.query("term == 'feeding'").set_index("route")
    bad = [key for key in VOTES if key != "reml" and rows.loc[key, "verdict"] in ("visible", "conflicting")]
    assert f"{len(bad)} of 10 are not" in text
    for route in bad:
        line = next(one for one in text.splitlines() if one.strip().startswith(f"{route}: "))
        assert rows.loc[route, "verdict"] in line
        assert f"{rows.loc[route, 'estimate']:.6g}" in line
        assert rows.loc[route, "reason"] in line
    assert Thresholds().text() in text
    widest = rows.loc[bad, "gap_in_se"].abs().idxmax()
    assert f"BECAUSE OF {widest}" in text
    assert text.count("BECAUSE OF") == 1


def test_thresholds_of_the_table_are_printed(study):
    table = study.agreement(immaterial=0.001)
    with pytest.raises(DisagreementError, match=r"gap below 0\.001 standard errors"):
        require(table, "forage", thresholds=Thresholds(0.001))


def test_routes_left_out_by_choice_are_listed(study):
    found = require(study.agreement(routes=["ml", "minque_1"]), "feeding")
    assert set(found["route"]) == {key for key in VOTES if key != "reml"}
    out = found[~found["compared"]]
    assert set(out["verdict"]) == {"left out"}
    assert set(out["route"]) == {key for key in VOTES if key not in ("reml", "ml", "minque_1")}
    assert out["agrees"].isna().all()
    with pytest.raises(DisagreementError) as raised:
        require(study.agreement(routes=["swamy_arora"]), "feeding")
    for route in VOTES:
        assert route in str(raised.value)


def test_routes_without_an_estimate_are_listed_and_do_not_pass_for_agreement():
    """As many unit-constant columns as units: no random-effects route is left to compare with."""
    rng = np.random.default_rng(4)
    unit = np.repeat(np.arange(3), 4)
    frame = pd.DataFrame(
        {"unit": unit, "x": rng.normal(size=12), "a": (unit == 1) * 1.0, "b": (unit == 2) * 1.0}
    )
    frame["y"] = frame["x"] + rng.normal(size=12)
    study = mixbridge.crosscheck("y ~ x + a + b", frame, unit="unit")
    with pytest.raises(DisagreementError, match="no route to compare"):
        require(study.ledger, "x", "visible")
    frame = frame.assign(c=rng.normal(size=3)[unit])
    study = mixbridge.crosscheck("y ~ x + c", frame, unit="unit")
    lost = study.ledger.query("term == 'c' and verdict == 'not available'")
    lost = [route for route in lost["route"] if route in VOTES]
    assert lost
    try:
        listed = " ".join(require(study.ledger, "c", "visible").query("not compared")["route"])
    except DisagreementError as reason:
        listed = str(reason)
    assert all(route in listed for route in lost)


def test_bad_requirements_are_refused(study):
    with pytest.raises(OptionError, match="immaterial"):
        require(study.ledger, "forage", "conflicting")  # type: ignore[arg-type]
    with pytest.raises(OptionError, match="Did you mean 'forage'"):
        require(study.ledger, "forrage")


# -- scales ----------------------------------------------------------------------------------------


def test_three_scales(study):
    noise = {("feeding", "ml"): 0.02, ("feeding", "swamy_arora"): 0.05, ("forage", "ml"): 0.0}
    table = gap_scales(study.ledger, noise=noise, margin={"feeding": 0.1})
    pd.testing.assert_frame_equal(table[study.ledger.columns], study.ledger)
    rows = table.set_index(["term", "route"])
    for key in (("feeding", "ml"), ("feeding", "swamy_arora")):
        assert rows.loc[key, "gap_in_noise"] == rows.loc[key, "gap"] / noise[key]
    assert np.isnan(
        rows.loc[("forage", "ml"), "gap_in_noise"]
    )  # no noise at all: an identity makes them agree
    assert np.isnan(rows.loc[("feeding", "amemiya"), "noise_sd"])
    assert np.isnan(rows.loc[("feeding", "amemiya"), "gap_in_noise"])
    feeding = table[table["term"] == "feeding"]
    np.testing.assert_allclose(feeding["gap_in_margin"], feeding["gap"] / 0.1, rtol=1e-15)
    assert (feeding["within_margin"] == (feeding["gap"].abs() <= 0.1)).all()
    others = table[table["term"] != "feeding"]
    assert others["within_margin"].isna().all()
    assert others["margin"].isna().all()


def test_one_margin_for_all_and_missing_gaps(study):
    table = gap_scales(study.ledger, margin=0.5)
    missing = table["gap"].isna()
    assert missing.any()
    assert table.loc[missing, "within_margin"].isna().all()
    assert not table.loc[~missing, "within_margin"].isna().any()
    assert table["gap_in_noise"].isna().all()


@pytest.mark.parametrize("margin", [0.0, -1.0, float("nan"), float("inf"), True, {"feeding": 0.0}])
def test_bad_margins_are_refused(study, margin):
    with pytest.raises(OptionError, match="margin"):
        gap_scales(study.ledger, margin=margin)


def test_margins_of_unknown_terms_are_refused(study):
    with pytest.raises(OptionError, match="forage"):
        gap_scales(study.ledger, margin={"forrage": 1.0})
