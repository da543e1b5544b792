"""Moments of units that become known as they are read, against those of units known before, and exact arithmetic."""

from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from streams import same_closed, split

import mixbridge
from mixbridge.moments import close
from mixbridge.moments.growing import LEVEL_LOSS, Growing
from mixbridge.moments.opened import gather
from mixbridge.sources.chunk_options import ChunkOptions

COLUMNS = ("one", "a", "b", "y")


def rows(n=1200, units=60, seed=1, between=1.0):
    rng = np.random.default_rng(seed)
    unit = rng.integers(0, units, n)
    values = rng.normal(size=(n, 3)) + between * rng.normal(size=(units, 3))[unit]
    return unit, values


def by_appearance(unit):
    codes, distinct = pd.factorize(unit)
    order = np.argsort(distinct)
    places = np.empty(len(distinct), dtype=np.intp)
    places[order] = np.arange(len(distinct))
    return codes, places, pd.Index(distinct[order])


def taken(unit, values, cuts=(), **options):
    codes, places, keys = by_appearance(unit)
    z = np.column_stack([values, np.ones(len(unit))])
    growing = Growing(4, **options)
    for part in np.split(np.arange(len(unit)), sorted(cuts)):
        growing.add(codes[part], z[part])
    level = growing.anchors is None
    return level, growing.finish(places, keys, COLUMNS, 0)


def known(unit, values):
    keys = pd.Index(np.unique(unit))
    x = np.column_stack([np.ones(len(unit)), values[:, :2]])
    return gather([(keys.get_indexer(unit), x, values[:, 2])], COLUMNS, keys)


@settings(max_examples=30, deadline=None)
@given(
    st.integers(0, 10**6),
    st.integers(2, 400),
    st.lists(st.integers(0, 1200), max_size=6),
    st.sampled_from([0.1, 1.0, 30.0]),
    st.booleans(),
)
def test_either_way_of_measuring_gives_the_moments(seed, units, cuts, between, by_unit):
    unit, values = rows(units=units, seed=seed, between=between)
    _, got = taken(unit, values, cuts, by_unit=by_unit)
    wanted = known(unit, values)
    np.testing.assert_array_equal(got.counts, wanted.counts)
    assert got.keys.equals(wanted.keys)
    # 1200 products of the size of squares of values are added in another order
    allowed = 1200 * 1200 * np.finfo(float).eps * np.square(values).max()
    assert np.abs(got.within - wanted.within).max() < allowed
    np.testing.assert_allclose(got.means + got.shift, wanted.means + wanted.shift, rtol=0, atol=allowed)
    same_closed(close(got), close(wanted))


def test_what_the_rows_are_measured_from_is_decided_by_the_first_of_them():
    unit, values = rows()
    assert taken(unit, values)[0]
    assert not taken(unit, values, by_unit=True)[0]
    assert not taken(unit[:300], values[:300])[0]  # too few rows beyond one for each unit
    assert not taken(unit, values + 30.0 * unit[:, None])[0]  # units far apart
    fixed = values.copy()
    fixed[:, 1] = unit
    level, got = taken(unit, fixed)
    assert not level
    assert got.within[2, 2] == 0.0  # constant within units, exactly
    assert np.isfinite(got.loss).all()


def test_an_offset_costs_nothing():
    """Offsets of 1e9, in rational arithmetic."""
    rng = np.random.default_rng(3)
    unit = rng.integers(0, 12, 400)
    values = 1e9 + rng.integers(-64, 64, (400, 3)) / 8.0
    level, got = taken(unit, values, [300])
    assert level
    exact = [[Fraction(0)] * 3 for _ in range(3)]
    for key in range(12):
        own = [[Fraction(v) for v in row] for row in values[unit == key].tolist()]
        mean = [sum(row[j] for row in own) / len(own) for j in range(3)]
        for a in range(3):
            for b in range(3):
                exact[a][b] += sum((row[a] - mean[a]) * (row[b] - mean[b]) for row in own)
    wanted = np.array([[float(value) for value in line] for line in exact])
    # differences from a number near the mean are exact to 1e-7 of it times 2^-53; 400 products are added
    scale = np.sqrt(np.diag(wanted))
    assert np.abs((got.within[1:, 1:] - wanted) / np.outer(scale, scale)).max() < 1e-13


@pytest.mark.parametrize("workers", [1, 2])
def test_rows_that_turn_out_otherwise_are_measured_again(workers):
    """The first chunk shows units close together, later ones are a million apart."""
    unit, values = rows(6000, 300)
    unit = np.sort(unit)[np.r_[0:6000]]
    far = np.where(unit > 100, 1e6 * (unit % 7), 0.0)
    data = pd.DataFrame({"hive": unit, "forage": values[:, 0] + far, "honey": values[:, 0] + values[:, 2]})
    parts = split(data.sample(frac=1, random_state=1).sort_values("hive", key=lambda k: k > 100), [2000])
    got = mixbridge.crosscheck("honey ~ forage", parts, unit="hive", chunks=ChunkOptions(workers=workers))
    assert "moments, measured unit by unit" in [each.what for each in got.panel.passes]
    assert got.opened.loss.max() < LEVEL_LOSS
    whole = mixbridge.crosscheck("honey ~ forage", data, unit="hive")
    np.testing.assert_allclose(got.fit("within").beta[1], whole.fit("within").beta[1], rtol=1e-12)
