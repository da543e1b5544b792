"""Moments of several sites: their coding, and what is left of them without small size classes."""

import numpy as np
import pandas as pd
import pytest
from moment_records import fits_of, records_of, rows_of, same_fits

import mixbridge
from mixbridge.moments import Moments
from mixbridge.moments.products_closing import moments_of
from mixbridge.moments.suppression import suppress


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


def test_nothing_of_a_suppressed_unit_is_left():
    """Shift, scale and magnitude too: with the grand mean of all units the others could be subtracted."""
    x, y, codes = rows_of(3)
    counts = np.bincount(codes)
    rare = np.isin(counts[codes], [size for size in range(1, 7) if (counts == size).sum() < 7])
    far = x + 1e6 * rare[:, None] * np.array([0.0, 1.0, 1.0])
    one, two = (suppress(records_of(*rows, codes)[2], 7).moments for rows in ((x, y), (far, y - 1e7 * rare)))
    assert one.scale.tolist() == two.scale.tolist()
    for name in ("shift", "magnitude"):
        np.testing.assert_allclose(getattr(one, name), getattr(two, name), rtol=1e-9, atol=1e-9)
    # unit products keep a rounding of the scale of all units, here 1e7: 1e-16 of it, times a few hundred
    np.testing.assert_allclose(one.within.T @ one.within, two.within.T @ two.within, rtol=1e-9, atol=1e-6)
    between = [m.between.transpose(0, 2, 1) @ m.between for m in (one, two)]
    np.testing.assert_allclose(*between, rtol=1e-9, atol=1e-6)


def test_one_row_units_are_left_out_of_closed_and_open_moments():
    rng = np.random.default_rng(5)
    codes = np.repeat(np.arange(40), np.r_[[1, 1, 1], np.full(20, 2), np.full(17, 3)])
    n = codes.size
    x = np.column_stack([np.ones(n), rng.normal(size=n), rng.normal(size=40)[codes]])
    y = x[:, 1] + rng.normal(size=40)[codes] + rng.normal(size=n)
    x[:3, 1], y[:3] = 1e3, -1e3
    opened, moments, products = records_of(x, y, codes)
    _, expected, _ = records_of(x[3:], y[3:], codes[3:] - 3)
    for source in (opened, moments, products):
        found = suppress(source, 5)
        assert found.left_out == ((1, 3, 3),)
        same_fits(fits_of(expected), fits_of(found.moments))
        np.testing.assert_allclose(found.moments.shift, expected.shift, rtol=1e-9, atol=1e-12)
        np.testing.assert_allclose(found.moments.magnitude, expected.magnitude, rtol=1e-9)
        assert not found.moments.shift.flags.writeable


def test_units_of_several_rows_cannot_be_left_out_without_their_products():
    opened, moments, products = records_of(*rows_of(3))
    for source in (opened, moments):
        with pytest.raises(mixbridge.DataError, match="W holds the rows of all units together"):
            suppress(source, 7)
        assert suppress(source, 2).left_out == ()
    assert suppress(moments, 2).moments is moments
    assert suppress(products, 2).moments.rows == products.rows


def test_a_column_that_varies_in_suppressed_units_only():
    rng = np.random.default_rng(6)
    codes = np.repeat(np.arange(21), np.r_[7, np.full(20, 3)])
    n = codes.size
    inside = np.where(codes == 0, rng.normal(size=n), rng.normal(size=21)[codes])
    x = np.column_stack([np.ones(n), rng.normal(size=n), inside])
    y = x[:, 1] + rng.normal(size=21)[codes] + rng.normal(size=n)
    products = records_of(x, y, codes)[2]
    found = suppress(products, 5).moments
    assert found.note.startswith("ill-conditioned")
    assert not found.within[:, 1].any()
    _, expected, _ = records_of(x[7:], y[7:], codes[7:] - 1)
    same_fits(fits_of(expected), fits_of(found))


def test_moments_of_some_units_go_together_with_their_products():
    _, moments, products = records_of(*rows_of(4))
    found = moments_of(products)
    assert found.shift.tobytes() == moments.shift.tobytes()
    assert found.scale.tobytes() == moments.scale.tobytes()
    np.testing.assert_allclose(found.magnitude, moments.magnitude, rtol=1e-12)
    some = products.select(products.sizes > 2)
    study = mixbridge.from_moments(moments_of(some), products=some)
    assert np.isfinite(study.fit("reml", covariance="CR1").standard_errors).all()


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
    closed = mixbridge.from_moments(study.moments, unit="apiary")
    with pytest.raises(mixbridge.DataError, match="W holds the rows of all units together"):
        mixbridge.shared_moments(closed, 5)
    carried = mixbridge.from_moments(study.moments, unit="apiary", products=study.products)
    again = mixbridge.shared_moments(carried, 5)
    assert isinstance(again.study.moments, Moments)
    pd.testing.assert_frame_equal(again.left_out, shared.left_out)
    pd.testing.assert_frame_equal(again.effect, shared.effect)
