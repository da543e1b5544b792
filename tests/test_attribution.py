"""Attribution: every node of every chain against the dense derivation, exact sums, contrasts, sentences."""

from __future__ import annotations

import re
from functools import cache
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest
from allowance import EPS, PLAIN, conditions
from mp_likelihood import DIGITS, evaluate, products
from mpmath import mp, mpf
from oracle import oracle_fit
from oracle.fit import dense_panel
from panels import BY_NAME, PANELS, tagged
from test_routes import on_curve

import mixbridge
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.references import pick_reference
from mixbridge.moments import Moments
from mixbridge.ratio import Curve, curve_of
from mixbridge.reconcile.agreement import Interval
from mixbridge.reconcile.attribution import Attribution, attribute, attribute_all
from mixbridge.reconcile.attribution_chains import median_size, weight_at
from mixbridge.reconcile.attribution_changes import CHANGES, changes_of
from mixbridge.reconcile.attribution_node import CAUSES, Node, node_of
from mixbridge.reconcile.attribution_positions import Positions
from mixbridge.reconcile.attribution_text import say, say_signed
from mixbridge.routes import FITTED, LEDGER_ROUTES, TRUNCATED, Fit, axes_of, fit_route

VARIANTS = (
    ("wallace_hussain", {"expectation": "short"}),
    ("swamy_arora", {"between": "unweighted"}),
    ("swamy_arora", {"between": "harmonic"}),
    ("swamy_arora", {"count": "columns"}),
    ("nerlove", {"divisor": "units"}),
    ("minque", {"prior": 7.5}),
)


@cache
def curve_for(name: str) -> Curve:
    panel = BY_NAME[name]
    codes = np.unique(panel.units, return_inverse=True)[1]
    return curve_of(Moments.from_arrays(panel.X, panel.y, codes, panel.names))


@cache
def fits_for(name: str) -> dict[str, Fit]:
    return {key: fit_route(curve_for(name), key, {}, "no order of rows") for key in LEDGER_ROUTES}


def intervals_of(curve: Curve, fit: Fit, rule: str | None = None) -> dict[str, Interval]:
    found = {}
    errors = fit.standard_errors.to_numpy()
    if rule == "kenward_roger":
        errors = np.sqrt(np.diag(kenward_roger(curve, fit).covariance))
    for term, value, error, law in zip(
        fit.terms, fit.beta, errors, pick_reference(curve, fit, rule=rule), strict=True
    ):
        found[term] = Interval(value, error, *law.interval(value, error, 0.95))
    return found


@cache
def all_attributions(name: str) -> tuple[tuple[Attribution, ...], Positions]:
    """Every curve route, variants too, with each likelihood route and with `swamy_arora`; the last term they share."""
    curve, fits = curve_for(name), fits_for(name)
    positions = Positions(curve, fits)
    ends = [fit for key, fit in fits.items() if key not in ("between", "first_difference")]
    ends += [fit_route(curve, route, kw, "none") for route, kw in VARIANTS]
    ends = [fit for fit in ends if fit.estimated]
    pairs = [(a, b) for b in ends if b.route in ("reml", "ml", "swamy_arora") for a in ends if a is not b]
    found = []
    for a, b in pairs:
        both = np.isfinite(a.beta) & np.isfinite(b.beta)
        for term in np.array(curve.names)[both][-1:]:
            found.append(attribute(curve, fits, str(term), a, b, positions=positions))
    return tuple(found), positions


# -- nodes -----------------------------------------------------------------------------------------


def check_forms(name: str, node: Node, positions: Positions) -> None:
    """A quadratic node: variances before truncation, and the ratio made of them."""
    panel, position = BY_NAME[name], positions.at(node)
    kw = dict(node.conventions)
    if node.made == "minque":
        kw["prior"] = positions.at(node.start).ratio
    ref = oracle_fit(panel.X, panel.y, panel.units, node.route, exact=True, **kw)
    fit = fit_route(positions.curve, node.route, kw, "none")
    bounds = {d.what: d for d in on_curve(conditions_for(name), node.route, kw, fit, ref)}
    unit, error = bounds["unit variance raw"], bounds["idiosyncratic variance"]
    raw = ref.unit_variance_raw / ref.idiosyncratic_variance
    relative = float(error.allowance) / ref.idiosyncratic_variance
    allowed = float(unit.allowance) / ref.idiosyncratic_variance + abs(raw) * relative
    allowed = max(allowed, PLAIN * abs(raw))
    if 1.0 + panel_largest(name) * raw > 0.0:
        assert abs(position.raw - raw) <= allowed, (node.label, position.raw, raw)
    else:  # weights would turn negative: the node is used after truncation only
        assert position.raw == position.ratio == 0.0
    assert abs(position.ratio - max(raw, 0.0)) <= allowed, (node.label, position.ratio, raw)


def panel_largest(name: str) -> float:
    return float(np.unique(BY_NAME[name].units, return_counts=True)[1].max())


@cache
def conditions_for(name: str):
    panel = BY_NAME[name]
    return conditions(panel.X, panel.y, panel.units)


def check_stationary(name: str, node: Node, ratio: float) -> None:
    """A stationary point of the likelihood: at 50 digits its slope changes sign within 1e-7 of the ratio.

    1e-7: an optimum is located to about the root of the rounding of the deviance at worst, and an iteration that
    stops at a change of 1e-12 with a contraction factor up to 1 - 1e-5 is that close.
    """
    panel = BY_NAME[name]
    kind = "ml" if node.route in ("ml", "gls") else "reml"
    with mp.workdps(DIGITS):
        pack = exact_products(name)
        if ratio == 0.0:
            assert evaluate(pack, mpf(0), kind).slope >= 0, (panel.name, node.label)
            return
        below, above = (evaluate(pack, mpf(ratio) * (1 + mpf(s) / 10**7), kind).slope for s in (-1, 1))
        assert below * above < 0, (panel.name, node.label, ratio)


@cache
def exact_products(name: str):
    panel = BY_NAME[name]
    with mp.workdps(DIGITS):
        return products(panel.X, panel.y, panel.units)


def check_gls_step(name: str, node: Node, positions: Positions) -> None:
    """The ratio of one step maximises the likelihood given the coefficients of its start: nothing on a grid is better."""
    panel = BY_NAME[name]
    dense, _ = dense_panel(panel.X, panel.y, panel.units, exact=True)
    start = positions.at(node.start).ratio
    if np.isinf(start):
        part = dense.averaging @ (dense.remainder @ dense.y)
        constant = dense.unit_constant_unweighted
        part = part - constant.projector @ part
        left = dense.within_residual @ dense.y + dense.Z @ part
    else:
        left = dense.y - dense.X @ dense.gls(dense.X.dtype.type(start))[0]

    def deviance(psi: float) -> float:
        root = dense.inverse_root(dense.X.dtype.type(psi))
        moved = root @ left
        return float(dense.n * np.log(moved @ moved) + np.log1p(dense.sizes * psi).sum())

    ratio = positions.at(node).ratio
    here = deviance(ratio)
    rivals = [ratio * (1 + s) for s in (-1e-3, 1e-3)] + [0.0, *np.geomspace(1e-4, 1e4, 81)]
    # deviances are sums of n terms of size log r: rounding n eps times that
    slack = 10 * EPS * dense.n * (1 + abs(here))
    assert here <= min(deviance(psi) for psi in rivals) + slack, (name, node.label, ratio)


@pytest.mark.parametrize("panel", PANELS, ids=lambda panel: panel.name)
def test_every_node_is_the_estimator_it_says(panel):
    _, positions = all_attributions(panel.name)
    checked = 0
    for node, position in positions.known.items():
        if not position.available:
            continue
        checked += 1
        if node.route == "pooled":
            assert position.ratio == 0.0
        elif node.route == "within":
            assert position.ratio == np.inf
        elif node.made == "gls":
            check_gls_step(panel.name, node, positions)
        elif node.made.startswith("iterated") or node.route in ("ml", "reml"):
            check_stationary(panel.name, node, position.ratio)
        else:
            check_forms(panel.name, node, positions)
    assert checked >= 8


def test_nodes_that_data_do_not_give_are_named():
    """With an idiosyncratic variance that is not positive a step has no ratio, and the note says which and why."""
    found, positions = all_attributions("psi_huge_balanced")
    lost = [node for node, position in positions.known.items() if not position.available]
    assert Node("wallace_hussain") in lost
    shown = {
        label
        for item in found
        for chain in item.chains
        for link in chain
        for label in (link.move.start, link.move.end)
    }
    assert not shown & {node.label for node in lost}
    assert any("not positive" in note for item in found for note in item.notes)


# -- sums ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("panel", PANELS, ids=lambda panel: panel.name)
def test_links_join_and_add_up(panel):
    found, _ = all_attributions(panel.name)
    assert found
    for item in found:
        gap = item.gap
        for chain in item.chains:
            assert chain[0].move.ratio_from == gap.ratio_b
            assert chain[-1].move.ratio_to == gap.ratio_a
            for before, after in pairwise(chain):
                assert before.move.end == after.move.start
                assert before.move.ratio_to == after.move.ratio_from
            # a sum of differences of the same numbers: one rounding of the largest per link
            largest = max([abs(gap.estimate_a), abs(gap.estimate_b)])
            steps = [link.coefficient_change for link in chain]
            slack = 4 * EPS * len(steps) * (largest + np.abs(steps).sum())
            assert abs(sum(steps) - gap.value) <= slack
            weights = [link.weight_change for link in chain]
            assert abs(sum(weights) - (gap.weight_a - gap.weight_b)) <= 4 * EPS * len(steps) * (
                1 + np.abs(weights).sum()
            )
        if item.chains and gap.b == "reml":
            table = item.causes
            # links of one cause may undo each other, so rounding is that of all steps of a chain
            scale = item.links["coefficient_change"].abs().groupby(item.links["chain"]).sum().max()
            slack = 16 * EPS * len(table) * (scale + abs(gap.estimate_a) + abs(gap.estimate_b))
            assert abs(table["coefficient"].sum() - gap.value) <= slack
            assert (table["coefficient_lowest"] <= table["coefficient"] + slack).all()
            assert (table["coefficient_highest"] >= table["coefficient"] - slack).all()
            assert set(table["cause"]) <= set(CAUSES)


def test_ratios_in_links_give_the_weights():
    found, positions = all_attributions("mild_between")
    size = median_size(positions.curve)
    assert size == 4.5  # sizes 2, 3, 3, 4, 5, 6, 7, 8
    links = pd.concat([item.links for item in found], ignore_index=True)
    by_hand = 1.0 - (1.0 + size * links["ratio_to"]) ** -0.5
    np.testing.assert_allclose(
        links["weight_to"], by_hand, atol=4 * EPS, rtol=0
    )  # one power and a difference
    assert weight_at(np.inf, size) == 1.0


# -- what chains say -------------------------------------------------------------------------------


def demo():
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary", period="season"
    )
    return study, {key: study.intervals(fit) for key, fit in study.fits.items()}


@pytest.fixture(scope="module")
def demo_study():
    return demo()


def test_the_chain_of_the_design_is_among_the_legal_ones(demo_study):
    study, intervals = demo_study
    found = attribute(
        study.curve,
        study.fits,
        "feeding",
        study.fits["swamy_arora"],
        study.fits["reml"],
        intervals=(intervals["swamy_arora"], intervals["reml"]),
    )
    routes = [[chain[0].move.start, *(link.move.end for link in chain)] for chain in found.chains]
    assert [
        "reml",
        "iterated minque from fitting_constants",
        "minque at the ratio of fitting_constants",
        "fitting_constants",
        "swamy_arora",
    ] in routes
    assert len({tuple(route) for route in routes}) == len(routes)


def test_orders_of_two_changes_are_averaged(demo_study):
    """amemiya and reml differ in divisors and in moments against likelihood: either can be changed first."""
    study, _ = demo_study
    found = attribute(study.curve, study.fits, "feeding", study.fits["amemiya"], study.fits["reml"])
    assert len(found.chains) == 2
    table = found.causes.set_index("cause")
    each = [sum(link.weight_change for link in chain if link.cause == "ML to REML") for chain in found.chains]
    assert table.loc["ML to REML", "weight"] == pytest.approx(np.mean(each), rel=1e-12)
    assert table.loc["ML to REML", "weight_lowest"] == min(each)
    assert table.loc["ML to REML", "weight_highest"] == max(each)
    assert table.loc["ML to REML", "chains"] == 1
    assert table["weight_highest"].max() - table["weight_lowest"].min() > 1e-4


@pytest.mark.parametrize("panel", tagged("closed"), ids=lambda panel: panel.name)
def test_quadratic_forms_share_nothing_where_columns_are_closed(panel):
    """Identity 13: on columns closed under unit averaging the forms are one, so their links are rounding."""
    found, positions = all_attributions(panel.name)
    seen = 0
    for item in found:
        for chain in item.chains:
            for link in chain:
                variant = "=" in link.move.start + link.move.end
                if link.cause == "quadratic forms" and not variant:
                    seen += 1
                    raw = abs(link.move.ratio_to - link.move.ratio_from)
                    # two ratios, each to 1e-9 of one plus itself: these panels have 30 rows and condition below 1e3
                    assert raw <= 1e-9 * (1 + abs(link.move.ratio_to)), (link.move.start, link.move.end)
    estimated = sum(
        positions.known[Node(key)].available
        for key in ("swamy_arora", "wansbeek_kapteyn", "wallace_hussain", "fitting_constants")
        if Node(key) in positions.known
    )
    assert seen or estimated < 2


def test_iteration_that_ends_elsewhere_than_the_optimum_is_shown():
    """With two minima some start ends at the worse one; the link to the certified optimum then moves the ratio."""
    moved = set()
    for panel in tagged("reml_two"):
        for item in all_attributions(panel.name)[0]:
            for chain in item.chains:
                for link in chain:
                    ends = {link.move.start, link.move.end}
                    last = "reml" in ends and any(end.startswith("iterated minque") for end in ends)
                    if last and abs(link.weight_change) > 1e-3:
                        moved.add(panel.name)
    assert moved


@pytest.mark.parametrize("panel", tagged("negative"), ids=lambda panel: panel.name)
def test_truncation_is_a_link_of_its_own(panel):
    found, positions = all_attributions(panel.name)
    fits, curve = fits_for(panel.name), positions.curve
    cut = [fit for fit in fits.values() if fit.status == TRUNCATED]
    assert cut
    largest = curve.sizes[-1]
    seen = 0
    for item in found:
        for chain in item.chains:
            for link in chain:
                if link.cause != "truncation at zero":
                    continue
                seen += 1
                inside = min(link.move.ratio_from, link.move.ratio_to)
                assert max(link.move.ratio_from, link.move.ratio_to) == 0.0
                assert -1.0 / largest < inside < 0.0
                at = curve.names.index(item.gap.term)
                beta = [curve.at(psi).beta[at] for psi in (link.move.ratio_from, link.move.ratio_to)]
                assert link.coefficient_change == beta[1] - beta[0]
    possible = [fit for fit in cut if fit.unit_variance_raw / fit.idiosyncratic_variance > -1.0 / largest]
    assert bool(seen) == bool(possible)


def test_every_route_has_a_place_in_the_graph():
    """Each curve route, with each value of each convention that moves the ratio, is an end of some change."""
    for route in LEDGER_ROUTES:
        key = route.partition("_0")[0].partition("_1")[0] if route.startswith("minque") else route
        if key in ("between", "first_difference"):
            continue
        for axis in axes_of(key):
            if axis.name not in ("between", "expectation", "divisor", "count", "prior"):
                continue
            for value in axis.values:
                fit = fit_route(curve_for("mild_between"), key, {axis.name: value}, "none")
                node = node_of(fit)
                changes = changes_of((node,))
                assert any(node in (change.a, change.b) for change in changes), node.label
    assert all(change.cause in CAUSES and change.sentence != change.back for change in CHANGES)


# -- half-widths -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "name", ["balanced_both", "mild_between", "singletons_between", "many_sizes", "huge_unit"]
)
def test_half_width_factors_are_what_they_say(name):
    panel, curve, fits = BY_NAME[name], curve_for(name), fits_for(name)
    dense, _ = dense_panel(panel.X, panel.y, panel.units)
    intervals = {key: intervals_of(curve, fit) for key, fit in fits.items() if fit.estimated}
    for item in attribute_all(curve, {k: fits[k] for k in intervals}, "reml", intervals):
        gap = item.gap
        here, there = intervals[gap.a][gap.term], intervals["reml"][gap.term]
        total = np.log(here.half_width / there.half_width)
        if gap.a == "between":
            assert item.factors == ()
            continue
        table = item.half_width.set_index("factor")["log"]
        assert abs(table.sum() - total) <= 32 * EPS * (
            1 + table.abs().sum()
        )  # logarithms of a dozen roundings
        at = curve.names.index(gap.term)
        if np.isfinite(gap.ratio_a):
            inverse = [
                np.linalg.inv(dense.X.T @ np.linalg.inv(dense.V(1.0, psi)) @ dense.X)
                for psi in (gap.ratio_a, gap.ratio_b)
            ]
            by_hand = 0.5 * np.log(inverse[0][at, at] / inverse[1][at, at])
            # plain inverses of matrices with a condition below 1e4
            assert table["ratio"] == pytest.approx(by_hand, abs=1e-10)
        scale = 0.5 * np.log(fits[gap.a].scale / fits["reml"].scale)
        assert table["scale"] == pytest.approx(scale, abs=1e-14)
        assert table["covariance type"] == 0.0
        # the same standard error by two orders of operations
        assert abs(table["small-sample adjustment"]) <= 16 * EPS


def test_small_sample_adjustment_and_kinds_of_covariance(demo_study):
    study, intervals = demo_study
    curve, fits, reml, ml = study.curve, study.fits, study.fits["reml"], study.fits["ml"]
    adjusted = study.intervals(reml, "kenward_roger")
    item = attribute(curve, fits, "feeding", reml, ml, intervals=(adjusted, intervals["ml"]))
    table = item.half_width.set_index("factor")["log"]
    by_hand = np.log(adjusted["feeding"].standard_error / reml.standard_errors["feeding"])
    assert by_hand > 0.0
    assert table["small-sample adjustment"] == pytest.approx(by_hand, rel=1e-10)

    sandwich = study.fit("swamy_arora", covariance="CR1")
    pair = (study.intervals(sandwich), intervals["reml"])

    def errors(fit, kind):
        return study.fit(fit.route, covariance=kind).standard_errors.to_numpy()

    one = attribute(curve, fits, "feeding", sandwich, reml, intervals=pair)
    both = attribute(curve, fits, "feeding", sandwich, reml, intervals=pair, errors=errors)
    total = np.log(pair[0]["feeding"].half_width / pair[1]["feeding"].half_width)
    for found in (one, both):
        assert sum(factor.log for factor in found.factors) == pytest.approx(total, abs=1e-13)
    kind = {factor.name: factor for factor in both.factors}["covariance type"]
    own, robust = study.fit("swamy_arora"), study.fit("reml", covariance="CR1")
    last = np.log(sandwich.standard_errors["feeding"] / own.standard_errors["feeding"])
    first = np.log(robust.standard_errors["feeding"] / reml.standard_errors["feeding"])
    assert (kind.lowest, kind.highest) == pytest.approx(sorted([first, last]), rel=1e-10)
    assert kind.log == pytest.approx((first + last) / 2, rel=1e-10)

    same = attribute(curve, fits, "feeding", sandwich, robust, intervals=(pair[0], study.intervals(robust)))
    parts = {factor.name: factor.log for factor in same.factors}
    assert parts["scale"] == parts["covariance type"] == 0.0  # a sandwich does not depend on the scale
    ratio = np.log(sandwich.standard_errors["feeding"] / robust.standard_errors["feeding"])
    assert parts["ratio"] == pytest.approx(ratio, rel=1e-10)


# -- off the curve ---------------------------------------------------------------------------------


@pytest.mark.parametrize("weights", ["size_weighted", "unweighted"])
@pytest.mark.parametrize(
    "name", ["balanced_both", "mild_both", "mild_no_intercept_within", "singletons_both", "many_sizes"]
)
def test_contrasts_with_off_curve_routes(name, weights):
    """Standard errors of differences from the dense covariance of the difference of two linear estimators."""
    panel, curve, fits = BY_NAME[name], curve_for(name), fits_for(name)
    dense, _ = dense_panel(panel.X, panel.y, panel.units)
    reml = fits["reml"]
    between = fit_route(curve, "between", {"between": weights}, "none")
    V = dense.V(reml.idiosyncratic_variance, reml.unit_variance)
    inverse = np.linalg.inv(V)
    maps = {
        "reml": np.linalg.inv(dense.X.T @ inverse @ dense.X) @ dense.X.T @ inverse,
        "within": np.linalg.pinv(dense.QX),
        "between": np.linalg.pinv(dense.P @ dense.X)
        if weights == "size_weighted"
        else np.linalg.pinv(dense.means) @ dense.averaging,
    }
    shared = [term for j, term in enumerate(curve.names) if curve.free_within[j] and curve.free_between[j]]
    assert shared
    for term in shared:
        at = curve.names.index(term)
        for a, b in ((between, reml), (fits["within"], between), (between, fits["within"])):
            item = attribute(curve, fits, term, a, b)
            (part,) = item.parts
            difference = maps[a.route][at] - maps[b.route][at]
            assert part.name == f"{a.route} - {b.route}"
            # pseudoinverses of matrices with a condition below 1e4
            np.testing.assert_allclose(part.value, difference @ panel.y, rtol=1e-8, atol=1e-10)
            np.testing.assert_allclose(part.standard_error, np.sqrt(difference @ V @ difference), rtol=1e-8)
            assert item.base == "reml"
            assert item.chains == ()
            assert not item.causes.size


def test_one_shared_coefficient_gives_the_joint_statistic():
    """With one covariate that varies both ways and equal sizes its z squared is the chi-square of identity 5."""
    curve, fits = curve_for("balanced_trend"), fits_for("balanced_trend")
    assert curve.rank_between - curve.rank_constant >= 1
    curve, fits = curve_for("two_units_balanced"), fits_for("two_units_balanced")
    for name in ("singletons_both", "balanced_all_periods", "mild_gaps"):
        curve, fits = curve_for(name), fits_for(name)
        if curve.rank_between - curve.rank_constant != 1:
            continue
        term = next(t for j, t in enumerate(curve.names) if curve.free_within[j] and curve.free_between[j])
        item = attribute(curve, fits, term, fits["within"], fits["reml"])
        assert item.parts == ()  # both are on the curve
        mixed = attribute(curve, fits, term, fits["between"], fits["within"])
        joint = {one.name: one for one in mixed.joint}
        assert joint["within - between"].df == 1
        if len(curve.sizes) == 1:
            assert mixed.parts[0].z ** 2 == pytest.approx(joint["within - between"].statistic, rel=1e-9)


def test_first_differences_are_compared_by_way_of_the_within_slopes(demo_study):
    study, _ = demo_study
    fits = study.fits
    item = attribute(study.curve, fits, "feeding", fits["first_difference"], fits["reml"])
    assert [part.name for part in item.parts] == ["first_difference - within", "within - reml"]
    assert sum(part.value for part in item.parts) == pytest.approx(item.gap.value, rel=1e-14)
    assert np.isnan(item.parts[0].standard_error)
    table = study.contrasts(by="term").set_index("term")
    assert item.parts[1].standard_error == pytest.approx(table.loc["feeding", "difference_se"], rel=1e-9)
    assert "not rejecting would prove nothing" in str(item)
    assert "No variance ratio explains this" in str(item)


# -- sentences -------------------------------------------------------------------------------------

NUMBER = re.compile(r"(?<![\w.])[+-]?\d+(?:\.\d+)?(?:e[+-]?\d+)?")


def test_numbers_in_sentences_are_those_of_the_tables(demo_study):
    study, intervals = demo_study
    for item in attribute_all(study.curve, study.fits, "reml", intervals):
        gap = item.gap
        known = {
            *(say(value, 5) for value in (gap.estimate_a, gap.estimate_b)),
            say_signed(gap.in_se),
            say_signed(gap.value, 3),
            *(say(value, 4) for value in (gap.ratio_a, gap.ratio_b)),
            *(say(value) for value in (gap.weight_a, gap.weight_b)),
            f"{gap.size:g}",
            say_signed(gap.weight_a - gap.weight_b, 3),
            str(len(item.chains)),
            *(
                say_signed(value, 3)
                for column in ("weight", "weight_lowest", "weight_highest")
                for value in item.causes[column]
            ),
            *(say_signed(value, 3) for value in item.links["weight_change"]),
            say(abs(gap.quotient - 1.0) * 100.0, 2),
            say_signed(np.log(gap.quotient), 3),
            *(say_signed(value, 3) for value in item.half_width["log"]),
            *(say_signed(part.value, 3) for part in item.parts),
            *(say_signed(part.z) for part in item.parts),
            *(
                text
                for one in item.joint
                for text in (str(one.df), say(one.statistic, 4), say(one.p_value, 2))
            ),
        }
        text = " ".join(item.sentences)
        # fixed numbers of fixed phrases: the within sum of squares over n - K, priors of routes, N - 1
        plain = re.sub(r"\(prior=\d+\)|from prior \d+|minque_\d|N - 1|prior ratio \d+", "", text)
        loose = [number for number in NUMBER.findall(plain) if number not in known]
        assert not loose, (gap.term, gap.a, loose, text)
        assert item.sentences[0].startswith(f"{gap.term}: {gap.a} gives {say(gap.estimate_a, 5)}")
        assert str(item) == "\n".join(item.sentences)


def test_sentences_follow_the_numbers(demo_study):
    study, intervals = demo_study
    found = {
        (item.gap.term, item.gap.a): item
        for item in attribute_all(study.curve, study.fits, "reml", intervals)
    }
    feeding = found["feeding", "swamy_arora"]
    assert "-2 standard errors of reml" in feeding.sentences[0]
    assert "because the variance ratio is 0.2892 in swamy_arora and 0.9092 in reml" in feeding.sentences[0]
    assert "narrower" in str(feeding)
    assert "wider" in str(found["feeding", "wallace_hussain"])
    assert "hardly depends on the ratio" in str(found["forage", "wallace_hussain"])
    assert "the variance ratio is infinite in within" in str(found["forage", "within"])
    balanced = all_attributions("balanced_closed")[0]
    same = [item for item in balanced if item.gap.a == "wallace_hussain" and item.gap.b == "swamy_arora"]
    assert same
    for item in same:
        text = str(item)
        assert (
            "No change between swamy_arora and wallace_hussain moves the ratio" in text or "both take" in text
        )


def test_one_route_with_two_scales_has_no_chain(demo_study):
    study, intervals = demo_study
    other = study.fit("swamy_arora", scale="gls_residuals")
    item = attribute(
        study.curve,
        study.fits,
        "feeding",
        other,
        study.fits["swamy_arora"],
        intervals=(study.intervals(other), intervals["swamy_arora"]),
    )
    assert item.chains == ()
    assert item.gap.value == 0.0
    factors = {factor.name: factor.log for factor in item.factors}
    assert factors["ratio"] == 0.0
    assert factors["scale"] == pytest.approx(0.5 * np.log(other.scale / study.fits["swamy_arora"].scale))
    assert "both take the variance ratio" in item.sentences[0]


def test_bad_questions_are_refused(demo_study):
    study, _ = demo_study
    curve, fits = study.curve, study.fits
    with pytest.raises(OptionError, match="forage"):
        attribute(curve, fits, "forrage", fits["ml"], fits["reml"])
    with pytest.raises(IdentificationError, match="does not vary within units"):
        attribute(curve, fits, "altitude", fits["within"], fits["reml"])
    dropped = study.fit("reml", one_row_units="dropped")
    assert dropped.rows < fits["reml"].rows
    with pytest.raises(OptionError, match="same"):
        attribute(curve, fits, "forage", dropped, fits["reml"])
    unavailable = [key for key, fit in fits.items() if fit.status not in (FITTED, TRUNCATED)]
    assert unavailable == []
