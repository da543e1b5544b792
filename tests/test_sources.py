"""Adapters: the same columns from frames, Arrow streams and files."""

import builtins
import decimal
import importlib

import numpy as np
import pandas as pd
import pytest

from mixbridge.errors import DataError
from mixbridge.panel import build_panel
from mixbridge.sources import CsvSource, FrameSource, ParquetSource, Source, open_source, read_table

pa = pytest.importorskip("pyarrow")
pq = pytest.importorskip("pyarrow.parquet")


@pytest.fixture(scope="module")
def frame() -> pd.DataFrame:
    rng = np.random.default_rng(4)
    data = pd.DataFrame(
        {
            "hive": np.repeat(2**53 + np.arange(6), 4),
            "season": np.tile(pd.date_range("2001", periods=4, freq="YS"), 6),
            "honey": rng.normal(size=24),
            "forage": rng.normal(size=24),
            "region": np.repeat(list("aabbcc"), 4),
            "unused": "text",
        }
    )
    data.loc[3, "honey"] = np.nan
    return data


def same(panel, expected):
    assert panel.names == expected.names
    assert panel.accounting == expected.accounting
    assert list(panel.unit_keys) == list(expected.unit_keys)
    np.testing.assert_array_equal(panel.codes, expected.codes)
    np.testing.assert_array_equal(panel.period_ordinals, expected.period_ordinals)
    for got, wanted in zip(panel.matrix(), expected.matrix(), strict=True):
        np.testing.assert_array_equal(got, wanted)


def panel_of(data):
    return build_panel("honey ~ forage + region", data, unit="hive", period="season")


def test_arrow_tables_batches_and_readers(frame):
    table = pa.Table.from_pandas(frame, preserve_index=False)
    expected = panel_of(frame)
    same(panel_of(table), expected)
    same(
        panel_of(pa.RecordBatchReader.from_batches(table.schema, table.to_batches(max_chunksize=5))), expected
    )
    same(panel_of(table.combine_chunks().to_batches()[0]), expected)


def test_a_query_result(frame):
    duckdb = pytest.importorskip("duckdb")
    with duckdb.connect() as connection:
        connection.register("rows", frame)
        same(panel_of(connection.sql("select * from rows")), panel_of(frame))


def test_only_needed_columns_of_a_stream_are_kept(frame):
    source = open_source(pa.Table.from_pandas(frame, preserve_index=False))
    assert list(source.frame(["honey", "hive"]).columns) == ["honey", "hive"]


def test_a_spent_stream_is_said(frame):
    table = pa.Table.from_pandas(frame, preserve_index=False)
    reader = pa.RecordBatchReader.from_batches(table.schema, table.to_batches())
    panel_of(reader)
    with pytest.raises(DataError, match=r"one-shot stream|no rows"):
        panel_of(reader)


def test_integers_with_gaps_do_not_pass_through_floats():
    table = pa.table({"g": pa.array([2**53, 2**53 + 1, None, 2**53 + 1]), "y": [1.0, 2.0, 3.0, 4.0]})
    panel = build_panel("y ~ 1", table, unit="g")
    assert panel.unit_keys.tolist() == [2**53, 2**53 + 1]
    assert panel.accounting.dropped == (("missing unit", "g", 1),)


@pytest.mark.parametrize("kind", ["int8", "int16", "int32", "uint8", "uint16", "uint32", "uint64"])
def test_integer_types_with_gaps(kind):
    table = pa.table({"g": pa.array([5, 6, None, 5], getattr(pa, kind)()), "y": [1.0, 2.0, 3.0, 4.0]})
    assert build_panel("y ~ 1", table, unit="g").unit_keys.tolist() == [5, 6]


def test_other_arrow_types():
    table = pa.table(
        {
            "g": pa.array(["a", "a", "b", "b"]).dictionary_encode(),
            "y": pa.array([decimal.Decimal("1.5"), decimal.Decimal("2.25"), None, decimal.Decimal("4.0")]),
            "b": pa.array([True, None, False, False]),
            "k": pa.array(
                [decimal.Decimal(1), decimal.Decimal(2), decimal.Decimal(3), decimal.Decimal(4)],
                pa.decimal128(20, 0),
            ),
            "nothing": pa.nulls(4),
        }
    )
    panel = build_panel("y ~ k", table, unit="g")
    np.testing.assert_array_equal(panel.matrix()[1], [1.5, 2.25, 4.0])
    np.testing.assert_array_equal(panel.matrix()[0][:, 1], [1, 2, 4])
    assert build_panel("k ~ b", table, unit="g").accounting.dropped == (("missing covariate", "b", 1),)
    with pytest.raises(DataError, match="No row is left"):
        build_panel("y ~ nothing", table, unit="g")


def test_repeated_names_in_a_stream():
    table = pa.table([[1.0, 2.0], [1.0, 3.0], [1, 2]], names=["y", "y", "g"])
    with pytest.raises(DataError, match="2 columns named 'y'"):
        build_panel("y ~ 1", table, unit="g")


def test_a_stream_that_is_no_table():
    class Broken:
        def __arrow_c_stream__(self, requested_schema=None):
            return pa.chunked_array([[1, 2]]).__arrow_c_stream__()

    with pytest.raises(DataError, match="not a table"):
        build_panel("y ~ 1", Broken(), unit="g")


def test_without_pyarrow_the_extra_is_named(frame, monkeypatch):
    class Stream:
        def __arrow_c_stream__(self, requested_schema=None):
            raise AssertionError("not reached")

    def absent(name, package=None):
        if name.startswith("pyarrow"):
            raise ImportError(name)
        return builtins.__import__(name)

    monkeypatch.setattr(importlib, "import_module", absent)
    with pytest.raises(DataError, match=r"mixbridge\[sources\]"):
        build_panel("y ~ 1", Stream(), unit="g")
    assert panel_of(frame).n == 23  # a frame needs no pyarrow


@pytest.mark.parametrize("data", [{"y": [1.0]}, [1, 2], 5, None])
def test_other_things_are_refused(data):
    with pytest.raises(DataError, match="needed is a pandas DataFrame"):
        build_panel("y ~ 1", data, unit="g")


def test_column_names_of_several_levels():
    data = pd.DataFrame([[1, 2]], columns=pd.MultiIndex.from_tuples([("a", "b"), ("a", "c")]))
    with pytest.raises(DataError, match="2 levels"):
        build_panel("y ~ 1", data, unit="g")


def test_adapters_fit_the_protocol(frame, tmp_path):
    frame.to_csv(tmp_path / "d.csv", index=False)
    frame.to_parquet(tmp_path / "d.parquet")
    for source in (
        FrameSource(frame),
        read_table(tmp_path / "d.csv"),
        read_table(tmp_path / "d.parquet"),
        open_source(pa.Table.from_pandas(frame)),
    ):
        assert isinstance(source, Source)
        assert "honey" in source.names


@pytest.mark.parametrize("ending", [".csv", ".tsv", ".csv.gz", ".parquet", ".pq"])
def test_files_give_the_same_panel(frame, tmp_path, ending):
    path = tmp_path / f"apiaries{ending}"
    if ending in (".parquet", ".pq"):
        frame.to_parquet(path)
        assert isinstance(read_table(path), ParquetSource)
    else:
        frame.to_csv(path, index=False, sep="\t" if ending == ".tsv" else ",")
        assert isinstance(read_table(path), CsvSource)
    expected = panel_of(frame)
    same(panel_of(read_table(path)), expected)
    same(panel_of(path), expected)
    same(panel_of(str(path)), expected)


def written(tmp_path, text, encoding="utf-8"):
    path = tmp_path / "table.csv"
    path.write_bytes(text.encode(encoding))
    return path


@pytest.mark.parametrize(
    ("keys", "expected"),
    [
        (["007", "7", "7"], ["007", "7"]),
        (["1", "2", "2"], [1, 2]),
        (["1.0", "2", "2"], [1, 2]),
        ([str(2**53), str(2**53 + 1), str(2**53)], [2**53, 2**53 + 1]),
        (["9" * 25, "9" * 24 + "8", "9" * 25], ["9" * 24 + "8", "9" * 25]),
        (["-0", "0", "0"], ["-0", "0"]),
        (["1.10", "1.1", "1.1"], ["1.1", "1.10"]),
        (
            ["2001-02-01", "2001-01-01", "2001-01-01"],
            [pd.Timestamp("2001-01-01"), pd.Timestamp("2001-02-01")],
        ),
        (["2001-13-01", "2001-01-01", "2001-01-01"], ["2001-01-01", "2001-13-01"]),
        (["é", "b", "b"], ["b", "é"]),
    ],
)
def test_keys_in_text_files_are_not_merged(tmp_path, keys, expected):
    path = written(tmp_path, "g,y\n" + "".join(f"{key},{i}\n" for i, key in enumerate(keys)))
    assert list(build_panel("y ~ 1", read_table(path), unit="g").unit_keys) == expected


def test_fractional_periods_in_text_files(tmp_path):
    path = written(tmp_path, "g,t,y\n1,0.25,1\n1,0.5,2\n2,1.0,4\n")
    assert build_panel("y ~ 1", path, unit="g", period="t").period_ordinals.tolist() == [0, 1, 3]


def test_missing_keys_in_text_files(tmp_path):
    panel = build_panel("y ~ 1", written(tmp_path, "g,y\n1,1\n,2\n2,4\n"), unit="g")
    assert panel.accounting.dropped == (("missing unit", "g", 1),)
    assert panel.unit_keys.tolist() == [1, 2]
    with pytest.raises(DataError, match="No row is left"):
        build_panel("y ~ 1", written(tmp_path, "g,y\n,1\n,2\n"), unit="g")


def test_semicolons_quotes_and_a_byte_order_mark(tmp_path):
    path = written(tmp_path, '"a;b";g;y\n1;1;1\n2;2;5\n', "utf-8-sig")
    panel = build_panel("y ~ Q('a;b')", path, unit="g")
    assert panel.names == ("Intercept", "Q('a;b')")


@pytest.mark.parametrize(
    ("text", "match"),
    [
        ("", "is empty"),
        ("g,y\n", "no rows"),
        ("g,y\n1,2\n1,2,3\n", "cannot be read as a table"),
        ("g,y\n1,2,3\n1,2,3\n", "cannot be read as a table"),
        ("g,y,y\n1,2,3\n", "2 columns named 'y'"),
        ("g,z\n1,2\n", "'y', which is not a column"),
    ],
)
def test_text_files_that_cannot_be_used(tmp_path, text, match):
    with pytest.raises(ValueError, match=match):
        build_panel("y ~ 1", read_table(written(tmp_path, text)), unit="g")


def test_files_that_cannot_be_read(tmp_path):
    with pytest.raises(DataError, match="no file"):
        read_table(tmp_path / "absent.csv")
    with pytest.raises(DataError, match="folder"):
        read_table(tmp_path)
    with pytest.raises(DataError, match="UTF-8"):
        read_table(written(tmp_path, "g,é\n1,2\n", "latin-1"))
    with pytest.raises(DataError, match="cannot be read as a table"):
        build_panel("y ~ 1", written(tmp_path, "g,y\n" + "a,1\n" * 200_000 + "é,2\n", "latin-1"), unit="g")
    broken = tmp_path / "broken.parquet"
    broken.write_bytes(b"no parquet")
    with pytest.raises(DataError, match="Parquet"):
        read_table(broken)
