"""Replicates of a panel under a stated model, every route refitted, in batches on any number of workers."""

from __future__ import annotations

import os
import time
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np

from mixbridge.errors import OptionError
from mixbridge.ratio import Curve
from mixbridge.resample.batch import STATUSES, Estimates, estimate, plan
from mixbridge.resample.moment_draws import BLOCK, Truth, coordinates_of, draw
from mixbridge.routes import Fit

__all__ = ["Progress", "Replicates", "replicate"]

Progress = Callable[[int, int], None]

NUMBERS = 2**18
"""Numbers drawn at one time, about: a few megabytes, so that the work stays in the caches."""

QUIET = 2.0
"""Seconds before progress is reported."""


@dataclass(frozen=True, slots=True, eq=False)
class Replicates:
    """Every route on every replicate.

    Attributes
    ----------
    curve : Curve
        The panel, whose X and sizes all replicates have.
    truth : Truth
        The model drawn from.
    fits : mapping of str to Fit
        Routes refitted, as fitted to the data.
    routes : mapping of str to Estimates
        The same routes on the replicates.
    left_out : mapping of str to str
        Routes that are not refitted, with the reason.
    count, seed : int
    """

    curve: Curve
    truth: Truth
    fits: Mapping[str, Fit]
    routes: Mapping[str, Estimates]
    left_out: Mapping[str, str]
    count: int
    seed: int

    def statuses(self, key: str) -> dict[str, int]:
        """Return how many replicates have each status of a route, and how many optima are not certified."""
        found = self.routes[key]
        counts = np.bincount(found.status, minlength=len(STATUSES))
        return {
            **dict(zip(STATUSES, counts.tolist(), strict=True)),
            "not certified": int((~found.certified).sum()),
        }


def replicate(
    curve: Curve,
    fits: Mapping[str, Fit],
    truth: Truth,
    replicates: int,
    seed: int,
    *,
    workers: int | None = None,
    batch: int | None = None,
    progress: Progress | None = None,
) -> Replicates:
    """Draw replicates and refit every route to each.

    Parameters
    ----------
    curve : Curve
        The panel.
    fits : mapping of str to Fit
        Routes to refit, fitted to this panel, with their conventions.
    truth : Truth
        The model to draw from.
    replicates : int
        How many.
    seed : int
        Replicate i is the same draw whatever the number of replicates, workers and batches.
    workers : int, optional
        Threads; as many as there are processors unless given. Results do not depend on it.
    batch : int, optional
        Replicates in work at one time per worker, rounded up to a multiple of 100; results depend on it by rounding
        only.
    progress : callable, optional
        Called with replicates done and asked for, once two seconds have passed.

    Returns
    -------
    Replicates
    """
    for name, given in (("replicates", replicates), ("workers", workers), ("batch", batch)):
        if given is not None and (isinstance(given, bool) or not isinstance(given, int) or given < 1):
            raise OptionError(f"{name}={given!r} is not allowed; allowed: a positive integer.")
    if isinstance(seed, bool) or not isinstance(seed, int) or seed < 0:
        raise OptionError(f"seed={seed!r} is not allowed; allowed: an integer, at least 0.")
    if truth.coefficients.shape != (curve.rank,):
        raise OptionError(
            f"{truth.coefficients.size} coefficients to draw under for {curve.rank} terms: {curve.names}."
        )
    space = coordinates_of(curve)
    prepared = plan(space, fits, truth.ratio)
    results = {key: Estimates.empty(replicates, curve.rank) for key in prepared.routes}
    wanted = NUMBERS // max(space.order, 1) if batch is None else batch
    step = max(-(-wanted // BLOCK), 1) * BLOCK

    def work(start: int) -> int:
        stop = min(start + step, replicates)
        drawn = draw(space, truth, seed, start, stop)
        for key, found in estimate(prepared, drawn).items():
            found.coefficients[:] += truth.coefficients
            results[key].put(start, found)
        return stop - start

    threads = min(workers or _processors(), -(-replicates // step))
    _run(work, range(0, replicates, step), threads, replicates, progress)
    return Replicates(
        curve=curve,
        truth=truth,
        fits=MappingProxyType(dict(prepared.routes)),
        routes=MappingProxyType({key: found.freeze() for key, found in results.items()}),
        left_out=MappingProxyType(dict(prepared.left_out)),
        count=replicates,
        seed=seed,
    )


def _run(
    work: Callable[[int], int], starts: range, workers: int, total: int, progress: Progress | None
) -> None:
    """Do every batch; an interruption or an error stops the rest."""
    began, done = time.monotonic(), 0
    for count in _completed(work, starts, workers):
        done += count
        if progress is not None and time.monotonic() - began >= QUIET:
            progress(done, total)


def _completed(work: Callable[[int], int], starts: range, workers: int) -> Iterator[int]:
    if workers == 1:
        yield from map(work, starts)
        return
    pool = ThreadPoolExecutor(workers)
    try:
        pending: set[Future[int]] = {pool.submit(work, start) for start in starts}
        while pending:
            done, pending = wait(pending, return_when=FIRST_COMPLETED)
            for each in done:
                yield each.result()
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


def _processors() -> int:
    """Return how many processors this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1
