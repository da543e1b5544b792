"""The benchmarks by name."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from benchmarks import (
    arrays,
    deletions,
    distributed,
    frames,
    growth,
    inference,
    likelihood,
    matching,
    memory,
    resampling,
    streaming,
)
from benchmarks.profiles import Profile
from benchmarks.results import Result


@dataclass(frozen=True, slots=True)
class Problem:
    """One benchmark.

    Attributes
    ----------
    title : str
    run : callable
    """

    title: str
    run: Callable[[Profile], Result]


PROBLEMS = {
    "arrays": Problem("From arrays to every curve route", arrays.arrays),
    "frames": Problem("From a frame and a formula to the ledger", frames.frames),
    "memory": Problem("Peak extra memory", memory.memory),
    "likelihood": Problem("REML with its certificate", likelihood.likelihood),
    "rows": Problem("All routes after the moments, by number of rows", growth.rows),
    "sizes": Problem("All routes after the moments, by number of distinct unit sizes", growth.sizes),
    "inference": Problem("Inference after the moments", inference.inference),
    "matching": Problem("Printed figures against every convention", matching.matching),
    "early": Problem("How often a general optimiser of REML stops early", matching.early),
    "deletions": Problem("Leave-one-unit-out", deletions.deletions),
    "rehearsal": Problem("Rehearsal of a design", deletions.rehearsal),
    "streaming": Problem("Rows in chunks from Parquet files", streaming.streaming),
    "distributed": Problem("Rows on two workers and in a database", distributed.distributed),
    "resampling": Problem("Parametric bootstrap in moment space", resampling.resampling),
}
"""Add a function that takes a profile and returns a result, and a line here."""
