"""Moments against rational arithmetic, merged in any partition, kept on disk, and what they say about columns."""

from __future__ import annotations

import dataclasses
import json
from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from panels import BY_NAME, PANELS

from mixbridge.errors import DataError, IdentificationError
from mixbridge.moments import Moments, OpenMoments, close, collect, column_table, gather, within_factor
from mixbridge.moments.closed import LOSS_LIMIT
from mixbridge.ratio import curve_of

EPS = float(np.finfo(float).eps)


# -- adversarial panels ----------------------------------------------------------------------------


def spread_sizes(rng):
    return np.concatenate([rng.permutation(np.array([1, 1, 1, 2, 2, 3, 5, 8, 13, 40])), [700]])


def ordinary(rng, units):
    n, N = len(units), units.max() + 1
    x = rng.normal(size=n) + rng.normal(size=N)[units]
    w = rng.normal(size=N)[units]
    return np.column_stack([np.ones(n), x, w]), x + w + rng.normal(size=N)[units] + rng.normal(size=n)


def offset(size):
    def make(rng, units):
        X, y = ordinary(rng, units)
        return X + np.array([0.0, size, -size]), y + size

    return make


def outlier_first(size):
    """The first row of each unit, which all other rows are measured from, lies far away."""

    def make(rng, units):
        X, y = ordinary(rng, units)
        first = np.unique(units, return_index=True)[1]
        X[first, 1] += size * rng.choice([-1.0, 1.0], size=len(first))
        y[first] += size
        return X, y

    return make


def scales(rng, units):
    X, y = ordinary(rng, units)
    return X * np.array([1.0, 1e-8, 1e8]), y * 1e12


MAKERS = {
    "ordinary": ordinary,
    "offset 1e9": offset(1e9),
    "offset 1e12": offset(1e12),
    "outlier 1e6": outlier_first(1e6),
    "outlier 1e9": outlier_first(1e9),
    "scales": scales,
}


def adversarial(kind: str, seed: int = 0, sizes=None):
    rng = np.random.default_rng(seed)
    sizes = spread_sizes(rng) if sizes is None else np.asarray(sizes)
    units = np.repeat(np.arange(len(sizes)), sizes)
    X, y = MAKERS[kind](rng, units)
    order = rng.permutation(len(units)) if seed % 2 else np.arange(len(units))
    return X[order], y[order], units[order]


def blocks_of(X, y, codes, length=97):
    return lambda: (
        (codes[s : s + length], X[s : s + length], y[s : s + length]) for s in range(0, len(y), length)
    )


def open_moments(X, y, units, keys=None) -> OpenMoments:
    codes, labels = pd.factorize(units)
    return gather(blocks_of(X, y, codes)(), ("c", "x", "w", "y"), pd.Index(labels if keys is None else keys))


def exact_products(X, y, units, columns=(1, 2)):
    """W and, per size, counts and the unit means of z, as fractions: integers times a common power of two."""
    z = np.column_stack([X[:, list(columns)], y])
    grain = [min(Fraction(float(v)).denominator for v in col) for col in z.T]
    grain = [max(Fraction(float(v)).denominator for v in col) for col in z.T]
    whole = [[int(Fraction(float(v)) * d) for v in col] for col, d in zip(z.T, grain, strict=True)]
    k = z.shape[1]
    rows_of: dict[int, list[int]] = {}
    for row, unit in enumerate(units.tolist()):
        rows_of.setdefault(unit, []).append(row)
    within = [[Fraction(0)] * k for _ in range(k)]
    means: dict[int, list[list[Fraction]]] = {}
    for rows in rows_of.values():
        T = len(rows)
        own = [[column[t] for t in rows] for column in whole]
        sums = [sum(column) for column in own]
        for i in range(k):
            for j in range(k):
                total = sum(a * b for a, b in zip(own[i], own[j], strict=True))
                within[i][j] += Fraction(T * total - sums[i] * sums[j], T * grain[i] * grain[j])
        means.setdefault(T, []).append([Fraction(s, T * d) for s, d in zip(sums, grain, strict=True)])
    return within, means


def check_against_exact(moments: Moments, X, y, units, loss: float) -> None:
    """Compare W and every B_T with exact ones.

    W: sums of n terms, each product amplified by `loss` (at most the largest size; one where rows were
    centred first): relative to sqrt(W_ii W_jj) the worst case is ``n u loss`` with ``u = eps / 2``, and 4 k
    eps for the factor. B_T: a unit mean is the first row plus a mean difference, so it is off by at most
    ``(T + 4) u`` times the range of z (not of its distance from zero: offsets cancel before anything is
    rounded, see `gather`).
    """
    n, k = len(y), len(moments.columns)
    W, means = exact_products(X, y, units)
    F = moments.within * moments.scale
    got = F.T @ F
    length = [float(W[i][i]) ** 0.5 for i in range(k)]
    allowed = n * EPS / 2 * loss + 4 * k * EPS
    for i in range(k):
        for j in range(k):
            if W[i][i] == 0 or W[j][j] == 0:
                assert got[i, j] == 0.0  # a column constant within every unit: exactly nothing
            else:
                assert abs(Fraction(float(got[i, j])) - W[i][j]) <= allowed * length[i] * length[j]
    assert moments.sizes.tolist() == sorted(means)
    assert moments.counts.tolist() == [len(means[T]) for T in sorted(means)]
    z = np.column_stack([X[:, 1:], y])
    reach = (z.max(axis=0) - z.min(axis=0)) / moments.scale
    shift = [Fraction(float(s)) for s in moments.shift]
    scale = [Fraction(float(s)) for s in moments.scale]
    for T, factor in zip(moments.sizes.tolist(), moments.between, strict=True):
        rows = [
            [Fraction(1)] + [(m - s) / c for m, s, c in zip(mean, shift, scale, strict=True)]
            for mean in means[T]
        ]
        exact = np.array(
            [[float(sum(r[i] * r[j] for r in rows)) for j in range(k + 1)] for i in range(k + 1)]
        )
        size = np.sqrt(np.diag(exact))
        off = np.concatenate([[0.0], (T + 4) * EPS / 2 * reach]) * np.sqrt(len(rows))
        limit = np.outer(size, off) + np.outer(off, size) + np.outer(off, off)
        limit += (len(rows) + 4 * k) * EPS * np.outer(size, size)
        assert (np.abs(factor.T @ factor - exact) <= limit).all()


@pytest.mark.parametrize("seed", [0, 1])
@pytest.mark.parametrize("kind", MAKERS)
def test_one_pass_against_rational_arithmetic(kind, seed):
    X, y, units = adversarial(kind, seed)
    opened, moments = collect(blocks_of(X, y, units), ("c", "x", "w", "y"), pd.RangeIndex(units.max() + 1))
    loss = 1.0 if opened.factor is not None else float(opened.loss.max())
    assert opened.loss.max() <= np.bincount(units).max() * (1 + 1e-9)  # the bound stated in `gather`
    check_against_exact(moments, X, y, units, loss)
    assert moments.constant == "c"
    assert moments.rows == len(y)
    assert moments.units == 11


def test_two_thousand_rows_in_one_unit():
    X, y, units = adversarial("outlier 1e9", 2, sizes=[1, 2, 3, 2000, 7])
    moments = Moments.from_arrays(X, y, units, ("c", "x", "w"))
    check_against_exact(moments, X, y, units, 2000.0)


def test_second_pass_where_the_first_row_is_an_outlier_of_a_long_unit():
    """Amplification grows with the size; beyond the limit the products are taken again from centred rows."""
    rng = np.random.default_rng(3)
    units = np.repeat([0, 1, 2], [30_000, 4, 5])
    X, y = ordinary(rng, units)
    X[0, 1], y[0] = 1e3, -1e3
    opened, moments = collect(blocks_of(X, y, units, 8192), ("c", "x", "w", "y"), pd.RangeIndex(3))
    # d = z - z_first has mean square about 1e6 against a variance of about 1e6/30000 + 1
    assert opened.loss.max() > LOSS_LIMIT
    assert opened.factor is not None
    assert "QR" in moments.note
    check_against_exact(moments, X, y, units, 1.0)


def test_second_pass_where_columns_are_ill_conditioned_within():
    for name in ("ill_within", "ill_within_balanced"):
        panel = BY_NAME[name]
        codes = np.unique(panel.units, return_inverse=True)[1]
        moments = Moments.from_arrays(panel.X, panel.y, codes, panel.names)
        assert "QR" in moments.note
        # products alone would leave 1 - correlation^2 = 1e-10 to an error of 1e-16 * n: six digits. QR
        # leaves eleven.
        z = np.column_stack([panel.X, panel.y]).astype(np.longdouble)
        means = np.array([z[codes == i].mean(axis=0) for i in range(codes.max() + 1)])
        exact = (z - means[codes])[:, 1:] / moments.scale
        for factor in (moments.within,):
            last = np.linalg.svd(factor[:, :2] / np.sqrt((factor[:, :2] ** 2).sum(axis=0)), compute_uv=False)[
                -1
            ]
            a, b = exact[:, 0], exact[:, 1]
            r = (a @ b) / np.sqrt((a @ a) * (b @ b))
            assert last == pytest.approx(float(np.sqrt(1 - abs(r))), rel=1e-9)
    plain = BY_NAME["mild_both"]
    assert "QR" not in Moments.from_arrays(plain.X, plain.y, plain.units, plain.names).note


def test_within_factor_keeps_constant_columns_at_zero():
    X, y, units = adversarial("offset 1e9", 1)
    opened = gather(blocks_of(X, y, units)(), ("c", "x", "w", "y"), pd.RangeIndex(11))
    factor = within_factor(blocks_of(X, y, units)(), opened)
    assert (factor[:, [0, 2]] == 0.0).all()
    diagonal = np.sqrt(np.diag(opened.within))
    np.testing.assert_allclose(
        factor.T @ factor, opened.within, rtol=0, atol=len(y) * EPS * opened.loss.max() * diagonal.max() ** 2
    )


# -- merging ---------------------------------------------------------------------------------------


def same_moments(one: Moments, other: Moments, steps: int, n: int, reach: np.ndarray, loss: float) -> None:
    """Equal up to the rounding of both sides; a merge adds one rounding per entry for each of its steps."""
    assert one.design == other.design
    assert one.constant == other.constant
    np.testing.assert_array_equal(one.sizes, other.sizes)
    np.testing.assert_array_equal(one.counts, other.counts)
    F, G = one.within * one.scale, other.within * other.scale
    length = np.sqrt((F**2).sum(axis=0))
    allowed = (n * loss + 8 * steps + 16) * EPS * np.outer(length, length)
    # the means of a split unit are moved to one origin: each merge rounds the gap between them at the size
    # of the range
    gap = 4 * steps * EPS * reach * np.sqrt(n)
    allowed += np.outer(length, gap) + np.outer(gap, length) + np.outer(gap, gap)
    assert (np.abs(F.T @ F - G.T @ G) <= allowed).all()
    ratio = other.scale / one.scale
    move = np.diag(np.concatenate([[1.0], ratio]))
    move[0, 1:] = (other.shift - one.shift) / one.scale
    for T, count, a, b in zip(one.sizes, one.counts, one.between, other.between @ move, strict=True):
        size = np.sqrt((a**2).sum(axis=0))
        off = np.concatenate([[0.0], (2 * T + 8 * steps + 8) * EPS * reach / one.scale]) * np.sqrt(count)
        limit = (
            np.outer(size, off)
            + np.outer(off, size)
            + np.outer(off, off)
            + (2 * count + 32) * EPS * np.outer(size, size)
        )
        assert (np.abs(a.T @ a - b.T @ b) <= limit).all()


@settings(max_examples=40)
@given(
    kind=st.sampled_from(sorted(MAKERS)),
    seed=st.integers(0, 50),
    parts=st.integers(2, 6),
    cut=st.sampled_from(["rows", "units", "blocks"]),
    shape=st.sampled_from(["left", "right", "tree"]),
)
def test_any_partition_equals_one_pass(kind, seed, parts, cut, shape):
    X, y, units = adversarial(kind, seed)
    rng = np.random.default_rng(seed + 1000)
    if cut == "units":
        part = rng.integers(parts, size=units.max() + 1)[units]
    elif cut == "rows":  # every unit may be split
        part = rng.integers(parts, size=len(y))
    else:
        part = np.arange(len(y)) * parts // len(y)
    pieces = [
        open_moments(X[part == i], y[part == i], units[part == i]) for i in range(parts) if (part == i).any()
    ]
    merged = pieces.copy()
    while len(merged) > 1:
        if shape == "left":
            merged = [merged[0] + merged[1], *merged[2:]]
        elif shape == "right":
            merged = [*merged[:-2], merged[-2] + merged[-1]]
        else:
            merged = [a + b for a, b in zip(merged[::2], merged[1::2], strict=False)] + merged[
                len(merged) // 2 * 2 :
            ]
    whole = open_moments(X, y, units)
    assert dict(zip(merged[0].keys, merged[0].counts, strict=True)) == dict(
        zip(whole.keys, whole.counts, strict=True)
    )
    z = np.column_stack([X[:, 1:], y])
    reach = z.max(axis=0) - z.min(axis=0)
    loss = max(piece.loss.max() for piece in [whole, *pieces])
    same_moments(close(whole), close(merged[0]), len(pieces), len(y), reach, loss)
    assert column_table(close(merged[0])).set_index("column").loc["w", "level"] == "between"


def test_merging_commutes_and_associates():
    X, y, units = adversarial("offset 1e9", 5)
    third = np.arange(len(y)) % 3
    a, b, c = (open_moments(X[third == i], y[third == i], units[third == i]) for i in range(3))
    reach = np.ptp(np.column_stack([X[:, 1:], y]), axis=0)
    loss = max(part.loss.max() for part in (a, b, c))
    same_moments(close(a + b), close(b + a), 1, len(y), reach, loss)
    same_moments(close((a + b) + c), close(a + (b + c)), 2, len(y), reach, loss)


def test_merged_factors_take_the_extra_row_of_a_split_unit():
    """With factors on both sides the within factor of the merge is exact for columns equal within to 1e-5."""
    panel = BY_NAME["ill_within"]
    X, y = panel.X, panel.y
    codes = np.unique(panel.units, return_inverse=True)[1]
    names = (*panel.names, "y")
    keys = pd.RangeIndex(codes.max() + 1)
    half = np.arange(len(y)) % 2 == 0
    parts = [collect(blocks_of(X[s], y[s], codes[s]), names, keys)[0] for s in (half, ~half)]
    assert all(part.factor is not None for part in parts)
    merged = close(parts[0] + parts[1])
    whole = Moments.from_arrays(X, y, codes, panel.names)

    def last(moments: Moments) -> float:
        columns = (moments.within * moments.scale)[:, :2]
        return float(np.linalg.svd(columns / np.sqrt((columns**2).sum(axis=0)), compute_uv=False)[-1])

    assert last(merged) == pytest.approx(
        last(whole), rel=1e-9
    )  # eps times the condition, 1e5, and 40 rows: 4e-10


@pytest.mark.parametrize("kind", ["ordinary", "offset 1e9", "scales"])
def test_closed_moments_of_disjoint_units_add(kind):
    X, y, units = adversarial(kind, 7)
    left = units < 5
    one = Moments.from_arrays(X, y, units, ("c", "x", "w"))
    parts = [
        Moments.from_arrays(X[s], y[s], np.unique(units[s], return_inverse=True)[1], ("c", "x", "w"))
        for s in (left, ~left)
    ]
    z = np.column_stack([X[:, 1:], y])
    reach = np.ptp(z, axis=0)
    # closed parts have their own origins: moving one costs a rounding of its distance, at most the range
    same_moments(one, parts[0] + parts[1], 2, len(y), reach, float(np.bincount(units).max()))
    same_moments(parts[0] + parts[1], parts[1] + parts[0], 2, len(y), reach, float(np.bincount(units).max()))


def test_merging_refuses_other_columns():
    X, y, units = adversarial("ordinary", 0)
    codes = pd.RangeIndex(units.max() + 1)
    one = gather(blocks_of(X, y, units)(), ("c", "x", "w", "y"), codes)
    other = gather(blocks_of(X, y, units)(), ("c", "x", "v", "y"), codes)
    with pytest.raises(DataError, match="different columns"):
        _ = one + other
    with pytest.raises(DataError, match="different designs"):
        _ = close(one) + close(other)


def test_units_without_a_row_are_left_out():
    X, y, units = adversarial("ordinary", 0)
    keep = units != 3
    opened = gather(blocks_of(X[keep], y[keep], units[keep])(), ("c", "x", "w", "y"), pd.RangeIndex(20))
    assert sorted(opened.keys) == [u for u in range(11) if u != 3]
    assert opened.rows == int(keep.sum())
    whole = Moments.from_arrays(X[keep], y[keep], units[keep])
    assert whole.units == 10


# -- records ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("panel", PANELS[::6], ids=lambda panel: panel.name)
def test_records_are_exact(panel, tmp_path):
    codes = np.unique(panel.units, return_inverse=True)[1]
    moments = Moments.from_arrays(panel.X, panel.y, codes, panel.names)
    moments.save(tmp_path / "moments.json")
    again = Moments.load(tmp_path / "moments.json")
    for field in dataclasses.fields(Moments):
        one, other = getattr(moments, field.name), getattr(again, field.name)
        if isinstance(one, np.ndarray):
            assert one.dtype == other.dtype
            assert one.tobytes() == other.tobytes(), field.name
        else:
            assert one == other
    assert Moments.from_record(json.loads(json.dumps(moments.to_record()))).to_record() == moments.to_record()


def test_a_changed_record_is_refused():
    X, y, units = adversarial("ordinary", 0)
    record = Moments.from_arrays(X, y, units).to_record()
    assert Moments.from_record(record).rows == len(y)
    flipped = json.loads(json.dumps(record))
    flipped["within"][0][1] = np.nextafter(flipped["within"][0][1], np.inf)  # one unit in the last place
    with pytest.raises(DataError, match="checksum"):
        Moments.from_record(flipped)
    for key, value in (
        ("outcome", "z"),
        ("note", ""),
        ("counts", record["counts"][::-1]),
        ("checksum", "0" * 64),
    ):
        with pytest.raises(DataError, match="checksum"):
            Moments.from_record({**record, key: value})
    missing = {key: value for key, value in record.items() if key != "checksum"}
    with pytest.raises(DataError, match="checksum"):
        Moments.from_record(missing)
    for key, value in (("format", "something"), ("version", 2)):
        with pytest.raises(DataError, match="not a record"):
            Moments.from_record({**record, key: value})


def test_moments_cannot_be_changed():
    X, y, units = adversarial("ordinary", 0)
    for moments in (
        Moments.from_arrays(X, y, units),
        Moments.from_record(Moments.from_arrays(X, y, units).to_record()),
        Moments.from_arrays(X, y, units).without_one_row_units(),
        Moments.from_arrays(X, y, units) + Moments.from_arrays(X, y + 1.0, units),
    ):
        for field in dataclasses.fields(Moments):
            value = getattr(moments, field.name)
            if isinstance(value, np.ndarray):
                with pytest.raises(ValueError, match="read-only"):
                    value[...] = 0
            with pytest.raises(dataclasses.FrozenInstanceError):
                setattr(moments, field.name, value)


def test_the_callers_arrays_are_not_touched():
    X, y, units = adversarial("offset 1e9", 0)
    before = X.copy(), y.copy(), units.copy()
    Moments.from_arrays(X, y, units)
    for array, copy in zip((X, y, units), before, strict=True):
        np.testing.assert_array_equal(array, copy)
        assert array.flags.writeable


def test_without_one_row_units():
    X, y, units = adversarial("ordinary", 0)
    count = np.bincount(units)[units]
    one = Moments.from_arrays(X, y, units).without_one_row_units()
    other = Moments.from_arrays(
        X[count > 1], y[count > 1], np.unique(units[count > 1], return_inverse=True)[1]
    )
    same_moments(one, other, 1, len(y), np.ptp(np.column_stack([X[:, 1:], y]), axis=0), 700.0)
    with pytest.raises(DataError, match="every unit has one row"):
        Moments.from_arrays(X, y, np.arange(len(y))).without_one_row_units()


# -- what columns are ------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", MAKERS)
def test_classes_of_columns(kind):
    X, y, units = adversarial(kind, 0)
    moments = Moments.from_arrays(X, y, units, ("c", "x", "w"))
    table = column_table(moments).set_index("column")
    assert table.loc["c", "level"] == "constant"
    assert table.loc["x", "level"] == "both"
    assert table.loc["w", "level"] == "between"
    assert table.loc["w", "within_share"] == 0.0
    assert (moments.within[:, moments.columns.index("w")] == 0.0).all()  # exactly, whatever the offset
    assert table.loc["y", "level"] == "both"


def test_column_table_against_plain_formulas():
    X, y, units = adversarial("ordinary", 1)
    table = column_table(Moments.from_arrays(X, y, units, ("c", "x", "w"))).set_index("column")
    n, N = len(y), 11
    for name, column in (("x", X[:, 1]), ("y", y)):
        means = (np.bincount(units, column) / np.bincount(units))[units]
        within, between = ((column - means) ** 2).sum(), ((means - column.mean()) ** 2).sum()
        got = table.loc[name]
        # sums of n = 776 ordinary numbers, worst case n eps times the amplification by the largest unit
        assert got["within_share"] == pytest.approx(within / (within + between), rel=1e-10)
        assert got["mean"] == pytest.approx(column.mean(), abs=1e-12)
        assert got["sd_within"] == pytest.approx(np.sqrt(within / (n - N)), rel=1e-10)
        assert got["sd_between"] == pytest.approx(np.sqrt(between / (N - 1)), rel=1e-10)


def centred_columns(shift: float):
    rng = np.random.default_rng(8)
    units = np.repeat(np.arange(8), (2, 3, 3, 4, 5, 6, 7, 8))
    x = rng.normal(size=38) + rng.normal(size=8)[units] + shift
    means = np.bincount(units, x) / np.bincount(units)
    X = np.column_stack([np.ones(38), x - means[units], means[units]])
    return X, X[:, 1] + 0.2 * X[:, 2] + rng.normal(size=38), units


@pytest.mark.parametrize("shift", [0.0, 10.0, 1000.0])
def test_a_column_centred_in_double_precision_varies_within_only(shift):
    """Centring on unit means leaves rounding of the means behind: it is not between variation."""
    X, y, units = centred_columns(shift)
    moments = Moments.from_arrays(X, y, units, ("c", "inside", "means"))
    table = column_table(moments).set_index("column")
    assert table.loc["inside", "level"] == "within"
    assert table.loc["means", "level"] == "between"
    curve = curve_of(moments)
    assert (curve.rank_within, curve.rank_between) == (1, 2)


def test_a_centred_column_with_a_large_first_row():
    rng = np.random.default_rng(9)
    rows = []
    for size in (1, 2, 1, 3, 1, 2, 3, 1):
        a, b = rng.normal(size=2)
        rows += [size * 1e9, -size * 1e9, a, b, -a, -b]  # means exactly zero, a - 1e9 is not exact
    x = np.array(rows)
    units = np.repeat(np.arange(8), 6)
    X = np.column_stack([np.ones(48), x, rng.normal(size=8)[units]])
    curve = curve_of(Moments.from_arrays(X, rng.normal(size=48), units))
    assert (curve.rank_within, curve.rank_between) == (1, 2)


@pytest.mark.parametrize("level", [1.0, -3.5, 1e9, 1e-9])
def test_constants(level):
    X, y, units = adversarial("ordinary", 0)
    X[:, 0] = level
    moments = Moments.from_arrays(X, y, units, ("c", "x", "w"))
    ones = (
        level == 1.0
    )  # a constant of another value is a column like others: its coefficient has its own unit
    assert moments.constant == ("c" if ones else None)
    assert moments.columns == (("x", "w", "y") if ones else ("c", "x", "w", "y"))


def test_no_constant_where_there_is_none():
    X, y, units = adversarial("ordinary", 0)
    assert Moments.from_arrays(X[:, 1:], y, units).constant is None
    X[0, 0] = np.nextafter(1.0, 2.0)
    nearly = Moments.from_arrays(X, y, units)
    assert nearly.constant is None  # not equal in every row: not the constant


def test_outcome_that_is_constant():
    X, y, units = adversarial("ordinary", 0)
    with pytest.raises(DataError, match="same value in every row"):
        Moments.from_arrays(X, np.full_like(y, 3.25), units)


@pytest.mark.parametrize("far", [0.0, 1e6, 1e9])
@pytest.mark.parametrize(
    ("combine", "text"),
    [
        (lambda a, b: 2.0 * a - b, "x3 = 2·x1 - x2"),
        (lambda a, b: a + b, "x3 = x1 + x2"),
        (lambda a, b: -a / 2, "x3 = -1/2·x1"),
        (lambda a, b: b, "x3 = x2"),
    ],
)
def test_collinearity_names_the_dependency(combine, text, far):
    rng = np.random.default_rng(10)
    units = np.repeat(np.arange(9), 4)
    a, b = (np.round(rng.normal(size=36) * 64) / 64 + far for _ in range(2))
    X = np.column_stack([np.ones(36), a, b, combine(a, b)])
    y = rng.normal(size=36)
    with pytest.raises(IdentificationError, match="exactly collinear") as caught:
        curve_of(Moments.from_arrays(X, y, units, ("Intercept", "x1", "x2", "x3")))
    assert text in str(caught.value)


def test_collinearity_with_the_constant():
    rng = np.random.default_rng(11)
    units = np.repeat(np.arange(9), 4)
    male = (rng.random(36) < 0.5).astype(float)
    X = np.column_stack([np.ones(36), male, 1.0 - male])
    with pytest.raises(IdentificationError) as caught:
        curve_of(Moments.from_arrays(X, rng.normal(size=36), units, ("Intercept", "male", "female")))
    assert "female = Intercept - male" in str(caught.value)


def test_near_collinearity_is_not_refused():
    rng = np.random.default_rng(12)
    units = np.repeat(np.arange(9), 4)
    x = rng.normal(size=36)
    X = np.column_stack([np.ones(36), x, x + 1e-8 * rng.normal(size=36)])
    curve = curve_of(Moments.from_arrays(X, rng.normal(size=36), units))
    assert curve.rank == 3
    assert 1e7 < curve.condition < 1e10


# -- what is refused -------------------------------------------------------------------------------


@pytest.mark.parametrize("bad", [np.inf, -np.inf, np.nan, 1e300])
def test_values_that_cannot_be_squared_are_named(bad):
    X, y, units = adversarial("ordinary", 0)
    X[4, 1] = bad
    with np.errstate(all="ignore"), pytest.raises(DataError, match="'x'"):
        Moments.from_arrays(X, y, units, ("c", "x", "w"))


def test_arrays_that_do_not_fit_together():
    X, y, units = adversarial("ordinary", 0)
    with pytest.raises(DataError, match="same rows"):
        Moments.from_arrays(X, y[:-1], units)
    with pytest.raises(DataError, match="same rows"):
        Moments.from_arrays(X[:, 1], y, units)
    for codes in (units.astype(float), units - 1, units[:0]):
        with pytest.raises(DataError):
            Moments.from_arrays(X[: len(codes)], y[: len(codes)], codes)
