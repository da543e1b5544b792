"""Dask DataFrames against the same rows in one frame: every scheduler, several processes, a worker killed."""

import functools
import itertools
import logging
import os
import signal
import subprocess
import sys
import threading
import time

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mixbridge import crosscheck
from mixbridge.errors import DataError, FormulaError, OptionError
from mixbridge.routes import LEDGER_ROUTES

dask = pytest.importorskip("dask")
dd = pytest.importorskip("dask.dataframe")
pytest.importorskip("pyarrow")

from mixbridge.moments import distributed as on_workers  # noqa: E402  (after the packages it needs)

FORMULA = "honey ~ forage * region + C(frames) + np.log(weight)"
LEARNING = "honey ~ standardize(forage) + center(np.log(weight)) + C(frames, Sum) + C(center(weight) > 0)"
CURVE = [key for key in LEDGER_ROUTES if key != "first_difference"]
EPS = np.finfo(float).eps


def make(n=300, seed=5):
    rng = np.random.default_rng(seed)
    hive = rng.integers(0, 30, n)
    data = pd.DataFrame(
        {
            "hive": hive,
            "season": pd.Series(range(n)).groupby(hive).cumcount() + 2001,
            "forage": rng.normal(size=n) + 0.1 * hive,
            "altitude": 100.0 + 10 * (hive % 7),
            "weight": rng.exponential(size=n) + 1.0,
            "frames": rng.integers(1, 4, n),
            "region": rng.choice(["east", "north", "west"], n),
        }
    )
    data["honey"] = 20 + data["forage"] + rng.normal(size=30)[hive] + rng.normal(size=n)
    data.loc[[3, 77], "forage"] = np.nan
    data.loc[[4, 50], "honey"] = np.nan
    data.loc[10, "weight"] = -1.0
    return data


def parted(data, cuts):
    """A Dask DataFrame whose partitions are cut where asked, empty ones among them."""
    edges = [0, *sorted(cuts), len(data)]
    pieces = [data.iloc[a:b] for a, b in itertools.pairwise(edges)]
    return dd.from_map(lambda number: pieces[number], range(len(pieces)), meta=data.iloc[:0])


def in_pieces(data, count=7):
    return parted(data, np.linspace(0, len(data), count + 1).astype(int)[1:-1])


@pytest.fixture
def small_buckets(monkeypatch):
    monkeypatch.setattr(on_workers, "BUCKET_BYTES", 1500)


def same_study(got, wanted, allowed=1e-10):
    """Coefficients and components to 1e-10 of the largest: the search for the ratio stops at 1e-12."""
    panel, whole = got.panel, wanted.panel
    assert panel.accounting == whole.accounting
    assert (panel.names, panel.outcome, panel.n, panel.N) == (whole.names, whole.outcome, whole.n, whole.N)
    assert dict(panel.terms) == dict(whole.terms)
    np.testing.assert_array_equal(got.moments.sizes, wanted.moments.sizes)
    np.testing.assert_array_equal(got.moments.counts, wanted.moments.counts)
    assert got.moments.constant == wanted.moments.constant
    for key in CURVE:
        ours, theirs = got.fit(key), wanted.fit(key)
        assert ours.status == theirs.status
        np.testing.assert_allclose(
            ours.beta, theirs.beta, rtol=0, atol=allowed * np.nanmax(np.abs(theirs.beta))
        )
        np.testing.assert_allclose(ours.ratio, theirs.ratio, rtol=1e2 * allowed, atol=1e2 * allowed)


@settings(max_examples=15)
@given(
    st.randoms(use_true_random=False), st.sets(st.integers(0, 300), max_size=9), st.sampled_from([400, 2**25])
)
def test_same_as_in_memory_however_the_rows_lie(random, cuts, bucket_bytes):
    data = make()
    order = list(range(len(data)))
    random.shuffle(order)
    shuffled = data.iloc[order]
    with pytest.MonkeyPatch.context() as patch, dask.config.set(scheduler="synchronous"):
        patch.setattr(on_workers, "BUCKET_BYTES", bucket_bytes)
        got = crosscheck(FORMULA, parted(shuffled, cuts), unit="hive")
    same_study(got, crosscheck(FORMULA, data, unit="hive"))


@pytest.mark.parametrize("formula", [LEARNING, "honey ~ 0 + region + forage + altitude", "honey ~ forage"])
def test_transforms_and_levels_are_learned_over_all_partitions(formula, small_buckets):
    data = make()
    same_study(crosscheck(formula, in_pieces(data), unit="hive"), crosscheck(formula, data, unit="hive"))


def test_the_same_bits_on_every_scheduler(small_buckets):
    records = []
    for scheduler in ("synchronous", "threads"):
        with dask.config.set(scheduler=scheduler):
            records.append(crosscheck(LEARNING, in_pieces(make()), unit="hive").moments.to_record())
    assert records[0]["checksum"] == records[1]["checksum"]


def test_columns_constant_within_units_stay_so(small_buckets):
    data = make().assign(altitude=lambda d: 1e9 + d["altitude"] / 3)
    got = crosscheck("honey ~ forage + altitude", in_pieces(data), unit="hive")
    assert (got.moments.within[:, got.moments.columns.index("altitude")] == 0).all()
    same_study(got, crosscheck("honey ~ forage + altitude", data, unit="hive"))


def test_ill_conditioned_rows_are_read_again(small_buckets):
    """Within columns that differ by 1e-5 of their spread, at an offset: the condition kappa is about 1e5, where
    products would keep 16 - 10 digits. Rows at an offset of 1e6 are rounded at 1e-10 of their spread, the same
    rounding for both; each QR is backward stable, so both coefficients are within a small multiple of
    n eps kappa of those rows."""
    rng = np.random.default_rng(2)
    data = make()
    data["near"] = 1e6 + data["forage"] + 1e-5 * rng.normal(size=len(data))
    formula = "honey ~ forage + near"
    got = crosscheck(formula, in_pieces(data), unit="hive")
    wanted = crosscheck(formula, data, unit="hive")
    assert "QR" in got.moments.note
    assert "once more" in got.panel.source_note
    assert "QR" in wanted.moments.note
    same_study(got, wanted, allowed=300 * EPS * 1e5)


KEYS = {
    "wide": lambda hive: hive + 2**62,
    "unsigned": lambda hive: hive.astype("uint64") + np.uint64(2**63),
    "text": lambda hive: "hive " + hive.astype(str),
    "nullable": lambda hive: hive.astype("Int64").where(hive != 3),
    "whole floats": lambda hive: hive.astype(float).where(hive != 3),
    "dates": lambda hive: pd.Timestamp("2001-01-01") + pd.to_timedelta(hive, unit="D"),
    "categories": lambda hive: pd.Categorical.from_codes(
        hive.clip(0, 28), [*"zyxwvutsrqponmlkjihgfedcba012"]
    ),
}


@pytest.mark.parametrize("kind", KEYS)
def test_no_two_keys_become_one(kind, small_buckets):
    data = make()
    data["hive"] = KEYS[kind](data["hive"])
    with dask.config.set({"scheduler": "synchronous", "dataframe.convert-string": False}):
        got = crosscheck("honey ~ forage", in_pieces(data), unit="hive")
    same_study(got, crosscheck("honey ~ forage", data, unit="hive"))


def test_keys_whose_type_depends_on_the_partition_meet(small_buckets):
    """Unsigned integers are plain 64-bit ones where they fit and Python's where a partition holds larger ones."""
    data = make()
    data["hive"] = data["hive"].astype("uint64") + np.where(data["hive"] > 20, np.uint64(2**63), np.uint64(0))
    data = data.sort_values("hive", kind="stable").reset_index(drop=True)
    got = crosscheck("honey ~ forage", in_pieces(data), unit="hive")
    same_study(got, crosscheck("honey ~ forage", data, unit="hive"))


def test_periods_are_checked_and_have_no_order(small_buckets):
    data = make()
    study = crosscheck("honey ~ forage", in_pieces(data), unit="hive", period="season")
    assert "order of the rows" in study.fit("first_difference").status
    again = pd.concat([data, data.iloc[[200]]])
    with pytest.raises(DataError, match="repeat a pair of unit and period"):
        crosscheck("honey ~ forage", in_pieces(again), unit="hive", period="season")


def test_what_needs_rows_says_what_to_do():
    study = crosscheck("honey ~ forage", in_pieces(make()), unit="hive")
    assert study.unit_moments is None
    with pytest.raises(DataError, match="chunks=True"):
        study.panel.matrix()
    with pytest.raises(DataError, match="chunks=True"):
        study.fit("reml", covariance="CR1")


def test_streaming_the_partitions_answers_what_needs_rows():
    data = make()
    study = crosscheck(FORMULA, in_pieces(data), unit="hive", chunks=True)
    whole = crosscheck(FORMULA, data, unit="hive")
    assert "one after the other" in study.panel.source_note
    ours, theirs = (s.fit("reml", covariance="CR1").standard_errors for s in (study, whole))
    np.testing.assert_allclose(
        ours, theirs, rtol=1e-9
    )  # as the coefficients, times the condition of the rows
    same_study(study, whole)


def test_unusable_data_say_so():
    data = make()
    scale = 2.0
    with pytest.raises(FormulaError, match="'scale'"):
        crosscheck("honey ~ I(forage * scale)", in_pieces(data), unit="hive")
    assert scale
    with pytest.raises(FormulaError, match="'forrage'"):
        crosscheck("honey ~ forrage", in_pieces(data), unit="hive")
    with pytest.raises(FormulaError, match="all rows at once"):
        crosscheck("honey ~ bs(forage, df=4)", in_pieces(data), unit="hive")
    with pytest.raises(DataError, match="not a column"):
        crosscheck("honey ~ forage", in_pieces(data), unit="hives")
    with pytest.raises(DataError, match="one unit"):
        crosscheck("honey ~ forage", in_pieces(data.assign(hive=1)), unit="hive")
    with pytest.raises(DataError, match="holds text"):
        crosscheck("region ~ forage", in_pieces(data), unit="hive")
    endless = data.assign(forage=data["forage"].where(data.index != 60, np.inf))
    with pytest.raises(DataError, match="partition 1"):
        crosscheck("honey ~ forage", in_pieces(endless), unit="hive")
    with pytest.raises(DataError, match="fractions"):
        crosscheck("honey ~ forage", in_pieces(data.assign(hive=data["hive"] / 2)), unit="hive")
    with pytest.raises(DataError, match="refused"):
        crosscheck("honey ~ forage", in_pieces(data), unit="hive", incomplete_rows="refuse")
    with pytest.raises(OptionError, match="compute"):
        crosscheck("honey ~ forage", in_pieces(data), unit="hive", chunks=False)
    with pytest.raises(DataError, match="No row is left"):
        crosscheck("honey ~ forage", in_pieces(data.assign(honey=np.nan)), unit="hive")


def test_a_column_of_another_kind_in_one_partition():
    data = make()
    pieces = [data.iloc[:150], data.iloc[150:].assign(forage="much")]
    mixed = dd.from_delayed([dask.delayed(piece) for piece in pieces], meta=data.iloc[:0], verify_meta=False)
    with pytest.raises(DataError, match="partition 1 the column 'forage' holds values of the kind text"):
        crosscheck("honey ~ forage", mixed, unit="hive")


def test_rows_that_change_between_passes_are_noticed():
    data, calls = make(), itertools.count()

    def piece(number):
        return data.iloc[150 * number : 150 * (number + 1) - (number == 1 and next(calls) > 0)]

    with dask.config.set(scheduler="synchronous"), pytest.raises(DataError, match="number of rows differs"):
        crosscheck("honey ~ region", dd.from_map(piece, range(2), meta=data.iloc[:0]), unit="hive")


def test_importing_the_package_does_not_import_dask():
    code = "import sys, mixbridge; sys.exit(any(name in sys.modules for name in ('dask', 'distributed', 'duckdb')))"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def slow_piece(number, data, log, pause):
    """A partition that leaves a mark when it is read, and takes its time."""
    with open(log, "a", encoding="utf-8") as file:  # appending a short line is atomic
        file.write(f"{number} {os.getpid()}\n")
    time.sleep(pause)
    return data.iloc[30 * number : 30 * (number + 1)]


def kill_when(log, marks, stop):
    """Kill the worker that wrote the last mark as soon as there are so many."""
    while not stop.is_set():
        lines = log.read_text().splitlines() if log.exists() else []
        if len(lines) >= marks:
            victim = int(lines[-1].split()[1])
            os.kill(victim, signal.SIGKILL)
            log.with_suffix(".killed").write_text(str(victim))
            return
        time.sleep(0.005)


@pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="this system has no SIGKILL")
def test_several_processes_and_a_worker_killed_while_it_works(tmp_path, small_buckets):
    distributed = pytest.importorskip("distributed", reason="needs the package distributed")
    data = make()
    # LEARNING: states, states again without the row dropped, a book, moments: four times ten partitions; the other one
    # takes moments at the first look
    runs = [
        ("killed while learning", LEARNING, 40, 13),
        ("killed while moments are taken", LEARNING, 40, 37),
        ("killed while units are merged", "honey ~ forage + weight", 10, 10),
    ]
    records = {LEARNING: set(), runs[-1][1]: set()}
    whole = {formula: crosscheck(formula, data, unit="hive") for formula in records}
    with (
        distributed.LocalCluster(
            n_workers=2,
            threads_per_worker=1,
            processes=True,
            dashboard_address=None,
            silence_logs=logging.CRITICAL,
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        assert len(set(client.run(os.getpid).values()) - {os.getpid()}) == 2
        for name, formula, least, marks in runs:
            log, stop = tmp_path / f"{name}.log", threading.Event()
            client.wait_for_workers(2, timeout=120)
            reading = functools.partial(slow_piece, data=data, log=log, pause=0.08)
            frame = dd.from_map(reading, range(10), meta=data.iloc[:0])
            killer = threading.Thread(target=kill_when, args=(log, marks, stop))
            killer.start()
            try:
                study = crosscheck(formula, frame, unit="hive")
            finally:
                stop.set()
                killer.join()
            reads = len(log.read_text().splitlines())
            assert log.with_suffix(".killed").exists()
            assert reads > least  # what was lost was read again
            same_study(study, whole[formula])
            records[formula].add(study.moments.to_record()["checksum"])
    with dask.config.set(scheduler="synchronous"):
        for formula, found in records.items():
            alone = crosscheck(formula, in_pieces(data, 10), unit="hive")
            assert found == {alone.moments.to_record()["checksum"]}
