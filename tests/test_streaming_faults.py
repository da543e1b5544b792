"""What is refused or counted when data come in chunks, and where the message says it lies."""

import gc
import itertools
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from mixbridge.errors import DataError, FormulaError, OptionError
from mixbridge.panel import build_panel
from mixbridge.panel.streaming import build_streaming_panel
from mixbridge.panel.streaming_attempts import bytes_per_unit
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.sources.chunks_opening import open_chunks

pa = pytest.importorskip("pyarrow")
pq = pytest.importorskip("pyarrow.parquet")


def make(n=60):
    rng = np.random.default_rng(8)
    return pd.DataFrame(
        {
            "hive": np.arange(n) % 12,
            "season": np.arange(n) // 12,
            "honey": rng.normal(size=n),
            "forage": rng.normal(size=n),
            "region": rng.choice(["east", "west"], n),
        }
    )


def split(data, *cuts):
    edges = [0, *cuts, len(data)]
    return lambda: (data.iloc[a:b] for a, b in itertools.pairwise(edges))


def streamed(source, formula="honey ~ forage", **options):
    chosen = {name: options.pop(name) for name in ("incomplete_rows", "period") if name in options}
    return build_streaming_panel(formula, source, unit="hive", options=ChunkOptions(**options), **chosen)


def test_a_corrupt_row_group_is_named(tmp_path):
    path = tmp_path / "rows.parquet"
    pq.write_table(pa.Table.from_pandas(make()), path, row_group_size=20, compression="zstd")
    chunk = pq.ParquetFile(path).metadata.row_group(1).column(2)
    content = bytearray(path.read_bytes())
    start = chunk.dictionary_page_offset or chunk.data_page_offset
    content[start : start + chunk.total_compressed_size] = b"\xff" * chunk.total_compressed_size
    path.write_bytes(bytes(content))
    with pytest.raises(DataError, match=r"rows\.parquet, row group 1 cannot be read"):
        streamed(path)


def test_a_file_that_is_no_parquet_is_named(tmp_path):
    pq.write_table(pa.Table.from_pandas(make()), tmp_path / "a.parquet")
    (tmp_path / "b.parquet").write_bytes(b"not this")
    with pytest.raises(DataError, match=r"b\.parquet cannot be read"):
        streamed(tmp_path)


def test_a_column_that_a_later_file_lacks(tmp_path):
    pq.write_table(pa.Table.from_pandas(make()), tmp_path / "a.parquet")
    pq.write_table(pa.Table.from_pandas(make().drop(columns="forage")), tmp_path / "b.parquet")
    with pytest.raises(DataError, match=r"b\.parquet has no column 'forage'"):
        streamed(tmp_path)


def test_a_column_that_a_later_file_of_a_partitioned_folder_lacks(tmp_path):
    for region, part in make().groupby("region"):
        (tmp_path / f"region={region}").mkdir()
        kept = part.drop(columns=["region", *(["forage"] if region == "west" else [])])
        pq.write_table(pa.Table.from_pandas(kept), tmp_path / f"region={region}" / "a.parquet")
    with pytest.raises(DataError, match=r"region=west.a\.parquet has no column 'forage'"):
        streamed(tmp_path, "honey ~ forage + region")
    assert streamed(tmp_path, "honey ~ region").n == 60


@pytest.mark.parametrize("name", ["forage", "hive"])
def test_a_type_that_drifts(tmp_path, name):
    pq.write_table(pa.Table.from_pandas(make()), tmp_path / "a.parquet")
    later = make()
    later[name] = later[name].astype(str)
    pq.write_table(pa.Table.from_pandas(later), tmp_path / "b.parquet")
    with pytest.raises(DataError, match=rf"b\.parquet, row group 0.* column '{name}' holds"):
        streamed(tmp_path)


def test_integers_beside_floats_are_no_drift():
    data = make()
    data["forage"] = np.arange(60.0)
    parts = [data[:30].astype({"forage": int}), data[30:]]
    panel = streamed(lambda: parts)
    x = np.vstack([block[1] for block in panel.blocks_with_codes()])
    np.testing.assert_array_equal(x[:, 1], np.arange(60.0))


@pytest.mark.parametrize("hole", [np.nan, None])
def test_chunks_without_rows_or_values_are_counted(hole):
    data = make()
    data["forage"] = data["forage"].astype(object if hole is None else float)
    data.loc[20:39, "forage"] = hole
    panel = streamed(split(data, 0, 20, 20, 40))
    assert panel.accounting.dropped == (("missing covariate", "forage", 20),)
    assert (panel.n, panel.accounting.rows_given) == (40, 60)


def test_nothing_left():
    data = make().assign(honey=np.nan)
    with pytest.raises(DataError, match=r"No row is left\. 60 rows given"):
        streamed(split(data, 30))
    with pytest.raises(DataError, match="no rows"):
        streamed(split(make()[:0]))


def test_incomplete_rows_can_be_refused():
    data = make()
    data.loc[50, "honey"] = np.nan
    with pytest.raises(DataError, match=r"refused .*missing outcome \(honey\): 1"):
        streamed(split(data, 30), incomplete_rows="refuse")


def test_an_infinite_value_is_placed():
    data = make()
    data.loc[33, "forage"] = np.inf
    with pytest.raises(DataError, match="Column 'forage' is infinite in the row labelled '3 of frame 1'"):
        streamed(split(data, 30))
    data.loc[33, "forage"] = 0.0
    for formula in ("honey ~ I(1 / forage)", "honey ~ center(1 / forage)"):
        with pytest.raises(DataError, match=r"infinite in the row labelled '3 of the 30 used of frame 1'"):
            streamed(split(data, 30), formula)


@pytest.mark.parametrize("formula", ["honey ~ forage", "honey ~ center(forage)"])
def test_checks_of_numbers_span_chunks(formula):
    data = make()
    data["honey"] = 3.0
    with pytest.raises(DataError, match="has the one value 3"):
        streamed(split(data, 30), formula)
    data = make()
    data["honey"] = np.where(np.arange(60) < 30, 1e9, 1e9 + 2.0**-22)
    with pytest.raises(DataError, match="below what double precision carries"):
        streamed(split(data, 30), formula)


@pytest.mark.parametrize(
    ("formula", "reason"),
    [
        ("honey ~ bs(forage, df=4)", "knots"),
        ("honey ~ cr(forage, df=4)", "knots"),
        ("honey ~ forage.rank()", "chunk by chunk"),
        ("honey ~ center(center(forage))", "inside another"),
    ],
)
def test_what_needs_all_rows_is_refused(formula, reason):
    with pytest.raises(FormulaError, match=reason):
        streamed(split(make(), 30), formula)


def test_memory_is_estimated_before_moments_are_taken():
    with pytest.raises(DataError, match=r"moments of 12 units with 6 columns .* memory_limit = 0\.0 MiB"):
        streamed(split(make(), 30), "honey ~ forage + C(season)", memory_limit=12 * bytes_per_unit(6) - 1)
    with pytest.raises(DataError, match="read so far have 12 units"):
        streamed(split(make(), 30), memory_limit=100)
    assert (
        streamed(split(make(), 30), "honey ~ forage + C(season)", memory_limit=12 * bytes_per_unit(6)).N == 12
    )


def test_repeated_pairs_are_found_across_chunks():
    data = make().assign(season=np.arange(60))
    data.loc[59, ["hive", "season"]] = [0, 0]
    with pytest.raises(DataError, match=r"frame 1: \(hive 0, season 0\)"):
        streamed(split(data, 30), period="season")
    ordered = data.sort_values(["hive", "season"])
    with pytest.raises(DataError, match=r"frame 1: \(hive 0, season 0\)"):
        streamed(split(ordered, 1), period="season", memory_limit=12 * bytes_per_unit(2))


def test_rows_that_are_not_sorted_say_so():
    panel = streamed(split(make(), 30), period="season")
    assert "not sorted by unit and period" in panel.order.reason
    with pytest.raises(OptionError, match="not sorted"):
        next(panel.difference_rows(1))
    assert "not looked for" not in panel.period_note
    many = make().assign(season=np.arange(60)[::-1])
    assert "not looked for" in streamed(split(many, 30), period="season", memory_limit=4000).period_note
    assert "no period given" in streamed(split(make(), 30)).order.reason


def test_data_that_change_between_passes_are_noticed():
    calls = []

    def rows():
        calls.append(1)
        return [make()] if len(calls) < 3 else [make()[:50]]

    panel = streamed(rows)
    with pytest.raises(DataError, match="not what it was"):
        list(panel.blocks_with_codes())


def test_a_stream_is_spooled_and_its_file_removed():
    source = open_chunks(split(make(), 30)())
    path = source._file.paths[0]
    assert Path(path).exists()
    assert "temporary Parquet file" in source.note
    del source
    gc.collect()
    assert not Path(path).exists()


def test_a_stream_that_begins_without_values():
    data = make().astype({"region": object})
    data.loc[:29, "region"] = None
    data.loc[45:, "region"] = None
    parts = split(data, 15, 30, 45)
    panel = streamed(parts(), "honey ~ forage + region")
    assert panel.accounting == build_panel("honey ~ forage + region", data, unit="hive").accounting
    assert panel.n == 15
    assert panel.names == ("Intercept", "region[T.west]", "forage")


def test_a_stream_whose_columns_change():
    parts = [make(), make().drop(columns="region")]
    with pytest.raises(DataError, match="Part 1 of the data has the columns"):
        streamed(iter(parts))
    with pytest.raises(DataError, match="types of part 1"):
        streamed(iter([make(), make().assign(forage="a")]))
    with pytest.raises(DataError, match="Part 0 of the data is a int"):
        streamed(iter([1]))


def test_broken_lines_are_placed(tmp_path):
    path = tmp_path / "rows.csv"
    make().to_csv(path, index=False)
    lines = path.read_text().splitlines()
    lines[45] += ",1,2"
    path.write_text("\n".join(lines))
    with pytest.raises(DataError, match="lines from 42 cannot be read as a table"):
        streamed(path, rows=20)


def test_misspelled_names_and_options():
    with pytest.raises(DataError, match="unit='hve' is not a column"):
        build_streaming_panel("honey ~ forage", split(make(), 30), unit="hve")
    with pytest.raises(FormulaError, match="'forag'"):
        streamed(split(make(), 30), "honey ~ forag")
    with pytest.raises(OptionError, match="rows"):
        streamed(split(make(), 30), rows=0)
    with pytest.raises(DataError, match="cannot be read in chunks"):
        streamed(3)
    with pytest.raises(DataError, match="one unit"):
        streamed(lambda: [make().assign(hive=1)])


def test_the_whole_is_refused_for_the_same_reasons():
    """The messages about numbers are those of the panel in memory."""
    data = make().assign(honey=3.0)
    with pytest.raises(DataError) as whole:
        build_panel("honey ~ forage", data, unit="hive")
    with pytest.raises(DataError) as parts:
        streamed(split(data, 30))
    assert str(parts.value) == str(whole.value)
