"""Identities 5, 6 and 10 on every panel, and faults that they must catch."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from panels import BY_NAME, PANELS

from mixbridge.moments import Moments
from mixbridge.ratio import curve_of
from mixbridge.reconcile.identities import DOES_NOT_APPLY, FAILS, HOLDS, check_identities, tests_agree
from mixbridge.routes import LEDGER_ROUTES, fit_route

KEYS = ("one_chi_square", "multiplier_is_score", "pivot_is_f", "inverted_pivot")


def found_on(panel):
    codes = np.unique(panel.units, return_inverse=True)[1]
    curve = curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))
    fits = {key: fit_route(curve, key, {}, "no periods") for key in LEDGER_ROUTES}
    return {item.key: item for item in check_identities(curve, fits) if item.key in KEYS}


@pytest.mark.parametrize("panel", PANELS, ids=lambda p: p.name)
def test_they_hold_or_say_why_not(panel):
    found = found_on(panel)
    assert set(found) == set(KEYS)
    for item in found.values():
        assert item.verdict in (HOLDS, DOES_NOT_APPLY), item
        assert item.condition
    assert found["multiplier_is_score"].verdict == HOLDS


def test_on_an_ordinary_panel_all_of_them_apply():
    assert {item.verdict for item in found_on(BY_NAME["mild_both"]).values()} == {HOLDS}


@pytest.mark.parametrize(
    ("target", "fault", "key"),
    [
        (
            "contrasts",
            lambda f: lambda *a: tuple(replace(c, statistic=1.0001 * c.statistic) for c in f(*a)),
            KEYS[0],
        ),
        ("multiplier_of", lambda f: lambda c: replace(f(c), two_sided=f(c).two_sided + 1e-6), KEYS[1]),
        ("pivot_of", lambda f: lambda c: replace(f(c), df_within=f(c).df_within + 1), KEYS[2]),
    ],
)
def test_a_fault_in_a_statistic_is_caught_by_its_identity(monkeypatch, target, fault, key):
    monkeypatch.setattr(tests_agree, target, fault(getattr(tests_agree, target)))
    found = found_on(BY_NAME["mild_both"])
    assert found[key].verdict == FAILS
    assert all(found[other].verdict == HOLDS for other in KEYS if other not in (key, "inverted_pivot"))
