"""Moments as files, merged over sites, and without small size classes."""

import json
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import mixbridge
from mixbridge.moments import OpenMoments, close, collect
from mixbridge.moments.products import UnitProducts, collect_products
from mixbridge.moments.suppression import moments_of, suppress
from mixbridge.ratio import curve_of
from mixbridge.routes import LEDGER_ROUTES, fit_route

CURVE = [key for key in LEDGER_ROUTES if key != "first_difference"]


def rows_of(seed=1, units=40, offset=0.0):
    rng = np.random.default_rng(seed)
    codes = np.repeat(np.arange(units), rng.integers(1, 7, units))
    n = codes.size
    between = rng.normal(size=units)[codes]
    x = np.column_stack([np.ones(n), offset + rng.normal(size=n) + between, rng.normal(size=units)[codes]])
    y = 1 + x[:, 1] - offset + between + rng.normal(size=n)
    return x, y, codes


def records_of(x, y, codes, keys=None):
    names = ("Intercept", "x", "w", "y")
    index = pd.RangeIndex(int(codes.max()) + 1) if keys is None else keys

    def blocks():
        yield codes, x, y

    opened, moments = collect(blocks, names, index)
    return opened, moments, collect_products(blocks, opened, moments, index)


def fits_of(moments):
    curve = curve_of(moments)
    return {key: fit_route(curve, key, {}, "no order") for key in CURVE}


def same_fits(one, two, rtol=1e-8):
    for key in CURVE:
        a, b = one[key], two[key]
        assert a.status == b.status, key
        np.testing.assert_allclose(a.beta, b.beta, rtol=rtol, atol=1e-9, err_msg=key)
        np.testing.assert_allclose(a.standard_errors, b.standard_errors, rtol=10 * rtol, err_msg=key)


KEYS = {
    "integers": pd.RangeIndex,
    "wide integers": lambda n: pd.Index(np.arange(n, dtype=np.int64) + 2**62),
    "text": lambda n: pd.Index([f"unit <{j}> \u05d0" for j in range(n)]),
    "dates": lambda n: pd.date_range("2001-01-01", periods=n),
}


@pytest.mark.parametrize("kind", list(KEYS))
def test_all_three_come_back_as_they_were(tmp_path, kind):
    x, y, codes = rows_of()
    opened, moments, products = records_of(x, y, codes, KEYS[kind](40))
    for number, (record, cls) in enumerate(
        [(opened, OpenMoments), (moments, mixbridge.Moments), (products, UnitProducts)]
    ):
        path = tmp_path / f"record{number}"
        record.save(path)
        again = cls.load(path)
        for name in record.__slots__:
            a, b = getattr(record, name), getattr(again, name)
            if isinstance(a, np.ndarray):
                np.testing.assert_array_equal(a, b)
            elif isinstance(a, pd.Index):
                assert a.astype(str).equals(b.astype(str))
            else:
                assert a == b, name


def test_open_moments_with_a_factor_come_back(tmp_path):
    opened, _, _ = records_of(*rows_of())
    wide = opened.with_factor(np.linalg.cholesky(opened.within + np.eye(4)).T)
    wide.save(tmp_path / "a")
    np.testing.assert_array_equal(OpenMoments.load(tmp_path / "a").factor, wide.factor)


@pytest.mark.parametrize("cls", [OpenMoments, mixbridge.Moments, UnitProducts])
def test_damaged_changed_foreign_and_missing_files_are_refused(tmp_path, cls):
    opened, moments, products = records_of(*rows_of())
    record = {OpenMoments: opened, mixbridge.Moments: moments, UnitProducts: products}[cls]
    path = tmp_path / "file"
    with pytest.raises(mixbridge.DataError, match="cannot be read"):
        cls.load(path)
    record.save(path)
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(mixbridge.DataError, match="damaged"):
        cls.load(path)
    path.write_text("hello", encoding="utf-8")
    with pytest.raises(mixbridge.DataError, match=r"damaged|not a"):
        cls.load(path)
    other = products if cls is not UnitProducts else opened
    other.save(path)
    with pytest.raises(mixbridge.DataError, match=r"not |damaged"):
        cls.load(path)


def test_one_changed_number_is_found(tmp_path):
    opened, moments, _ = records_of(*rows_of())
    path = tmp_path / "closed.json"
    moments.save(path)
    body = json.loads(path.read_text())
    body["shift"][0] += 1e-9
    path.write_text(json.dumps(body))
    with pytest.raises(mixbridge.DataError, match="checksum"):
        mixbridge.Moments.load(path)
    path = tmp_path / "open"
    opened.save(path)
    data = bytearray(path.read_bytes())
    at = data.find(opened.means.tobytes()[:64])
    data[at + 3] ^= 1
    path.write_bytes(bytes(data))
    with pytest.raises(mixbridge.DataError, match=r"checksum|damaged"):
        OpenMoments.load(path)


def test_it_cannot_be_written_where_there_is_no_folder(tmp_path):
    opened, _, _ = records_of(*rows_of())
    with pytest.raises(mixbridge.DataError, match="cannot be written"):
        opened.save(tmp_path / "nowhere" / "a")


@settings(max_examples=15, deadline=None)
@given(
    st.integers(0, 10**6),
    st.lists(st.sampled_from([6, 12, 20, 28, 34]), min_size=1, max_size=4, unique=True),
    st.sampled_from([0.0, 1e6]),
)
def test_pooled_moments_give_the_fit_on_pooled_rows(seed, cuts, offset):
    """Rounding of the offset data, times the condition, bounds what can be the same."""
    x, y, codes = rows_of(seed, offset=offset)
    _, whole, _ = records_of(x, y, codes)
    edges = [0, *sorted(cuts), 40]
    parts = []
    for low, high in pairwise(edges):
        rows = (codes >= low) & (codes < high)
        opened, _, _ = records_of(x[rows], y[rows], codes[rows] - low, pd.RangeIndex(low, high))
        parts.append(opened)
    pooled = close(parts[0])
    for part in parts[1:]:
        pooled = pooled + close(part)
    open_pooled = parts[0]
    for part in parts[1:]:
        open_pooled = open_pooled + part
    rtol = 1e-8 if offset == 0.0 else 1e-5
    one = fits_of(whole)
    same_fits(one, fits_of(pooled), rtol)
    same_fits(one, fits_of(close(open_pooled)), rtol)


def test_products_of_two_sites_are_those_of_all_rows():
    x, y, codes = rows_of()
    _, _, whole = records_of(x, y, codes)
    left = codes < 17
    _, _, a = records_of(x[left], y[left], codes[left], pd.RangeIndex(17))
    _, _, b = records_of(x[~left], y[~left], codes[~left] - 17, pd.RangeIndex(17, 40))
    pooled = a + b
    assert pooled.keys.tolist() == whole.keys.tolist()
    np.testing.assert_allclose(
        pooled.within_total() * np.outer(pooled.scale, pooled.scale),
        whole.within_total() * np.outer(whole.scale, whole.scale),
        rtol=1e-10,
        atol=1e-9,
    )


def studies(formula, first, second):
    data = mixbridge.demo.apiaries()
    data["zone"] = np.where(data["altitude"] > 500, "high", "low")
    return [mixbridge.crosscheck(formula, data[pick(data)], unit="apiary") for pick in (first, second)]


def test_other_coding_under_the_same_names_is_refused():
    def north(d):
        return d["apiary"] < "A20"

    def south(d):
        return ~north(d)

    a, b = studies("honey ~ center(forage)", north, south)
    assert a.moments.design == b.moments.design
    for one, two in ((a.moments, b.moments), (a.opened, b.opened), (a.products, b.products)):
        with pytest.raises(mixbridge.DataError, match="coded differently"):
            one + two
    a, b = studies("honey ~ I(forage - 40) + C(zone, levels=['low', 'high'])", north, south)
    assert a.moments.coding == b.moments.coding
    pooled = mixbridge.from_moments(a.moments + b.moments, unit="apiary")
    whole = studies(
        "honey ~ I(forage - 40) + C(zone, levels=['low', 'high'])", lambda d: d["honey"] == d["honey"], north
    )[0]
    np.testing.assert_allclose(pooled.fit("reml").beta, whole.fit("reml").beta, rtol=1e-9)


def test_reference_level_that_differs_is_found_though_names_agree():
    data = mixbridge.demo.apiaries()
    data["kind"] = np.where(data["season"] % 2 == 0, "b", "a")
    other = data.assign(kind=data["kind"].replace("a", "0"))
    one = mixbridge.crosscheck("honey ~ C(kind)", data, unit="apiary").moments
    two = mixbridge.crosscheck("honey ~ C(kind)", other, unit="apiary").moments
    assert one.design == two.design
    with pytest.raises(mixbridge.DataError, match="coded differently"):
        one + two


def test_without_small_classes_it_is_as_if_these_units_had_never_been_there():
    x, y, codes = rows_of(3)
    _, _, products = records_of(x, y, codes)
    counts = np.bincount(codes)
    rare = [size for size in range(1, 7) if 0 < (counts == size).sum() < 7]
    found = suppress(products, 7)
    assert [size for size, _, _ in found.left_out] == rare
    keep = ~np.isin(counts[codes], rare)
    _, expected, _ = records_of(x[keep], y[keep], np.unique(codes[keep], return_inverse=True)[1])
    assert found.moments.sizes.tolist() == expected.sizes.tolist()
    same_fits(fits_of(expected), fits_of(found.moments))


def test_moments_of_all_products_are_the_moments():
    _, moments, products = records_of(*rows_of(4))
    same_fits(fits_of(moments), fits_of(moments_of(products)))


def test_shared_moments_show_their_effect():
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", mixbridge.demo.apiaries(), unit="apiary", period="season"
    )
    shared = mixbridge.shared_moments(study, 5)
    assert shared.left_out["units"].tolist() == [3, 1, 2]
    row = shared.effect.set_index(["route", "term"]).loc[("reml", "feeding")]
    assert row["before"] == study.fit("reml").coefficients["feeding"]
    assert row["after"] == shared.study.fit("reml").coefficients["feeding"]
    assert "selects units by size" in shared.note
    for threshold in (1, 2.5, True):
        with pytest.raises(mixbridge.OptionError, match="from 2 on"):
            mixbridge.shared_moments(study, threshold)
    with pytest.raises(mixbridge.DataError, match="nothing would be left"):
        mixbridge.shared_moments(study, 100)
