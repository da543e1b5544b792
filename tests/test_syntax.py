"""Only one thread at a time parses, whatever is read in however many threads."""

from __future__ import annotations

import ast
import threading
import time
from pathlib import Path

import numpy as np
import pandas as pd
import patsy
import pytest

import mixbridge
from mixbridge import ChunkOptions
from mixbridge.panel import syntax


@pytest.fixture
def watched(monkeypatch):
    """Count parsers at work, and the most at one time."""
    inside, most, parsed = [], [], []
    original = ast.parse

    def parse(*given, **named):
        inside.append(threading.get_ident())
        most.append(len(set(inside)))
        parsed.append(threading.current_thread().name)
        time.sleep(1e-4)
        try:
            return original(*given, **named)
        finally:
            inside.remove(threading.get_ident())

    monkeypatch.setattr(ast, "parse", parse)
    syntax.tree_of.cache_clear()
    yield most, parsed
    syntax.tree_of.cache_clear()


def rows():
    rng = np.random.default_rng(4)
    data = pd.DataFrame({"unit": np.arange(600) % 40, "x": rng.gamma(2.0, size=600), "g": list("abc") * 200})
    data["y"] = data["x"] + rng.normal(size=600)
    return data


FORMULAS = ("y ~ np.log(x) + C(g)", "y ~ center(x) + np.exp(-x)", "y ~ standardize(np.log(x)) + x:g")


@pytest.mark.parametrize("formula", FORMULAS)
def test_chunks_in_several_threads(watched, formula):
    most, parsed = watched
    frames = [part for _, part in rows().groupby(np.arange(600) // 20)]
    mixbridge.crosscheck(formula, lambda: iter(frames), unit="unit", chunks=ChunkOptions(workers=4))
    assert max(most) == 1
    assert len(parsed) < 40  # not for each of the thirty chunks and each factor anew


@pytest.mark.parametrize("formula", FORMULAS)
def test_partitions_in_several_threads(watched, formula):
    dask = pytest.importorskip("dask")
    frame = pytest.importorskip("dask.dataframe").from_pandas(rows(), npartitions=12)
    most, _ = watched
    with dask.config.set(scheduler="threads", num_workers=4):
        mixbridge.crosscheck(formula, frame, unit="unit")
    assert max(most) == 1


def test_the_two_places_wait_for_each_other(watched):
    most, parsed = watched
    environment = patsy.EvalEnvironment.capture()

    def work(number):
        for at in range(20):
            syntax.tree_of(f"x + {number} + {at}")
            syntax.prepare(patsy.EvalFactor(f"center(x + {number})"), {}, environment)

    threads = [threading.Thread(target=work, args=(number,)) for number in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(parsed) >= 160
    assert max(most) == 1


def test_nobody_else_parses():
    package = Path(mixbridge.__file__).parent
    for file in package.rglob("*.py"):
        text = file.read_text(encoding="utf-8")
        if file.name != "syntax.py":
            assert "ast.parse(" not in text, file
            assert ".memorize_passes_needed(" not in text, file
