"""Rows sorted by unit in temporary files: the same results, in bounded memory, and nothing left behind."""

import shutil
import tempfile
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from streams import make, same_closed, same_studies, source_of, split

import mixbridge
from mixbridge.errors import DataError
from mixbridge.panel.streaming_attempts import bytes_per_unit
from mixbridge.panel.streaming_spill import hash_of_keys
from mixbridge.sources import spill_files
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.sources.spill_files import Pile, SortedFiles

FORMULA = "honey ~ forage + np.log(weight)"
FEW = 12 * bytes_per_unit(3)
"""Bytes of the moments of twelve units."""


def study(data, cuts=(), formula=FORMULA, period="season", **options):
    return mixbridge.crosscheck(
        formula, split(data, cuts), unit="hive", period=period, chunks=ChunkOptions(**options)
    )


def test_units_beyond_memory_are_refused_and_then_spilled():
    data = make()
    with pytest.raises(DataError, match=r"have \d+ units: moments of so many .*ChunkOptions\(spill=True\)"):
        study(data, range(20, 300, 20), memory_limit=FEW)
    got = study(data, range(20, 300, 20), memory_limit=FEW, spill=True)
    assert got.unit_moments is None
    assert "sorted by unit in temporary files" in got.panel.source_note
    same_studies(got, mixbridge.crosscheck(FORMULA, data, unit="hive", period="season"))
    assert [each.what for each in got.panel.passes][2] == "sorting in temporary files"


def test_columns_beyond_memory_are_spilled_too():
    """The number of columns is known only when levels are: the estimate is made before moments are taken."""
    data = make()
    formula = "honey ~ C(season)"
    with pytest.raises(DataError, match=r"moments of 30 units with .* columns"):
        study(data, [100], formula, memory_limit=31 * bytes_per_unit(2))
    got = study(data, [100], formula, memory_limit=31 * bytes_per_unit(2), spill=True)
    same_closed(got.moments, mixbridge.crosscheck(formula, data, unit="hive").moments)


def test_routes_that_need_the_order_of_periods_get_it():
    data = make()
    unsorted = study(data, [50, 200])
    assert "ChunkOptions(spill=True)" in unsorted.fit("first_difference").status
    got = study(data, [50, 200], spill=True)
    assert got.unit_moments is not None
    whole = mixbridge.crosscheck(FORMULA, data, unit="hive", period="season")
    same_studies(got, whole)
    assert list(got.panel.unit_keys) == list(whole.panel.unit_keys)
    assert got.panel.accounting == whole.panel.accounting
    np.testing.assert_allclose(
        got.fit("first_difference").beta, whole.fit("first_difference").beta, rtol=1e-9
    )


def test_rows_in_order_are_not_spilled():
    data = make().sort_values(["hive", "season"])
    got = study(data, [50, 200], spill=True)
    assert "temporary" not in got.panel.source_note
    assert "temporary" not in study(make(), [50], period=None, spill=True).panel.source_note


def test_periods_out_of_order_within_sorted_units():
    data = make().sort_values(["hive", "season"], ascending=[True, False])
    for records in (True, False):
        got = study(data, [50, 200], spill=True, unit_records=records)
        assert (got.unit_moments is None) == (not records)
        same_studies(got, mixbridge.crosscheck(FORMULA, data, unit="hive", period="season"))


KEYS = {
    "integers": lambda hive: hive * 10**15 - 3,
    "text": lambda hive: "hive " + hive.astype(str),
    "dates": lambda hive: pd.Timestamp("2001-01-01") + pd.to_timedelta(hive, unit="D"),
    "nullable": lambda hive: hive.astype("Int64").where(hive != 3),
    "whole floats": lambda hive: hive.astype(float).where(hive != 3),
    "categories": lambda hive: hive.map("{:03d}".format).astype("category"),
}


@pytest.mark.parametrize("kind", KEYS)
@pytest.mark.parametrize("records", [True, False])
def test_keys_of_every_kind(kind, records):
    data = make().assign(hive=lambda frame: KEYS[kind](frame["hive"]))
    whole = mixbridge.crosscheck(FORMULA, data, unit="hive", period="season")
    got = study(data, [11, 12, 100], spill=True, unit_records=records)
    assert got.panel.N == whole.panel.N
    same_closed(got.moments, whole.moments)
    if records:
        assert list(got.panel.unit_keys) == list(whole.panel.unit_keys)


def test_types_that_go_together_meet_in_one_unit():
    data = make()
    parts = [data[:100].astype({"hive": "float64"}), data[100:200].astype({"hive": "Int32"}), data[200:]]
    parts[1] = parts[1].assign(frames=parts[1]["frames"].astype(float))
    got = mixbridge.crosscheck(
        "honey ~ forage + frames",
        lambda: parts,
        unit="hive",
        chunks=ChunkOptions(spill=True, unit_records=False),
    )
    assert got.panel.N == 30
    same_closed(got.moments, mixbridge.crosscheck("honey ~ forage + frames", data, unit="hive").moments)


@pytest.mark.parametrize("huge", [lambda key: 10**30 + key, lambda key: 2**63 + key])
def test_keys_beyond_64_bits_are_told(huge):
    data = make()
    data["hive"] = pd.Series([huge(int(key)) for key in data["hive"]], dtype=object)
    with pytest.raises(DataError, match="beyond 64 bits"):
        study(data, [100], spill=True, unit_records=False)


@settings(max_examples=12, deadline=None)
@given(
    st.integers(0, 10**6),
    st.integers(1, 30),
    st.integers(1, 20),
    st.sampled_from([300, 3000, 10**6]),
    st.integers(1, 300),
)
def test_every_row_comes_back_in_order(seed, units, keys, part, rows):
    """Parts are dealt anew where they are larger than they should be, twice at most."""
    rng = np.random.default_rng(seed)
    data = pd.DataFrame({"key": rng.integers(0, units, 500), "when": rng.permutation(500), "name": "x"})
    data["name"] = rng.choice(["a", "bc", "ä"], 500)

    def dealer(frame, files, depth):
        hashes = hash_of_keys(frame["key"]) >> np.uint64(20 * depth)
        return (hashes % np.uint64(files)).astype(np.intp)

    def sorter(pieces):
        frame = pd.concat(pieces, ignore_index=True)
        return frame, np.lexsort([frame["when"], frame["key"]])

    with tempfile.TemporaryDirectory() as folder:
        files = SortedFiles(folder, 10_000, "sorted")
        pile = Pile(files.folder, 10_000, part, dealer)
        for start in range(0, 500, 500 // keys):
            pile.deal(data[start : start + 500 // keys])
        files.fill(pile, sorter, rows)
        chunks = [chunk.frame for chunk in files.chunks(["key", "when", "name"])]
        assert files.rows_total == 500
        assert max(map(len, chunks)) <= rows
        got = pd.concat(chunks, ignore_index=True)
        runs = np.count_nonzero(got["key"].diff() != 0)
        assert runs == data["key"].nunique()
        assert all(part["when"].is_monotonic_increasing for _, part in got.groupby("key"))
        wanted = data.sort_values("when", ignore_index=True)
        pd.testing.assert_frame_equal(got.sort_values("when", ignore_index=True), wanted, check_dtype=False)
        files.remove()
        assert list(Path(folder).iterdir()) == []


def test_hashes_depend_on_the_key_alone():
    whole = hash_of_keys(pd.Series([1, 2, 3]))
    assert (hash_of_keys(pd.Series([3, 1]))[::-1] == whole[[0, 2]]).all()
    assert (hash_of_keys(pd.Series(["a", "b"], dtype=object)) == hash_of_keys(pd.Series(["a", "b"]))).all()
    dates = pd.to_datetime(["2001-01-01", "2001-01-02"])
    assert (hash_of_keys(pd.Series(dates.as_unit("s"))) == hash_of_keys(pd.Series(dates.as_unit("ns")))).all()


def test_a_disk_that_is_too_small_is_told_before(monkeypatch, tmp_path):
    usage = shutil.disk_usage(tmp_path)._replace(free=100)
    monkeypatch.setattr(shutil, "disk_usage", lambda _: usage)
    with pytest.raises(DataError, match=r"GiB left\. Name a folder on a larger disk"):
        study(make(), [100], spill=tmp_path)
    assert list(tmp_path.iterdir()) == []
    with pytest.raises(DataError, match="No temporary folder can be made"):
        study(make(), [100], spill=tmp_path / "nowhere")


def test_files_are_made_where_asked_and_removed(tmp_path, monkeypatch):
    got = study(make(), [100], spill=tmp_path)
    [folder] = tmp_path.iterdir()
    assert {path.suffix for path in folder.iterdir()} == {".arrow"}
    assert all(path.name.startswith("sorted-") for path in folder.iterdir())  # the unsorted ones are gone
    del got
    assert list(tmp_path.iterdir()) == []

    def broken(*_):
        raise OSError("disk full")

    monkeypatch.setattr(spill_files, "_remove", broken)
    with pytest.raises(OSError, match="disk full"):
        study(make(), [100], spill=tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_a_file_that_vanishes_is_named(tmp_path):
    got = study(make(), [100], spill=tmp_path)
    [folder] = tmp_path.iterdir()
    next(folder.iterdir()).unlink()
    with pytest.raises(DataError, match=r"sorted-.*\.arrow, piece 0 cannot be read"):
        got.fit("reml", covariance="CR1")


@pytest.mark.parametrize("kind", ["csv", "reader", "partitioned"])
def test_any_source_can_be_spilled(kind, tmp_path):
    data = make()
    got = mixbridge.crosscheck(
        FORMULA,
        source_of(kind, data, tmp_path),
        unit="hive",
        period="season",
        chunks=ChunkOptions(spill=True, rows=50),
    )
    same_studies(got, mixbridge.crosscheck(FORMULA, data, unit="hive", period="season"))
