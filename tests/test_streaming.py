"""Panels from chunks against the panel of the same rows in one frame, and against rational arithmetic."""

import tracemalloc
from fractions import Fraction

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from streams import KINDS, make, same_closed, source_of, split

import mixbridge
from mixbridge.moments import collect, factor_from_rows, stack_factors
from mixbridge.panel import build_panel, streaming_rows
from mixbridge.panel.streaming import build_streaming_panel
from mixbridge.ratio import curve_of
from mixbridge.routes import LEDGER_ROUTES, differences_of, fit_route
from mixbridge.sources.chunk_options import ChunkOptions

FORMULA = "honey ~ forage * region + C(frames) + np.log(weight)"
OFF_CURVE = ("first_difference",)


def streamed(formula, source, **options):
    chosen = {name: options.pop(name) for name in ("incomplete_rows", "period") if name in options}
    return build_streaming_panel(formula, source, unit="hive", options=ChunkOptions(**options), **chosen)


def moments_of(panel):
    if hasattr(panel, "blocks_with_codes"):
        return collect(panel.blocks_with_codes, (*panel.names, panel.outcome), panel.unit_keys)
    codes = panel.codes
    return collect(
        lambda: ((codes[s : s + len(y)], x, y) for s, x, y in panel.blocks()),
        (*panel.names, panel.outcome),
        panel.unit_keys,
    )


def same_recipe(got, wanted):
    assert got.names == wanted.names
    assert dict(got.terms) == dict(wanted.terms)
    assert (got.constant, got.outcome, got.n, got.N) == (
        wanted.constant,
        wanted.outcome,
        wanted.n,
        wanted.N,
    )
    assert got.accounting == wanted.accounting
    assert list(got.unit_keys) == list(wanted.unit_keys)


def same_moments(got, wanted):
    """Compare to 1e-12 of the column scale: both add the same 300 products in different order, each sum having a
    relative error of at most 300 eps = 7e-14 of the sum of magnitudes."""
    (opened, closed), (opened_0, closed_0) = got, wanted
    scale = opened_0.magnitude
    np.testing.assert_array_equal(opened.counts, opened_0.counts)
    means, means_0 = opened.means + opened.shift, opened_0.means + opened_0.shift
    assert np.abs((means - means_0) / scale).max() < 1e-12
    products = np.outer(scale, scale) * opened_0.rows
    assert np.abs((opened.within - opened_0.within) / products).max() < 1e-12
    np.testing.assert_array_equal(closed.sizes, closed_0.sizes)
    for name in ("within", "between"):
        a, b = getattr(closed, name), getattr(closed_0, name)
        ours, theirs = (np.swapaxes(f, -1, -2) @ f for f in (a, b))
        # columns are standardised here: every product is of the order of the number of rows
        assert np.abs(ours - theirs).max() < 1e-12 * opened_0.rows


def same_fits(got, wanted):
    """Coefficients of every curve route to 1e-10 of the largest: the search for the ratio stops at 1e-12."""
    ours, theirs = curve_of(got), curve_of(wanted)
    for key in LEDGER_ROUTES:
        if key in OFF_CURVE:
            continue
        a, b = (fit_route(curve, key, {}, "not here") for curve in (ours, theirs))
        assert a.status == b.status
        np.testing.assert_allclose(a.beta, b.beta, rtol=0, atol=1e-10 * np.nanmax(np.abs(b.beta)))


def same_rows(got, wanted):
    parts = list(got.blocks_with_codes(rows=17))
    x, y = wanted.matrix()
    np.testing.assert_array_equal(np.concatenate([part[0] for part in parts]), wanted.codes)
    np.testing.assert_array_equal(np.vstack([part[1] for part in parts]), x)
    np.testing.assert_array_equal(np.concatenate([part[2] for part in parts]), y)


@settings(max_examples=25, deadline=None)
@given(st.randoms(use_true_random=False), st.lists(st.integers(0, 300), max_size=40))
def test_any_partition_of_shuffled_rows(random, cuts):
    data = make()
    order = list(range(len(data)))
    random.shuffle(order)
    shuffled = data.iloc[order]
    got = streamed(FORMULA, split(shuffled, cuts))
    same_rows(got, build_panel(FORMULA, shuffled, unit="hive"))
    whole = build_panel(FORMULA, data, unit="hive")
    same_recipe(got, whole)
    moments, expected = moments_of(got), moments_of(whole)
    same_moments(moments, expected)
    same_fits(moments[1], expected[1])


KEYS = {
    "integer": lambda hive: hive * 3 - 7,
    "scattered": lambda hive: hive * 10**15,
    "wide": lambda hive: hive + 2**62,
    "unsigned": lambda hive: hive.astype("uint64") + np.uint64(2**63),
    "huge": lambda hive: pd.Series([int(h) + 10**30 for h in hive], dtype=object),
    "text": lambda hive: "hive " + hive.astype(str),
    "nullable": lambda hive: hive.astype("Int64").where(hive != 3),
    "whole floats": lambda hive: hive.astype(float).where(hive != 3),
    "dates": lambda hive: pd.Timestamp("2001-01-01") + pd.to_timedelta(hive, unit="D"),
    "categories": lambda hive: pd.Categorical.from_codes(
        hive.clip(0, 28), [*"zyxwvutsrqponmlkjihgfedcba012"]
    ),
}


@pytest.mark.parametrize("kind", KEYS)
def test_unit_keys(kind):
    data = make().assign(hive=lambda frame: KEYS[kind](frame["hive"]))
    wanted = build_panel("honey ~ forage", data, unit="hive")
    got = streamed("honey ~ forage", split(data, [11, 12, 100]))
    same_recipe(got, wanted)
    assert got.unit_keys.dtype == wanted.unit_keys.dtype
    same_rows(got, wanted)


@pytest.mark.parametrize("kind", KINDS)
def test_every_source(kind, tmp_path):
    data = make()
    got = streamed(FORMULA, source_of(kind, data, tmp_path), period="season", rows=37)
    wanted = build_panel(FORMULA, data, unit="hive", period="season")
    if kind == "partitioned":  # rows come in the order of the folders
        assert got.accounting.rows_used == wanted.accounting.rows_used
        assert got.names == wanted.names
    else:
        same_recipe(got, wanted)
        same_rows(got, wanted)
        assert got.period_note == wanted.period_note
    spooled = kind in ("reader", "table", "generator")
    assert ("temporary Parquet file" in got.source_note) == spooled
    moments, expected = moments_of(got), moments_of(wanted)
    same_moments(moments, expected)
    same_fits(moments[1], expected[1])


@pytest.mark.parametrize(
    "formula",
    [
        "honey ~ center(forage)",
        "honey ~ standardize(forage) + scale(weight)",
        "honey ~ center(np.log(weight))",
        "honey ~ np.log(center(weight) + 1)",
        "honey ~ C(forage > 1) * weight",
        "honey ~ C(region, Sum) + C(frames, levels=[3, 2, 1])",
        "np.log(honey) ~ I(region == 'east') + region:weight",
        "honey ~ 0 + region",
        "honey ~ C(season)",
    ],
)
def test_what_is_learned_is_that_of_the_whole(formula):
    data = make()
    wanted = build_panel(formula, data, unit="hive")
    got = streamed(formula, split(data, [1, 9, 60, 200]))
    same_recipe(got, wanted)
    x = np.vstack([part[1] for part in got.blocks_with_codes()])
    # a mean of 300 values summed in another order: 300 eps of the largest value, 10
    np.testing.assert_allclose(x, wanted.matrix()[0], rtol=0, atol=1e-12)


def test_levels_that_only_dropped_rows_have_are_left_out():
    data = make()
    data["grade"] = pd.Categorical(np.where(np.arange(300) % 2, "a", "b"), ["c", "b", "a", "d"])
    data.loc[3, "grade"] = "d"  # forage is missing there
    wanted = build_panel("honey ~ forage + grade", data, unit="hive")
    got = streamed("honey ~ forage + grade", split(data, [2, 5, 100]))
    same_recipe(got, wanted)
    assert got.names[1] == "grade[T.a]"
    assert any("left out: c, d" in note for note in got.accounting.notes)


def test_keys_in_text_files_are_read_over_all_lines(tmp_path):
    data = make().assign(hive=lambda frame: frame["hive"].map("{:02d}".format))
    path = tmp_path / "rows.csv"
    data.to_csv(path, index=False)
    got = streamed("honey ~ forage", path, rows=29)
    same_recipe(got, build_panel("honey ~ forage", path, unit="hive"))
    assert got.unit_keys[0] == "00"


def test_fractions_are_text_as_units_and_numbers_as_periods(tmp_path):
    data = make().assign(hive=lambda frame: frame["hive"] + 0.5, season=lambda frame: frame["season"] / 4)
    path = tmp_path / "rows.csv"
    data.to_csv(path, index=False)
    got = streamed("honey ~ forage", path, period="season", rows=29)
    wanted = build_panel("honey ~ forage", path, unit="hive", period="season")
    same_recipe(got, wanted)
    assert got.unit_keys[0] == "0.5"
    assert got.period_note == wanted.period_note == "season: numbers in steps of 0.25"


@pytest.mark.parametrize("step", [None, 1, 2])
def test_sorted_rows_are_differenced_over_the_edges_of_chunks(step):
    data = make().sort_values(["hive", "season"]).drop(columns="region")
    formula = "honey ~ forage + weight"
    wanted = build_panel(formula, data, unit="hive", period="season")
    x, y = wanted.matrix()
    expected = differences_of(x, y, wanted.codes, wanted.period_ordinals, step)
    got = streamed(formula, split(data, range(0, 300, 3)), period="season")
    assert got.order.reason is None
    used = min(got.order.jumps) if step is None else step
    factor = np.zeros_like(expected.factor)
    count = 0
    for rows in got.difference_rows(used, rows=2):
        factor = stack_factors(factor, factor_from_rows(rows))
        count += len(rows)
    assert (count, used) == (expected.count, expected.step)
    assert count == got.order.jumps[used]
    # sums of at most 300 products, whose relative error is below 300 eps of the largest
    products = expected.factor.T @ expected.factor
    np.testing.assert_allclose(factor.T @ factor, products, rtol=0, atol=1e-12 * products.max())


def test_exact_arithmetic_with_an_offset_and_units_in_every_chunk():
    """Rational arithmetic on the stored doubles: offsets of 1e9, units of 4 rows, one row of each in each chunk."""
    rng = np.random.default_rng(2)
    units, rows = 5, 4
    x = 1e9 + rng.integers(-64, 64, (rows, units)) / 8.0
    y = 1e9 + 2 * (x - 1e9) + rng.integers(-64, 64, (rows, units)) / 16.0 + np.arange(units) / 4.0
    frames = [pd.DataFrame({"hive": np.arange(units), "honey": y[t], "forage": x[t]}) for t in range(rows)]
    panel = streamed("honey ~ forage", lambda: iter(frames))
    opened, closed = moments_of(panel)
    z = [[(Fraction(1), Fraction(x[t, i]), Fraction(y[t, i])) for t in range(rows)] for i in range(units)]
    mean = [[sum(row[j] for row in unit) / rows for j in range(3)] for unit in z]
    within = [
        [sum((r[a] - mean[i][a]) * (r[b] - mean[i][b]) for i in range(units) for r in z[i]) for b in range(3)]
        for a in range(3)
    ]
    exact = np.array([[float(value) for value in line] for line in within])
    scale = np.sqrt(np.diag(exact)[1:])
    gap = (opened.within - exact)[1:, 1:] / np.outer(scale, scale)
    assert np.abs(gap).max() < 1e-13  # differences of stored doubles are exact; 20 products are added
    for psi in (Fraction(0), Fraction(1), Fraction(7, 2)):
        weight = rows / (1 + rows * psi)
        a = [[within[j][k] + weight * sum(m[j] * m[k] for m in mean) for k in range(3)] for j in range(3)]
        determinant = a[0][0] * a[1][1] - a[0][1] * a[1][0]
        slope = (a[0][0] * a[1][2] - a[1][0] * a[0][2]) / determinant
        constant = (a[0][2] * a[1][1] - a[0][1] * a[1][2]) / determinant
        beta = curve_of(closed).at(float(psi)).beta
        assert abs(beta[1] - float(slope)) < 1e-13 * abs(float(slope)) * 10  # condition of the centred design
        # the constant is the mean of y minus slope times 1e9: it inherits the rounding of the slope
        assert abs(beta[0] - float(constant)) < 1e9 * 1e-13 * 10 * abs(float(slope))


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10**6), st.lists(st.integers(0, 120), max_size=12))
def test_every_dropped_row_has_the_cause_it_has_in_memory(seed, cuts):
    rng = np.random.default_rng(seed)
    data = make(120, seed)
    for name in data.columns:
        holes = rng.random(120) < 0.08
        data[name] = data[name].astype(object if name == "region" else float).where(~holes)
    data.loc[rng.integers(0, 120, 5), "weight"] = -1.0
    data = data.drop_duplicates(["hive", "season"])
    formula = "honey ~ np.log(weight) + center(np.sqrt(weight)) + np.log(center(forage) + 1) + C(region)"
    wanted = build_panel(formula, data, unit="hive", period="season")
    got = streamed(formula, split(data, [min(cut, len(data)) for cut in cuts]), period="season")
    same_recipe(got, wanted)
    assert got.period_note == wanted.period_note


def test_memory_does_not_grow_with_rows():
    def peak(chunks):
        def frames():
            for i in range(chunks):
                rng = np.random.default_rng(i)
                yield pd.DataFrame(
                    {"hive": rng.integers(0, 50, 4000), "honey": rng.normal(size=4000), "forage": i + 0.5}
                )

        tracemalloc.start()
        try:
            moments_of(streamed("honey ~ forage", frames))
            return tracemalloc.get_traced_memory()[1]
        finally:
            tracemalloc.stop()

    peak(2)  # what is imported or cached once does not count
    # all rows of the longer run are 60 * 4000 * 24 bytes = 5.8 MB, ten times those of the shorter one, which is long
    # enough for as many chunks as are ever held at the same time
    assert peak(60) < 1.25 * peak(6)


@pytest.mark.parametrize("ordered", [True, False])
def test_wide_designs_are_laid_out_in_pieces(ordered, monkeypatch):
    """The same moments whatever part of a chunk is laid out at once."""
    data = make().sort_values("hive") if ordered else make()
    options = ChunkOptions(unit_records=not ordered)

    def study(formula):
        return mixbridge.crosscheck(formula, split(data, [150]), unit="hive", chunks=options)

    for formula in ("honey ~ forage + weight", "honey ~ C(season) + region * weight"):
        wide = study(formula)
        assert len(list(wide.panel.blocks_with_codes(rows=1000))) == 2
        with monkeypatch.context() as patch:
            patch.setattr(streaming_rows, "CELLS", 300)
            narrow = study(formula)
            assert len(list(narrow.panel.blocks_with_codes(rows=1000))) > 2
        same_closed(narrow.moments, wide.moments)
