"""The design columns against patsy's own, built whole."""

import tracemalloc

import numpy as np
import pandas as pd
import patsy
import pytest
from hypothesis import given
from hypothesis import strategies as st

from mixbridge.errors import DataError, FormulaError
from mixbridge.panel import build_panel
from mixbridge.panel.categories import Coded
from mixbridge.panel.factors import Evaluated, Plain, Stored
from mixbridge.panel.standardize import standardize


@pytest.fixture(scope="module")
def frame() -> pd.DataFrame:
    rng = np.random.default_rng(20)
    n = 150
    levels = ["lo", "mid", "hi"]
    return pd.DataFrame(
        {
            "firm": rng.integers(0, 30, n),
            "y": rng.normal(size=n),
            "x": rng.normal(size=n),
            "z": rng.exponential(size=n) + 0.1,
            "k": rng.integers(1, 5, n),
            "region": rng.choice(list("abc"), n),
            "open": rng.random(n) > 0.5,
            "grade": pd.Categorical(rng.choice(levels, n), levels, ordered=True),
            "a b": rng.normal(size=n),
        },
        index=rng.permutation(n) + 1000,
    )


def demeaned(values):
    return values - values.mean()


EXACT = [
    "1",
    "x",
    "x + z + k",
    "0 + x",
    "x - 1",
    "x * z",
    "(x + z + k)**2",
    "x:z + region",
    "C(k)",
    "region",
    "open",
    "grade",
    "region * grade",
    "region:x",
    "x:region + z",
    "0 + region",
    "0 + region:grade",
    "region * x * grade",
    "k:C(k)",
    "C(k, Sum)",
    "C(k, Poly) * x",
    "C(region, Helmert):x",
    "C(region, Diff)",
    "C(region, Treatment('b'))",
    "C(k, levels=[4, 3, 2, 1])",
    "C(open)",
    "C(x > 0)",
    "x > 0",
    "I(region == 'a')",
    "I(open * 1)",
    "np.log(z)",
    "center(x)",
    "I(x**2) + I(z**-1)",
    "bs(x, df=5)",
    "cr(x, df=4)",
    "cc(x, df=4)",
    "bs(x, df=4) * region",
    "Q('a b')",
    "center(np.log(z)):region",
    "demeaned(x)",
    "np.cumsum(x)",
    "np.where(region == 'a', x, z)",
    "te(cr(x, df=3), cr(z, df=3))",
]


@pytest.mark.parametrize("right", EXACT)
def test_columns_are_patsys_to_the_last_bit(frame, right):
    left, expected = patsy.dmatrices(f"y ~ {right}", frame)
    panel = build_panel(f"y ~ {right}", frame, unit="firm")
    X, y = panel.matrix()
    assert panel.names == tuple(expected.design_info.column_names)
    assert dict(panel.terms) == dict(expected.design_info.term_name_slices)
    np.testing.assert_array_equal(X, np.asarray(expected))
    np.testing.assert_array_equal(y, np.asarray(left)[:, 0])
    if panel.constant is None:
        assert "Intercept" not in panel.names
    else:
        assert panel.names[panel.constant] == "Intercept"


@pytest.mark.parametrize("right", EXACT)
def test_blocks_stacked_are_the_matrix(frame, right):
    panel = build_panel(f"y ~ {right}", frame, unit="firm")
    X, y = panel.matrix()
    starts, blocks, outcomes = zip(*panel.blocks(rows=37), strict=True)
    assert starts == (0, 37, 74, 111, 148)
    assert all(block.flags.c_contiguous and block.dtype == np.float64 for block in blocks)
    np.testing.assert_array_equal(np.vstack(blocks), X)
    np.testing.assert_array_equal(np.concatenate(outcomes), y)


def test_plain_columns_come_straight_from_the_frame(frame):
    panel = build_panel("y ~ x + z", frame, unit="firm")
    assert all(isinstance(factor, Plain) for factor in panel.design.factors)
    held = panel.design.factors[0].column.numbers
    assert np.shares_memory(held, frame["x"].to_numpy())


@pytest.mark.parametrize(
    ("right", "kind"),
    [
        ("np.log(z)", Evaluated),
        ("bs(x, df=4)", Evaluated),
        ("demeaned(x)", Stored),  # looks at all rows: in blocks it would be wrong
        ("x.rank()", Stored),
        ("C(k)", Coded),
    ],
)
def test_only_what_works_row_by_row_is_evaluated_in_blocks(frame, right, kind):
    panel = build_panel(f"y ~ {right}", frame, unit="firm")
    assert [type(factor) for factor in panel.design.factors] == [kind]


def test_a_listed_name_with_the_callers_meaning_is_not_taken_to_work_row_by_row(frame):
    def log(values):
        return values - values.mean()

    panel = build_panel("y ~ log(x)", frame, unit="firm")
    assert isinstance(panel.design.factors[0], Stored)
    np.testing.assert_array_equal(panel.matrix()[0][:, 1], log(frame["x"]))


@pytest.mark.parametrize("right", ["standardize(x)", "scale(x, ddof=1)", "standardize(x, center=False)"])
def test_standardize_is_patsys_to_rounding(frame, right):
    expected = np.asarray(patsy.dmatrix(right, frame))
    X, _ = build_panel(f"y ~ {right}", frame, unit="firm").matrix()
    # Two sums of 150 terms in different orders: each within 150 rounding errors of values of order 1.
    np.testing.assert_allclose(X, expected, rtol=0, atol=150 * np.finfo(float).eps)


def test_the_outcome_may_be_transformed(frame):
    panel = build_panel("np.log(z) ~ x", frame, unit="firm")
    assert panel.outcome == "np.log(z)"
    np.testing.assert_array_equal(panel.matrix()[1], np.log(frame["z"]))


def test_small_integers_do_not_overflow_in_powers():
    data = pd.DataFrame(
        {"g": [1, 1, 2, 2], "y": [1.0, 2.0, 4.0, 3.0], "x": np.array([100, 90, 80, 70], "int8")}
    )
    X, _ = build_panel("y ~ I(x**2)", data, unit="g").matrix()
    assert X[:, 1].tolist() == [10000.0, 8100.0, 6400.0, 4900.0]


def test_a_factor_reads_the_callers_names_at_the_stated_depth(frame):
    offset = 3.0

    def inner():
        return build_panel("y ~ I(x - offset)", frame, unit="firm", env=1)

    np.testing.assert_array_equal(inner().matrix()[0][:, 1], frame["x"] - offset)


def test_a_column_may_have_the_name_of_a_function(frame):
    data = frame.assign(log=np.nan)
    panel = build_panel("y ~ np.log(z) + log(z)", data, unit="firm")
    assert panel.n == len(data)
    with pytest.raises(FormulaError, match="both a function and a column"):
        build_panel("y ~ log(log)", data, unit="firm")


def test_levels_that_no_used_row_has_give_no_column_and_a_note(frame):
    data = frame.assign(grade=frame["grade"].where(frame["grade"] != "hi"))
    panel = build_panel("y ~ grade", data, unit="firm")
    assert panel.names == ("Intercept", "grade[T.mid]")
    assert any("grade" in note and "hi" in note for note in panel.accounting.notes)


def test_a_level_lost_with_dropped_rows_gives_no_column(frame):
    data = frame.assign(y=frame["y"].where(frame["region"] != "c"))
    panel = build_panel("y ~ region", data, unit="firm")
    assert panel.names == ("Intercept", "region[T.b]")


def test_a_single_level_is_said(frame):
    panel = build_panel("y ~ x + region", frame.assign(region="a"), unit="firm")
    assert panel.names == ("Intercept", "x")
    assert any("region" in note and "one level" in note for note in panel.accounting.notes)


def test_a_design_without_columns_is_refused(frame):
    with pytest.raises(FormulaError, match="nothing on its right side"):
        build_panel("y ~ 0", frame, unit="firm")


def test_listed_levels_must_cover_the_data(frame):
    with pytest.raises(DataError, match=r"also hold 4"):
        build_panel("y ~ C(k, levels=[1, 2, 3])", frame, unit="firm")


def test_a_category_per_row_is_refused():
    n = 2500
    data = pd.DataFrame({"g": np.arange(n) // 2, "y": np.arange(n) % 7, "name": [f"p{i}" for i in range(n)]})
    with pytest.raises(DataError, match="2500 levels"):
        build_panel("y ~ name", data, unit="g")


def test_numbers_stored_as_text_are_noted(frame):
    panel = build_panel("y ~ k", frame.assign(k=frame["k"].astype(str)), unit="firm")
    assert panel.names == ("Intercept", "k[T.2]", "k[T.3]", "k[T.4]")
    assert any("numbers stored as text" in note for note in panel.accounting.notes)


@pytest.mark.parametrize(
    "dtype", ["Int64", "Float64", "int64[pyarrow]", "double[pyarrow]", "float32", object]
)
def test_numeric_types_give_the_same_columns(frame, dtype):
    panel = build_panel("y ~ k + I(k**2)", frame.assign(k=frame["k"].astype(dtype)), unit="firm")
    expected = build_panel("y ~ k + I(k**2)", frame, unit="firm")
    assert panel.names == expected.names
    np.testing.assert_array_equal(panel.matrix()[0], expected.matrix()[0])


@pytest.mark.parametrize("dtype", ["string", "string[pyarrow]", "str", "category", object])
def test_text_types_give_the_same_columns(frame, dtype):
    data = frame.assign(region=frame["region"].astype(dtype))
    panel = build_panel("y ~ region + I(region == 'b')", data, unit="firm")
    expected = build_panel("y ~ region + I(region == 'b')", frame, unit="firm")
    assert panel.names == expected.names
    np.testing.assert_array_equal(panel.matrix()[0], expected.matrix()[0])


@pytest.mark.parametrize("dtype", ["boolean", "bool[pyarrow]", object])
def test_truth_types_give_the_same_columns(frame, dtype):
    data = frame.assign(open=frame["open"].astype(dtype))
    panel = build_panel("y ~ open + I(open * 1)", data, unit="firm")
    expected = build_panel("y ~ open + I(open * 1)", frame, unit="firm")
    assert panel.names == expected.names == ("Intercept", "open[T.True]", "I(open * 1)")
    np.testing.assert_array_equal(panel.matrix()[0], expected.matrix()[0])


def test_dates_enter_by_indicators_only_when_asked(frame):
    data = frame.assign(day=pd.Timestamp("2001-01-01") + pd.to_timedelta(frame["k"], unit="D"))
    with pytest.raises(FormulaError, match=r"C\(day\)"):
        build_panel("y ~ day", data, unit="firm")
    assert len(build_panel("y ~ C(day)", data, unit="firm").names) == 4


@given(st.permutations(range(24)))
def test_row_order_only_reorders(order):
    rng = np.random.default_rng(3)
    data = pd.DataFrame(
        {
            "g": np.repeat(["p", "q", "r", "s"], 6),
            "t": np.tile(np.arange(6), 4),
            "y": rng.normal(size=24),
            "x": rng.normal(size=24),
            "c": rng.choice(list("uvw"), 24),
        }
    )
    data.loc[[3, 17], "x"] = np.nan
    first = build_panel("y ~ x + c + I(x**2)", data, unit="g", period="t")
    second = build_panel("y ~ x + c + I(x**2)", data.iloc[order], unit="g", period="t")
    place = pd.Index(second.row_labels).get_indexer(first.row_labels)
    assert first.names == second.names
    assert first.unit_keys.equals(second.unit_keys)
    np.testing.assert_array_equal(first.codes, second.codes[place])
    np.testing.assert_array_equal(first.period_ordinals, second.period_ordinals[place])
    np.testing.assert_array_equal(first.matrix()[0], second.matrix()[0][place])
    assert first.accounting == second.accounting


def test_later_changes_of_the_frame_do_not_reach_the_panel(frame):
    data = frame.copy()
    panel = build_panel("y ~ x", data, unit="firm")
    before = panel.matrix()[0].copy()
    data["x"] = 0.0
    np.testing.assert_array_equal(panel.matrix()[0], before)


def test_memory_beyond_the_data_stays_below_the_design_matrix():
    rng = np.random.default_rng(5)
    n, p = 100_000, 9
    data = pd.DataFrame(rng.normal(size=(n, p)), columns=[f"x{j}" for j in range(p)])
    data["y"], data["g"] = rng.normal(size=n), rng.permutation(n) // 10
    right = " + ".join(f"x{j}" for j in range(p))
    build_panel(f"y ~ {right}", data.head(1000), unit="g")  # imports and caches are not counted
    tracemalloc.start()
    panel = build_panel(f"y ~ {right}", data, unit="g")
    for _ in panel.blocks():
        pass
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 0.5 * n * (p + 1) * 8


def test_standardize_learns_the_same_from_chunks():
    values = np.random.default_rng(6).normal(5, 2, size=100)
    whole, chunks = (standardize.__patsy_stateful_transform__() for _ in range(2))
    whole.memorize_chunk(values)
    for part in np.split(values, [7, 40]):
        chunks.memorize_chunk(part)
    for transform in (whole, chunks):
        transform.memorize_finish()
    # means and sums of squares of 100 numbers of order 5, added in another order
    np.testing.assert_allclose(chunks.transform(values), whole.transform(values), rtol=0, atol=1e-13)


def test_standardize_alone_without_rescaling_centres(frame):
    X, _ = build_panel("y ~ standardize(x, rescale=False)", frame, unit="firm").matrix()
    np.testing.assert_array_equal(X[:, 1], frame["x"] - frame["x"].to_numpy().mean())


def test_more_rows_than_one_look_takes():
    n = 70_000
    data = pd.DataFrame({"g": np.arange(n) // 7, "y": np.arange(n) % 11.0, "x": np.arange(n, dtype=float)})
    data.loc[5, "x"] = np.nan
    panel = build_panel("y ~ x + I(x**2) + C(x > 69_999 - 3)", data, unit="g")
    used = data["x"].dropna()
    expected = [np.ones(n - 1), used > 69_996, used, used**2]
    np.testing.assert_array_equal(panel.matrix()[0], np.column_stack(expected))
    data.loc[69_990, "x"] = np.inf
    with pytest.raises(DataError, match="labelled 69990"):
        build_panel("y ~ x", data, unit="g")
    data.loc[69_990, "x"] = -1.0
    panel = build_panel("y ~ np.sqrt(x)", data, unit="g")
    assert panel.accounting.dropped[-1] == ("not a number in np.sqrt(x)", "np.sqrt(x)", 1)


def test_the_callers_own_coding_function_is_used(frame):
    def C(values):
        return values * 2.0

    np.testing.assert_array_equal(
        build_panel("y ~ C(x)", frame, unit="firm").matrix()[0][:, 1], frame["x"] * 2
    )


@pytest.mark.parametrize("coding", ["3", "np.eye(7)", "'Sum'"])
def test_a_coding_that_does_not_fit_is_a_formula_error(frame, coding):
    with pytest.raises(FormulaError, match="cannot be laid out"):
        build_panel(f"y ~ C(k, {coding})", frame, unit="firm")


def test_a_coding_without_columns_leaves_no_design(frame):
    nothing = np.empty((3, 0))
    with pytest.raises(FormulaError, match="leaves no column"):
        build_panel("y ~ 0 + C(region, nothing)", frame, unit="firm")
    assert nothing.size == 0


def test_values_of_unlike_kinds_are_ordered_by_kind(frame):
    def mixed(values):
        return pd.Series(np.where(values > 0, "high", None), dtype=object).where(values.to_numpy() > 0, 3)

    panel = build_panel("y ~ mixed(x)", frame, unit="firm")
    assert panel.names == ("Intercept", "mixed(x)[T.high]")


def test_categories_in_two_dimensions_are_refused(frame):
    def squares(values):
        return np.full((len(values), 2), "a")

    with pytest.raises(DataError, match="2 dimensions"):
        build_panel("y ~ squares(x)", frame, unit="firm")
    with pytest.raises(FormulaError, match="complex"):
        build_panel("y ~ I(x * 1j)", frame, unit="firm")


def test_own_functions_get_plain_numbers_from_nullable_columns(frame):
    kinds = []

    def look(values):
        kinds.append(values.dtype)
        return values * 1.0

    data = frame.assign(
        a=frame["k"].astype("Int64"), b=frame["k"].astype(object), c=frame["k"].astype("double[pyarrow]")
    )
    build_panel("y ~ look(a)", data, unit="firm")
    build_panel("y ~ look(b) + look(c)", data, unit="firm")
    assert set(kinds) == {np.dtype("int64"), np.dtype("float64")}
