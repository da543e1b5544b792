"""Rows for tests of what is read in chunks, in every form in which they can come, and comparisons with memory."""

import itertools

import numpy as np
import pandas as pd
import pytest

from mixbridge.sources import read_table

pa = pytest.importorskip("pyarrow")
pq = pytest.importorskip("pyarrow.parquet")
ds = pytest.importorskip("pyarrow.dataset")

KINDS = [
    "parquet",
    "folder",
    "partitioned",
    "csv",
    "dataset",
    "reader",
    "table",
    "generator",
    "frame",
    "function",
    "read_table",
]


def make(n=300, seed=5, units=30):
    rng = np.random.default_rng(seed)
    hive = rng.integers(0, units, n)
    data = pd.DataFrame(
        {
            "hive": hive,
            "season": pd.Series(range(n)).groupby(hive).cumcount() + 2001,
            "forage": rng.normal(size=n) + 0.1 * hive,
            "weight": rng.exponential(size=n) + 1.0,
            "frames": rng.integers(1, 4, n),
            "region": rng.choice(["east", "north", "west"], n),
        }
    )
    data["honey"] = 20 + data["forage"] + rng.normal(size=units)[hive] + rng.normal(size=n)
    data.loc[[3, 77], "forage"] = np.nan
    data.loc[[4, 50], "honey"] = np.nan
    data.loc[10, "weight"] = -1.0
    return data


def in_order(data):
    return data.sort_values(["hive", "season"], ignore_index=True)


def split(data, cuts):
    edges = [0, *sorted(cuts), len(data)]
    return lambda: (data.iloc[a:b] for a, b in itertools.pairwise(edges))


def source_of(kind, data, folder, rows=41):
    """Return the rows as a source; parts have `rows` rows or so."""
    table = pa.Table.from_pandas(data, preserve_index=False)
    cuts = range(rows, len(data), rows)
    if kind in ("parquet", "read_table"):
        pq.write_table(table, folder / "rows.parquet", row_group_size=rows)
        return folder / "rows.parquet" if kind == "parquet" else read_table(folder / "rows.parquet")
    if kind in ("folder", "dataset"):
        step = -(-len(data) // 4)
        for i in range(4):
            pq.write_table(table.slice(step * i, step), folder / f"part-{i}.parquet", row_group_size=rows)
        return folder if kind == "folder" else ds.dataset(folder)
    if kind == "partitioned":
        flavour = ds.partitioning(pa.schema([("frames", pa.int64())]), flavor="hive")
        ds.write_dataset(table, folder, format="parquet", partitioning=flavour)
        return folder
    if kind == "csv":
        data.to_csv(folder / "rows.csv", index=False)
        return folder / "rows.csv"
    return {
        "reader": lambda: pa.RecordBatchReader.from_batches(
            table.schema, table.to_batches(max_chunksize=rows)
        ),
        "table": lambda: table,
        "generator": split(data, cuts),
        "frame": lambda: data,
        "function": lambda: split(data, cuts),
    }[kind]()


def same_closed(got, wanted):
    """Compare closed moments: both add the same products in another order, each sum with a relative error of at most
    n eps; columns are standardised, so that every product is of the order of the number of rows."""
    assert (got.design, got.constant, got.outcome) == (wanted.design, wanted.constant, wanted.outcome)
    np.testing.assert_array_equal(got.sizes, wanted.sizes)
    np.testing.assert_array_equal(got.counts, wanted.counts)
    np.testing.assert_array_equal(got.scale, wanted.scale)
    allowed = max(1e-12, 4 * wanted.rows * np.finfo(float).eps) * wanted.rows
    reach = np.append(1.0, 1.0 + wanted.magnitude / wanted.scale)
    gap = np.append(0.0, (got.shift - wanted.shift) / wanted.scale)
    assert np.abs(gap / reach).max() < 1e-13
    move = np.eye(len(gap))
    move[0] += gap  # the two are measured from shifts that differ by rounding
    for ours, theirs in ((got.within, wanted.within), (got.between @ move, wanted.between)):
        products = [np.swapaxes(f, -1, -2) @ f for f in (ours, theirs)]
        assert np.abs(products[0] - products[1]).max() < allowed


def same_studies(got, wanted, tolerance=1e-9):
    """Compare all that is shown of every route, relative to the standard error of its coefficient: the search for the
    ratio stops at 1e-12, and rounding is amplified by the condition of a design that is far below 1e3 here."""
    a, b = got.ledger, wanted.ledger
    assert a[["term", "route", "reason"]].equals(b[["term", "route", "reason"]])
    scale = np.abs(b["estimate"]).fillna(0.0) + b["standard_error"].fillna(0.0) + 1e-300
    for name in ("estimate", "standard_error", "lower", "upper"):
        np.testing.assert_allclose(a[name] / scale, b[name] / scale, rtol=0, atol=tolerance)
    one, two = got.components, wanted.components
    assert one["status"].equals(two["status"])
    for name in ("unit_variance", "idiosyncratic_variance"):
        np.testing.assert_allclose(one[name], two[name], rtol=tolerance, atol=tolerance)


def identical(one, two):
    """Whether two closed moments are the same bit for bit."""
    return all(
        np.array_equal(getattr(one, name), getattr(two, name))
        if isinstance(getattr(one, name), np.ndarray)
        else getattr(one, name) == getattr(two, name)
        for name in one.__slots__
    )
