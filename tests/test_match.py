"""Printed figures back to routes and conventions: parsing, textbook columns, recovery, faults, the ratio set."""

from __future__ import annotations

from decimal import ROUND_DOWN, ROUND_HALF_UP, Decimal
from functools import cache

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from test_published import PUBLISHED, study

import mixbridge
from mixbridge.display.text import WIDTH
from mixbridge.errors import DataError, OptionError
from mixbridge.reconcile.match import match_reported
from mixbridge.reconcile.match_ratio import compatible_ratios
from mixbridge.reconcile.match_score import relative_error
from mixbridge.reconcile.match_space import ESTIMATION, PRESENTATION, UNSEEN, conventions_of
from mixbridge.reconcile.match_text import MATCH_LIMIT
from mixbridge.reconcile.match_values import weight_summary
from mixbridge.reconcile.printed import figure_list, parse_figure
from mixbridge.reconcile.printed_file import read_figures
from mixbridge.reconcile.printed_quantities import QUANTITIES, canonical_quantity, readings
from mixbridge.routes import AXES, ROUTES, axes_of

# ---- one printed figure


@pytest.mark.parametrize(
    ("text", "value", "digits", "half", "low", "high"),
    [
        ("0.110", 0.110, 3, 0.0005, 0.1095, 0.1105),
        (".11", 0.11, 2, 0.005, 0.105, 0.115),
        ("-.5", -0.5, 1, 0.05, -0.55, -0.45),
        ("−0.139", -0.139, 3, 0.0005, -0.1395, -0.1385),
        ("1,764.05", 1764.05, 6, 0.005, 1764.045, 1764.055),
        ("2.30e-4", 2.3e-4, 3, 5e-7, 2.295e-4, 2.305e-4),
        ("12", 12.0, 2, 0.5, 11.5, 12.5),
        ("12.", 12.0, 2, 0.5, 11.5, 12.5),
        ("0.00", 0.0, 2, 0.005, -0.005, 0.005),
        ("-0.00", 0.0, 2, 0.005, -0.005, 0.0),
        ("0.31**", 0.31, 2, 0.005, 0.305, 0.315),
        ("+3", 3.0, 1, 0.5, 2.5, 3.5),
    ],
)
def test_a_text_stands_for_an_interval(text, value, digits, half, low, high):
    figure = parse_figure("b:x", text)
    assert (figure.value, figure.digits, figure.half_unit) == (value, digits, half)
    assert figure.interval == (low, high)
    assert figure.text == text.strip()


@given(
    st.decimals(-(10**6), 10**6, allow_nan=False, places=9),
    st.integers(0, 6),
    st.sampled_from(["round", "cut"]),
)
def test_what_was_rounded_or_cut_lies_in_its_interval(number, places, how):
    unit = Decimal(1).scaleb(-places)
    text = str(number.quantize(unit, rounding=ROUND_HALF_UP if how == "round" else ROUND_DOWN))
    figure = parse_figure("icc", text)
    low, high = figure.interval if how == "round" else figure.cut
    # the ends are decimals stored in binary: one rounding of a number of this size
    slack = 2.0**-52 * abs(float(number))
    assert low - slack <= float(number) <= high + slack
    assert figure.widest[0] <= low <= high <= figure.widest[1]


@pytest.mark.parametrize(
    "text", ["", "-", ".", "1,76", "12,345,6", "0,5", "<0.001", "0.1.2", "1e", "n.s.", "(0.5)", "nan"]
)
def test_what_is_no_figure_is_refused_with_its_place(text):
    with pytest.raises(DataError, match="figure 2: b:x"):
        figure_list([("icc", "0.5"), ("b:x", text)])


def test_parentheses_belong_to_errors_and_ratios():
    assert parse_figure("se:x", "(0.024)").value == 0.024
    assert parse_figure("t:x", " (2.31)* ").value == 2.31


def test_a_number_is_refused_because_its_digits_are_unknown():
    with pytest.raises(DataError, match="as printed, in quotes"):
        figure_list({"icc": 0.5})


@pytest.mark.parametrize(
    ("name", "canonical"),
    [
        ("rho", "icc"),
        ("sigma_u^2", "sigma2_u"),
        ("sigma_mu", "sigma_a"),
        ("theta:max", "lambda:max"),
        ("LM", "lagrange_multiplier"),
    ],
)
def test_names_have_aliases(name, canonical):
    assert canonical_quantity(name) == canonical


def test_unknown_quantities_and_terms_are_refused_with_what_there_is():
    with pytest.raises(DataError, match="no quantity; there are"):
        canonical_quantity("unit_vari")
    with pytest.raises(DataError, match="needs a term"):
        canonical_quantity("se")
    with pytest.raises(DataError, match="min, median, max"):
        canonical_quantity("lambda:mean")
    with pytest.raises(OptionError, match="valeu"):
        match_reported({"b:valeu": "0.11"}, study("grunfeld"))
    with pytest.raises(OptionError, match="robust"):
        match_reported({"b:value": "0.11"}, study("grunfeld"), robust="sometimes")
    with pytest.raises(DataError, match="given twice"):
        figure_list([("rho", "0.5"), ("icc", "0.4")])
    with pytest.raises(DataError, match="no figures"):
        figure_list({})


def test_files_keep_the_digits(tmp_path):
    toml = tmp_path / "column.toml"
    toml.write_text(
        '[figures]\nicc = 0.720\n"theta:min" = ".36"\n[figures.b]\nvalue = 0.110\n[figures.se]\nvalue = "(0.010)"\n'
    )
    assert [(f.quantity, f.text) for f in read_figures(toml)] == [
        ("icc", "0.720"),
        ("lambda:min", ".36"),
        ("b:value", "0.110"),
        ("se:value", "(0.010)"),
    ]
    table = tmp_path / "column.csv"
    table.write_text('printed,quantity,note\n0.110,b:value,\n"1,764.05",unit_variance,typed\n')
    assert [(f.quantity, f.text) for f in read_figures(table)] == [
        ("b:value", "0.110"),
        ("unit_variance", "1,764.05"),
    ]


@pytest.mark.parametrize(
    ("name", "text", "message"),
    [
        ("a.csv", "quantity,value\nicc,0.5\n", "needed are 'quantity' and 'printed'"),
        ("a.csv", "quantity,printed\nicc,0.5\nrho2,0.5\n", "line 3: 'rho2' is no quantity"),
        ("a.csv", "quantity,printed\nicc,\n", "line 2: a quantity or its figure is missing"),
        ("a.csv", "quantity,printed\nicc,.5\nrho,.5\n", "given twice"),
        ("a.toml", "icc = .5\n", "need quotes"),
        ("a.toml", "icc = true\n", "no printed figure"),
        ("a.toml", "", "holds no figures"),
        ("a.txt", "icc 0.5", "from .toml and .csv"),
    ],
)
def test_files_that_cannot_be_read_say_where(tmp_path, name, text, message):
    file = tmp_path / name
    file.write_text(text)
    with pytest.raises(DataError, match=message):
        read_figures(file)


def test_every_quantity_has_a_reading():
    for name in QUANTITIES:
        for balanced in (True, False):
            assert readings(canonical_quantity(name.replace("TERM", "x")), balanced)


# ---- the space that is searched


def test_every_axis_of_the_conventions_is_searched_or_said_to_be_unseen():
    assert {axis.name for axis in AXES} == {*ESTIMATION, *PRESENTATION, *UNSEEN}


def test_every_value_of_every_estimation_axis_is_tried():
    for route in ROUTES:
        tried = list(conventions_of(route, dropped=True))
        for axis in axes_of(route):
            if axis.name in ESTIMATION and axis.name != "step":
                seen = {choice.get(axis.name, axis.values[0]) for choice in tried}
                assert seen == ({0.0, 1.0} if axis.name == "prior" else set(axis.values))


# ---- textbook columns

RENAMED = {
    "se_scaled_by_gls_residuals": "se",
    "quasi_demeaning": "lambda",
    "hausman_one_idiosyncratic_variance": "contrast",
    "unit_variance_untruncated": "unit_variance",
}
UNUSED = ("mean_square_within", "sum_of_squares_between", "hausman_each_own_variance")


def column(case: str, route: str) -> dict[str, str]:
    """Return one printed column in the names used here."""
    found = {}
    for row in PUBLISHED:
        if (row["case"], row["route"]) == (case, route) and row["quantity"] not in UNUSED:
            kind, colon, term = row["quantity"].partition(":")
            found[RENAMED.get(kind, kind) + colon + term] = row["printed"]
    return found


COLUMNS = sorted({(row["case"], row["route"]) for row in PUBLISHED if row["route"] != "tests"})


@cache
def matched(case: str, route: str):
    return match_reported(column(case, route), study(case))


def labels(match) -> list[list[str]]:
    return [[one.label for one in tied.candidates] for tied in match.classes]


@pytest.mark.parametrize(("case", "route"), COLUMNS)
def test_the_route_of_a_printed_column_is_among_the_best_and_ties_are_stated(case, route):
    match = matched(case, route)
    assert match.all_matched
    assert match.complete
    best = {one.route for tied in match.classes for one in tied.candidates}
    assert route in best
    text = str(match)
    assert max(len(line) for line in text.splitlines()) <= WIDTH
    assert " ".join(MATCH_LIMIT.split()) in " ".join(text.split())
    if len(match.classes) > 1:
        # several remain: the screen says how many, and either a figure separates them or it says that none does
        assert f"{len(match.classes)} candidates that print differently" in text
        assert "would separate" in text or "no further figure" in text


GRUNFELD = {
    # route of the column -> labels of each class that is left
    "pooled": [["pooled"]],
    "between": [["between", "between, between=unweighted"]],
    "within": [["within"]],
    "wallace_hussain": [
        ["wallace_hussain", "minque"],
        ["wallace_hussain, scale=gls_residuals", "minque, scale=gls_residuals"],
    ],
    "wansbeek_kapteyn": [
        ["wansbeek_kapteyn"],
        ["wansbeek_kapteyn, scale=gls_residuals"],
        ["wansbeek_kapteyn, scale=gls_residuals_n"],
    ],
    "swamy_arora": [
        ["swamy_arora"],
        ["swamy_arora, scale=gls_residuals"],
        ["swamy_arora, scale=gls_residuals_n"],
    ],
    "ml": [["ml"], ["ml, scale=gls_residuals"], ["ml, covariance=observed_information"]],
}


@pytest.mark.parametrize("route", GRUNFELD)
def test_grunfeld_columns_leave_one_route_with_ties_of_its_errors_only(route):
    """Balanced: `minque` at prior 0 is `wallace_hussain`, a theorem; the errors differ by less than was printed."""
    match = matched("grunfeld", route)
    assert labels(match) == GRUNFELD[route]
    assert match.unique == (len(GRUNFELD[route]) == 1)


def test_grunfeld_tests_fit_the_contrast_with_one_variance():
    match = match_reported(column("grunfeld", "tests"), study("grunfeld"))
    assert match.all_matched
    found = next(one for one in match.candidates if one.route == "swamy_arora")
    assert found.matched == len(match.figures)
    assert "within - gls, one idiosyncratic variance" in found.naming[0]
    other = match_reported({"hausman": "2.33"}, study("grunfeld"))
    assert any(
        "within - gls, each route's own" in name
        for one in other.candidates
        if one.matched
        for name in one.naming
    )


@pytest.mark.parametrize("case", ["wagepan", "jtrain_re"])
def test_columns_with_errors_of_the_residual_scale_are_told_from_those_of_the_components(case):
    match = matched(case, "swamy_arora")
    best = [one for tied in match.classes for one in tied.candidates]
    plain = [one for one in best if one.route == "swamy_arora" and "count" not in one.conventions]
    assert {one.conventions.get("scale", "own") for one in plain} <= {"gls_residuals", "gls_residuals_n"}
    assert "gls_residuals" in {one.conventions.get("scale") for one in plain}
    own = next(one for one in match.candidates if one.label == "swamy_arora")
    assert own.first_failure.quantity.startswith("se:")
    assert 0.5 < abs(own.first_failure.units_off) < 1.5
    if case == "jtrain_re":
        assert match.unique
        assert match.classes[0].label == "swamy_arora, scale=gls_residuals"


def test_single_figures_leave_many_and_say_so():
    match = match_reported({"b:value": "0.11"}, study("grunfeld"))
    assert len(match.classes) > 10
    assert not match.unique
    assert match.separators[0].parts > 5
    assert match.chance.any_dependent == 1.0


# ---- naming


def test_sigma_u_is_read_under_either_naming_and_as_either_measure():
    fit = study("grunfeld").fit("swamy_arora")
    unit, rest = fit.unit_variance, fit.idiosyncratic_variance
    for printed, naming in (
        (
            {"sigma_u": f"{unit**0.5:.2f}", "sigma_e": f"{rest**0.5:.2f}"},
            "sigma_u belongs to unit; sigma is sd",
        ),
        (
            {"sigma_a": f"{unit:.1f}", "sigma_u": f"{rest:.1f}"},
            "sigma is variance; sigma_u belongs to idiosyncratic",
        ),
        ({"sigma2_u": f"{rest:.1f}", "icc": f"{fit.icc:.3f}"}, "sigma_u belongs to idiosyncratic"),
    ):
        match = match_reported(printed, study("grunfeld"))
        found = next(one for one in match.candidates if one.label == "swamy_arora")
        assert found.matched == 2
        assert found.naming == (naming,)


def test_weights_are_summarised_over_units_or_rows():
    curve = mixbridge.crosscheck("y ~ x", unbalanced(), unit="unit").curve
    sizes = np.repeat(curve.sizes, curve.counts.astype(int))
    weights = 1 - 1 / np.sqrt(1 + 0.7 * sizes)
    per_row = np.repeat(weights, sizes.astype(int))
    for summary, value in {
        "min": weights.min(),
        "max": weights.max(),
        "median over units": np.median(weights),
        "median over rows": np.median(per_row),
        "mean over units": weights.mean(),
        "at the mean size": 1 - 1 / np.sqrt(1 + 0.7 * sizes.mean()),
    }.items():
        # sums of at most 200 terms of size one
        assert weight_summary(curve, 0.7, "quasi_demeaning", summary) == pytest.approx(value, rel=1e-13)
    assert weight_summary(curve, 0.7, "one minus shrinkage", "min") == pytest.approx(
        1 / (1 + 0.7 * sizes.max())
    )


# ---- random panels


def draw(seed: int, smallest: int = 8) -> tuple[mixbridge.Study, np.random.Generator]:
    """Draw a small panel: balanced or not, with or without one-row units, with a column of each kind."""
    rng = np.random.default_rng(seed)
    units = int(rng.integers(smallest, 16))
    sizes = (
        np.full(units, rng.integers(3, 6))
        if rng.random() < 0.3
        else rng.integers(1 + (rng.random() < 0.5), 8, units)
    )
    unit = np.repeat(np.arange(units), sizes)
    x = rng.normal(size=unit.size) + rng.normal(size=units)[unit]
    w = rng.normal(size=units)[unit]
    effect = rng.choice([0.0, 0.5, 1.5]) * rng.normal(size=units)
    y = 1 + 0.5 * x - 0.3 * w + effect[unit] + rng.normal(size=unit.size)
    period = np.concatenate([np.arange(size) for size in sizes])
    frame = pd.DataFrame({"y": y, "x": x, "w": w, "unit": unit, "t": period})
    return mixbridge.crosscheck("y ~ x + w", frame, unit="unit", period="t"), rng


def unbalanced() -> pd.DataFrame:
    rng = np.random.default_rng(3)
    sizes = np.array([1, 2, 2, 3, 5, 5, 5, 9, 12, 14])
    unit = np.repeat(np.arange(sizes.size), sizes)
    x = rng.normal(size=unit.size)
    return pd.DataFrame(
        {"y": x + rng.normal(size=sizes.size)[unit] + rng.normal(size=unit.size), "x": x, "unit": unit}
    )


TRUTHS = [route for route in ROUTES if route != "first_difference"]


def truth(
    made: mixbridge.Study, rng: np.random.Generator, robust: bool
) -> tuple[mixbridge.Study, object] | None:
    """Pick a route and conventions at random; None where they give no figures on this panel."""
    route = TRUTHS[rng.integers(len(TRUTHS))]
    options = list(conventions_of(route, 0 < made.singletons < made.panel.N))
    chosen = dict(options[rng.integers(len(options))])
    axes = {axis.name: axis.values for axis in axes_of(route)}
    if robust and rng.random() < 0.4:
        kind = ("CR0", "CR1", "CR2", "CR3")[rng.integers(4)]
        chosen["covariance"] = kind
        if kind == "CR1":
            chosen["multiplier"] = ("units", "units_and_rows", "jackknife")[rng.integers(3)]
    elif "scale" in axes:
        chosen["scale"] = axes["scale"][rng.integers(3)]
    try:
        fit = made.fit(route, **chosen)
    except mixbridge.IdentificationError:
        return None
    shown = ("x", "w") if route != "within" else ("x",)
    if not np.isfinite(fit.standard_errors[list(shown)]).all():
        return None
    return fit


def printed(fit, digits: int) -> dict[str, str]:
    """Print what such a table prints, to a number of significant digits."""
    figures = {}
    for term in ("x", "w"):
        if np.isfinite(fit.beta[fit.terms.index(term)]):
            figures[f"b:{term}"] = significant(fit.coefficients[term], digits)
            figures[f"se:{term}"] = significant(fit.standard_errors[term], digits)
    if np.isfinite(fit.unit_variance) and fit.route != "pooled":
        figures["unit_sd"] = significant(fit.unit_variance**0.5, digits)
        figures["idiosyncratic_sd"] = significant(fit.idiosyncratic_variance**0.5, digits)
    return figures


def significant(value: float, digits: int) -> str:
    """Round to significant digits, trailing zeros kept, without an exponent."""
    if value == 0.0:
        return "0." + "0" * digits
    exponent = int(f"{abs(value):.{digits - 1}e}".partition("e")[2])
    return f"{value:.{max(digits - 1 - exponent, 0)}f}" if exponent < digits else f"{value:.{digits - 1}e}"


def likeness(fit, made: mixbridge.Study, candidate) -> bool:
    """Tell whether a candidate prints what the fit prints, in full precision."""
    if candidate.conventions.get("covariance", "model") != fit.conventions.get("covariance", "model"):
        return False
    other = made.fit(candidate.route, **{k: v for k, v in candidate.conventions.items() if k != "reference"})
    shown = [fit.terms.index(term) for term in ("x", "w") if np.isfinite(fit.coefficients[term])]
    left = [
        *fit.beta[shown],
        *fit.standard_errors.to_numpy()[shown],
        fit.unit_variance,
        fit.idiosyncratic_variance,
    ]
    right = [
        *other.beta[shown],
        *other.standard_errors.to_numpy()[shown],
        other.unit_variance,
        other.idiosyncratic_variance,
    ]
    return np.allclose(left, right, rtol=1e-8, atol=1e-12, equal_nan=True)


@cache
def recovered() -> pd.DataFrame:
    """Print a random route of each of 240 panels and look for it."""
    rows = []
    for seed in range(240):
        made, rng = draw(seed)
        fit = None
        while fit is None:
            fit = truth(made, rng, robust=True)
        digits = 2 + seed % 4
        match = match_reported(printed(fit, digits), made, robust="always")
        place = next(
            (
                at
                for at, tied in enumerate(match.classes)
                if any(one.route == fit.route and likeness(fit, made, one) for one in tied.candidates)
            ),
            None,
        )
        rows.append(
            [seed, digits, fit.route, match.all_matched, match.unique, len(match.classes), place is not None]
        )
    return pd.DataFrame(rows, columns=["seed", "digits", "route", "matched", "unique", "classes", "held"])


def test_a_random_route_is_always_among_the_best():
    table = recovered()
    assert len(table) == 240
    assert table["matched"].all(), table[~table["matched"]]
    assert table["held"].all(), table[~table["held"]]


def test_no_unique_match_is_false():
    table = recovered()
    assert (table["unique"] & ~table["held"]).sum() == 0
    assert table["unique"].sum() > 60  # the statement is about something


def test_more_digits_leave_fewer_candidates():
    by_digits = recovered().groupby("digits")
    share, median = by_digits["unique"].mean(), by_digits["classes"].median()
    # ties at five digits are theorems (balanced panels, truncated unit variances, one-row units that do not matter)
    assert share.loc[5] > 0.7
    assert share.loc[2] < share.loc[5]
    assert median.loc[5] == 1.0 <= median.loc[2]


def test_ties_at_zero_are_told_apart_by_the_variance_before_truncation():
    made, _ = draw(43)
    fit = made.fit("fitting_constants")
    assert fit.unit_variance_raw < 0.0
    match = match_reported(printed(fit, 5), made)
    assert len(match.classes) > 1
    assert match.separators[0].quantity.startswith("unit_variance, before")
    raw = match_reported({**printed(fit, 5), "unit_variance": f"{fit.unit_variance_raw:.6f}"}, made)
    assert {one.route for tied in raw.classes for one in tied.candidates} == {"fitting_constants"}


def test_cut_digits_are_found_and_said():
    made, _ = draw(5)
    fit = made.fit("swamy_arora")
    figures = {}
    for term in ("x", "w"):
        for name, value in (("b", fit.coefficients[term]), ("se", fit.standard_errors[term])):
            cut = Decimal(float(value)).quantize(Decimal("0.00001"), rounding=ROUND_DOWN)
            figures[f"{name}:{term}"] = str(cut)
    match = match_reported(figures, made)
    found = next(one for one in match.candidates if one.label == "swamy_arora")
    assert found.matched == 4
    assert found.rounding == "cut"
    assert "digits cut off" in str(match)


@pytest.mark.parametrize("seed", range(40))
def test_a_corrupted_figure_is_the_one_that_fails_and_by_the_right_distance(seed):
    made, rng = draw(1000 + seed)
    fit = None
    while fit is None:
        fit = truth(made, rng, robust=False)
    figures = printed(fit, 5)
    names = [name for name, text in figures.items() if float(text)]
    name = names[rng.integers(len(names))]
    steps = int(rng.choice([-300, -40, 25, 700]))
    unit = Decimal(1).scaleb(Decimal(figures[name]).as_tuple().exponent)
    original = Decimal(figures[name])
    figures[name] = f"{original + steps * unit:f}"
    match = match_reported(figures, made)
    own = [one for one in match.candidates if one.route == fit.route and likeness(fit, made, one)]
    assert own
    one = own[0]
    assert [failure.quantity for failure in one.failures] == [name]
    value = {
        "b": lambda term: fit.coefficients[term],
        "se": lambda term: fit.standard_errors[term],
        "unit_sd": lambda _: fit.unit_variance**0.5,
        "idiosyncratic_sd": lambda _: fit.idiosyncratic_variance**0.5,
    }[name.partition(":")[0]](name.partition(":")[2])
    exact = (Decimal(float(value)) - original) / unit - steps
    # the search fits again from the same moments: its value is this one to rounding, 1e-9 of it at most, which is
    # less than 1e-3 of the fifth digit
    assert one.first_failure.units_off == pytest.approx(float(exact), abs=1e-3)
    assert abs(one.first_failure.units_off + steps) <= 0.5 + 1e-3


# ---- stages, slips, consistency


def test_robust_errors_are_found_and_their_stage_is_said():
    made, _ = draw(11)
    fit = made.fit("wansbeek_kapteyn", covariance="CR2")
    figures = printed(fit, 6)
    match = match_reported(figures, made)
    assert match.unique
    assert match.classes[0].label.startswith("wansbeek_kapteyn, covariance=CR2")
    plain = match_reported(printed(made.fit("wansbeek_kapteyn"), 6), made, robust="if_needed")
    assert plain.all_matched
    assert not plain.complete
    assert not plain.unique
    assert "Not searched: CR0 and CR1" in " ".join(str(plain).split())
    never = match_reported(figures, made, robust="never")
    assert not never.all_matched
    assert not never.complete


def test_bounds_skip_only_what_cannot_be_among_the_best():
    made, _ = draw(12)
    figures = printed(made.fit("ml"), 5)
    match = match_reported(figures, made, robust="always")
    assert match.account.bounded > 0
    for kind in ("CR0", "CR1", "CR2", "CR3"):
        for route in ("reml", "swamy_arora", "ml", "nerlove"):
            fit = made.fit(route, covariance=kind)
            hits = _hits(fit, match.figures)
            assert hits <= match.best


def _hits(fit, figures) -> int:
    values = {
        **{f"b:{term}": value for term, value in fit.coefficients.items()},
        **{f"se:{term}": value for term, value in fit.standard_errors.items()},
        "unit_sd": fit.unit_variance**0.5,
        "idiosyncratic_sd": fit.idiosyncratic_variance**0.5,
    }
    return sum(figure.interval[0] <= values[figure.quantity] <= figure.interval[1] for figure in figures)


def test_first_differences_are_searched_when_periods_are_there():
    made, _ = draw(21)
    fit = made.fit("first_difference")
    match = match_reported(
        {"b:x": f"{fit.coefficients['x']:.5f}", "se:x": f"{fit.standard_errors['x']:.5f}"}, made
    )
    assert "first_difference" in [tied.label for tied in match.classes]
    other = match_reported(
        {"b:x": f"{fit.coefficients['x']:.5f}"}, mixbridge.crosscheck("y ~ x", unbalanced(), unit="unit")
    )
    assert dict(other.account.absent)["first_difference"].startswith("no period given")


SLIPS = {
    "the two figures swapped": lambda f: {
        **f,
        "unit_sd": f["idiosyncratic_sd"],
        "idiosyncratic_sd": f["unit_sd"],
    },
    "a variance printed under this name": lambda f: {
        **f,
        "unit_sd": f"{study('grunfeld').fit('reml').unit_variance:.2f}",
    },
    "a minus dropped": lambda f: {**f, "b:Intercept": f["b:Intercept"].removeprefix("-")},
    "two neighbouring digits exchanged": lambda f: {
        **f,
        "b:capital": f["b:capital"][:-2] + f["b:capital"][:-3:-1],
    },
    "the decimal point moved by one place": lambda f: {
        **f,
        "se:capital": "0." + f["se:capital"].removeprefix("0.0"),
    },
    "one digit replaced": lambda f: {**f, "b:value": f["b:value"][:-3] + "0" + f["b:value"][-2:]},
}


@pytest.mark.parametrize("slip", SLIPS)
def test_slips_of_copying_are_offered_as_hypotheses(slip):
    fit = study("grunfeld").fit("reml")
    figures = {
        **{f"b:{term}": f"{fit.coefficients[term]:.5f}" for term in fit.terms},
        "se:capital": f"{fit.standard_errors['capital']:.6f}",
        "unit_sd": f"{fit.unit_variance**0.5:.3f}",
        "idiosyncratic_sd": f"{fit.idiosyncratic_variance**0.5:.3f}",
    }
    wrong = SLIPS[slip](figures)
    assert wrong != figures
    match = match_reported(wrong, study("grunfeld"))
    assert not match.all_matched
    found = [
        fault
        for fault in match.faults
        if fault.hypothesis == slip and any("reml" in label for label in fault.labels)
    ]
    assert found
    assert found[0].weak == (slip == "one digit replaced")
    assert "none is shown to have happened" in str(match)
    assert match_reported(figures, study("grunfeld")).faults == ()


def test_the_printed_set_is_checked_against_itself():
    fit = study("grunfeld").fit("swamy_arora")
    figures = {
        "b:value": f"{fit.coefficients['value']:.4f}",
        "se:value": f"{fit.standard_errors['value']:.4f}",
        "z:value": f"{fit.coefficients['value'] / fit.standard_errors['value']:.2f}",
        "sigma_u": f"{fit.unit_variance**0.5:.3f}",
        "sigma_e": f"{fit.idiosyncratic_variance**0.5:.3f}",
        "rho": f"{fit.icc:.4f}",
        "theta": f"{fit.quasi_demeaning.item():.4f}",
        "log_likelihood": "-1095.26",
        "minus_2_log_likelihood": "2190.51",
        "aic": "2200.51",
    }
    match = match_reported(figures, study("grunfeld"))
    assert {one.quantity for one in match.consistency} == {
        "z:value",
        "icc",
        "lambda",
        "minus_2_log_likelihood",
        "aic",
    }
    assert all(one.holds for one in match.consistency)
    for name, text, units in (
        ("rho", "0.7300", -120),
        ("theta", "0.8705", -92),
        ("z:value", "10.90", -42),
        ("aic", "2201.60", None),
    ):
        wrong = match_reported({**figures, name: text}, study("grunfeld"))
        broken = [one for one in wrong.consistency if not one.holds]
        assert [one.quantity for one in broken] == [canonical_quantity(name)]
        if units is not None:
            assert broken[0].units_off == pytest.approx(units, rel=0.25)
        assert "CONTRADICTION" in str(wrong)


def test_consistency_needs_no_route():
    """Figures that no route gives can still be consistent: psi = 3 in a balanced panel of 20 periods."""
    printed_set = {"sigma_a": "3.0000", "sigma_e": "1.7321", "rho": "0.7500", "theta": "0.8720"}
    match = match_reported(printed_set, study("grunfeld"))
    assert match.best < 4
    assert all(one.holds for one in match.consistency)


def test_wording_is_of_compatibility_only():
    text = str(matched("grunfeld", "swamy_arora")) + str(match_reported({"icc": "0.111"}, study("grunfeld")))
    for word in ("came from", "was used", "used by", "authors", "must have", "proves", "mistake", "error by"):
        assert word not in text


def test_tables_hold_what_the_screen_says():
    match = matched("jtrain_re", "swamy_arora")
    table = match.table()
    assert list(table["matched"]) == sorted(table["matched"], reverse=True)
    assert len(table) == len(match.candidates) == match.account.printouts
    assert len(match.failures_table()) == sum(one.figures - one.matched for one in match.candidates)
    assert set(match.ties_table()["candidate"]) == {
        one.label for tied in match.classes for one in tied.candidates
    }
    assert len(match.chance_table()) == len(match.figures)
    assert (match.chance_table()["probability"].between(0, 1)).all()
    assert match.chance.independent <= match.chance.dependent
    with pytest.raises(TypeError):
        match.candidates[0].conventions["scale"] = "own"
    assert repr(match) == "<Match: 12 of 12 figures, 1 best classes; print it>"


# ---- the set of ratios


@pytest.mark.parametrize("seed", range(30))
def test_ratio_sets_agree_with_a_dense_scan(seed):
    made, rng = draw(2000 + seed)
    curve = made.curve
    psi = float(np.exp(rng.normal()))
    beta = dict(zip(curve.names, curve.at(psi).beta, strict=True))
    figures = figure_list(
        {f"b:{name}": f"{beta[name]:.{rng.integers(2, 5)}f}" for name in ("x", "w", "Intercept")}
    )
    error = relative_error(curve)
    union = compatible_ratios(curve, figures, error)
    assert union.complete
    assert union.holds(psi)
    grid = np.concatenate([[0.0], np.logspace(-5, 5, 4001)])
    found = np.array([curve.at(each).beta for each in grid])
    inside = np.ones(grid.size, dtype=bool)
    sure = np.ones(grid.size, dtype=bool)
    for figure in figures:
        values = found[:, curve.names.index(figure.quantity[2:])]
        depth = np.minimum(values - figure.widest[0], figure.widest[1] - values)
        inside &= depth >= 0.0
        sure &= (
            np.abs(depth) > 0.02 * figure.half_unit
        )  # nearer than that, an excursion may go unseen, by its statement
    said = np.array([union.holds(each) for each in grid])
    assert (said == inside)[sure].all()
    assert sure.mean() > 0.5


def test_ends_of_ratio_sets_lie_on_the_ends_of_figures():
    made, _ = draw(2003)
    curve = made.curve
    figures = figure_list({"b:w": f"{curve.at(0.4).beta[curve.names.index('w')]:.4f}"})
    union = compatible_ratios(curve, figures, 0.0)
    at = curve.names.index("w")
    ends = [end for pair in union.intervals for end in pair if 0.0 < end < np.inf]
    assert ends
    for end in ends:
        gap = min(abs(curve.at(end).beta[at] - level) for level in figures[0].widest)
        # two evaluations of the curve, each right to rounding times a condition below 100
        assert gap <= 1e-13 * max(1.0, abs(figures[0].value))


def test_a_column_off_the_curve_has_no_ratio():
    match = matched("grunfeld", "between")
    assert match.ratios[0].intervals == ()
    assert "none" in str(match)
    assert matched("grunfeld", "swamy_arora").ratios[0].holds(study("grunfeld").fit("swamy_arora").ratio)
    assert "swamy_arora" in [label for label, _, _ in matched("grunfeld", "swamy_arora").inside]


def test_one_row_units_give_a_second_set_of_ratios():
    made = mixbridge.crosscheck("y ~ x", unbalanced(), unit="unit")
    dropped = made.fit("nerlove", one_row_units="dropped")
    match = match_reported(
        {"b:x": f"{dropped.coefficients['x']:.6f}", "unit_sd": f"{dropped.unit_variance**0.5:.6f}"}, made
    )
    assert [union.one_row_units for union in match.ratios] == ["kept", "dropped"]
    assert match.classes[0].label == "nerlove, one_row_units=dropped"
    assert ("nerlove, one_row_units=dropped", "dropped", pytest.approx(dropped.ratio)) in match.inside
