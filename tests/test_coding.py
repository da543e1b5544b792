"""What columns mean beyond their names travels with moments from every source, and a mismatch is refused."""

from __future__ import annotations

import dask.dataframe as dd
import duckdb
import numpy as np
import pytest

import mixbridge
from mixbridge import ChunkOptions
from mixbridge.errors import DataError


def bees(first="a", second="b"):
    data = mixbridge.demo.apiaries()
    data["region"] = np.where(data["apiary"].astype("category").cat.codes % 3 == 0, first, second)
    return data


SOURCES = {
    "held": lambda data: (data, {}),
    "chunks": lambda data: (data, {"chunks": ChunkOptions(rows=50)}),
    "Dask": lambda data: (dd.from_pandas(data, npartitions=3), {}),
    "DuckDB": lambda data: (duckdb.from_df(data), {}),
}
FORMULAS = (
    "honey ~ forage + region",
    "honey ~ forage + C(region, Sum)",
    "honey ~ forage + C(season, levels=[2015, 2014, 2016, 2017, 2018, 2019, 2020])",
    "honey ~ center(forage) + region",
    "honey ~ np.log(forage + 10)",
)


def coding(formula, name, data):
    source, options = SOURCES[name](data)
    return mixbridge.crosscheck(formula, source, unit="apiary", **options).moments.coding


@pytest.mark.parametrize("formula", FORMULAS)
def test_the_coding_is_the_same_from_every_source(formula):
    data = bees()
    seasons = sorted(data["season"].unique().tolist())
    formula = formula.replace(
        "[2015, 2014, 2016, 2017, 2018, 2019, 2020]", str([seasons[1], seasons[0], *seasons[2:]])
    )
    found = {name: coding(formula, name, data) for name in SOURCES}
    assert found["held"] is not None
    assert set(found.values()) == {found["held"]}, found


def test_the_coding_tells_levels_contrasts_and_constants_apart():
    data = bees()
    moved = data.assign(forage=data["forage"] + 1.0)
    found = [
        coding("honey ~ forage + region", "chunks", data),
        coding("honey ~ forage + region", "chunks", bees("a", "c")),
        coding("honey ~ forage + C(region, Sum)", "chunks", data),
        coding("honey ~ center(forage) + region", "chunks", data),
        coding("honey ~ center(forage) + region", "chunks", moved),
    ]
    assert len(set(found)) == len(found)
    assert coding("honey ~ forage + region", "chunks", moved) == found[0]


@pytest.mark.parametrize("one", SOURCES)
@pytest.mark.parametrize("two", ["chunks", "Dask", "DuckDB"])
def test_other_reference_levels_under_the_same_names_are_refused(one, two):
    """Both sites have a column region[T.b]; what it is compared with differs."""
    source, options = SOURCES[one](bees("a", "b"))
    here = mixbridge.crosscheck("honey ~ region", source, unit="apiary", **options).moments
    source, options = SOURCES[two](bees("0", "b"))
    there = mixbridge.crosscheck("honey ~ region", source, unit="apiary", **options).moments
    assert here.design == there.design
    with pytest.raises(DataError, match="coded differently"):
        _ = here + there
