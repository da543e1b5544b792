"""One call on rows that are read in chunks: every source against the same rows in memory."""

import tempfile
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from streams import KINDS, in_order, make, same_closed, same_studies, source_of, split

import mixbridge
from mixbridge.errors import DataError, OptionError
from mixbridge.sources.chunk_options import IN_ONE_PIECE, ChunkOptions

FORMULAS = ["honey ~ forage + np.log(weight)", "honey ~ forage * region + C(frames) + center(weight)"]


@settings(max_examples=40, deadline=None)
@given(
    st.sampled_from(KINDS),
    st.sampled_from(FORMULAS),
    st.integers(0, 1000),
    st.integers(2, 40),
    st.integers(5, 320),
    st.integers(5, 320),
    st.integers(1, 3),
    st.booleans(),
    st.sampled_from([None, True, False]),
)
def test_every_source_on_drawn_partitions(kind, formula, seed, units, part, rows, workers, ordered, records):
    """Sizes of units, parts and chunks, order of rows and number of threads are drawn."""
    data = make(seed=seed, units=units)
    data = in_order(data) if ordered else data
    spill = records is False and (not ordered or kind == "partitioned")
    options = ChunkOptions(rows=rows, workers=workers, unit_records=records, spill=spill)
    whole = mixbridge.crosscheck(formula, data, unit="hive")
    with tempfile.TemporaryDirectory() as folder:
        source = source_of(kind, data, Path(folder), part)
        got = mixbridge.crosscheck(formula, source, unit="hive", chunks=options)
        assert (got.unit_moments is None) == (records is False)
        assert got.panel.accounting.dropped == whole.panel.accounting.dropped
        assert got.panel.accounting.rows_used == whole.panel.accounting.rows_used
        assert (got.panel.N, got.panel.names) == (whole.panel.N, whole.panel.names)
        same_closed(got.moments, whole.moments)
        del got


@pytest.mark.parametrize("kind", KINDS)
def test_all_that_is_shown_is_that_of_memory(kind, tmp_path):
    data = make()
    whole = mixbridge.crosscheck(FORMULAS[1], data, unit="hive", period="season")
    got = mixbridge.crosscheck(
        FORMULAS[1],
        source_of(kind, data, tmp_path),
        unit="hive",
        period="season",
        chunks=ChunkOptions(rows=37, spill=True),
    )
    same_studies(got, whole)
    for ask in ("reml", "within"):
        a, b = got.fit(ask, covariance="CR2"), whole.fit(ask, covariance="CR2")
        np.testing.assert_allclose(a.covariance_array, b.covariance_array, rtol=1e-8, atol=1e-14)
    a, b = got.unit_effects("reml"), whole.unit_effects("reml")
    assert list(a.index) == list(b.index)
    np.testing.assert_allclose(a["effect"], b["effect"], rtol=0, atol=1e-10)
    # two passes: the products of units are taken in one of their own, which further questions use again
    later = [each.what for each in got.panel.passes[got.panel.rows_read.for_moments[0] :]]
    assert later.count("rows unit by unit") == 1


@pytest.mark.parametrize(
    "kind", [kind for kind in KINDS if kind not in ("parquet", "csv", "table", "frame", "read_table")]
)
def test_what_is_not_one_table_comes_in_chunks_unasked(kind, tmp_path):
    got = mixbridge.crosscheck("honey ~ forage", source_of(kind, make(), tmp_path), unit="hive")
    assert "read in chunks" in got.panel.source_note


@pytest.mark.parametrize("kind", ["parquet", "csv"])
def test_large_files_come_in_chunks_unasked(kind, tmp_path, monkeypatch):
    path = source_of(kind, make(), tmp_path)
    assert mixbridge.crosscheck("honey ~ forage", path, unit="hive").panel.source_note is None
    monkeypatch.setitem(IN_ONE_PIECE, path.suffix, 100)
    assert "chunks" in mixbridge.crosscheck("honey ~ forage", path, unit="hive").panel.source_note
    assert mixbridge.crosscheck("honey ~ forage", path, unit="hive", chunks=False).panel.source_note is None


KEYS = {
    "integer": lambda hive: hive * 3 - 7,
    "scattered": lambda hive: hive * 10**15,
    "wide": lambda hive: pd.Series([2**63 + 5 * int(key) for key in hive], dtype="uint64"),
    "text": lambda hive: "hive " + hive.astype(str),
    "nullable": lambda hive: hive.astype("Int64").where(hive != 3),
}


@pytest.mark.parametrize("key", KEYS)
@pytest.mark.parametrize("kind", ["folder", "csv", "function"])
def test_unit_keys(key, kind, tmp_path):
    data = make().assign(hive=lambda frame: KEYS[key](frame["hive"]))
    source = source_of(kind, data, tmp_path)
    # integers beyond 64 bits in a text file are text, in memory too
    whole = mixbridge.crosscheck("honey ~ forage", source if kind == "csv" else data, unit="hive")
    got = mixbridge.crosscheck("honey ~ forage", source, unit="hive", chunks=ChunkOptions(rows=50))
    assert list(got.panel.unit_keys) == list(whole.panel.unit_keys)
    same_closed(got.moments, whole.moments)


def test_the_number_of_passes_is_announced():
    data = in_order(make())
    plain = mixbridge.crosscheck("honey ~ forage", split(data, [9]), unit="hive", period="season")
    assert "rows read in chunks, in 1 pass" in str(plain)
    assert plain.to_dict()["source"] == "rows read in chunks, in 1 pass"
    assert [each.what for each in plain.panel.passes[:1]] == ["account of rows, and moments"]
    assert plain.panel.passes[0].rows == 300
    assert plain.panel.passes[0].complete
    levels = mixbridge.crosscheck("honey ~ region", split(data, [9]), unit="hive")
    assert "in 2 passes" in levels.panel.source_note
    learned = mixbridge.crosscheck("honey ~ region + center(forage)", split(data, [9]), unit="hive")
    assert "in 3 passes" in learned.panel.source_note
    assert plain.fit("reml", covariance="CR1").estimated
    assert "in 1 pass" in plain.panel.source_note  # further passes answer further questions
    assert [each.what for each in plain.panel.passes].count("rows unit by unit") == 1


def test_text_files_are_passed_over_for_their_keys(tmp_path):
    path = source_of("csv", make(), tmp_path)
    got = mixbridge.crosscheck("honey ~ forage", path, unit="hive", chunks=True)
    assert [each.what for each in got.panel.passes] == [
        "what keys in text are",
        "account of rows, and moments",
    ]


@pytest.mark.parametrize("kind", ["parquet", "csv", "function"])
def test_progress_counts_rows(kind, tmp_path):
    seen = []
    options = ChunkOptions(rows=50, progress=lambda done, total: seen.append((done, total)))
    mixbridge.crosscheck("honey ~ region", source_of(kind, make(), tmp_path, 50), unit="hive", chunks=options)
    known = 300 if kind == "parquet" else None
    one = [(done, known) for done in range(50, 301, 50)]
    if known is None:  # what all rows were is told at the end
        one.append((300, 300))
    assert seen == one + one


def test_a_callback_that_fails_stops_the_run():
    def progress(done, total):
        raise RuntimeError("no more")

    with pytest.raises(RuntimeError, match="no more"):
        mixbridge.crosscheck(
            "honey ~ forage", split(make(), [9]), unit="hive", chunks=ChunkOptions(progress=progress)
        )


def test_names_of_the_caller_can_be_used():
    chosen = [3, 2, 1]
    formula = "honey ~ C(frames, levels=chosen)"
    got = mixbridge.crosscheck(formula, split(make(), [50]), unit="hive")
    same_studies(got, mixbridge.crosscheck(formula, make(), unit="hive"))
    assert chosen == [3, 2, 1]
    with pytest.raises(mixbridge.FormulaError, match="'chosen'"):
        mixbridge.crosscheck(formula, split(make(), [50]), unit="hive", trusted=False)


def test_faults_name_file_and_row_group(tmp_path):
    data = make()
    pq.write_table(pa.Table.from_pandas(data), tmp_path / "a.parquet", row_group_size=100)
    pq.write_table(
        pa.Table.from_pandas(data.assign(forage="much")), tmp_path / "b.parquet", row_group_size=100
    )
    with pytest.raises(DataError, match=r"In .*b\.parquet, row group 0 the column 'forage'"):
        mixbridge.crosscheck("honey ~ forage", tmp_path, unit="hive")
    pq.write_table(pa.Table.from_pandas(data.drop(columns="forage")), tmp_path / "b.parquet")
    with pytest.raises(DataError, match=r"b\.parquet has no column 'forage'"):
        mixbridge.crosscheck("honey ~ forage", tmp_path, unit="hive")


def test_parts_without_rows_or_values_are_counted(tmp_path):
    data = make()
    parts = [data[:0], data[:100], data[100:200].assign(honey=np.nan), data[200:]]
    for i, part in enumerate(parts):
        pq.write_table(pa.Table.from_pandas(part), tmp_path / f"{i}.parquet")
    got = mixbridge.crosscheck("honey ~ forage", tmp_path, unit="hive")
    whole = mixbridge.crosscheck("honey ~ forage", pd.concat(parts), unit="hive")
    assert got.panel.accounting.dropped == whole.panel.accounting.dropped
    same_closed(got.moments, whole.moments)


def test_refusals():
    with pytest.raises(DataError, match="cannot be read in chunks"):
        mixbridge.crosscheck("honey ~ forage", 3, unit="hive", chunks=True)
    with pytest.raises(OptionError, match="workers=0"):
        mixbridge.crosscheck("honey ~ forage", make(), unit="hive", chunks=ChunkOptions(workers=0))
    got = mixbridge.crosscheck("honey ~ forage", split(make(), [50]), unit="hive", period="season")
    assert "spill=True" in got.fit("first_difference").status
    with pytest.raises(DataError, match="as one frame"):
        got.quasi_demeaned("reml")
    with pytest.raises(OptionError, match="rows are read in chunks"):
        got.fit("reml", covariance="two_way")
