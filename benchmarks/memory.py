"""Peak extra memory of the moments and of `crosscheck`, relative to the design matrix."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from benchmarks.measure import peak
from benchmarks.panels import panel
from benchmarks.profiles import Profile
from benchmarks.results import Ratio, Result, Table
from mixbridge.moments import Moments
from mixbridge.study import crosscheck


def moments_task(units: int) -> Callable[[], object]:
    data = panel(units)
    return lambda: Moments.from_arrays(data.x, data.y, data.codes, data.names)


def crosscheck_task(units: int) -> Callable[[], object]:
    data = panel(units)
    frame, formula = data.frame(), data.formula
    del data

    def task() -> object:
        study = crosscheck(formula, frame, unit="unit")
        return study, study.ledger

    return task


def lstsq_task(units: int) -> Callable[[], object]:
    data = panel(units)
    return lambda: np.linalg.lstsq(data.x, data.y, rcond=None)


def formula_task(units: int) -> Callable[[], object]:
    import statsmodels.formula.api as smf  # noqa: PLC0415 (only the process that measures it)

    data = panel(units)
    frame, formula = data.frame(), data.formula
    return lambda: smf.ols(formula, frame).fit()


def memory(profile: Profile) -> Result:
    """Measure each task in a process of its own."""
    rows = int(np.resize(np.arange(1, 20), profile.units).sum())
    design = rows * 10 * 8
    tasks = {
        "moments from arrays": moments_task,
        "crosscheck from frame and formula, ledger included": crosscheck_task,
        "numpy.linalg.lstsq of the same matrix": lstsq_task,
        "statsmodels OLS from frame and formula": formula_task,
    }
    peaks = {name: peak(task, profile.units) for name, task in tasks.items()}
    table = []
    for name, found in peaks.items():
        held = "not reported here" if found.resident is None else f"{found.resident / design:.2f}"
        table.append(
            (name, f"{found.traced / 2**20:.3g} MiB", f"{found.traced / design:.2f}", held),
        )
    ours = list(tasks)[:2]
    worst = {name: max(peaks[name].traced, peaks[name].resident or 0) / design for name in ours}
    return Result(
        problem=f"{rows:,} rows × 10 columns: the design matrix takes {design / 2**20:.3g} MiB",
        method="Peak above what was in use before the call, each task in a process of its own, once; "
        "the larger of both measures counts",
        table=Table(
            ("task", "allocated (tracemalloc)", "per design matrix", "resident, per design matrix"),
            tuple(table),
        ),
        ratios=tuple(Ratio(f"{name} / design matrix", value, 1.5) for name, value in worst.items()),
        agreements=(),
        notes=(
            "tracemalloc sees what Python and numpy allocate, but not the workspace of compiled libraries (in lstsq, "
            "for instance); the growth of resident memory sees both, rounded up to pages.",
        ),
    )
