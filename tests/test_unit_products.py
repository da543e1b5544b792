"""Products by unit against sums over the rows, in every order, merged, selected, saved."""

import json

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from panels import PANELS

from mixbridge.errors import DataError
from mixbridge.moments import Moments, collect
from mixbridge.moments.products import UnitProducts, collect_products


def coded(panel):
    return np.unique(panel.units, return_inverse=True)[1]


def by_rows(products, X, y, codes):
    """Return size, scaled mean and scaled within products of each unit in long double, straight from the rows."""
    keep = [j for j, name in enumerate(products.design) if name != products.constant]
    z = np.column_stack([X[:, keep], y]).astype(np.longdouble)
    sizes, means, within = [], [], []
    for code in np.unique(codes):
        rows = z[codes == code]
        deviation = (rows - rows.mean(axis=0)) / products.scale
        sizes.append(len(rows))
        means.append((rows.mean(axis=0) - products.shift) / products.scale)
        within.append(deviation.T @ deviation)
    return np.array(sizes), np.array(means), np.array(within)


@pytest.mark.parametrize("panel", PANELS, ids=lambda panel: panel.name)
def test_every_panel_by_its_rows(panel):
    codes = coded(panel)
    products = UnitProducts.from_arrays(panel.X, panel.y, codes, panel.names)
    moments = Moments.from_arrays(panel.X, panel.y, codes, panel.names)
    sizes, means, within = by_rows(products, panel.X, panel.y, codes)
    np.testing.assert_array_equal(products.sizes, sizes)
    # the stored data are rounded at 1e-16 of their distance from zero, which is `magnitude` in units of the scale
    stored = 4e-16 * moments.magnitude / moments.scale
    assert (np.abs(products.means - means) <= 1e-14 + stored).all()
    # framed coordinates come by substitution: each column keeps its digits next to the columns that are taken off it
    framed = np.sqrt(np.einsum("ijj->ij", products.framed()))
    length = framed @ np.abs(products.frame) + np.sqrt(sizes)[:, None] * stored
    allowed = (2e-15 * length + 4 * np.sqrt(sizes)[:, None] * stored)[:, :, None] * length[:, None, :]
    gap = np.abs(products.within() - within)
    assert (gap <= allowed + allowed.transpose(0, 2, 1)).all()


@pytest.mark.parametrize("panel", PANELS[::4], ids=lambda panel: panel.name)
def test_units_add_up_to_the_moments(panel):
    codes = coded(panel)
    products = UnitProducts.from_arrays(panel.X, panel.y, codes, panel.names)
    moments = Moments.from_arrays(panel.X, panel.y, codes, panel.names)
    assert (products.design, products.constant, products.outcome) == (
        moments.design,
        moments.constant,
        moments.outcome,
    )
    assert products.columns == moments.columns
    assert (products.rows, products.units) == (moments.rows, moments.units)
    np.testing.assert_array_equal(products.shift, moments.shift)
    np.testing.assert_array_equal(products.scale, moments.scale)
    w = moments.within.T @ moments.within
    length = np.sqrt(np.diag(w))
    # W comes from products of rows measured elsewhere or from QR of the rows: both lose up to the size of a unit
    assert (np.abs(products.within().sum(axis=0) - w) <= 1e-13 * np.outer(length, length) + 1e-300).all()
    np.testing.assert_allclose(products.within_total(), products.within().sum(axis=0), atol=1e-13 * w.max())
    at = np.array([products.units - 1, 0])
    np.testing.assert_array_equal(products.within(at), products.within()[at])


@given(st.integers(0, 2**32 - 1), st.sampled_from([1, 3, 17, 64, 8192]), st.booleans())
def test_any_order_of_rows_and_any_blocks_give_the_same(seed, rows, ordered):
    rng = np.random.default_rng(seed)
    sizes = rng.integers(1, 9, 12)
    codes = np.repeat(np.arange(12), sizes)
    X = np.column_stack([np.ones(codes.size), rng.normal(size=(codes.size, 2)), rng.normal(size=12)[codes]])
    y = rng.normal(size=codes.size)
    expected = UnitProducts.from_arrays(X, y, codes)
    if not ordered:
        shuffle = rng.permutation(codes.size)
        X, y, codes = X[shuffle], y[shuffle], codes[shuffle]

    def blocks():
        for start in range(0, codes.size, rows):
            yield codes[start : start + rows], X[start : start + rows], y[start : start + rows]

    opened, moments = collect(blocks, ("x0", "x1", "x2", "x3", "y"), pd.RangeIndex(12))
    got = collect_products(blocks, opened, moments)
    np.testing.assert_allclose(got.means, expected.means, atol=1e-14)
    # another order is another rounding, and a frame of its own
    np.testing.assert_allclose(got.within(), expected.within(), atol=1e-13 * np.abs(expected.within()).max())


def small(seed=0, units=6, keys=None):
    rng = np.random.default_rng(seed)
    codes = np.repeat(np.arange(units), rng.integers(2, 6, units))
    X = np.column_stack([np.ones(codes.size), rng.normal(size=(codes.size, 2))])
    return X, rng.normal(size=codes.size) * 3 + 5, codes


def test_framed_products_add_up_to_the_identity_and_keep_nearly_collinear_columns_apart():
    X, y, codes = small(units=40)
    X[:, 2] = X[:, 1] + 2.0**-24 * X[:, 2]
    products = UnitProducts.from_arrays(X, y, codes)
    np.testing.assert_allclose(products.framed().sum(axis=0), np.eye(3), atol=1e-8)  # 2^24 roundings
    d = np.array([np.append(X[codes == i, 2] - X[codes == i, 1], 0) for i in range(40)], dtype=object)
    share = np.array([np.sum((v[:-1] - v[:-1].mean()) ** 2) for v in d])
    # the second framed column is the small difference, up to its projection on the first column
    assert np.corrcoef(products.framed()[:, 1, 1], share.astype(float))[0, 1] > 0.9


def test_units_without_rows_are_left_out_by_key():
    X, y, codes = small()
    keys = pd.Index(["a", "b", "empty", "c", "d", "e", "f"])
    renamed = np.array([0, 1, 3, 4, 5, 6])[codes]

    def blocks():
        yield renamed, X, y

    opened, moments = collect(blocks, ("x0", "x1", "x2", "y"), keys)
    products = collect_products(blocks, opened, moments, keys)
    assert list(products.keys) == ["a", "b", "c", "d", "e", "f"]
    np.testing.assert_allclose(products.within(), UnitProducts.from_arrays(X, y, codes).within(), atol=1e-14)


def test_a_source_that_changed_is_refused():
    X, y, codes = small()
    calls = []

    def blocks():
        calls.append(1)
        stop = codes.size - (len(calls) > 1)
        yield codes[:stop], X[:stop], y[:stop]

    opened, moments = collect(blocks, ("x0", "x1", "x2", "y"), pd.RangeIndex(6))
    with pytest.raises(DataError, match="did not give the same rows"):
        collect_products(blocks, opened, moments)
    with pytest.raises(DataError, match="do not know"):
        collect_products(lambda: iter([(codes + 3, X, y)]), opened, moments)


def test_pooling_disjoint_units_is_one_gathering():
    X, y, codes = small(units=20)
    X[:, 1] += 40.0
    whole = UnitProducts.from_arrays(X, y, codes)
    first = codes < 7
    part = UnitProducts.from_arrays(X[first], y[first], codes[first])
    rest = UnitProducts.from_arrays(X[~first], y[~first], codes[~first])
    assert list(rest.keys) == list(range(7, 20))
    pooled = part + rest
    assert list(pooled.keys) == list(range(20))
    change = pooled.scale / whole.scale
    np.testing.assert_allclose(
        pooled.within() * np.outer(change, change), whole.within(), atol=1e-13 * np.abs(whole.within()).max()
    )
    moved = pooled.means * change + (pooled.shift - whole.shift) / whole.scale
    np.testing.assert_allclose(moved, whole.means, atol=1e-13 * np.abs(moved).max())
    moments = Moments.from_arrays(X[first], y[first], codes[first]) + Moments.from_arrays(
        X[~first], y[~first], codes[~first]
    )
    np.testing.assert_array_equal(pooled.shift, moments.shift)
    again = pooled.select(np.arange(7, 20)) + pooled.select(np.arange(7))
    np.testing.assert_array_equal(again.packed, pooled.packed[np.r_[7:20, 0:7]])


def test_pooling_refuses_other_designs():
    X, y, codes = small()
    one = UnitProducts.from_arrays(X, y, codes)
    with pytest.raises(DataError, match="different designs"):
        one + UnitProducts.from_arrays(X[:, :2], y, codes + 10)


def test_selection_by_place_mask_and_size():
    X, y, codes = small(units=9)
    products = UnitProducts.from_arrays(X, y, codes)
    some = products.select(np.array([4, 1]))
    assert list(some.keys) == [4, 1]
    np.testing.assert_array_equal(some.within(), products.within()[[4, 1]])
    mask = products.sizes > 3
    np.testing.assert_array_equal(products.select(mask).sizes, products.sizes[mask])
    size = int(products.sizes[0])
    assert size not in products.without_sizes(size).sizes
    with pytest.raises(DataError, match="no unit is left"):
        products.select(np.zeros(9, dtype=bool))
    with pytest.raises(DataError, match="more than once"):
        products.select(np.array([1, 1]))
    with pytest.raises(DataError, match="mask"):
        products.select(np.ones(3, dtype=bool))


@pytest.mark.parametrize(
    "keys",
    [
        pd.RangeIndex(6),
        pd.Index(["ä", "b", "c", "d", "e", "f"]),
        pd.Index([1, "1", 2.5, "x", 4, 5], dtype=object),
        pd.Index([0.1, 0.2, 1e300, -1.0, 4.0, 5.0]),
        pd.date_range("2020-01-01 12:30:00.123456789", periods=6, freq="D"),
        pd.CategoricalIndex(list("abcdef")),
    ],
    ids=["integers", "texts", "mixed", "floats", "dates", "categories"],
)
def test_saved_and_loaded_is_the_same(tmp_path, keys):
    X, y, codes = small()

    def blocks():
        yield codes, X, y

    opened, moments = collect(blocks, ("x0", "x1", "x2", "y"), keys)
    products = collect_products(blocks, opened, moments)
    path = tmp_path / "units.npz"
    products.save(path)
    back = UnitProducts.load(path)
    for name in ("shift", "scale", "sizes", "means", "frame", "packed"):
        np.testing.assert_array_equal(getattr(back, name), getattr(products, name))
    assert (back.design, back.constant, back.outcome) == (
        products.design,
        products.constant,
        products.outcome,
    )
    assert list(back.keys) == list(products.keys)


def test_a_changed_or_foreign_file_is_refused(tmp_path):
    X, y, codes = small()
    path = tmp_path / "units.npz"
    UnitProducts.from_arrays(X, y, codes).save(path)
    with np.load(path, allow_pickle=False) as file:
        arrays = dict(file)
    changed = {**arrays, "means": arrays["means"] + 1e-12}
    np.savez(path, **changed)
    with pytest.raises(DataError, match="checksum"):
        UnitProducts.load(path)
    meta = {**json.loads(str(arrays["meta"])), "version": 2}
    np.savez(path, **{**arrays, "meta": np.array(json.dumps(meta))})
    with pytest.raises(DataError, match="version 1"):
        UnitProducts.load(path)
    np.savez(path, a=np.ones(3))
    with pytest.raises(DataError, match="not a file of unit products"):
        UnitProducts.load(path)
    path.write_bytes(b"no archive")
    with pytest.raises(DataError, match="not a file of unit products"):
        UnitProducts.load(path)


def test_arrays_are_read_only_and_wrong_shapes_are_refused():
    X, y, codes = small()
    products = UnitProducts.from_arrays(X, y, codes)
    with pytest.raises(ValueError, match="read-only"):
        products.packed[0, 0] = 1.0
    with pytest.raises(DataError, match="same rows"):
        UnitProducts.from_arrays(X, y[1:], codes)
    with pytest.raises(DataError, match="non-negative integers"):
        UnitProducts.from_arrays(X, y, codes - 1)
