"""Rows sorted by unit: closed moments without keeping units, against those of memory and rational arithmetic."""

import itertools
import tracemalloc
from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from streams import identical, in_order, make, same_closed, same_studies, split

import mixbridge
from mixbridge.errors import DataError
from mixbridge.moments import Moments, close, collect, sorted_classes
from mixbridge.moments.opened import within_factor
from mixbridge.moments.sorted_classes import SizeClass, SortedFactor
from mixbridge.panel import streaming_attempts
from mixbridge.ratio import curve_of
from mixbridge.sources.chunk_options import ChunkOptions

FORMULA = "honey ~ forage + np.log(weight)"
CLOSED = ChunkOptions(unit_records=False)


def study(data, cuts=(), formula=FORMULA, period="season", **options):
    return mixbridge.crosscheck(
        formula, split(data, cuts), unit="hive", period=period, chunks=ChunkOptions(**options)
    )


@settings(max_examples=20, deadline=None)
@given(
    st.integers(0, 10**6),
    st.integers(2, 60),
    st.lists(st.integers(0, 300), max_size=30),
    st.integers(1, 3),
    st.sampled_from([1, 7, 2**16]),
)
def test_any_partition_of_sorted_rows(seed, units, cuts, workers, waiting):
    data = in_order(make(seed=seed, units=units))
    whole = mixbridge.crosscheck(FORMULA, data, unit="hive")
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(sorted_classes, "WAITING", waiting)
        got = study(data, cuts, period=None, unit_records=False, workers=workers)
    assert got.unit_moments is None
    assert got.panel.accounting == whole.panel.accounting
    assert (got.panel.N, got.panel.n) == (whole.panel.N, whole.panel.n)
    same_closed(got.moments, whole.moments)


@pytest.mark.parametrize("formula", [FORMULA, "honey ~ forage * region + C(frames) + center(weight)"])
def test_the_study_is_that_of_memory_with_differences(formula):
    data = in_order(make())
    whole = mixbridge.crosscheck(formula, data, unit="hive", period="season")
    got = study(data, range(0, 300, 7), formula, unit_records=False)
    same_studies(got, whole)
    assert got.fit("first_difference").status == "fitted"
    assert got.panel.period_note == whole.panel.period_note


def exact(data, size):
    """W and sum of products of means about the grand mean, in rational arithmetic."""
    z = [[Fraction(value) for value in row] for row in data[["forage", "honey"]].to_numpy().tolist()]
    grand = [sum(row[j] for row in z) / len(z) for j in range(2)]
    units = [z[i : i + size] for i in range(0, len(z), size)]
    within = [[Fraction(0)] * 2 for _ in range(2)]
    between = [[Fraction(0)] * 2 for _ in range(2)]
    for rows in units:
        mean = [sum(row[j] for row in rows) / size for j in range(2)]
        for a in range(2):
            for b in range(2):
                within[a][b] += sum((row[a] - mean[a]) * (row[b] - mean[b]) for row in rows)
                between[a][b] += (mean[a] - grand[a]) * (mean[b] - grand[b])
    return [np.array([[float(value) for value in line] for line in each]) for each in (within, between)]


@pytest.mark.parametrize("first", [0.0, 1e9])
@pytest.mark.parametrize("offset", [0.0, 1e9])
def test_exact_arithmetic_with_units_in_several_chunks(first, offset):
    """Offsets of 1e9, and a first unit far from the others: what means are measured from provisionally must not cost
    digits. Chunks of three rows split every unit of four."""
    rng = np.random.default_rng(2)
    units, size = 60, 4
    x = offset + rng.integers(-64, 64, (units, size)) / 8.0
    x[0] += first
    y = (
        offset
        + 2 * (x - offset)
        + rng.integers(-64, 64, (units, size)) / 16.0
        + np.arange(units)[:, None] / 4.0
    )
    data = pd.DataFrame({"hive": np.arange(units).repeat(size), "forage": x.ravel(), "honey": y.ravel()})
    got = study(data, range(3, 240, 3), "honey ~ forage", None, unit_records=False)
    within, between = exact(data, size)
    moments = got.moments
    ours = moments.within.T @ moments.within * np.outer(moments.scale, moments.scale)
    own = np.sqrt(np.diag(within))
    # differences of stored doubles are exact; 240 products of rounding 1e-16 are added
    assert np.abs((ours - within) / np.outer(own, own)).max() < 1e-13
    [factor] = moments.between
    squares = factor.T @ factor
    theirs = squares[1:, 1:] * np.outer(moments.scale, moments.scale)
    own = np.sqrt(np.diag(between))
    # means are measured from a row of the data: what is stored of them has their distance from it as its size
    assert np.abs((theirs - between) / np.outer(own, own)).max() < 1e-13


def test_nearly_collinear_columns_are_read_once_more():
    """A column that is another one plus 1e-7 of noise: products keep no digit of it, rows do."""
    rng = np.random.default_rng(4)
    data = in_order(make())
    data["other"] = data["forage"] + 1e-7 * rng.normal(size=len(data))
    formula = "honey ~ forage + other"
    whole = mixbridge.crosscheck(formula, data, unit="hive")
    got = study(data, range(0, 300, 5), formula, None, unit_records=False)
    assert [each.what for each in got.panel.passes] == [
        "account of rows, and moments",
        "within factor of nearly collinear columns",
    ]
    assert "in 2 passes" in got.panel.source_note
    a, b = got.fit("within").beta, whole.fit("within").beta
    # rounding of 2e-16 in 300 rows times the condition of 2e7; from products its square would leave two digits
    np.testing.assert_allclose(a[1:], b[1:], rtol=0, atol=8e-8 * np.abs(b[1:]).max())
    assert np.abs(b[1:]).max() > 1e3  # as they are with so little to tell the columns apart


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 10**6), st.lists(st.integers(1, 400), max_size=8))
def test_the_factor_from_rows_in_parts(seed, cuts):
    rng = np.random.default_rng(seed)
    codes = np.sort(rng.integers(0, 40, 400))
    codes = np.unique(codes, return_inverse=True)[1]
    z = np.column_stack([rng.normal(size=(400, 3)) + 1e6 * codes[:, None], codes * 1.5, np.ones(400)])
    opened, _ = collect(
        lambda: [(codes, z[:, :3], z[:, 3])], ("a", "b", "c", "y"), pd.RangeIndex(codes.max() + 1)
    )
    wanted = within_factor([(codes, z[:, :3], z[:, 3])], opened)
    part = SortedFactor(5)
    edges = sorted({0, 400, *cuts})
    for start, stop in itertools.pairwise(edges):
        part.add(codes[start:stop], z[start:stop])
    # values of 1e7 are stored to 1e-9, and means are rounded as much
    np.testing.assert_allclose(part.factor.T @ part.factor, wanted.T @ wanted, rtol=0, atol=400 * 1e-8)
    assert (part.factor[:, 3] == 0).all()  # constant within units, exactly


def test_every_unit_of_its_own_size():
    rng = np.random.default_rng(6)
    sizes = rng.permutation(np.arange(1, 121))
    hive = np.arange(120).repeat(sizes)
    data = pd.DataFrame({"hive": hive, "forage": rng.normal(size=hive.size)})
    data["honey"] = data["forage"] + rng.normal(size=120)[hive] + rng.normal(size=hive.size)
    whole = mixbridge.crosscheck("honey ~ forage", data, unit="hive")
    got = study(data, range(0, len(data), 100), "honey ~ forage", None, unit_records=False)
    same_closed(got.moments, whole.moments)
    same_studies(got, whole)


def test_classes_merge_in_any_order():
    rng = np.random.default_rng(7)
    means = rng.normal(size=(500, 4)) + np.array([0, 1e6, 5, 0])
    means[:, 3] = means[:, 0]  # collinear
    means[:, 2] = 5.0  # the same in all
    whole = SizeClass.of(means)
    for cuts in ([1, 2, 3], [250], [7, 100, 400]):
        first, *rest = (SizeClass.of(part) for part in np.split(means, cuts))
        for part in rest:
            first.merge(part)
        assert first.count == 500
        np.testing.assert_allclose(first.mean, whole.mean, rtol=1e-14)
        # 500 products of size one, of means that carry 1e-10 where they are of size 1e6
        np.testing.assert_allclose(
            first.factor.T @ first.factor, whole.factor.T @ whole.factor, rtol=0, atol=500 * 1e-9
        )
        assert (first.factor[:, 2] == 0).all()


def test_a_column_of_ones_without_an_intercept_is_the_constant():
    data = in_order(make()).assign(one=1.0)
    whole = mixbridge.crosscheck("honey ~ 0 + one + forage", data, unit="hive")
    got = study(data, [40, 41], "honey ~ 0 + one + forage", None, unit_records=False)
    assert got.moments.constant == "one"
    same_closed(got.moments, whole.moments)


KEYS = {
    "integers": lambda hive: hive * 10**15 - 3,
    "text": lambda hive: hive.map("hive {:03d}".format),
    "dates": lambda hive: pd.Timestamp("2001-01-01") + pd.to_timedelta(hive, unit="D"),
    "nullable": lambda hive: hive.astype("Int64").where(hive != 3),
    "whole floats": lambda hive: hive.astype(float).where(hive != 3),
    "wide": lambda hive: pd.Series([2**63 + int(key) for key in hive], dtype="uint64"),
    "huge": lambda hive: pd.Series([10**30 + int(key) for key in hive], dtype=object),
    "categories": lambda hive: hive.map("{:03d}".format).astype("category"),
}


@pytest.mark.parametrize("kind", KEYS)
def test_keys_of_every_kind(kind):
    data = in_order(make()).assign(hive=lambda frame: KEYS[kind](frame["hive"]))
    whole = mixbridge.crosscheck("honey ~ forage", data, unit="hive")
    got = study(data, [11, 12, 100], "honey ~ forage", None, unit_records=False, sorted_by_unit=True)
    assert got.panel.N == whole.panel.N
    assert got.panel.accounting == whole.panel.accounting
    same_closed(got.moments, whole.moments)


@pytest.mark.parametrize("records", [None, True, False])
def test_a_false_declaration_is_refused_and_placed(records):
    data = in_order(make(200))
    later = pd.concat([data[150:], data[:150]], ignore_index=True)
    with pytest.raises(DataError, match=r"declared .* sorted by unit, but in frame 1, hive 0 comes after 29"):
        study(later, [40], sorted_by_unit=True, unit_records=records)


def test_rows_that_only_lie_together_are_not_sorted():
    data = make(200)
    together = pd.concat([part for _, part in data.groupby("hive")][::-1], ignore_index=True)
    with pytest.raises(DataError, match="unit_records=False takes rows sorted by unit, but in frame 0, hive"):
        study(together, [], unit_records=False)
    assert study(together, []).unit_moments is not None


def test_text_sorted_as_people_sort_it_is_told():
    data = pd.concat([make(80).assign(hive=key) for key in ("Aa", "ab", "B", "c")], ignore_index=True)
    with pytest.raises(DataError, match="hive B comes after ab"):
        study(data, [], "honey ~ forage", None, unit_records=False)


@pytest.fixture
def few_records(monkeypatch):
    """Let records of twelve units with three columns be too many for sorted rows."""
    monkeypatch.setattr(streaming_attempts, "RECORDS", 12 * streaming_attempts.bytes_per_unit(3))


def test_sorted_rows_are_found_out_when_units_become_many(few_records):
    data = in_order(make())
    got = study(data, range(0, 300, 20))
    assert got.unit_moments is None
    assert [each.complete for each in got.panel.passes] == [False, True]
    assert identical(got.moments, study(data, range(0, 300, 20), unit_records=False).moments)
    assert study(data, range(0, 300, 20), unit_records=True).unit_moments is not None
    assert study(data, range(0, 300, 20), sorted_by_unit=False).unit_moments is not None
    few = study(data[:80], [20])
    assert few.panel.N <= 12
    assert few.unit_moments is not None


def test_rows_that_stop_being_sorted_keep_their_units_after_all(few_records):
    data = in_order(make())
    late = pd.concat([data[30:], data[:30]], ignore_index=True)
    got = study(late, range(0, 300, 20), period=None)
    assert got.unit_moments is not None
    same_studies(got, mixbridge.crosscheck(FORMULA, data, unit="hive"))
    assert [each.complete for each in got.panel.passes][:3] == [False, False, True]


def test_memory_does_not_grow_with_units():
    def peak(units):
        def frames():
            for i in range(0, units, 500):
                rng = np.random.default_rng(i)
                yield pd.DataFrame(
                    {
                        "hive": np.arange(i, i + 500).repeat(4),
                        "honey": rng.normal(size=2000),
                        "forage": rng.normal(size=2000),
                    }
                )

        tracemalloc.start()
        try:
            got = mixbridge.crosscheck("honey ~ forage", frames, unit="hive", chunks=CLOSED)
            assert units == got.panel.N
            return tracemalloc.get_traced_memory()[1]
        finally:
            tracemalloc.stop()

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(sorted_classes, "WAITING", 1000)
        peak(1000)  # what is imported or cached once does not count
        # the means alone of the longer run would be 40,000 x 2 x 8 bytes, a third of what the shorter one takes
        assert peak(40_000) < 1.1 * peak(4000)


@pytest.mark.parametrize(
    "ask",
    [
        lambda s: s.opened,
        lambda s: s.unit_effects("reml"),
        lambda s: s.fit("reml", covariance="CR1"),
        lambda s: s.leave_one_out(),
        lambda s: s.quasi_demeaned("reml"),
        lambda s: s.panel.unit_keys,
        lambda s: s.panel.matrix(),
        lambda s: s.panel.codes,
    ],
)
def test_what_needs_units_is_refused_with_the_way_out(ask):
    got = study(in_order(make()), [50], unit_records=False)
    with pytest.raises(DataError, match=r"unit_records=True|as one frame"):
        ask(got)


def test_what_closed_moments_give_is_there():
    data = in_order(make())
    got, whole = study(data, [50], unit_records=False), mixbridge.crosscheck(FORMULA, data, unit="hive")
    np.testing.assert_allclose(
        got.correlated("mundlak").fit("reml").beta, whole.correlated("mundlak").fit("reml").beta, rtol=1e-9
    )
    contrasts = whole.contrasts()
    kept = contrasts[~contrasts["variance"].str.startswith("cluster")]
    np.testing.assert_allclose(got.contrasts()["statistic"].iloc[:-1], kept["statistic"], rtol=1e-9)
    assert "needs rows or the means of units" in got.contrasts()["note"].iloc[-1]
    assert got.bootstrap(20, seed=1) is not None
    statuses = {item.key: item.status for item in got.audit().findings}
    assert statuses["unit_means_model"] == "computed"
    assert statuses["variance_wald"].startswith("not assessable: ")
    assert "rows read in chunks, in 1 pass" in str(got)
    assert Moments.from_record(got.to_dict()["moments"]).rows == got.panel.n


def test_blocks_number_units_as_they_come():
    data = in_order(make())
    got = study(data, [50], unit_records=False).panel
    whole = mixbridge.crosscheck(FORMULA, data, unit="hive").panel
    parts = list(got.blocks_with_codes(rows=17))
    np.testing.assert_array_equal(np.concatenate([part[0] for part in parts]), whole.codes)
    np.testing.assert_array_equal(np.vstack([part[1] for part in parts]), whole.matrix()[0])
    opened, moments = collect(got.blocks_with_codes, (*got.names, got.outcome), pd.RangeIndex(got.N))
    same_closed(close(opened), moments)


def test_nothing_to_explain_and_one_unit():
    data = in_order(make()).assign(honey=3.0)
    with pytest.raises(DataError, match="one value 3"):
        study(data, [50], unit_records=False)
    with pytest.raises(DataError, match="one unit"):
        study(in_order(make()).assign(hive=1, season=range(300)), [50], unit_records=False)


def test_a_curve_is_the_same_from_both_ways_of_closing():
    data = in_order(make())
    a = curve_of(study(data, [50], unit_records=False).moments)
    b = curve_of(study(data, [50], unit_records=True).moments)
    for ratio in (0.0, 0.3, 10.0):
        np.testing.assert_allclose(a.at(ratio).beta, b.at(ratio).beta, rtol=1e-11)
