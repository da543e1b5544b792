"""NIST Statistical Reference Datasets: one-way analysis of variance (eleven sets) and regression (Longley).

The certified values are in the public domain. Certified are values for the decimals as printed; what a
program receives are the nearest doubles. So each result is compared twice: with exact rational arithmetic on
the stored doubles, where only the program's own rounding is left, and with the certified value, where the
rounding of the data is left too. That second floor is derived in `floor_of_a_sum_of_squares`.
"""

import csv
from dataclasses import dataclass
from fractions import Fraction
from functools import cache
from itertools import groupby
from math import sqrt
from pathlib import Path

import pandas as pd
import pytest
from statsmodels.datasets import longley

import mixbridge

REFERENCE = Path(__file__).parent / "reference"
with (REFERENCE / "nist_anova.csv").open(encoding="utf-8", newline="") as file:
    CERTIFIED = {row["data_set"]: row for row in csv.DictReader(file)}

# Allowed to the program itself, relative: about 4500 roundings, enough for sums of 18009 rows added in any
# sensible order and far below what raw cross-products at an offset of 1e6 could reach.
OWN_ROUNDING = 1e-12


@dataclass(frozen=True)
class Set:
    """Decimals as NIST prints them, by group."""

    name: str
    groups: tuple[tuple[str, ...], ...]

    def frame(self) -> pd.DataFrame:
        rows = [(number, float(value)) for number, group in enumerate(self.groups) for value in group]
        return pd.DataFrame(rows, columns=["group", "y"])

    def stored(self) -> list[list[Fraction]]:
        """Return the doubles, exactly."""
        return [[Fraction(float(value)) for value in group] for group in self.groups]

    def rounding(self) -> list[Fraction]:
        """Return what storing did to each value: the double minus the decimal."""
        return [Fraction(float(value)) - Fraction(value) for group in self.groups for value in group]


@dataclass(frozen=True)
class Exact:
    """Sums of squares in rational arithmetic, and the balanced closed forms that follow from them."""

    groups: int
    rows_per_group: int
    between: Fraction
    within: Fraction

    @property
    def mean_square_between(self) -> Fraction:
        return self.between / (self.groups - 1)

    @property
    def mean_square_within(self) -> Fraction:
        return self.within / (self.groups * (self.rows_per_group - 1))

    @property
    def analysis_of_variance(self) -> Fraction:
        """Unit variance, possibly negative, of every unbiased route and of REML away from zero."""
        return (self.mean_square_between - self.mean_square_within) / self.rows_per_group

    @property
    def maximum_likelihood(self) -> tuple[Fraction, Fraction]:
        """Unit and idiosyncratic variance: between sum over groups, not groups - 1; at zero, total over n."""
        unit = (self.between / self.groups - self.mean_square_within) / self.rows_per_group
        if unit > 0:
            return unit, self.mean_square_within
        return Fraction(0), (self.between + self.within) / (self.groups * self.rows_per_group)


@cache
def load(name: str) -> Set:
    if name.startswith("SmLs"):
        return Set(name, generated(int(name[-2:])))
    with (REFERENCE / f"nist_{name.lower()}.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    by_group = groupby(rows, key=lambda row: row["group"])
    return Set(name, tuple(tuple(row["y"] for row in members) for _, members in by_group))


def generated(number: int) -> tuple[tuple[str, ...], ...]:
    """Follow the rule of SmLs01 to SmLs09: first a/10, then alternately (a - 1)/10 and (a + 1)/10, plus C."""
    size = (21, 201, 2001)[(number - 1) % 3]
    whole = (1, 10**6, 10**12)[(number - 1) // 3]
    return tuple(
        (f"{whole}.{a}", *(f"{whole}.{a - 1}", f"{whole}.{a + 1}") * (size // 2))
        for a in (4, 3, 5, 3, 5, 3, 5, 3, 5)
    )


@cache
def exact(name: str) -> Exact:
    return sums_of_squares(load(name).stored())


def sums_of_squares(groups: list[list[Fraction]]) -> Exact:
    """Add exactly, in integers: all doubles are multiples of one power of two."""
    unit = max(value.denominator for group in groups for value in group)
    whole = [[int(value * unit) for value in group] for group in groups]
    size = len(whole[0])
    squares = sum(value * value for group in whole for value in group)
    of_totals = sum(sum(group) ** 2 for group in whole)
    total = sum(sum(group) for group in whole)
    between = Fraction(of_totals, size) - Fraction(total**2, size * len(whole))
    within = squares - Fraction(of_totals, size)
    return Exact(len(whole), size, between / unit**2, within / unit**2)


@cache
def study(name: str) -> mixbridge.Study:
    return mixbridge.crosscheck("y ~ 1", load(name).frame(), unit="group")


def floor_of_a_sum_of_squares(name: str, certified: str) -> float:
    """Bound how far a sum of squares of the doubles may lie from the certified one.

    A sum of squares is the squared length of a projection of the data. Storing adds a vector e to the data,
    so that the length moves by at most |e|, and the square by at most |e| (2 * length + |e|). e is known
    exactly. To this comes half a unit of the fifteenth certified digit.
    """
    moved = sqrt(sum(part * part for part in load(name).rounding()))
    value = float(certified)
    return moved * (2 * sqrt(value) + moved) + 0.5e-14 * 10 ** int(certified.partition("E")[2])


def relative(computed: float, reference: Fraction) -> float:
    return abs(float((Fraction(computed) - reference) / reference))


@pytest.mark.parametrize("name", CERTIFIED)
def test_exact_arithmetic_agrees_with_the_certified_values(name):
    """The data files, the rule and the floor belong together: checked without the package."""
    row, sums = CERTIFIED[name], exact(name)
    assert (sums.groups, sums.rows_per_group) == (int(row["groups"]), int(row["rows_per_group"]))
    decimals = sums_of_decimals(load(name))
    for part in ("between", "within"):
        certified = row[f"sum_of_squares_{part}"]
        last_digit = Fraction(10) ** (int(certified.partition("E")[2]) - 14)
        assert abs(getattr(decimals, part) - Fraction(certified)) <= last_digit / 2
        floor = floor_of_a_sum_of_squares(name, certified)
        assert abs(getattr(sums, part) - Fraction(certified)) <= floor


def sums_of_decimals(data: Set) -> Exact:
    scale = 10 ** max(len(value.partition(".")[2]) for group in data.groups for value in group)
    scaled = sums_of_squares([[Fraction(value) * scale for value in group] for group in data.groups])
    return Exact(scaled.groups, scaled.rows_per_group, scaled.between / scale**2, scaled.within / scale**2)


@pytest.mark.parametrize("name", CERTIFIED)
def test_mean_squares(name):
    sums, row = exact(name), CERTIFIED[name]
    between = study(name).fit("between")
    within = study(name).fit("fitting_constants").forms.loc["within residual sum of squares"]
    for part, degrees, sum_of_squares in (
        ("between", between.residual_df, between.scale * between.residual_df),
        ("within", within["on_idiosyncratic_variance"], within["value"]),
    ):
        reference = getattr(sums, f"mean_square_{part}")
        assert degrees == getattr(sums, part) / reference
        assert relative(sum_of_squares / degrees, reference) <= OWN_ROUNDING
        certified = row[f"sum_of_squares_{part}"]
        floor = floor_of_a_sum_of_squares(name, certified)
        assert abs(sum_of_squares - float(certified)) <= floor + OWN_ROUNDING * float(certified)


@pytest.mark.parametrize(
    "route", ["swamy_arora", "wansbeek_kapteyn", "wallace_hussain", "fitting_constants", "minque", "reml"]
)
@pytest.mark.parametrize("name", CERTIFIED)
def test_unbiased_routes_and_reml_have_the_closed_form(name, route):
    """In every set the closed form is positive, so that REML has it too."""
    sums, fit = exact(name), study(name).fit(route)
    assert sums.analysis_of_variance > 0
    within, between = sums.mean_square_within, sums.mean_square_between
    assert relative(fit.idiosyncratic_variance, within) <= OWN_ROUNDING
    # The difference of two mean squares keeps their absolute error.
    lost = float((between + within) / (between - within))
    assert relative(fit.unit_variance, sums.analysis_of_variance) <= OWN_ROUNDING * lost


@pytest.mark.parametrize("name", CERTIFIED)
def test_maximum_likelihood_has_the_closed_form(name):
    sums, fit = exact(name), study(name).fit("ml")
    unit, idiosyncratic = sums.maximum_likelihood
    assert relative(fit.idiosyncratic_variance, idiosyncratic) <= OWN_ROUNDING
    if unit == 0:
        assert fit.unit_variance == 0
        return
    per_group = sums.between / sums.groups
    lost = float((per_group + sums.mean_square_within) / (per_group - sums.mean_square_within))
    assert relative(fit.unit_variance, unit) <= OWN_ROUNDING * lost


def test_only_one_set_has_its_maximum_at_zero():
    assert [name for name in CERTIFIED if exact(name).maximum_likelihood[0] == 0] == ["SiRstv"]


# Longley: the certified values of the NIST linear regression set, typed from memory and checked below against
# exact rational least squares.
LONGLEY = {  # term: estimate, standard deviation of the estimate
    "Intercept": ("-3482258.63459582", "890420.383607373"),
    "GNPDEFL": ("15.0618722713733", "84.9149257747669"),
    "GNP": ("-0.358191792925910E-01", "0.334910077722432E-01"),
    "UNEMP": ("-2.02022980381683", "0.488399681651699"),
    "ARMED": ("-1.03322686717359", "0.214274163161675"),
    "POP": ("-0.511041056535807E-01", "0.226073200069370"),
    "YEAR": ("1829.15146461355", "455.478499142212"),
}
LONGLEY_RESIDUAL = "304.854073561965"


def rational_least_squares(
    x: list[list[Fraction]], y: list[Fraction]
) -> tuple[list[Fraction], list[Fraction]]:
    """Solve the normal equations exactly; return the coefficients and their squared standard errors."""
    columns = list(zip(*x, strict=True))
    count = len(columns)
    table = [
        [sum(a * b for a, b in zip(left, right, strict=True)) for right in columns]
        + [sum(a * b for a, b in zip(left, y, strict=True))]
        + [Fraction(row == column) for column in range(count)]
        for row, left in enumerate(columns)
    ]
    for pivot in range(count):
        table[pivot] = [value / table[pivot][pivot] for value in table[pivot]]
        for row in range(count):
            if row != pivot:
                factor = table[row][pivot]
                table[row] = [a - factor * b for a, b in zip(table[row], table[pivot], strict=True)]
    coefficients = [table[row][count] for row in range(count)]
    residuals = [
        value - sum(a * b for a, b in zip(row, coefficients, strict=True))
        for row, value in zip(x, y, strict=True)
    ]
    variance = sum(value * value for value in residuals) / (len(y) - count)
    return coefficients, [variance * table[row][count + 1 + row] for row in range(count)]


@pytest.fixture(scope="module")
def longley_frame() -> pd.DataFrame:
    frame = longley.load_pandas().data
    return frame.assign(pair=((frame["YEAR"] - 1947) // 2).astype(int))


def test_typed_longley_values_are_the_exact_solution(longley_frame):
    """Exact arithmetic on the decimals gives every typed digit: half a unit of the fifteenth."""
    terms = [term for term in LONGLEY if term != "Intercept"]
    x = [
        [Fraction(1), *(Fraction(str(value)) for value in row)]
        for row in longley_frame[terms].itertuples(index=False)
    ]
    y = [Fraction(str(value)) for value in longley_frame["TOTEMP"]]
    coefficients, variances = rational_least_squares(x, y)
    for (estimate, error), coefficient, variance in zip(
        LONGLEY.values(), coefficients, variances, strict=True
    ):
        assert abs(coefficient - Fraction(estimate)) <= half_of_the_fifteenth_digit(estimate)
        half = half_of_the_fifteenth_digit(error)
        assert (Fraction(error) - half) ** 2 <= variance <= (Fraction(error) + half) ** 2


def half_of_the_fifteenth_digit(printed: str) -> Fraction:
    mantissa, _, exponent = printed.partition("E")
    return Fraction(10) ** (int(exponent or 0) - len(mantissa.partition(".")[2])) / 2


def test_longley_to_ten_digits(longley_frame):
    """Pooled takes no notice of the units; pairs of years stand in for them."""
    formula = "TOTEMP ~ " + " + ".join(term for term in LONGLEY if term != "Intercept")
    fit = mixbridge.crosscheck(formula, longley_frame, unit="pair", period="YEAR").fit("pooled")
    assert fit.residual_df == 9
    # Centred and scaled, columns have condition 111; products lose its square, 2.2e-16 * 111**2 = 2.7e-12,
    # the sums of sixteen rows a little more. Raw, they have condition 5e9, whose square leaves no digit.
    for term, (estimate, error) in LONGLEY.items():
        assert fit.coefficients[term] == pytest.approx(float(estimate), rel=1e-10)
        assert fit.standard_errors[term] == pytest.approx(float(error), rel=1e-10)
    assert sqrt(fit.scale) == pytest.approx(float(LONGLEY_RESIDUAL), rel=1e-10)
