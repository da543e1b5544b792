"""Parametric bootstrap in moment space: every curve route, by number of rows, and against fitting one by one."""

from __future__ import annotations

import time
from collections.abc import Mapping

import numpy as np

from benchmarks.arrays import CURVE_ROUTES, NO_ORDER
from benchmarks.measure import COLUMNS, described, interleaved, text
from benchmarks.panels import moments_of_sizes
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.ratio import Curve, curve_of
from mixbridge.resample import Replicates, replicate, truth_of
from mixbridge.resample.moment_draws import coordinates_of, draw, moments_of
from mixbridge.routes import Fit, fit_route

LARGEST = 19
WORKERS = 2
SEED = 7
ONE_BY_ONE = 50


def resampling(profile: Profile) -> Result:
    """Time replicates of REML and of all curve routes at two numbers of units."""
    replicates = 10_000 if profile.units >= 10_000 else 200
    panels = {units: panel_of(units) for units in (max(profile.units // 100, 100), profile.units)}
    curve, fits = panels[profile.units]
    names = {units: f"{curve.n:,} rows, {units:,} units" for units, (curve, _) in panels.items()}
    tasks = {}
    for units, (here, routes) in panels.items():
        tasks[f"REML, {names[units]}"] = lambda c=here, f=routes: run(c, {"reml": f["reml"]}, f, replicates)
        tasks[f"{len(routes)} routes, {names[units]}"] = lambda c=here, f=routes: run(c, f, f, replicates)
    rounds = max(profile.rounds, 3)
    times = interleaved(tasks, rounds)
    clock = {name: min(timing.clock) for name, timing in times.items()}
    large, small = (f"REML, {names[units]}" for units in (profile.units, min(panels)))
    whole = f"{len(fits)} routes, {names[profile.units]}"
    found = run(curve, fits, fits, replicates)
    slow, worst = one_by_one(curve, found)
    lost = sum(found.statuses(key)["not certified"] for key in ("ml", "reml"))
    return Result(
        problem=f"{replicates:,} replicates under the REML fit; {len(curve.sizes)} distinct unit sizes, {curve.rank} "
        f"columns, {WORKERS} workers",
        method=f"{described(rounds)}; targets are on the clock, with both workers; one by one: {ONE_BY_ONE} "
        "replicates, their moments already there",
        table=Table(
            ("task", *COLUMNS, "per replicate, on the clock"),
            (
                *((name, *timing.cells(), text(clock[name] / replicates)) for name, timing in times.items()),
                ("REML one by one, with its certificate", *(text(slow * ONE_BY_ONE),) * 3, text(slow)),
            ),
        ),
        ratios=(
            Ratio("REML with certified optima, on the clock", clock[large], 1.0, unit="s"),
            Ratio("all routes, on the clock", clock[whole], 4.0, unit="s"),
            Ratio("optima not certified, ML and REML", float(lost), 0.0),
            Ratio(
                "processor time at the larger number of rows / at the smaller",
                times[large].best / times[small].best,
            ),
            Ratio(
                "one by one / in batches, processor time per replicate", slow * replicates / times[large].best
            ),
        ),
        agreements=(
            Agreement(
                "ratio by REML, one by one against in batches",
                worst,
                1e-9,
                "both solve for a slope of zero far below 1e-9 of its parts",
            ),
        ),
        notes=(
            f"Routes: {', '.join(fits)}; each with components, ratio, coefficients and model-based standard errors of "
            "every replicate. No row is drawn: a replicate is a draw of the moments.",
        ),
    )


def panel_of(units: int) -> tuple[Curve, dict[str, Fit]]:
    curve = curve_of(moments_of_sizes(np.resize(np.arange(1, LARGEST + 1), units)))
    return curve, {key: fit_route(curve, key, {}, NO_ORDER) for key in CURVE_ROUTES}


def run(curve: Curve, routes: Mapping[str, Fit], fits: Mapping[str, Fit], replicates: int) -> Replicates:
    return replicate(curve, routes, truth_of(fits["reml"]), replicates, SEED, workers=WORKERS)


def one_by_one(curve: Curve, found: Replicates) -> tuple[float, float]:
    """Fit the first replicates one at a time; return seconds each and the largest relative difference of the ratio."""
    space = coordinates_of(curve)
    draws = draw(space, found.truth, SEED, 0, ONE_BY_ONE)
    moments = [moments_of(space, found.truth, draws, i) for i in range(ONE_BY_ONE)]
    start = time.process_time()
    ratios = np.array([fit_route(curve_of(each), "reml", {}, NO_ORDER).ratio for each in moments])
    spent = (time.process_time() - start) / ONE_BY_ONE
    ours = found.routes["reml"].ratio[:ONE_BY_ONE]
    return spent, float((np.abs(ratios - ours) / np.maximum(ratios, 1e-3)).max())
