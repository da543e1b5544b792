"""Moments and every curve route from arrays in memory, against one least-squares fit of the same matrix."""

from __future__ import annotations

import numpy as np
import pandas as pd

from benchmarks.measure import COLUMNS, described, interleaved
from benchmarks.panels import Panel, panel
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.moments import Moments
from mixbridge.ratio import curve_of
from mixbridge.routes import LEDGER_ROUTES, Fit, differences_of, fit_route

EPS = float(np.finfo(float).eps)
CURVE_ROUTES = tuple(key for key in LEDGER_ROUTES if key != "first_difference")
NO_ORDER = "rows have no order here"


def routes_of(moments: Moments) -> dict[str, Fit]:
    """Fit every route that closed moments give."""
    curve = curve_of(moments)
    return {key: fit_route(curve, key, {}, NO_ORDER) for key in CURVE_ROUTES}


def routes_of_arrays(data: Panel) -> dict[str, Fit]:
    return routes_of(Moments.from_arrays(data.x, data.y, data.codes, data.names))


def arrays(profile: Profile) -> Result:
    """Time the engine on arrays."""
    data = panel(profile.units)
    moments = Moments.from_arrays(data.x, data.y, data.codes, data.names)
    text_keys = data.frame()["unit_text"]
    order = np.lexsort((data.period, data.codes))
    in_order = Panel(*(np.ascontiguousarray(a[order]) for a in (data.x, data.y, data.codes, data.period)))
    rival = "least squares of the same matrix (numpy.linalg.lstsq)"
    all_routes = f"moments and all {len(CURVE_ROUTES)} curve routes"
    tasks = {
        rival: lambda: np.linalg.lstsq(data.x, data.y, rcond=None),
        all_routes: lambda: routes_of_arrays(data),
        "moments alone, unit codes in random order": lambda: Moments.from_arrays(data.x, data.y, data.codes),
        "moments alone, rows sorted by unit": lambda: Moments.from_arrays(
            in_order.x, in_order.y, in_order.codes
        ),
        "all curve routes after the moments": lambda: routes_of(moments),
        "one cross-product X'X": lambda: data.x.T @ data.x,
        "integer codes from text keys (pandas.factorize)": lambda: pd.factorize(text_keys),
        "first differences: products of rows in order": lambda: differences_of(
            data.x, data.y, data.codes, data.period, 1
        ),
    }
    times = interleaved(tasks, profile.rounds)
    base = times[rival].best
    fits = routes_of_arrays(data)
    slope, *_, singular = np.linalg.lstsq(data.x, data.y, rcond=None)
    # both solve the same problem backward stably: they differ by condition times rounding, which grows with sqrt(n)
    condition = float(singular[0] / singular[-1])
    allowed = 64.0 * EPS * condition * np.sqrt(data.y.size)
    difference = float(np.abs(fits["pooled"].beta - slope).max() / np.abs(slope).max())
    return Result(
        problem=f"{data.y.size:,} rows × {data.x.shape[1]} columns, {profile.units:,} units of 1 to 19 rows",
        method=described(profile.rounds),
        table=Table(
            ("task", *COLUMNS, "ratio"),
            tuple((name, *timing.cells(), f"{timing.best / base:.3f}") for name, timing in times.items()),
        ),
        ratios=(Ratio("moments and all curve routes / lstsq", times[all_routes].best / base, 0.6),),
        agreements=(
            Agreement("pooled coefficients", difference, allowed, "64 x rounding x condition x sqrt(n)"),
        ),
        notes=(
            f"Routes: {', '.join(CURVE_ROUTES)}; each with its components, their sampling covariance, coefficients and "
            "their covariance; ml and reml with the certificate.",
            "Text keys must be turned into codes before anything else, and first differences need rows in order: "
            "these costs are not in the first ratio.",
        ),
    )
