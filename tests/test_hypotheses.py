"""Hypotheses by name: reading, refusing, and testing them under every covariance and reference."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st
from panels import BALANCED, BY_NAME, make
from scipy import stats

from mixbridge.errors import FormulaError, IdentificationError, OptionError
from mixbridge.inference import hypotheses
from mixbridge.inference.hypothesis_text import read_hypothesis
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.references import Robust
from mixbridge.inference.satterthwaite import joint_satterthwaite, satterthwaite
from mixbridge.moments import Moments
from mixbridge.ratio import curve_of
from mixbridge.routes import fit_route

NAMES = (
    "Intercept",
    "forage",
    "forage:feeding",
    "feeding",
    "C(region)[T.north east]",
    "C(region)[T.b]",
    'Q("brood frames")',
    "I(x ** 2)",
    "x1",
    "x",
    "np.log(x, y)",
)
#: Between two evaluations of one formula on whitened factors of a well-conditioned panel.
ROUNDING = 1e-10


@pytest.mark.parametrize(
    ("text", "rows", "values"),
    [
        ("forage = feeding", [{"forage": 1, "feeding": -1}], [0]),
        ("forage = 0, feeding = 0", [{"forage": 1}, {"feeding": 1}], [0, 0]),
        ("2*forage - feeding = 1", [{"forage": 2, "feeding": -1}], [1]),
        (" 2 * ( forage - feeding ) / 4 + 1 = x1 ", [{"forage": 0.5, "feeding": -0.5, "x1": -1}], [-1]),
        ("-forage = -1.5e-1", [{"forage": -1}], [-0.15]),
        ("0 = forage", [{"forage": -1}], [0]),
        ("forage*3 = .5", [{"forage": 3}], [0.5]),
        ("forage:feeding = forage", [{"forage:feeding": 1, "forage": -1}], [0]),
        ("forage : feeding = 0", [{"forage:feeding": 1}], [0]),
        (
            "C(region)[T.b] = C(region)[T.north east]",
            [{"C(region)[T.b]": 1, "C(region)[T.north east]": -1}],
            [0],
        ),
        ("Q('brood frames') = 2", [{'Q("brood frames")': 1}], [2]),
        ("I(x**2) = 0, x = 0", [{"I(x ** 2)": 1}, {"x": 1}], [0, 0]),
        ("np.log(x,y) + x1 = x", [{"np.log(x, y)": 1, "x1": 1, "x": -1}], [0]),
        ("forage = feeding = x", [{"forage": 1, "feeding": -1}, {"feeding": 1, "x": -1}], [0, 0]),
        ("(forage + feeding)/2 = (x + x1)/2", [{"forage": 0.5, "feeding": 0.5, "x": -0.5, "x1": -0.5}], [0]),
    ],
)
def test_reads(text, rows, values):
    found = read_hypothesis(text, NAMES)
    assert found.text == text
    expected = np.array([[row.get(name, 0.0) for name in NAMES] for row in rows])
    assert (found.matrix == expected).all()
    assert (found.values == np.array(values)).all()
    assert len(found.equations) == len(rows)


@given(
    st.lists(
        st.tuples(st.sampled_from(NAMES), st.fractions(min_value=-9, max_value=9, max_denominator=16)),
        min_size=1,
    ),
    st.integers(-99, 99),
)
def test_reads_back_what_it_is_given(parts, value):
    """Any sum of decimals times names, repeated names included, comes back as their exact sum."""
    text = " + ".join(f"{float(number)!r}*{name}" for name, number in parts) + f" = {value}"
    total = {name: sum(Fraction(repr(float(k))) for other, k in parts if other == name) for name in NAMES}
    if not any(total.values()):
        with pytest.raises(FormulaError, match="no coefficient is left"):
            read_hypothesis(text, NAMES)
        return
    found = read_hypothesis(text, NAMES)
    assert found.matrix[0].tolist() == [float(total[name]) for name in NAMES]
    assert found.values.tolist() == [float(value)]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("forrage = 0", r"'forrage' .* is not a term.*Did you mean 'forage'\?"),
        ("C(region)[T.c] = 0", r"'C\(region\)\[T\.c\]' .* is not a term.*Did you mean 'C\(region\)\[T\.b\]'"),
        ("x12 = 0", "'x12' .* is not a term"),
        ("forage:x = 0", "'forage:x' .* is not a term"),
        ("forage", r"has no '='.*forage = 0"),
        ("forage = 0, feeding", r"'feeding' has no '='"),
        ("forage*feeding = 0", "not linear"),
        ("1/forage = 0", "not linear"),
        ("forage**2 = 0", "not linear"),
        ("forage/0 = 1", "divides by zero"),
        ("2forage = 0", "write the product with"),
        ("forage feeding = 0", "an operator, '=' or ',' is missing before 'feeding = 0'"),
        ("(forage = 0", r"'\)' is missing"),
        ("forage = ", "a term or a number is missing at the end"),
        ("", "a term or a number is missing"),
        ("forage = 0,", "a term or a number is missing at the end"),
        ("forage > 0", "'>' .* is not a term"),
        ("forage = forage", "no coefficient is left in 'forage = forage'"),
    ],
)
def test_refuses_what_it_cannot_read(text, message):
    with pytest.raises(FormulaError, match=message):
        read_hypothesis(text, NAMES)


def test_names_redundant_and_contradicting_rows():
    redundant = "forage = feeding, x = 0, feeding = x, forage = 0, x1 = 0, 0.1*x1 = 0"
    with pytest.raises(IdentificationError, match="redundant") as caught:
        read_hypothesis(redundant, NAMES)
    text = str(caught.value)
    assert "'forage = 0' (row 4) follows from 'forage = feeding', 'x = 0', 'feeding = x'" in text
    assert "'0.1*x1 = 0' (row 6) follows from 'x1 = 0'" in text
    with pytest.raises(
        IdentificationError, match=r"'x = 1' \(row 3\) contradicts 'forage = 0', 'forage = x'"
    ):
        read_hypothesis("forage = 0, forage = x, x = 1", NAMES)


PANEL = BY_NAME["mild_periods"]
CURVE = curve_of(Moments.from_arrays(PANEL.X, PANEL.y, PANEL.units, PANEL.names))
FIRST, SECOND, THIRD = PANEL.names[1:4]


def fit(route, **conventions):
    return fit_route(CURVE, route, conventions, "no periods here")


@pytest.mark.parametrize(
    "text",
    [
        f"{FIRST} = 0",
        f"2*{FIRST} - {SECOND} = 1",
        f"{FIRST} = 0, {SECOND} = {THIRD}",
        f"Intercept = 3, {FIRST} + {SECOND} = 0, {THIRD} = 0.25",
    ],
)
def test_pooled_is_the_f_test_of_least_squares(text):
    reference = sm.OLS(PANEL.y, PANEL.X).fit()
    read = read_hypothesis(text, PANEL.names)
    wanted = reference.f_test((read.matrix, read.values))
    found = hypotheses.test_hypothesis(CURVE, fit("pooled"), text)
    assert found.rule == "t_residual"
    assert (found.df1, found.df2) == (len(read.values), reference.df_resid)
    assert found.statistic == pytest.approx(float(wanted.fvalue), rel=ROUNDING)
    assert found.p_value == pytest.approx(
        float(wanted.pvalue), rel=1e-8
    )  # the tail amplifies by its log slope
    assert found.estimate == pytest.approx(
        read.matrix @ reference.params - read.values, rel=ROUNDING, abs=1e-12
    )
    single = reference.t_test((read.matrix, read.values))
    assert found.standard_error == pytest.approx(np.atleast_1d(np.squeeze(single.sd)), rel=ROUNDING)
    if len(read.values) == 1:
        assert found.statistic == pytest.approx(float(np.squeeze(single.tvalue)) ** 2, rel=ROUNDING)


@pytest.mark.parametrize("route", ["reml", "wallace_hussain", "within"])
def test_rules_of_a_joint_hypothesis(route):
    one = fit(route)
    text = f"{FIRST} = {SECOND}, {THIRD} = 0"
    L = read_hypothesis(text, PANEL.names).matrix
    used = np.flatnonzero(L.any(axis=0))
    b, V = L[:, used] @ one.beta[used], L[:, used] @ one.covariance_array[np.ix_(used, used)] @ L[:, used].T
    F = b @ np.linalg.solve(V, b) / 2
    dfs = {"normal": np.inf, "t_rows": CURVE.n - CURVE.rank, "t_units": 7, "t_within": CURVE.df_within}
    for rule, df in dfs.items():
        found = hypotheses.test_hypothesis(CURVE, one, text, rule=rule)
        assert (found.rule, found.covariance, found.df2, found.scaling) == (rule, "model", df, 1.0)
        assert found.statistic == pytest.approx(F, rel=ROUNDING)
        wanted = stats.chi2.sf(2 * F, 2) if np.isinf(df) else stats.f.sf(F, 2, df)
        assert found.p_value == pytest.approx(wanted, rel=1e-8)
    default = hypotheses.test_hypothesis(CURVE, one, text)
    if route == "within":
        assert (default.rule, default.df2) == ("t_residual", CURVE.df_within)
    else:
        assert (default.rule, default.df2) == ("satterthwaite", joint_satterthwaite(CURVE, one, L).df)
    written = hypotheses.test_hypothesis(CURVE, one, text, rule="satterthwaite", decomposition="as_written")
    assert written.df2 == joint_satterthwaite(CURVE, one, L, "as_written").df


def test_kenward_roger_scales_the_statistic_of_its_own_covariance():
    one, text = fit("reml"), f"{FIRST} = 0.5, {SECOND} = 0, {THIRD} = 0"
    found = hypotheses.test_hypothesis(CURVE, one, text, rule="kenward_roger")
    adjusted = kenward_roger(CURVE, one)
    L = found.matrix
    law = adjusted.scaled_f(L)
    d = L @ one.beta - [0.5, 0.0, 0.0]
    F = law.scaling * d @ np.linalg.solve(L @ adjusted.covariance @ L.T, d) / 3
    assert law.scaling < 1.0
    assert (found.covariance, found.scaling, found.df2) == ("kenward_roger", law.scaling, law.df)
    assert found.statistic == pytest.approx(F, rel=ROUNDING)
    assert found.p_value == pytest.approx(stats.f.sf(F, 3, law.df), rel=1e-8)
    single = hypotheses.test_hypothesis(CURVE, one, f"{FIRST} = 0", rule="kenward_roger")
    assert single.df2 == pytest.approx(satterthwaite(CURVE, one, np.eye(CURVE.rank)[1:2]).df[0], rel=ROUNDING)


def test_same_hypothesis_in_other_words_is_the_same_test():
    one = fit("reml")
    for rule in ("satterthwaite", "kenward_roger", "normal"):
        a = hypotheses.test_hypothesis(CURVE, one, f"{FIRST} = {SECOND} = {THIRD}", rule=rule)
        b = hypotheses.test_hypothesis(
            CURVE, one, f"3*({THIRD} - {FIRST}) = 0, {SECOND} + {THIRD} = 2*{FIRST}", rule=rule
        )
        assert (a.statistic, a.df2, a.p_value) == pytest.approx((b.statistic, b.df2, b.p_value), rel=1e-9)


def test_robust_covariances_and_their_rules():
    one, text = fit("wansbeek_kapteyn"), f"{FIRST} = 0, {SECOND} = 0"
    matrix = 2.25 * one.covariance_array
    robust = {
        "CR1": Robust(matrix),
        "CR2": Robust(matrix, satterthwaite=lambda row: 3.5, joint=lambda rows: (4.5, 0.8)),
    }
    model = hypotheses.test_hypothesis(CURVE, one, text)
    plain = hypotheses.test_hypothesis(CURVE, one, text, covariance="CR1", robust=robust)
    assert (plain.rule, plain.df2, plain.covariance) == ("t_units", 7.0, "CR1")
    assert plain.statistic == pytest.approx(model.statistic / 2.25, rel=ROUNDING)
    assert plain.standard_error == pytest.approx(1.5 * model.standard_error, rel=ROUNDING)
    joint = hypotheses.test_hypothesis(CURVE, one, text, covariance="CR2", robust=robust)
    assert (joint.rule, joint.df2, joint.scaling) == ("satterthwaite", 4.5, 0.8)
    assert joint.statistic == pytest.approx(0.8 * plain.statistic, rel=ROUNDING)
    halfway = {"CR2": Robust(matrix, satterthwaite=lambda row: 3.5)}
    found = hypotheses.test_hypothesis(CURVE, one, text, covariance="CR2", robust=halfway)
    assert (found.rule, found.df2) == ("t_units", 7.0)  # no joint rule was given
    single = hypotheses.test_hypothesis(CURVE, one, f"{FIRST} = 0", covariance="CR2", robust=robust)
    assert (single.df2, single.scaling) == (3.5, 1.0)
    with pytest.raises(OptionError, match="no Satterthwaite rule"):
        hypotheses.test_hypothesis(CURVE, one, text, rule="satterthwaite", covariance="CR1", robust=robust)
    with pytest.raises(OptionError, match="own adjusted covariance"):
        hypotheses.test_hypothesis(CURVE, one, text, rule="kenward_roger", covariance="CR1", robust=robust)
    with pytest.raises(OptionError, match="allowed: model, CR1, CR2"):
        hypotheses.test_hypothesis(CURVE, one, text, covariance="CR9", robust=robust)


def test_singular_robust_covariance_names_the_row():
    one = fit("reml")
    scores = np.random.default_rng(1).normal(size=(CURVE.rank, 2))  # as with two units
    robust = {"CR0": Robust(scores @ scores.T)}
    with pytest.raises(IdentificationError, match=f"'{THIRD} = 0' has no variation of its own beside"):
        hypotheses.test_hypothesis(
            CURVE, one, f"{FIRST} = 0, {SECOND} = 0, {THIRD} = 0", covariance="CR0", robust=robust
        )


def test_refusals_of_the_test():
    within = fit("within")
    with pytest.raises(IdentificationError, match="does not estimate 'Intercept'"):
        hypotheses.test_hypothesis(CURVE, within, f"Intercept = {FIRST}")
    with pytest.raises(OptionError, match="allowed: normal"):
        hypotheses.test_hypothesis(CURVE, within, f"{FIRST} = 0", rule="t_rowss")
    with pytest.raises(OptionError, match="belongs to the route 'reml'"):
        hypotheses.test_hypothesis(CURVE, within, f"{FIRST} = 0", rule="kenward_roger")
    with pytest.raises(
        IdentificationError, match=r"N - K_p|unit means"
    ):  # 8 units, K_p = 9 columns of rank 8
        hypotheses.test_hypothesis(CURVE, fit("reml"), f"{FIRST} = 0", rule="t_between")
    two = BY_NAME["two_minima_reml_zero_b"]
    c = curve_of(Moments.from_arrays(two.X, two.y, two.units, two.names))
    one = fit_route(c, "reml", {}, "no periods")
    with pytest.raises(IdentificationError, match="no usable law"):
        hypotheses.test_hypothesis(c, one, f"{two.names[0]} = 0, {two.names[1]} = 0", rule="kenward_roger")


def test_zero_ratio_is_said():
    panel = BY_NAME["negative_mild"]
    c = curve_of(Moments.from_arrays(panel.X, panel.y, panel.units, panel.names))
    for rule in ("satterthwaite", "kenward_roger"):
        found = hypotheses.test_hypothesis(
            c, fit_route(c, "reml", {}, ""), f"{panel.names[1]} = 0, {panel.names[2]} = 0", rule=rule
        )
        assert "ratio of zero" in found.notes[0]


def test_balanced_closed_joint_hypotheses_are_the_classical_f_tests():
    """Identity 12 for tests: F(q, n - N - K_w) within, F(q, N - K_p) between, both small-sample rules."""
    panel = make("closed", "", BALANCED, "pure pure between between", seed=5, psi=2.0)
    c = curve_of(Moments.from_arrays(panel.X, panel.y, panel.units, panel.names))
    one = fit_route(c, "reml", {}, "")
    for side, terms in (("within", panel.names[1:3]), ("between", panel.names[3:])):
        text = " = ".join([*terms, "0"])
        classical = hypotheses.test_hypothesis(c, fit_route(c, side, {}, ""), text)
        for rule in ("satterthwaite", "kenward_roger"):
            found = hypotheses.test_hypothesis(c, one, text, rule=rule)
            # the ratio is located to 1e-8 of itself
            assert (found.statistic, found.df2) == pytest.approx(
                (classical.statistic, classical.df2), rel=1e-7
            )
