"""Threads change neither results nor errors, and end when the caller stops."""

import threading
import time

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from streams import KINDS, identical, in_order, make, source_of, split

import mixbridge
from mixbridge.errors import DataError, OptionError
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.sources.in_order import in_order as worked_on


def helpers():
    return [thread for thread in threading.enumerate() if thread.name.startswith("mixbridge")]


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 30), st.integers(1, 4), st.booleans(), st.randoms(use_true_random=False))
def test_results_come_in_the_order_of_the_items(count, threads, anywhere, random):
    waits = [random.random() * 1e-3 for _ in range(count)]

    def work(item):
        time.sleep(waits[item])
        return item * item

    got = list(worked_on(iter(range(count)), work, threads, anywhere=anywhere))
    assert got == [item * item for item in range(count)]
    assert not helpers()


@pytest.mark.parametrize("threads", [1, 2, 4])
@pytest.mark.parametrize("anywhere", [True, False])
def test_the_first_error_in_order_is_raised(threads, anywhere):
    def items():
        yield from range(6)
        raise KeyError("stream")

    def work(item):
        time.sleep(1e-3 * (5 - item))  # the later, the sooner
        if item in (3, 5):
            raise ValueError(item)
        return item

    results = worked_on(items(), work, threads, anywhere=anywhere)
    assert [next(results) for _ in range(3)] == [0, 1, 2]
    with pytest.raises(ValueError, match="3"):
        next(results)
    with pytest.raises(KeyError, match="stream"):
        list(worked_on(items(), lambda item: item, threads, anywhere=anywhere))
    assert not helpers()


@pytest.mark.parametrize("anywhere", [True, False])
def test_a_caller_that_stops_leaves_no_thread_and_closes_the_stream(anywhere):
    closed = []

    def items():
        try:
            yield from range(1000)
        finally:
            closed.append(True)

    results = worked_on(items(), lambda item: item, 3, anywhere=anywhere)
    assert next(results) == 0
    results.close()
    assert closed == [True]
    assert not helpers()


def test_no_more_items_are_drawn_than_can_wait():
    drawn = []

    def items():
        for item in range(100):
            drawn.append(item)
            yield item

    results = worked_on(items(), lambda item: item, 2, anywhere=True)
    next(results)
    time.sleep(0.05)
    assert len(drawn) <= 5
    results.close()


def test_a_stream_is_drawn_in_the_callers_thread_where_it_has_to_be():
    def items():
        for _ in range(5):
            yield threading.current_thread()

    got = worked_on(items(), lambda thread: (thread, threading.current_thread()), 3, anywhere=False)
    for drawn, worked in got:
        assert drawn is threading.current_thread()
        assert worked is not drawn


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("ordered", [True, False])
def test_results_are_the_same_bit_for_bit(kind, ordered, tmp_path):
    data = in_order(make()) if ordered else make()
    studies = []
    for workers in (1, 2, 3):
        folder = tmp_path / str(workers)
        folder.mkdir()
        options = ChunkOptions(workers=workers, rows=29)
        source = source_of(kind, data, folder)
        formula = "honey ~ forage + np.log(weight)" if ordered else "honey ~ forage * region + center(weight)"
        studies.append(mixbridge.crosscheck(formula, source, unit="hive", period="season", chunks=options))
    for other in studies[1:]:
        assert identical(other.moments, studies[0].moments)
        assert other.panel.accounting == studies[0].panel.accounting
        pd.testing.assert_frame_equal(other.ledger, studies[0].ledger, check_exact=True)
        np.testing.assert_array_equal(
            other.fit("reml", covariance="CR1").covariance_array,
            studies[0].fit("reml", covariance="CR1").covariance_array,
        )


@pytest.mark.parametrize("workers", [1, 2, 3])
def test_the_same_fault_is_found_first(workers):
    data = make()
    data.loc[150, "forage"] = np.inf
    data.loc[250, "honey"] = np.inf
    with pytest.raises(DataError, match=r"forage.*row labelled '10 of frame 7'"):
        mixbridge.crosscheck(
            "honey ~ forage",
            split(data, range(20, 300, 20)),
            unit="hive",
            chunks=ChunkOptions(workers=workers),
        )
    assert not helpers()


@pytest.mark.parametrize(
    "options",
    [
        {"workers": 0},
        {"workers": 1.5},
        {"workers": True},
        {"rows": 0},
        {"memory_limit": -1},
        {"sorted_by_unit": "yes"},
        {"unit_records": 1},
        {"spill": 3},
        {"checkpoint": True},
        {"checkpoint_seconds": -1.0},
        {"checkpoint_seconds": float("nan")},
        {"progress": "bar"},
        {"unit_records": False, "sorted_by_unit": False},
    ],
)
def test_options_are_checked_at_the_door(options):
    with pytest.raises(OptionError):
        ChunkOptions(**options)


def test_two_threads_are_used_where_there_are_two_processors(monkeypatch):
    monkeypatch.setattr("os.cpu_count", lambda: 8)
    assert ChunkOptions().threads == 2
    monkeypatch.setattr("os.cpu_count", lambda: 1)
    assert ChunkOptions().threads == 1
    assert ChunkOptions(workers=5).threads == 5
