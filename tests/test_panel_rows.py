"""What becomes of rows: dropped, counted, refused."""

from decimal import Decimal

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from mixbridge.errors import DataError, FormulaError, OptionError
from mixbridge.panel import build_panel


def small(**columns) -> pd.DataFrame:
    base = {
        "g": [1, 1, 2, 2, 3, 3],
        "t": [1, 2, 1, 2, 1, 2],
        "y": [1.0, 2.0, 4.0, 3.0, 6.0, 5.5],
        "x": [0.5, 1.5, 2.0, 2.5, 3.5, 3.0],
        "z": [1.0, 2.0, 3.0, 4.0, 5.0, 6.0],
    }
    return pd.DataFrame({**base, **columns}, index=list("abcdef"))


nan = np.nan


def test_complete_rows_are_all_used():
    account = build_panel("y ~ x", small(), unit="g", period="t").accounting
    assert (account.rows_given, account.rows_used, account.rows_dropped) == (6, 6, 0)
    assert account.table.empty
    assert list(account.table.columns) == ["cause", "column", "rows"]
    assert account.lines() == ["6 rows given, all used."]


def test_each_row_is_counted_under_its_first_cause():
    data = small(
        g=[None, 1, 2, 2, 3, 3],
        t=[None, None, 1, 2, 1, 2],
        y=[nan, nan, nan, 3.0, 6.0, 5.5],
        x=[nan, nan, nan, nan, 3.5, 3.0],
        z=[nan, 2.0, 3.0, nan, 5.0, 6.0],
    )
    extra = pd.DataFrame(
        {"g": [4, 4], "t": [1, 2], "y": [1.0, 2.0], "x": [1.0, 2.0], "z": [nan, 4.0]}, list("gh")
    )
    panel = build_panel("y ~ x + z", pd.concat([data, extra]), unit="g", period="t")
    account = panel.accounting
    assert account.dropped == (
        ("missing unit", "g", 1),
        ("missing period", "t", 1),
        ("missing outcome", "y", 1),
        ("missing covariate", "x", 1),
        ("missing covariate", "z", 1),
    )
    assert dict(account.missing) == {"g": 1, "t": 2, "y": 3, "x": 4, "z": 3}
    assert list(panel.row_labels) == ["e", "f", "h"]
    assert account.rows_dropped == account.table["rows"].sum() == 5
    assert "  missing covariate (x): 1" in account.lines()
    assert account.missing_table.set_index("column").loc["x", "rows"] == 4


@given(st.lists(st.sets(st.sampled_from(["g", "t", "y", "x", "z"])), min_size=6, max_size=6))
def test_given_is_used_plus_dropped(holes):
    data = small().astype(object)
    for label, missing in zip(data.index, holes, strict=True):
        data.loc[label, list(missing)] = None
    data = data.infer_objects()
    more = small(g=[7, 7, 8, 8, 9, 9])
    panel = build_panel("y ~ x + z", pd.concat([data.astype(object), more]), unit="g", period="t")
    account = panel.accounting
    assert account.rows_given == account.rows_used + sum(rows for _, _, rows in account.dropped) == 12
    assert account.rows_used == 6 + sum(not missing for missing in holes)


def test_refused_incomplete_rows_come_with_the_counts():
    with pytest.raises(DataError, match=r"missing covariate \(x\): 1"):
        build_panel("y ~ x", small(x=[nan, 1, 2, 3, 4, 5]), unit="g", incomplete_rows="refuse")
    with pytest.raises(DataError, match=r"not a number in np.log\(x\): 1"):
        build_panel("y ~ np.log(x)", small(x=[-1.0, 1, 2, 3, 4, 5]), unit="g", incomplete_rows="refuse")
    with pytest.raises(OptionError, match="drop, refuse"):
        build_panel("y ~ x", small(), unit="g", incomplete_rows="keep")


def test_rows_without_a_value_after_a_transform_are_dropped_and_counted():
    data = small(x=[-1.0, 1.0, 2.0, 3.0, 4.0, 5.0])
    panel = build_panel("y ~ np.log(x)", data, unit="g")
    assert panel.accounting.dropped == (("not a number in np.log(x)", "np.log(x)", 1),)
    np.testing.assert_array_equal(panel.matrix()[0][:, 1], np.log([1.0, 2.0, 3.0, 4.0, 5.0]))


@pytest.mark.parametrize(
    "term", ["center(np.log(x))", "standardize(np.log(x))", "bs(np.log(x), df=3, degree=2)"]
)
def test_stateful_transforms_learn_from_the_rows_used_only(term):
    data = small(x=[-1.0, 1.0, 2.0, 3.0, 4.0, 5.0])
    panel = build_panel(f"y ~ {term} + z", data, unit="g")
    alone = build_panel(f"y ~ {term} + z", data.iloc[1:], unit="g")
    assert panel.n == 5
    np.testing.assert_array_equal(panel.matrix()[0], alone.matrix()[0])


def test_another_terms_lost_rows_change_what_is_learned():
    data = small(z=[-1.0, 2.0, 3.0, 4.0, 5.0, 6.0])
    panel = build_panel("y ~ center(x) + np.sqrt(z)", data, unit="g")
    # a mean of five doubles of order 1, subtracted: a few rounding errors
    np.testing.assert_allclose(panel.matrix()[0][:, 1].sum(), 0, atol=10 * np.finfo(float).eps)


def test_own_functions_see_the_rows_used_only():
    seen = []

    def record(values):
        seen.append(len(values))
        return values

    build_panel("y ~ record(x)", small(x=[nan, 1, 2, 3, 4, 5]), unit="g")
    assert set(seen) == {5}


@pytest.mark.parametrize(
    ("formula", "change", "match"),
    [
        ("y ~ x", {"x": [1, np.inf, 2, 3, 4, 5]}, r"'x'.*infinite.*'b'"),
        ("y ~ x", {"y": [1, 2, -np.inf, 3, 4, 5]}, r"'y'.*infinite.*'c'"),
        ("y ~ np.log(x)", {"x": [1.0, 2, 3, 0, 4, 5]}, r"np.log\(x\).*infinite.*'d'"),
        ("y ~ center(np.log(x))", {"x": [1.0, 2, 3, 0, 4, 5]}, r"np.log\(x\).*infinite.*'d'"),
        ("y ~ np.exp(-x)", {"x": [1, np.inf, 2, 3, 4, 5]}, r"'x'.*infinite.*'b'"),
        ("y ~ I(1 / x)", {"x": [1.0, 2, 3, 0, 4, 5]}, r"infinite.*'d'"),
        ("y ~ np.cumsum(np.exp(x))", {"x": [1.0, 2, 3, 1000, 4, 5]}, r"infinite.*'d'"),
    ],
)
def test_infinite_values_name_column_and_row(formula, change, match):
    with pytest.raises(DataError, match=match):
        build_panel(formula, small(**change), unit="g")


def test_an_infinite_value_in_a_row_dropped_anyway_does_no_harm():
    panel = build_panel("y ~ x", small(x=[np.inf, 1, 2, 3, 4, 5], y=[nan, 2, 3, 4, 5, 7]), unit="g")
    assert panel.n == 5


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ({"y": [2.0] * 6}, "one value 2"),
        ({"y": [nan] * 6}, r"No row is left.*missing outcome \(y\): 6"),
        ({"g": [None] * 6}, r"No row is left.*missing unit \(g\): 6"),
        ({"g": [1] * 6}, "one unit"),
        ({"g": ["n", "n", None, None, None, None]}, "one unit"),
        ({"y": list("123456")}, "to_numeric"),
        ({"y": pd.Categorical(list("aabbcc"))}, "categories"),
        ({"y": [True, False] * 3}, "truth values"),
        ({"y": pd.date_range("2001", periods=6)}, "dates"),
        ({"x": [1, "a", 2, "b", 3, "c"]}, "mixes"),
        ({"y": [1, "a", 2, "b", 3, "c"]}, "mixes"),
        ({"x": np.arange(6) * 1j}, "complex"),
        ({"x": [[1], [2], [3], [4], [5], [6]]}, "mixes"),
        (
            {"x": pd.Series([10**400, 1, 2, 3, 4, 5], list("abcdef"), dtype=object)},
            "cannot be read as numbers",
        ),
        ({"x": pd.interval_range(0, 6)}, "type interval"),
    ],
)
def test_unusable_columns(change, match):
    with pytest.raises(DataError, match=match):
        build_panel("y ~ x", small(**change), unit="g")


def test_no_rows():
    with pytest.raises(DataError, match="no rows"):
        build_panel("y ~ x", small().head(0), unit="g")


@pytest.mark.parametrize("values", [1e15 + np.arange(6) % 2, 2**60 + np.arange(6), -1e15 - np.arange(6) % 2])
def test_a_spread_that_doubles_do_not_carry_is_refused(values):
    with pytest.raises(DataError, match=r"of x lie between .*Subtract an offset"):
        build_panel("y ~ x", small(x=values), unit="g")
    with pytest.raises(DataError, match="of y lie between"):
        build_panel("y ~ x", small(y=values), unit="g")


def test_a_large_offset_that_doubles_carry_is_accepted():
    assert build_panel("y ~ x", small(x=1e9 + np.arange(6)), unit="g").n == 6
    assert build_panel("y ~ x", small(x=[1e15] * 6), unit="g").n == 6  # constant: collinear, found later


def test_repeated_names_are_refused_only_where_used():
    data = small()
    twice = pd.concat([data, data[["x"]]], axis=1)
    assert build_panel("y ~ z", twice, unit="g").n == 6
    with pytest.raises(DataError, match="2 columns named 'x'"):
        build_panel("y ~ x", twice, unit="g")


def test_an_outcome_of_several_columns_or_categories():
    with pytest.raises(FormulaError, match="3 columns"):
        build_panel("bs(y, df=3) ~ x", small(), unit="g")
    with pytest.raises(FormulaError, match="categories"):
        build_panel("C(y) ~ x", small(), unit="g")


def test_a_term_that_never_settles_is_refused():
    def lose_first(values):
        values = values.copy()
        values.iloc[0] = nan
        return values

    n = 60
    data = pd.DataFrame({"g": np.arange(n) // 2, "y": np.arange(n) % 7.0, "x": np.arange(n) % 5.0})
    with pytest.raises(DataError, match="rounds"):
        build_panel("y ~ lose_first(x)", data, unit="g")


def test_missing_category_after_evaluation_is_counted():
    data = small(x=[-1.0, 1.0, 2.0, 3.0, 4.0, 5.0])
    panel = build_panel("y ~ C(np.round(np.log(x)))", data, unit="g")
    assert panel.accounting.rows_dropped == 1


def test_missing_of_nullable_types():
    data = small(
        x=pd.array([1, None, 3, 4, 5, 6], dtype="Int64"),
        z=pd.array([True, False, None, True, True, False], "boolean"),
    )
    panel = build_panel("y ~ x + z", data, unit="g")
    assert panel.accounting.dropped == (("missing covariate", "x", 1), ("missing covariate", "z", 1))
    assert panel.names == ("Intercept", "z[T.True]", "x")


def test_the_unit_may_also_be_a_covariate():
    panel = build_panel("y ~ g", small(), unit="g")
    np.testing.assert_array_equal(panel.matrix()[0][:, 1], [1, 1, 2, 2, 3, 3])


def test_the_panel_cannot_be_changed():
    panel = build_panel("y ~ x", small(), unit="g", period="t")
    with pytest.raises(AttributeError):
        panel.formula = "y ~ 1"
    for array in (panel.codes, panel.period_ordinals):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 5
    with pytest.raises(TypeError):
        panel.terms["x"] = slice(0, 1)
    with pytest.raises(OptionError, match="at least one row"):
        next(panel.blocks(rows=0))


def test_decimals_and_sparse_numbers_are_numbers():
    decimals = [Decimal("0.5"), None, Decimal(2), Decimal("2.5"), Decimal(4), Decimal(5)]
    panel = build_panel("y ~ x", small(x=decimals), unit="g")
    np.testing.assert_array_equal(panel.matrix()[0][:, 1], [0.5, 2.0, 2.5, 4.0, 5.0])
    assert panel.accounting.notes == ("x is stored as objects; its numbers were read as numbers",)
    assert panel.accounting.lines()[-1].startswith("  note: x is stored")
    sparse = build_panel("y ~ x", small(x=pd.arrays.SparseArray([0.0, 0, 1, 0, 2, 0])), unit="g")
    np.testing.assert_array_equal(sparse.matrix()[0][:, 1], [0, 0, 1, 0, 2, 0])


def test_a_column_without_any_value():
    with pytest.raises(DataError, match=r"No row is left\. 6 rows given, 0 used, 6 dropped: .*\(x\): 6\.$"):
        build_panel("y ~ x", small(x=pd.Series([None] * 6, list("abcdef"), dtype=object)), unit="g")


def test_a_transform_that_loses_every_row():
    with pytest.raises(DataError, match=r"No row is left.*not a number in standardize\(x\): 6"):
        build_panel("y ~ standardize(x)", small(x=[1.0] * 6), unit="g")
