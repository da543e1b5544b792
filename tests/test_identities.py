"""Identities hold on every panel, and each deliberate fault is caught by the identities that should catch it."""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import pytest
from panels import BALANCED, BY_NAME, MILD, PANELS, make, moved, scaled

from mixbridge.correlated.means import with_unit_means
from mixbridge.errors import MixbridgeError
from mixbridge.moments import Moments
from mixbridge.ratio import curve_of
from mixbridge.reconcile import IDENTITIES_HEADING, Identity, Rows, check_identities, identity_table
from mixbridge.reconcile.identities import REGISTRY, Compared, Unmet
from mixbridge.reconcile.identities.registry import Rule, identity, result
from mixbridge.routes import LEDGER_ROUTES, differences_of, fit_route, log_likelihood
from mixbridge.routes.quadratic import minque_pair, solve

OFFSETS = [
    moved(
        make(f"{name}_{offset:g}", "", sizes, kinds, seed=900 + place),
        f"{name}_{offset:g}",
        "",
        x=offset,
        y=offset,
    )
    for place, (name, sizes, kinds) in enumerate(
        [
            ("balanced_closed", BALANCED, "pure between"),
            ("mild_closed", MILD, "pure between"),
            ("balanced_means", BALANCED, "both mean between"),
            ("mild_means", MILD, "both mean"),
        ]
    )
    for offset in (1e6, 1e9)
]
ORDINARY = [
    "balanced_both",
    "balanced_closed",
    "mild_both",
    "mild_between",
    "mild_means",
    "many_sizes",
    "singletons_both",
]
ANY_PANEL = {
    "ridge_on_indicators",
    "quasi_demeaned_rows",
    "predicted_effects",
    "pooled_end",
    "minque_is_scoring",
    "reml_unit_equation",
    "reml_idiosyncratic_equation",
    "reml_constant",
    "reml_shift",
}


def fitted(panel):
    """Return curve, all fits of the ledger, and the rows."""
    codes = np.unique(panel.units, return_inverse=True)[1]
    curve = curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))
    ordinals = panel.periods.astype(np.int64)
    fits = {
        key: fit_route(curve, key, {}, lambda step: differences_of(panel.X, panel.y, codes, ordinals, step))
        for key in LEDGER_ROUTES
    }
    return curve, fits, Rows(panel.X, panel.y, codes)


def verdicts(identities):
    return {one.key: one.verdict for one in identities}


def failing(identities):
    return {one.key for one in identities if one.verdict == "FAILS"}


def at_components(curve, fit, idiosyncratic, unit, **more):
    """Return a fit that is consistent in itself at other components: coefficients, root and ratio follow."""
    psi = max(unit, 0.0) / idiosyncratic
    point = curve.at(psi)
    return replace(
        fit,
        beta=point.beta,
        root=point.root,
        ratio=psi,
        unit_variance=max(unit, 0.0),
        unit_variance_raw=unit,
        idiosyncratic_variance=idiosyncratic,
        **more,
    )


# --- no false alarm -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("panel", [*PANELS, *OFFSETS], ids=lambda panel: panel.name)
def test_nothing_fails_and_what_applies_holds(panel):
    curve, fits, rows = fitted(panel)
    found = check_identities(curve, fits, rows)
    assert failing(found) == set(), [one for one in found if one.verdict == "FAILS"]
    seen = verdicts(found)
    assert seen.keys() == REGISTRY.keys()
    for key in (
        "ridge_on_indicators",
        "quasi_demeaned_rows",
        "pooled_end",
        "reml_constant",
        "minque_is_scoring",
    ):
        assert seen[key] == "holds", key
    if {"balanced", "closed"} <= panel.tags and "offset" not in panel.tags:
        assert seen["balanced_components"] == "holds"
        assert seen["closed_components"] == "does not apply"
    elif "closed" in panel.tags and "few" not in panel.tags:
        assert seen["closed_components"] == "holds"
        assert seen["balanced_components"] == "does not apply"
    if "balanced" not in panel.tags and not panel.name.startswith("balanced"):
        assert seen["wallace_hussain_is_minque_zero"] == "does not apply"
    if "singletons" in panel.tags and np.isfinite(fits["within"].beta).any():
        assert seen["one_row_units"] == "holds"


def random_panel(rng):
    """Draw a fitted panel: sizes, kinds of columns, ratios from 1e-4 to 1e8, offsets to 1e9 and scales at random."""
    units = int(rng.integers(4, 25))
    sizes = (
        (int(rng.integers(2, 8)),) * units
        if rng.random() < 0.4
        else tuple(int(v) for v in rng.integers(1, 10, units))
    )
    kinds = ["within", "between", "binary", "hidden", "mean", "pure", "near_within", "near_between"]
    chosen = " ".join(["both", *rng.choice(kinds, size=int(rng.integers(0, 4)), replace=False)])
    psi, seed = 10.0 ** rng.uniform(-4, 8), int(rng.integers(2**31))
    panel = make("random", chosen, sizes, chosen, seed=seed, psi=psi, intercept=bool(rng.random() < 0.8))
    offset = 10.0 ** rng.uniform(2, 9) * (rng.random() < 0.4)
    panel = moved(panel, "random", chosen, x=offset, y=offset)
    return fitted(scaled(panel, "random", chosen, x=10.0 ** rng.uniform(-8, 8), y=10.0 ** rng.uniform(-8, 8)))


def test_no_false_alarm_on_random_panels():
    rng, checked = np.random.default_rng(20), 0
    while checked < 100:
        try:
            curve, fits, rows = random_panel(rng)
        except (ArithmeticError, MixbridgeError, RuntimeWarning):  # dependent columns, or a column of zeros
            continue
        found = check_identities(curve, fits, rows)
        assert failing(found) == set(), (
            checked,
            curve.names,
            [one for one in found if one.verdict == "FAILS"],
        )
        checked += 1


def test_tolerances_are_narrow_on_ordinary_panels():
    """On well-conditioned panels an agreement to nine digits is asked for, so that `holds` says something."""
    for name in ORDINARY:
        curve, fits, rows = fitted(BY_NAME[name])
        for one in check_identities(curve, fits, rows):
            if one.verdict == "holds":
                assert one.tolerance < 1e-9, (name, one.key)
                assert one.difference <= one.tolerance


def test_every_identity_applies_somewhere_and_says_elsewhere_why_not():
    applied, refused = set(), {}
    for panel in PANELS:
        curve, fits, _ = fitted(panel)
        for one in check_identities(curve, fits):
            if one.verdict == "does not apply":
                refused.setdefault(one.key, set()).add(one.condition.split(":")[0])
                assert np.isnan(one.difference)
            else:
                applied.add(one.key)
    assert applied == REGISTRY.keys() - {"quasi_demeaned_rows"}  # rows were not given
    assert refused["quasi_demeaned_rows"] == {"rows"}
    assert "balanced" in refused["balanced_components"]
    assert "column space closed under unit averaging" in refused["balanced_components"]
    assert "unbalanced" in refused["closed_components"]
    assert "interior optimum" in refused["minque_fixed_point"]
    assert "meeting at a ratio >= 0" in refused["iterated_is_ml"]
    assert "one-row units" in refused["one_row_units"]


def test_two_rows_per_unit_with_a_gap_do_not_apply():
    panel = BY_NAME["pairs_balanced"]
    assert verdicts(check_identities(*fitted(panel)))["differences_are_within"] == "holds"
    periods = panel.periods.copy()
    periods[1] += 1  # the second row of the first unit is two periods after its first
    found = check_identities(*fitted(replace(panel, periods=periods)))
    one = next(one for one in found if one.key == "differences_are_within")
    assert (one.verdict, one.condition) == (
        "does not apply",
        "no gap: 1 of 12 differences were left out because the step differs",
    )


# --- deliberate faults ----------------------------------------------------------------------------------------------


def with_fault(panel, key, change, **options):
    """Return what fails after one fit was changed; nothing failed before."""
    curve, fits, rows = fitted(panel)
    assert failing(check_identities(curve, fits, rows)) == set()
    return failing(check_identities(curve, {**fits, key: change(curve, fits[key])}, rows, **options))


def average_weight(panel):
    """Return a change: coefficients of rows quasi-demeaned with the average share for all units."""

    def change(curve, fit):
        codes = np.unique(panel.units, return_inverse=True)[1]
        counts = np.bincount(codes)
        share = fit.quasi_demeaning.reindex(counts).to_numpy().mean()
        rows = np.column_stack([panel.X, panel.y])
        means = np.column_stack([np.bincount(codes, column) / counts for column in rows.T])[codes]
        moved_rows = rows - share * means
        return replace(fit, beta=np.linalg.lstsq(moved_rows[:, :-1], moved_rows[:, -1], rcond=None)[0])

    return change


def test_an_average_weight_is_caught_where_sizes_differ_only():
    unbalanced, balanced = BY_NAME["mild_both"], BY_NAME["balanced_both"]
    found = with_fault(unbalanced, "swamy_arora", average_weight(unbalanced))
    assert found == {"ridge_on_indicators", "quasi_demeaned_rows"}
    found = with_fault(unbalanced, "reml", average_weight(unbalanced))
    assert found >= {
        "ridge_on_indicators",
        "quasi_demeaned_rows",
        "predicted_effects",
        "contextual_decomposition",
    }
    assert not found & {"reml_unit_equation", "reml_constant", "minque_fixed_point", "slopes_with_means"}
    assert with_fault(balanced, "reml", average_weight(balanced)) == set()  # there it is the right one


@pytest.mark.parametrize("size", [1e-3, 1e-9])
@pytest.mark.parametrize("name", ORDINARY)
def test_a_coefficient_off_by_little_is_caught(name, size):
    def change(curve, fit):
        return replace(fit, beta=fit.beta * (1.0 + size))

    panel = BY_NAME[name]
    assert with_fault(panel, "wallace_hussain", change) == {"ridge_on_indicators", "quasi_demeaned_rows"}
    # contextual_decomposition looks at two fits, pooled the second of them
    extra = {"contextual_decomposition"} & {
        key for key, verdict in verdicts(check_identities(*fitted(panel))).items() if verdict == "holds"
    }
    found = with_fault(panel, "pooled", change)
    assert found == {"ridge_on_indicators", "quasi_demeaned_rows", "pooled_end"} | extra


@pytest.mark.parametrize("name", ["balanced_both", "mild_both", "many_sizes"])
def test_swapped_components_are_caught(name):
    def change(curve, fit):
        return replace(
            fit,
            unit_variance=fit.idiosyncratic_variance,
            unit_variance_raw=fit.idiosyncratic_variance,
            idiosyncratic_variance=fit.unit_variance,
            ratio=fit.idiosyncratic_variance / fit.unit_variance,
        )

    found = with_fault(BY_NAME[name], "swamy_arora", change)
    assert found >= {"ridge_on_indicators", "quasi_demeaned_rows"}
    assert not found & {"reml_unit_equation", "slopes_with_means", "within_end", "pooled_end"}


def test_a_shrinkage_at_another_ratio_is_caught():
    """Components and coefficients are right, the ratio from which shares and shrinkage come is not."""
    found = with_fault(BY_NAME["mild_both"], "reml", lambda curve, fit: replace(fit, ratio=1.01 * fit.ratio))
    assert found == {"quasi_demeaned_rows", "predicted_effects"}


def wrong_divisor(curve, fit):
    """sigma_u^2 with n - N where n - N - K_w belongs."""
    (_, within, df, _), (_, between, on_idiosyncratic, on_unit) = fit.forms_table
    first = within / (df + curve.rank_within)
    return at_components(curve, fit, first, (between - on_idiosyncratic * first) / on_unit)


def truncated_trace(curve, fit):
    """The unit variance divided by n - N, as if the trace in its expectation were that of a one-way layout of equal units."""
    (_, within, df, _), (_, between, on_idiosyncratic, _) = fit.forms_table
    first = within / df
    n = curve.n
    return at_components(
        curve, fit, first, (between - on_idiosyncratic * first) / (n - n / curve.units * curve.rank_between)
    )


@pytest.mark.parametrize("route", ["swamy_arora", "wansbeek_kapteyn"])
def test_a_wrong_divisor_is_caught(route):
    found = with_fault(BY_NAME["balanced_closed"], route, wrong_divisor)
    assert found == {"balanced_components"} | ({"harmonic_is_weighted"} if route == "swamy_arora" else set())
    assert with_fault(BY_NAME["mild_closed"], route, wrong_divisor) == {"closed_components"}


def test_a_truncated_trace_is_caught_where_sizes_differ_only():
    assert with_fault(BY_NAME["mild_closed"], "swamy_arora", truncated_trace) == {"closed_components"}
    assert with_fault(BY_NAME["mild_means"], "swamy_arora", truncated_trace) == {"closed_components"}
    assert with_fault(BY_NAME["balanced_closed"], "swamy_arora", truncated_trace) == set()  # equal there


def test_an_approximate_convention_is_no_fault():
    """Routes that state other divisors are left out of the comparisons, not counted as failing."""
    for name in ("balanced_closed", "mild_closed", "balanced_both"):
        curve, fits, rows = fitted(BY_NAME[name])
        for key, conventions in [
            ("wallace_hussain", {"expectation": "short"}),
            ("swamy_arora", {"between": "harmonic"}),
            ("swamy_arora", {"count": "columns"}),
        ]:
            other = fit_route(curve, key, conventions, "no rows")
            assert failing(check_identities(curve, {**fits, key: other}, rows)) == set()


def test_short_expectations_called_exact_are_caught():
    def change(curve, fit):
        short = fit_route(curve, "wallace_hussain", {"expectation": "short"}, "no rows")
        return replace(short, conventions=fit.conventions)

    assert with_fault(BY_NAME["balanced_both"], "wallace_hussain", change) == {
        "wallace_hussain_is_minque_zero"
    }


def wrong_optimum(factor):
    """A ratio that is not the optimum, everything else computed correctly from it."""

    def change(curve, fit):
        psi = fit.ratio * factor
        sigma = curve.at(psi).residual / (curve.n - curve.rank)
        value = log_likelihood(curve, "reml", psi)
        return at_components(curve, fit, sigma, psi * sigma, log_likelihood=value)

    return change


@pytest.mark.parametrize("factor", [0.5, 1.0 + 1e-6])
@pytest.mark.parametrize(
    "name", ["mild_both", "mild_between", "many_sizes", "singletons_both", "offset_both_1e6"]
)
def test_a_wrong_ratio_called_the_optimum_is_caught(name, factor):
    expected = {"minque_fixed_point", "reml_unit_equation", "reml_idiosyncratic_equation"}
    assert with_fault(BY_NAME[name], "reml", wrong_optimum(factor)) == expected


def test_a_wrong_ratio_called_the_optimum_is_caught_by_the_analysis_of_variance_too():
    found = with_fault(BY_NAME["balanced_closed"], "reml", wrong_optimum(1.1))
    assert "balanced_components" in found


def test_zero_called_the_optimum_is_caught():
    """At zero the unit form must not exceed its expectation; where the optimum is interior and D falls at 0 it does."""

    def change(curve, fit):
        sigma = curve.at(0.0).residual / (curve.n - curve.rank)
        return at_components(curve, fit, sigma, 0.0, log_likelihood=log_likelihood(curve, "reml", 0.0))

    assert with_fault(BY_NAME["mild_both"], "reml", change) == {"reml_unit_equation"}


def test_a_forgotten_constant_is_caught():
    def change(curve, fit):
        return replace(fit, log_likelihood=log_likelihood(curve, "reml", fit.ratio, constant=False))

    assert with_fault(BY_NAME["mild_both"], "reml", change) == {"reml_constant"}


def test_a_constant_left_out_by_convention_is_no_fault():
    curve, fits, rows = fitted(BY_NAME["mild_both"])
    stated = fit_route(curve, "reml", {"reml_constant": "omitted"}, "no rows")
    found = check_identities(curve, {**fits, "reml": stated}, rows)
    one = next(one for one in found if one.key == "reml_constant")
    assert (one.verdict, "omitted" in one.condition) == ("holds", True)
    assert stated.log_likelihood != pytest.approx(fits["reml"].log_likelihood, rel=1e-3)
    # and the reverse fault: the constant is there although the convention says it is not
    forged = replace(stated, log_likelihood=fits["reml"].log_likelihood)
    assert failing(check_identities(curve, {**fits, "reml": forged}, rows)) == {"reml_constant"}


@pytest.mark.parametrize("name", ["mild_both", "balanced_both", "singletons_both"])
def test_a_minimum_norm_step_from_another_prior_is_caught(name):
    def change(curve, fit):
        step = solve(curve, minque_pair(curve, 1.05))
        return at_components(curve, fit, step.idiosyncratic, step.unit)

    assert with_fault(BY_NAME[name], "minque_1", change) == {"minque_is_scoring"}


def test_wrong_maximum_likelihood_is_caught():
    def change(curve, fit):
        psi = 1.0001 * fit.ratio
        sigma = curve.at(psi).residual / curve.n
        return at_components(curve, fit, sigma, psi * sigma)

    assert with_fault(BY_NAME["balanced_both"], "ml", change) == {"iterated_is_ml"}
    assert with_fault(BY_NAME["balanced_closed"], "ml", change) == {"iterated_is_ml", "balanced_ml"}


@pytest.mark.parametrize("size", [1e-3, 1e-9])
def test_wrong_within_slopes_are_caught(size):
    def change(curve, fit):
        return replace(fit, beta=fit.beta * (1.0 + size))

    three = {"within_end", "slopes_with_means", "contextual_decomposition"}
    assert with_fault(BY_NAME["mild_both"], "within", change) == three
    assert with_fault(BY_NAME["singletons_both"], "within", change) == three | {"one_row_units"}
    assert with_fault(BY_NAME["pairs_balanced"], "within", change) == three | {"differences_are_within"}
    assert with_fault(BY_NAME["pairs_balanced"], "first_difference", change) == {"differences_are_within"}


def test_moments_of_other_rows_are_caught():
    panel = BY_NAME["mild_both"]
    curve, fits, rows = fitted(panel)
    y = rows.y.copy()
    y[3] += 1e-6
    assert failing(check_identities(curve, fits, Rows(rows.x, y, rows.codes))) == {"quasi_demeaned_rows"}


def mean_columns(panel, source, drop=()):
    """Return unit means of columns over rows, as columns of the rows left after some were dropped."""
    codes = np.unique(panel.units, return_inverse=True)[1]
    counts = np.bincount(codes)
    columns = [panel.X[:, panel.names.index(name)] for name in source.values()]
    means = np.column_stack([(np.bincount(codes, column) / counts)[codes] for column in columns])
    return np.delete(means, list(drop), axis=0)


@pytest.mark.parametrize(
    "name", ["mild_both", "balanced_both", "many_sizes", "mild_no_intercept", "singletons_both"]
)
def test_means_taken_before_rows_were_dropped_are_caught(name):
    full, drop = BY_NAME[name], [len(BY_NAME[name].y) - 1]
    keep = np.delete(np.arange(len(full.y)), drop)
    panel = replace(full, X=full.X[keep], y=full.y[keep], units=full.units[keep], periods=full.periods[keep])
    curve, fits, rows = fitted(panel)
    source = with_unit_means(curve.moments).source
    for means, expected in [
        (mean_columns(panel, source), set()),
        (
            mean_columns(full, source, drop),
            {"slopes_with_means", "contextual_decomposition", "one_chi_square"},
        ),
    ]:
        names = (*panel.names, *source)
        wide = Moments.from_arrays(np.column_stack([panel.X, means]), panel.y, rows.codes, names)
        assert failing(check_identities(curve, fits, rows, with_means=(wide, source))) == expected


# --- the objects ----------------------------------------------------------------------------------------------------


def test_the_table_has_one_row_per_identity_and_its_fields():
    curve, fits, _ = fitted(BY_NAME["mild_both"])
    found = check_identities(curve, fits)
    table = identity_table(found)
    assert list(table.columns) == [field.name for field in fields(Identity)]
    assert list(table["key"]) == [one.key for one in found]
    assert list(table["number"]) == sorted(table["number"])
    assert set(table["number"]) == set(range(1, 15))
    assert set(table["verdict"]) == {"holds", "does not apply"}
    assert (table["source"].str.len() > 0).all()
    assert (table["statement"].str.len() > 0).all()
    compared = table[table["verdict"] == "holds"]
    assert (compared["tolerance_reason"].str.len() > 0).all()
    assert (compared["left_name"] != compared["right_name"]).all()
    assert list(identity_table([]).columns) == list(table.columns)


def test_the_heading_says_what_identities_do_not_show():
    assert IDENTITIES_HEADING == "These check the arithmetic, not the model."


def test_missing_routes_and_fits_on_other_rows_do_not_apply():
    curve, fits, _ = fitted(BY_NAME["singletons_both"])
    for one in check_identities(curve, {}):
        assert one.verdict == "does not apply", one.key
    other = fit_route(curve_of(curve.moments.without_one_row_units()), "within", {}, "no rows")
    found = verdicts(check_identities(curve, {**fits, "within": other}))
    assert found["within_end"] == "does not apply"


def test_a_key_is_registered_once():
    def pooled_end(setting):
        return Unmet("never")

    with pytest.raises(ValueError, match="pooled_end"):
        identity(number=11, name="again", statement="again", source="again")(pooled_end)


@pytest.mark.parametrize(
    ("difference", "tolerance", "verdict"),
    [
        (1e-12, 1e-11, "holds"),
        (1e-10, 1e-11, "FAILS"),
        (np.nan, 1e-11, "FAILS"),
        (1e-12, 0.5, "does not apply"),
    ],
)
def test_a_verdict_needs_a_number_and_a_tolerance_that_can_tell(difference, tolerance, verdict):
    def check(setting):
        return Compared("any", 1.0, 1.0, "left", "right", difference, tolerance, "reason")

    rule = Rule("key", 1, "name", "statement", "source", check)
    assert result(rule, None).verdict == verdict
