"""Moments that do not match are not merged, with the reason; keys of one kind are."""

from __future__ import annotations

from dataclasses import replace
from datetime import date

import numpy as np
import pandas as pd
import pytest
from moment_parts import records, rows_of

from mixbridge.errors import DataError, OptionError
from mixbridge.moments import Moments, merge_closed


def test_what_does_not_match_is_refused_with_the_reason():
    X, y, codes = rows_of(14)
    one = records(X, y, codes)
    other = records(X, y, codes + 100, ("c", "x", "w", "u"))
    for kind, reason in enumerate(["different columns", "different designs", "different designs"]):
        with pytest.raises(DataError, match=reason):
            one[kind] + other[kind]
    far = records(X, y + 1.0, codes + 100)
    for kind in range(3):
        coded = replace(one[kind], coding="a"), replace(far[kind], coding="b")
        with pytest.raises(DataError, match="coded differently"):
            coded[0] + coded[1]
        assert (coded[0] + far[kind]).coding == "a"
        assert (far[kind] + coded[0]).coding == "a"
    with pytest.raises(DataError, match="coded differently"):
        merge_closed(
            [far[1], replace(one[1], coding="a"), replace(one[1], coding="b")], units_are_distinct=True
        )


def test_closed_moments_of_units_that_may_overlap_are_refused():
    X, y, codes = rows_of(15)
    one, two = records(X, y, codes)[1], records(X, y + 1.0, codes)[1]
    with pytest.raises(DataError, match="parts 1 and 2 hold the same moments"):
        one + one
    with pytest.raises(DataError, match="parts 1 and 3 hold the same moments"):
        merge_closed([one, two, Moments.from_record(one.to_record())], units_are_distinct=True)
    for said in (False, None, 1):
        with pytest.raises(OptionError, match="hold no keys"):
            merge_closed([one, two], units_are_distinct=said)
    with pytest.raises(DataError, match="no moments"):
        merge_closed([], units_are_distinct=True)


def test_records_of_two_kinds_are_not_merged():
    one = records(*rows_of(16))
    for a in range(3):
        for b in range(3):
            if a != b:
                with pytest.raises(DataError, match=r"cannot be (merged|pooled) with"):
                    one[a] + one[b]


@pytest.mark.parametrize(
    ("keys", "others"),
    [
        (pd.RangeIndex(30), pd.Index([str(j) for j in range(30)])),
        (pd.RangeIndex(30), pd.date_range("2001-01-01", periods=30)),
        (pd.date_range("2001-01-01", periods=30), pd.date_range("2001-01-01", periods=30, tz="UTC")),
        (pd.Index([str(j) for j in range(30)]), pd.Index([date(2001, 1, 1 + j) for j in range(30)])),
        (pd.CategoricalIndex([f"{j:02}" for j in range(30)]), pd.RangeIndex(30)),
    ],
)
def test_units_keyed_by_other_types_are_refused(keys, others):
    """The number 1 and the text '1' may be one unit: it would not be found."""
    one = records(*rows_of(17))
    for kind in (0, 2):
        with pytest.raises(DataError, match="units are keyed by"):
            replace(one[kind], keys=keys) + replace(one[kind], keys=others)


@pytest.mark.parametrize("kind", [np.int32, np.uint64, np.float64, object])
def test_numbers_of_any_type_are_joined(kind):
    one = records(*rows_of(18))
    for record in (one[0], one[2]):
        other = replace(record, keys=pd.Index(np.arange(30), dtype=kind))
        assert len((record + other).keys) == 30


def test_wide_integers_are_not_made_one():
    one = records(*rows_of(19))
    wide = pd.Index(np.arange(30, dtype=np.int64) + 2**60)
    next_to = pd.Index(np.arange(30, dtype=np.int64) + 2**60 + 30)
    for record in (one[0], one[2]):
        merged = replace(record, keys=wide) + replace(record, keys=next_to)
        assert merged.keys.tolist() == [*wide.tolist(), *next_to.tolist()]


def test_a_unit_twice_in_full_has_twice_its_products():
    X, y, codes = rows_of(20)
    products = records(X, y, codes)[2]
    twice = products + products
    np.testing.assert_array_equal(twice.sizes, 2 * products.sizes)
    np.testing.assert_allclose(twice.within(), 2 * products.within(), rtol=1e-12, atol=1e-11)
    np.testing.assert_allclose(twice.framed().sum(axis=0), np.diag([1.0, 0.0, 1.0, 1.0]), atol=1e-8)
