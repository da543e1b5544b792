"""All routes after the moments: independent of the number of rows, growing with the number of distinct unit sizes."""

from __future__ import annotations

import numpy as np

from benchmarks.arrays import CURVE_ROUTES, routes_of
from benchmarks.measure import COLUMNS, described, interleaved, text
from benchmarks.panels import moments_of_sizes
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table

SIZES = 20
MEAN_SIZE = (SIZES + 1) / 2


def rows(profile: Profile) -> Result:
    """Time all curve routes at growing numbers of rows."""
    moments = {}
    for n in profile.rows:
        counts = np.resize(np.arange(1, SIZES + 1), round(n / MEAN_SIZE))
        moments[n] = moments_of_sizes(counts)
    rounds = max(profile.rounds, 3)
    times = interleaved({str(n): (lambda m=m: routes_of(m)) for n, m in moments.items()}, rounds)
    table = tuple(
        (f"{m.rows:,}", f"{m.units:,}", str(len(m.sizes)), *times[str(n)].cells()) for n, m in moments.items()
    )
    best = {n: times[str(n)].best for n in moments}
    return Result(
        problem=f"{len(CURVE_ROUTES)} routes with covariances, component covariances and certificates; 10 columns, "
        f"{SIZES} distinct unit sizes",
        method=described(rounds),
        table=Table(("rows", "units", "distinct sizes", *COLUMNS), table),
        ratios=(
            Ratio("slowest of these", 1e3 * max(best.values()), 20.0, unit="ms"),
            Ratio(
                f"time at {max(best):,} rows / at {min(best):,} rows",
                best[max(best)] / best[min(best)],
            ),
        ),
        agreements=(complete(moments),),
    )


def sizes(profile: Profile) -> Result:
    """Time all curve routes at growing numbers of distinct unit sizes."""
    moments = {g: moments_of_sizes(np.repeat(np.arange(1, g + 1), 4)) for g in profile.distinct}
    rounds = max(profile.rounds, 3)
    times = interleaved({str(g): (lambda m=m: routes_of(m)) for g, m in moments.items()}, rounds)
    table = tuple((str(g), f"{m.rows:,}", *times[str(g)].cells()) for g, m in moments.items())
    most, least = max(moments), min(moments)
    return Result(
        problem=f"{len(CURVE_ROUTES)} routes as above; 10 columns, "
        "four units of each size from 1 to the number of distinct sizes",
        method=described(rounds),
        table=Table(("distinct sizes", "rows", *COLUMNS), table),
        ratios=(
            Ratio(f"time at {most} sizes / at {least} sizes", times[str(most)].best / times[str(least)].best),
        ),
        agreements=(complete(moments),),
        notes=(f"At {most} sizes: {text(times[str(most)].best)} for all routes together.",),
    )


def complete(moments: dict) -> Agreement:
    """Count the routes that were not fitted or whose certificate is incomplete: a time for less would mean nothing."""
    lacking = 0
    for each in moments.values():
        for fit in routes_of(each).values():
            lacking += fit.status not in ("fitted", "unit variance truncated")
            lacking += fit.certificate is not None and not fit.certificate.excluded
    return Agreement("routes without an estimate or a complete certificate", float(lacking), 0.0, "a count")
