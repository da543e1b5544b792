"""Keys of units and periods: none merged, none split, or refused with a reason."""

import datetime

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from mixbridge.errors import DataError
from mixbridge.panel import build_panel
from mixbridge.panel.keys import encode


def panel_with(keys, **options):
    n = len(keys)
    data = pd.DataFrame({"g": keys, "y": np.arange(n) % 3.0, "x": np.arange(n) % 5.0})
    return build_panel("y ~ x", data, unit="g", **options)


HUGE = 2**53

KEYS = {
    "integers": np.array([3, 1, 3, 2]),
    "small integers at both ends": np.array([127, -128, 127, 0], dtype="int8"),
    "spread integers": np.array([10**12, 5, 10**12, -7]),
    "neighbours beyond 2^53": np.array([HUGE, HUGE + 1, HUGE, HUGE + 2]),
    "unsigned at the end": np.array([2**64 - 1, 2**64 - 2, 2**64 - 1, 0], dtype="uint64"),
    "unsigned close together": np.array([2**64 - 1, 2**64 - 2, 2**64 - 1, 2**64 - 3], dtype="uint64"),
    "Python integers beyond 64 bits": pd.Series([2**70, 2**70 + 1, 2**70, -1], dtype=object),
    "Python integers around 2^63": pd.Series([2**63, 2**63 + 1, 2**63, -1], dtype=object),
    "nullable": pd.array([HUGE + 1, HUGE, HUGE + 1, 5], dtype="Int64"),
    "arrow": pd.array([HUGE + 1, HUGE, HUGE + 1, 5], dtype="int64[pyarrow]"),
    "whole floats": np.array([3.0, 1.0, 3.0, 2.0]),
    "text": ["b", "a", "b", "c"],
    "text like numbers": ["007", "7", "007", "07"],
    "arrow text": pd.array(["b", "a", "b", "c"], dtype="string[pyarrow]"),
    "categories": pd.Categorical(["b", "a", "b", "c"], ["c", "b", "a", "unused"]),
    "dates": pd.to_datetime(["2001-03-01", "2001-01-01", "2001-03-01", "2001-02-01"]),
    "zoned dates": pd.to_datetime(["2001-03-01", "2001-01-01", "2001-03-01", "2001-02-01"]).tz_localize(
        "Europe/Oslo"
    ),
    "Python dates": [datetime.date(2001, m, 1) for m in (3, 1, 3, 2)],
    "tuples": [("a", 2), ("a", 1), ("a", 2), ("b", 1)],
    "tuples of unlike kinds": [("a", 2), (1, "a"), ("a", 2), (None, 1)],
    "numbers and text": [2, "x", 2, 1],
    "truth values and text": [True, "x", True, False],
    "periods": pd.PeriodIndex(["2001-03", "2001-01", "2001-03", "2001-02"], freq="M"),
}


@pytest.mark.parametrize("name", KEYS)
def test_keys_are_kept_apart_and_recoverable(name):
    keys = KEYS[name]
    panel = panel_with(keys)
    assert panel.N == 3
    assert panel.codes.dtype == np.intp
    recovered = [panel.unit_keys[code] for code in panel.codes]
    assert recovered == list(pd.Series(keys, dtype=getattr(keys, "dtype", None)))
    assert panel.codes[0] == panel.codes[2]
    assert panel.unit_keys.name == "g"


@pytest.mark.parametrize("name", KEYS)
def test_codes_do_not_depend_on_the_order_of_rows(name):
    series = pd.Series(KEYS[name])
    codes, keys = encode("g", series)
    backwards, same = encode("g", series.iloc[::-1])
    assert list(keys) == list(same)
    np.testing.assert_array_equal(codes, backwards[::-1])


@given(st.lists(st.integers(-(2**63), 2**63 - 1), min_size=1, max_size=30))
def test_integers_come_back_exactly(values):
    for series in (
        pd.Series(values, dtype="int64"),
        pd.Series(values, dtype=object),
        pd.Series(values, dtype="Int64"),
    ):
        codes, keys = encode("g", series)
        assert [int(keys[code]) for code in codes] == values
        assert list(keys) == sorted(set(values))


@given(st.lists(st.integers(0, 2**64 - 1), min_size=1, max_size=30), st.booleans())
def test_unsigned_integers_come_back_exactly(values, close):
    values = [2**64 - 1 - value % 50 for value in values] if close else values
    codes, keys = encode("g", pd.Series(values, dtype="uint64"))
    assert [int(keys[code]) for code in codes] == values


@pytest.mark.parametrize(
    ("keys", "match"),
    [
        ([1.5, 1.5, 2.0, 3.0], "fractions, for example 1.5"),
        ([1.0, np.inf, 2.0, 3.0], "infinite"),
        ([2.0**60, 2.0**60, 1.0, 2.0], "2\\^53"),
        (pd.Series([2.0**60, 1, 1, 2], dtype=object), "2\\^53"),
        (pd.Series([1.5, 1, 1, 2], dtype=object), "fractions"),
        (pd.Series([True, 1, 0, 2], dtype=object), "truth values and numbers"),
        (pd.Series([1, "1", 2, 2], dtype=object), r"both 1 and '1'"),
        (pd.Series([[1], [1], [2], [2]], dtype=object), "cannot be compared"),
    ],
)
def test_ambiguous_keys_are_refused(keys, match):
    with pytest.raises(DataError, match=match):
        panel_with(keys)


def test_missing_keys_of_every_kind_are_dropped():
    for missing in (
        [1.0, np.nan, 2.0, 1.0],
        ["a", None, "b", "a"],
        pd.array([1, None, 2, 1], dtype="Int64"),
        pd.to_datetime(["2001-01-01", None, "2002-01-01", "2001-01-01"]),
        pd.Categorical(["a", None, "b", "a"]),
        pd.Series([1, pd.NA, 2, 1], dtype=object),
    ):
        panel = panel_with(missing)
        assert panel.N == 2
        assert panel.accounting.dropped == (("missing unit", "g", 1),)


def test_whole_float_keys_with_gaps_become_integers():
    panel = panel_with([1.0, np.nan, 2.0, 1.0])
    assert panel.unit_keys.tolist() == [1, 2]
    assert panel.unit_keys.dtype == np.int64


def paired(units, periods, **options):
    n = len(units)
    data = pd.DataFrame({"g": units, "t": periods, "y": np.arange(n) % 3.0, "x": np.arange(n) % 5.0})
    return build_panel("y ~ x", data, unit="g", period="t", **options)


def test_repeated_pairs_are_named():
    with pytest.raises(DataError, match=r"2 rows repeat.*\(g b, t 2\), \(g a, t 1\).*Aggregate"):
        paired(list("abbaba"), [1, 2, 2, 1, 3, 2])


@given(st.lists(st.tuples(st.integers(0, 3), st.sampled_from([0, 1, 2, 10**6])), min_size=3, max_size=12))
def test_repeated_pairs_are_found_exactly_when_there_are_some(pairs):
    pairs = [*pairs, (98, 0), (99, 0)]
    units, periods = zip(*pairs, strict=True)
    if len(set(pairs)) == len(pairs):
        assert paired(units, periods).n == len(pairs)
    else:
        with pytest.raises(DataError, match=f"{len(pairs) - len(set(pairs))} rows repeat"):
            paired(units, periods)


def test_a_repeated_pair_among_dropped_rows_does_no_harm():
    data = pd.DataFrame({"g": [1, 1, 2], "t": [1, 1, 1], "y": [1.0, np.nan, 3.0], "x": [1.0, 2.0, 4.0]})
    assert build_panel("y ~ x", data, unit="g", period="t").n == 2
