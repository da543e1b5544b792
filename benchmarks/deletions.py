"""Leave-one-unit-out for every unit, and the rehearsal of a design."""

from __future__ import annotations

import numpy as np

from benchmarks.arrays import NO_ORDER
from benchmarks.measure import COLUMNS, described, interleaved
from benchmarks.panels import panel
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.moments import Moments
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import curve_of
from mixbridge.rehearse import Design, Truth, rehearse
from mixbridge.resample.jackknife import leave_one_out
from mixbridge.routes import fit_route

ROUTES = ("swamy_arora", "reml")
REHEARSED = 2_000
UNITS = 200


def deletions(profile: Profile) -> Result:
    """Time all deletions of two routes."""
    rows = panel(profile.units)
    curve = curve_of(Moments.from_arrays(rows.x, rows.y, rows.codes, rows.names))
    products = UnitProducts.from_arrays(rows.x, rows.y, rows.codes, rows.names)
    rounds = max(min(profile.rounds, 3), 1)
    times = interleaved(
        {f"all deletions of {' and '.join(ROUTES)}": lambda: leave_one_out(curve, products, ROUTES)}, rounds
    )
    found = leave_one_out(curve, products, ROUTES)
    at = int(np.argmax(products.sizes))
    keep = rows.codes != at
    codes = np.unique(rows.codes[keep], return_inverse=True)[1]
    again = curve_of(Moments.from_arrays(rows.x[keep], rows.y[keep], codes, rows.names))
    apart = max(
        float(np.abs(found.refits[key].coefficients[at] - fit_route(again, key, {}, NO_ORDER).beta).max())
        for key in ROUTES
    )
    name = next(iter(times))
    return Result(
        problem=f"{curve.n:,} rows × {curve.rank} columns, {curve.units:,} units, each left out once",
        method=described(rounds),
        table=Table(("task", *COLUMNS), ((name, *times[name].cells()),)),
        ratios=(Ratio("all deletions of both routes", times[name].best, 5.0, unit="s"),),
        agreements=(
            Agreement(
                "coefficients without the largest unit, against fitting the other rows",
                apart,
                1e-9,
                "coefficients near one; the two computations share no sums",
            ),
        ),
        notes=("Products of every unit are at hand; taking them is timed among the inference benchmarks.",),
    )


def rehearsal(profile: Profile) -> Result:
    """Time the rehearsal of a design of 200 units by every curve route."""
    replicates = REHEARSED if profile.units >= 10_000 else 200
    design = Design(
        units=UNITS, sizes={3: 100, 8: 100}, covariates={"a": (1.0, 1.0), "b": (1.0, 0.5), "c": (0.0, 1.0)}
    )
    truth = Truth(coefficients={"a": 1.0}, icc=0.4)
    rounds = max(min(profile.rounds, 3), 1)
    times = interleaved(
        {"rehearsal, tables included": lambda: str(rehearse(design, truth, replicates))}, rounds
    )
    name = next(iter(times))
    table = rehearse(design, truth, replicates).intervals
    within = table[(table["route"] == "within") & (table["term"] == "a") & (table["rule"] == "t_residual")]
    error = float(np.sqrt(0.05 * 0.95 / replicates))
    return Result(
        problem=f"{replicates:,} replicates, {UNITS} units of 3 or 8 rows, 4 columns, every curve route",
        method=described(rounds),
        table=Table(("task", *COLUMNS), ((name, *times[name].cells()),)),
        ratios=(Ratio("rehearsal", times[name].best, 5.0, unit="s"),),
        agreements=(
            Agreement(
                "coverage of the within interval against 95%",
                abs(float(within["coverage"].iloc[0]) - 0.95),
                4.0 * error,
                "four Monte Carlo standard errors of an exact rule",
            ),
        ),
        notes=("Cluster-robust rules are not part of a rehearsal.",),
    )
