"""Replicates under a truth: every route refitted, every test computed, batch by batch."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import OptionError
from mixbridge.ratio import Curve
from mixbridge.rehearse.assumption_tests import Critical, critical_values, statistics
from mixbridge.rehearse.design import Rows
from mixbridge.rehearse.rows import draw_rows, row_space
from mixbridge.rehearse.truth import Model
from mixbridge.resample.batch import Estimates, estimate, plan
from mixbridge.resample.moment_draws import BLOCK, Coordinates, Draws, coordinates_of, draw
from mixbridge.resample.replicates import NUMBERS, QUIET, Progress
from mixbridge.routes import Fit

__all__ = ["Runs", "check_count", "run"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Runs:
    """Estimates and statistics on every replicate.

    Attributes
    ----------
    curve : Curve
    model : Model
    fits : mapping of str to Fit
        Routes refitted.
    routes : mapping of str to Estimates
    tests : mapping of str to Critical
    statistics : mapping of str to ndarray of shape (R,)
    left_out : mapping of str to str
        Routes not refitted, with the reason.
    count, seed : int
    """

    curve: Curve
    model: Model
    fits: Mapping[str, Fit]
    routes: Mapping[str, Estimates]
    tests: Mapping[str, Critical]
    statistics: Mapping[str, FloatArray]
    left_out: Mapping[str, str]
    count: int
    seed: int


def check_count(name: str, value: object, least: int) -> None:
    """Refuse what is not an integer, or is too small."""
    if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or value < least:
        raise OptionError(f"{name}={value!r} is not allowed; allowed: an integer, at least {least}.")


def run(
    curve: Curve,
    fits: Mapping[str, Fit],
    model: Model,
    replicates: int,
    seed: int,
    *,
    level: float = 0.05,
    rows: Rows | None = None,
    progress: Progress | None = None,
) -> Runs:
    """Draw replicates and refit.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
    model : Model
    replicates, seed : int
        Replicate i is the same whatever the number of replicates.
    level : float
        Of the tests.
    rows : Rows, optional
        Draw by rows of these; in moment space unless given.
    progress : callable, optional
        Called with replicates done and asked for, once two seconds have passed.

    Returns
    -------
    Runs
    """
    check_count("replicates", replicates, 1)
    check_count("seed", seed, 0)
    by_rows = None if rows is None else row_space(curve, rows)
    space = coordinates_of(curve) if by_rows is None else by_rows.space
    prepared = plan(space, fits, model.normal.ratio)
    tests = critical_values(curve, prepared.routes, level)
    results = {key: Estimates.empty(replicates, curve.rank) for key in prepared.routes}
    values = {name: np.full(replicates, np.nan) for name in tests}
    lift = _lift(space, model)
    step = max(NUMBERS // max(space.order, 1) // BLOCK, 1) * BLOCK
    began = time.monotonic()
    for start in range(0, replicates, step):
        stop = min(start + step, replicates)
        if by_rows is None:
            drawn = draw(space, model.normal, seed, start, stop)
        else:
            drawn = draw_rows(by_rows, model, seed, start, stop)
        drawn = Draws(drawn.e + lift, drawn.rest)
        found = estimate(prepared, drawn)
        for name, part in statistics(space, drawn, found, tests).items():
            values[name][start:stop] = part
        for key, estimates in found.items():
            estimates.coefficients[:] += model.normal.coefficients
            results[key].put(start, estimates)
        if progress is not None and time.monotonic() - began >= QUIET:
            progress(stop, replicates)
    for part in values.values():
        part.setflags(write=False)
    return Runs(
        curve=curve,
        model=model,
        fits=MappingProxyType(dict(prepared.routes)),
        routes=MappingProxyType({key: found.freeze() for key, found in results.items()}),
        tests=MappingProxyType(tests),
        statistics=MappingProxyType(values),
        left_out=MappingProxyType(dict(prepared.left_out)),
        count=int(replicates),
        seed=int(seed),
    )


def _lift(space: Coordinates, model: Model) -> FloatArray:
    """Return the part of the errors that unit means explain: X is fixed, so it is the same in every replicate."""
    lift = np.zeros(space.order)
    if model.correlated:
        at = space.within_order
        lift[at:] = space.x[at:] @ np.linalg.solve(space.to_beta, model.contextual)
    return lift
