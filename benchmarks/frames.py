"""`crosscheck` from a frame and a formula, against ordinary least squares from the same frame and formula."""

from __future__ import annotations

import numpy as np
import statsmodels.formula.api as smf

from benchmarks.arrays import EPS
from benchmarks.measure import COLUMNS, described, interleaved
from benchmarks.panels import panel
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.study import crosscheck


def frames(profile: Profile) -> Result:
    """Time the public call, ledger included."""
    data = panel(profile.units)
    frame, formula = data.frame(), data.formula
    rival = "ordinary least squares (statsmodels, formula)"
    ours = "crosscheck and its ledger, integer unit keys"
    ordered = "the same, integer unit keys, period given (first differences too)"
    tasks = {
        rival: lambda: smf.ols(formula, frame).fit(),
        ours: lambda: crosscheck(formula, frame, unit="unit").ledger,
        "the same, text unit keys": lambda: crosscheck(formula, frame, unit="unit_text").ledger,
        ordered: lambda: crosscheck(formula, frame, unit="unit", period="period").ledger,
    }
    times = interleaved(tasks, profile.frame_rounds)
    base = times[rival].best
    fitted = smf.ols(formula, frame).fit()
    ledger = crosscheck(formula, frame, unit="unit").ledger
    mine = ledger[ledger["route"] == "pooled"].set_index("term")
    condition = float(np.linalg.cond(data.x))
    allowed = 64.0 * EPS * condition**2 * np.sqrt(data.y.size)
    gaps = [
        ("pooled coefficients", mine["estimate"].to_numpy(), fitted.params[mine.index].to_numpy()),
        ("pooled standard errors", mine["standard_error"].to_numpy(), fitted.bse[mine.index].to_numpy()),
    ]
    return Result(
        problem=f"{data.y.size:,} rows, {data.x.shape[1] - 1} covariates and a constant, "
        f"{profile.units:,} units of 1 to 19 rows",
        method=described(profile.frame_rounds),
        table=Table(
            ("task", *COLUMNS, "ratio"),
            tuple((name, *timing.cells(), f"{timing.best / base:.3f}") for name, timing in times.items()),
        ),
        ratios=(
            Ratio("crosscheck with ledger / formula OLS", times[ours].best / base, 0.5),
            Ratio("the same with a period, first differences included", times[ordered].best / base),
        ),
        agreements=tuple(
            Agreement(
                what,
                float(np.abs(a - b).max() / np.abs(b).max()),
                allowed,
                "64 x rounding x condition^2 x sqrt(n): the rival solves with a pseudo-inverse",
            )
            for what, a, b in gaps
        ),
    )
