"""Moments merged: against rational arithmetic, and against one gathering of all rows."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction
from functools import reduce
from operator import add

import numpy as np
import pytest
from allowance import EPS, conditions
from hypothesis import given, settings
from hypothesis import strategies as st
from moment_parts import records, rows_of, same_fits

import mixbridge
from mixbridge.moments import close, merge_closed
from mixbridge.moments.products_closing import moments_of

# -- rational arithmetic ---------------------------------------------------------------------------


def exact(X, y, units):
    """Per unit its size, the means of z and the products of deviations, as fractions."""
    z = [[Fraction(float(value)) for value in row] for row in np.column_stack([X[:, 1:], y])]
    k = len(z[0])
    found = {}
    for unit in np.unique(units).tolist():
        rows = [row for row, owner in zip(z, units.tolist(), strict=True) if owner == unit]
        mean = [sum(column) / len(rows) for column in zip(*rows, strict=True)]
        products = [
            [sum((row[i] - mean[i]) * (row[j] - mean[j]) for row in rows) for j in range(k)] for i in range(k)
        ]
        found[unit] = len(rows), mean, products
    return found


def split_over_every_chunk(offset, chunks=5, seed=0):
    """Units of five and more rows; each chunk holds rows of each unit, in no order."""
    rng = np.random.default_rng(seed)
    sizes = np.array([5, 5, 6, 7, 7, 7, 9])
    units = np.repeat(np.arange(len(sizes)), sizes)
    effect = rng.normal(size=len(sizes))[units]
    x = rng.normal(size=units.size) + effect
    X = np.column_stack([np.ones(units.size), offset + x, rng.normal(size=len(sizes))[units] - offset, x**2])
    y = offset + x + effect + rng.normal(size=units.size)
    chunk = np.concatenate([rng.permutation(np.arange(size) % chunks) for size in sizes])
    order = rng.permutation(len(y))
    return X[order], y[order], units[order], chunk[order]


@pytest.mark.parametrize("offset", [0.0, 1e9])
@pytest.mark.parametrize("shape", ["left", "right"])
def test_merged_parts_against_rational_arithmetic(offset, shape):
    """W and every B_T to the rounding of their sums.

    Within a part W is off by at most ``n u T`` relative to the lengths of its columns (u = eps / 2, see `gather`). A
    merger rounds each mean, and so each gap between two means, at the size of the range of z (offsets cancel before
    anything is rounded): that moves W by twice its length times the rounding of as many gaps as there are rows.
    """
    X, y, units, chunk = split_over_every_chunk(offset)
    parts = [records(X[chunk == j], y[chunk == j], units[chunk == j])[0] for j in range(5)]
    assert all(len(part.keys) == 7 for part in parts)
    if shape == "left":
        merged = reduce(add, parts)
    else:
        merged = reduce(lambda later, part: part + later, reversed(parts[:-1]), parts[-1])
    truth = exact(X, y, units)
    z = np.column_stack([X[:, 1:], y])
    n, k = z.shape
    reach = np.ptp(z, axis=0)
    W = [[sum(products[i][j] for _, _, products in truth.values()) for j in range(k)] for i in range(k)]
    length = np.array([float(W[i][i]) ** 0.5 for i in range(k)])
    gap = len(parts) * EPS * reach * np.sqrt(n)
    allowed = n * EPS / 2 * 9 * np.outer(length, length) + np.outer(length, gap) + np.outer(gap, length)
    for i in range(k):
        for j in range(k):
            found = Fraction(float(merged.within[i + 1, j + 1]))
            if W[i][i] == 0 or W[j][j] == 0:
                assert found == 0
            else:
                assert abs(found - W[i][j]) <= allowed[i, j]
    for key, mean, count in zip(merged.keys, merged.means, merged.counts, strict=True):
        size, true, _ = truth[int(key)]
        assert size == count
        for j in range(k):
            place = Fraction(float(mean[j + 1])) + Fraction(float(merged.shift[j + 1]))
            assert abs(place - true[j]) <= (size + 4 * len(parts)) * EPS * reach[j]
    closed = close(merged)
    shift, scale = ([Fraction(float(value)) for value in values] for values in (closed.shift, closed.scale))
    for size, count, factor in zip(
        closed.sizes.tolist(), closed.counts.tolist(), closed.between, strict=True
    ):
        means = [
            [Fraction(1)] + [(m - s) / c for m, s, c in zip(mean, shift, scale, strict=True)]
            for rows, mean, _ in truth.values()
            if rows == size
        ]
        assert len(means) == count
        B = np.array([[float(sum(m[i] * m[j] for m in means)) for j in range(k + 1)] for i in range(k + 1)])
        own = np.sqrt(np.diag(B))
        off = np.concatenate([[0.0], (size + 4 * len(parts)) * EPS * reach / closed.scale * np.sqrt(count)])
        limit = np.outer(own, off) + np.outer(off, own) + (count + 4 * k) * EPS * np.outer(own, own)
        assert (np.abs(factor.T @ factor - B) <= limit).all()


@pytest.mark.parametrize("offset", [0.0, 1e9])
def test_merged_products_against_rational_arithmetic(offset):
    """Every unit's own products, with the rounding of its gaps as above and of the change of frame."""
    X, y, units, chunk = split_over_every_chunk(offset, seed=1)
    parts = [records(X[chunk == j], y[chunk == j], units[chunk == j])[2] for j in range(5)]
    assert len({part.frame.tobytes() for part in parts}) == 5
    merged = reduce(add, parts)
    truth = exact(X, y, units)
    z = np.column_stack([X[:, 1:], y])
    k = z.shape[1]
    reach = np.ptp(z, axis=0)
    live = np.array([0, 2, 3])
    np.testing.assert_allclose(merged.framed().sum(axis=0), np.diag([1.0, 0.0, 1.0, 1.0]), atol=1e-8)
    inside = np.array([[float(sum(p[i][j] for _, _, p in truth.values())) for j in live] for i in live])
    length = np.sqrt(np.diag(inside))
    condition = np.sqrt(np.linalg.cond(inside / np.outer(length, length)))
    for key, size, mean, products in zip(
        merged.keys, merged.sizes, merged.means, merged.within(), strict=True
    ):
        rows, true, wanted = truth[int(key)]
        assert rows == size
        got = products * np.outer(merged.scale, merged.scale)
        for i in range(k):
            level = Fraction(float(mean[i])) * Fraction(float(merged.scale[i])) + Fraction(
                float(merged.shift[i])
            )
            assert abs(level - true[i]) <= (rows + 4 * len(parts)) * EPS * reach[i]
            for j in range(k):
                allowed = 16 * k * len(parts) * condition * EPS * rows * reach[i] * reach[j]
                assert abs(Fraction(float(got[i, j])) - wanted[i][j]) <= allowed


# -- fits ------------------------------------------------------------------------------------------


panels = st.fixed_dictionaries(
    {
        "seed": st.integers(0, 10**6),
        "offset": st.sampled_from([0.0, 1e6, 1e9]),
        "near": st.sampled_from([1.0, 1e-2, 1e-4]),
    }
)


@settings(max_examples=10, deadline=None)
@given(panels, st.integers(2, 5))
def test_sites_give_the_fit_on_pooled_rows(panel, parts):
    X, y, codes = rows_of(**panel)
    site = np.random.default_rng(panel["seed"]).integers(parts, size=codes.max() + 1)
    site[:parts] = np.arange(parts)
    kept = [site[codes] == j for j in range(parts)]
    kept = [rows for rows in kept if rows.sum() > 1]
    taken = np.logical_or.reduce(kept)
    whole = records(X[taken], y[taken], codes[taken])
    sites = [records(X[rows], y[rows], codes[rows]) for rows in kept]
    opened, closed, products = zip(*sites, strict=True)
    rows = X[taken], y[taken], codes[taken]
    same_fits(*rows, whole[1], merge_closed(closed, units_are_distinct=True))
    same_fits(*rows, whole[1], reduce(add, reversed(closed)))
    same_fits(*rows, whole[1], close(reduce(add, opened)))
    same_fits(*rows, whole[1], moments_of(reduce(add, products)), 64.0)


@settings(max_examples=10, deadline=None)
@given(panels, st.integers(2, 4))
def test_units_split_over_parts_give_the_fit_on_all_rows(panel, parts):
    X, y, codes = rows_of(**panel)
    chunk = np.random.default_rng(panel["seed"]).integers(parts, size=codes.size)
    whole = records(X, y, codes)
    pieces = [records(X[chunk == j], y[chunk == j], codes[chunk == j]) for j in range(parts)]
    opened, _, products = zip(*pieces, strict=True)
    same_fits(X, y, codes, whole[1], close(reduce(add, opened)), 16.0)
    merged = reduce(add, products)
    same_fits(X, y, codes, whole[1], moments_of(merged), 64.0)
    assert dict(zip(merged.keys, merged.sizes, strict=True)) == dict(
        zip(whole[2].keys, whole[2].sizes, strict=True)
    )


@pytest.mark.parametrize("split", [False, True])
def test_robust_covariances_and_effects_from_merged_products(split):
    X, y, codes = rows_of(5)
    rng = np.random.default_rng(5)
    part = rng.integers(3, size=codes.size) if split else np.arange(31)[codes] % 3
    merged = reduce(add, (records(X[part == j], y[part == j], codes[part == j])[2] for j in range(3)))
    whole = records(X, y, codes)
    one = mixbridge.from_moments(whole[1], products=whole[2])
    two = mixbridge.from_moments(moments_of(merged), products=merged)
    c = conditions(X, y, codes)
    for kind in ("CR0", "CR1", "CR2", "CR3"):
        a, b = (np.asarray(s.fit("reml", covariance=kind).covariance) for s in (one, two))
        size = np.sqrt(np.outer(np.diag(a), np.diag(a)))
        assert (np.abs(a - b) <= 64 * len(y) * EPS * c.combined * size).all()


def test_closed_and_products_of_the_same_sites_go_together():
    X, y, codes = rows_of(6)
    sites = [records(X[codes % 3 == j], y[codes % 3 == j], codes[codes % 3 == j]) for j in range(3)]
    pooled, products = (reduce(add, (site[kind] for site in sites)) for kind in (1, 2))
    assert pooled.shift.tobytes() == products.shift.tobytes()
    assert pooled.scale.tobytes() == products.scale.tobytes()
    study = mixbridge.from_moments(pooled, products=products)
    assert np.isfinite(study.fit("reml", covariance="CR2").standard_errors).all()


# -- special shapes --------------------------------------------------------------------------------


def test_a_category_that_one_site_has_alone():
    """Without an intercept the indicator is a column of ones in a site where all units are of that category."""
    rng = np.random.default_rng(7)
    codes = np.repeat(np.arange(24), 3)
    north = codes < 10
    x = rng.normal(size=72)
    X = np.column_stack([x, north, ~north]).astype(float)
    y = x + north + rng.normal(size=24)[codes] + rng.normal(size=72)
    names = ("x", "north", "south")
    whole = records(X, y, codes, names)
    one, two = (records(X[s], y[s], codes[s], names) for s in (north, ~north))
    assert (one[1].constant, two[1].constant, whole[1].constant) == ("north", "south", None)
    pooled = one[1] + two[1]
    assert pooled.constant is None
    same_fits(X, y, codes, whole[1], pooled)
    merged = one[2] + two[2]
    assert merged.constant is None
    same_fits(X, y, codes, whole[1], moments_of(merged))
    half = codes % 2 == 0
    again = [records(X[s], y[s], codes[s], names)[1] for s in (north & half, north & ~half)]
    assert (again[0] + again[1]).constant == "north"


def test_a_constant_named_otherwise_is_taken_where_all_parts_have_it():
    rng = np.random.default_rng(8)
    codes = np.repeat(np.arange(12), 3)
    early = codes < 6
    X = np.column_stack([np.where(early, 1.0, 2.0), np.ones(36), rng.normal(size=36)])
    y = rng.normal(size=12)[codes] + rng.normal(size=36)
    names = ("a", "b", "x")
    parts = [records(X[s], y[s], codes[s], names) for s in (early, ~early)]
    assert [part[1].constant for part in parts] == ["a", "b"]
    whole = records(X, y, codes, names)[1]
    for pooled in (parts[0][1] + parts[1][1], moments_of(parts[0][2] + parts[1][2])):
        assert pooled.constant == whole.constant == "b"
        assert pooled.columns == whole.columns
        same_fits(X, y, codes, whole, pooled)


def test_scales_of_sites_may_be_far_apart():
    """A column that does not vary in one site says nothing of the scale, one that varies little not much."""
    X, y, codes = rows_of(9)
    left = codes < 15
    X = X * np.array([1.0, 1e-9, 1.0, 1.0])
    X[left, 1] = 3e-9
    whole = records(X, y, codes)[1]
    pooled = records(X[left], y[left], codes[left])[1] + records(X[~left], y[~left], codes[~left])[1]
    assert pooled.scale[0] < 1e-8
    same_fits(X, y, codes, whole, pooled)


def test_a_within_factor_from_rows_is_not_given_up():
    """One part is nearly collinear and has its factor, the other has none and needs none."""
    X, y, codes = rows_of(10, near=1e-6)
    left = codes < 15
    X[~left, 3] = X[~left, 1] + np.random.default_rng(1).normal(size=(~left).sum())
    one, two = (records(X[s], y[s], codes[s])[0] for s in (left, ~left))
    assert one.factor is not None
    assert two.factor is None
    for merged in (one + two, two + one):
        np.testing.assert_allclose(merged.factor.T @ merged.factor, merged.within, rtol=1e-12, atol=1e-12)


def test_digits_that_a_part_has_lost_stay_lost():
    X, y, codes = rows_of(11, near=1e-7)
    left = codes < 15
    one = close(replace(records(X[left], y[left], codes[left])[0], factor=None))
    two = records(X[~left], y[~left], codes[~left])[1]
    assert one.note.startswith("ill-conditioned")
    for pooled in (one + two, two + one, (two + one) + records(*rows_of(12))[1]):
        assert pooled.note.startswith("ill-conditioned")
    assert not (two + records(*rows_of(12))[1]).note.startswith("ill-conditioned")


def test_one_pass_over_many_sites_and_the_order_of_sites():
    X, y, codes = rows_of(13, units=60)
    sites = [records(X[codes % 6 == j], y[codes % 6 == j], codes[codes % 6 == j])[1] for j in range(6)]
    pooled = merge_closed(sites, units_are_distinct=True)
    same_fits(X, y, codes, pooled, reduce(add, sites))
    same_fits(X, y, codes, pooled, merge_closed(reversed(sites), units_are_distinct=True))
    assert merge_closed(sites[:1], units_are_distinct=True) is sites[0]
    assert (pooled.rows, pooled.units) == (len(y), 60)
    assert not pooled.between.flags.writeable
