"""Formulas that cannot be read, and those from an untrusted place."""

import numpy as np
import pandas as pd
import pytest

from mixbridge.errors import DataError, FormulaError, OptionError
from mixbridge.panel import build_panel
from mixbridge.panel.grammar import violation


@pytest.fixture(scope="module")
def frame() -> pd.DataFrame:
    rng = np.random.default_rng(8)
    return pd.DataFrame(
        {
            "hive": np.repeat(np.arange(6), 4),
            "season": np.tile(np.arange(4), 6),
            "honey": rng.normal(size=24),
            "forage": rng.exponential(size=24) + 0.5,
            "altitude": np.repeat(rng.normal(size=6), 4),
            "region": np.repeat(list("aabbcc"), 4),
        }
    )


@pytest.mark.parametrize(
    ("formula", "match"),
    [
        ("honey ~ forage +", r"(?s)expected a noun.*honey ~ forage \+\n *\^"),
        ("honey ~ log(forage", "unclosed bracket"),
        ("honey ~ forage)", r"extra '\)'"),
        (
            "honey ~ forage altitude",
            r"(?s)not an expression: forage altitude\n.*honey ~ forage altitude\n *\^",
        ),
        ("honey ~ class", r"Q\('its name'\)"),
        ("honey ~ forage ~ altitude", "only be used once"),
        ("honey ~ 'abc", "tokenizing"),
        ("honey ~ 3", "numbers besides"),
        ("forage", "no left side"),
        ("~ forage", "no left side"),
        ("", "no left side"),
        ("honey + forage ~ altitude", "one outcome.*honey and forage"),
        ("honey:forage ~ altitude", "one outcome"),
        ("1 ~ forage", "one outcome"),
        ("honey ~ 0", "nothing on its right side"),
        ("honey ~ forage | hive", "vertical bar at character 16.*argument unit"),
        ("honey ~ forage + (1 | hive)", "vertical bar.*argument unit"),
        ("honey ~ forage || hive", "vertical bar"),
        ("honey ~ forrage", r"names 'forrage', which is not a column.*Did you mean 'forage'\?"),
        ("hony ~ forage", r"'hony'.*Did you mean 'honey'"),
        ("honey ~ Q('forag e')", r"'forag e'.*Did you mean 'forage'"),
        ("honey ~ unknown_function(forage)", "unknown_function"),
        ("honey ~ C(forage, levels=3)", "list of levels"),
        ("honey ~ C(region, levels='abc')", "list of levels"),
        ("honey ~ standardize(C(season))", "cannot be evaluated"),
        ("honey ~ (touch := forage)", "not an expression"),
        ("honey ~ np.log(region)", r"np.log\(region\) cannot be evaluated"),
        ("honey ~ bs(forage, df=1)", "cannot be evaluated"),
        ("honey ~ forage.nothing", "cannot be evaluated"),
        ("honey ~ C(region, Treatment('z'))", "cannot be laid out"),
        ("honey ~ np.mean(forage)", "one number"),
        ("honey ~ np.arange(3)", "one value for each of the 24 rows"),
        ("honey ~ C(np.arange(3))", "3 values"),
    ],
)
def test_formulas_that_cannot_be_used(frame, formula, match):
    with pytest.raises(FormulaError, match=match):
        build_panel(formula, frame, unit="hive")


def test_a_formula_is_text(frame):
    with pytest.raises(FormulaError, match="needed is text"):
        build_panel(["honey", "forage"], frame, unit="hive")


def test_a_bar_inside_a_call_is_pythons(frame):
    panel = build_panel("honey ~ I((forage > 1) | (altitude > 0))", frame, unit="hive")
    assert panel.names == ("Intercept", "I((forage > 1) | (altitude > 0))[T.True]")


@pytest.mark.parametrize(
    ("unit", "period", "error", "match"),
    [
        ("hiv", None, DataError, r"unit='hiv'.*Did you mean 'hive'"),
        ("hive", "seasn", DataError, r"period='seasn'.*Did you mean 'season'"),
        ("hive", "hive", DataError, "both name 'hive'"),
        (3, None, OptionError, "name of a column"),
    ],
)
def test_unit_and_period_are_columns(frame, unit, period, error, match):
    with pytest.raises(error, match=match):
        build_panel("honey ~ forage", frame, unit=unit, period=period)


def test_a_unit_in_the_index_is_pointed_out(frame):
    with pytest.raises(DataError, match=r"reset_index\('hive'\)"):
        build_panel("honey ~ forage", frame.set_index(["hive", "season"]), unit="hive")


ACCEPTED = [
    "forage",
    "forage * altitude + C(season)",
    "log(forage) + np.log1p(forage) + sqrt(abs(altitude))",
    "center(forage) + standardize(altitude) + scale(forage)",
    "bs(forage, df=4) + cr(altitude, df=3)",
    "bs(forage, knots=[1.0, 2.0], degree=2)",
    "cc(forage, 3)",
    "I(forage**2) + I((forage + altitude) / 2) + I(-forage)",
    "I(forage**-1)",
    "I(forage > 1) + (altitude <= 0)",
    "I(region == 'a')",
    "region * forage",
    "C(region, Treatment('b')) + C(season, Sum)",
    "C(region, levels=['c', 'b', 'a'])",
    "Q('forage')",
]


@pytest.mark.parametrize("right", ACCEPTED)
def test_an_untrusted_formula_gives_what_a_trusted_one_gives(frame, right):
    trusted = build_panel(f"honey ~ {right}", frame, unit="hive")
    untrusted = build_panel(f"honey ~ {right}", frame, unit="hive", trusted=False)
    assert trusted.names == untrusted.names
    np.testing.assert_array_equal(trusted.matrix()[0], untrusted.matrix()[0])


REFUSED = [
    "__import__('os').system('touch owned')",
    "open('owned', 'w')",
    "open('owned', 'w').write(str(forage))",
    "eval('forage')",
    "np.load('owned')",
    "np.lib.npyio.load('owned')",
    "np.log.__class__",
    "forage.__class__",
    "forage.mean()",
    "forage.to_csv('owned')",
    "forage[0]",
    "I([v for v in forage])",
    "I((lambda v: v)(forage))",
    "f'{forage}'",
    "I(forage if 1 else altitude)",
    "I(forage and altitude)",
    "I(0 < forage < 1)",
    "I(9**9**9)",
    "I(9**9)",
    "I(forage**1000)",
    "I(forage**altitude)",
    "I(region * 10)",
    "I('a' * 1000000000)",
    "bs(forage, df=1000000)",
    "bs(forage, df=altitude)",
    "center(*forage)",
    "center(**forage)",
    "C(region, np.log)",
    "np.where(forage > 1, 1, 0)",
    "log(forage, altitude)",
    "te(cr(forage, df=3))",
    "I(forage % 2)",
    "I(~forage)",
    "log()",
    "bs(forage, df=-1000000 * 2)",
    "C(region, Treatment(reference=forage))",
]


@pytest.mark.parametrize("right", REFUSED)
def test_an_untrusted_formula_reaches_nothing_but_columns_and_listed_transforms(
    frame, right, tmp_path, monkeypatch
):
    monkeypatch.chdir(tmp_path)
    with pytest.raises(FormulaError, match=r"not accepted here.*log, log1p.*standardize"):
        build_panel(f"honey ~ {right}", frame, unit="hive", trusted=False)
    with pytest.raises(FormulaError, match="not accepted here"):
        build_panel(f"{right} ~ forage", frame, unit="hive", trusted=False)
    assert not list(tmp_path.iterdir())


def test_an_untrusted_formula_does_not_see_the_callers_names(frame):
    secret = 3.0
    with pytest.raises(FormulaError, match="'secret', which is not a column"):
        build_panel("honey ~ I(forage - secret)", frame, unit="hive", trusted=False)
    with pytest.raises(FormulaError, match="'open', which is not a column"):
        build_panel("honey ~ C(region, open)", frame, unit="hive", trusted=False)
    assert build_panel("honey ~ I(forage - secret)", frame, unit="hive").n == 24
    assert secret == 3.0


def test_deep_nesting_is_refused_not_crashed(frame):
    deep = "I(" + "(" * 150 + "forage" + ")" * 150 + ")"
    assert violation("-" * 5000 + "x", ["x"], ["x"]) is not None
    assert build_panel(f"honey ~ {deep}", frame, unit="hive", trusted=False).n == 24
    for deeper in (
        "forage + (" * 2000 + "forage" + ")" * 2000,
        "I(" + "-" * 5000 + "forage)",
        "I(" * 500 + "forage" + ")" * 500,
    ):
        with pytest.raises(FormulaError):
            build_panel(f"honey ~ {deeper}", frame, unit="hive", trusted=False)
