"""Rehearse a design: what every route would do under a stated truth, and what becomes of it as units are added."""

from __future__ import annotations

from collections.abc import Sequence

import pandas as pd

from mixbridge.errors import OptionError
from mixbridge.rehearse.design import Design
from mixbridge.rehearse.record import Rehearsal
from mixbridge.rehearse.replicates import check_count, run
from mixbridge.rehearse.setting import StudyLike, setting_of
from mixbridge.rehearse.tables import coefficient_table
from mixbridge.rehearse.truth import Truth
from mixbridge.resample.replicates import Progress
from mixbridge.resample.simulated import check_confidence

__all__ = ["growth", "rehearse"]

FEWEST = 100
"""Fewest replicates: a share of 0.05 is then known to 0.02."""


def rehearse(
    source: Design | StudyLike,
    truth: Truth | None = None,
    replicates: int = 2_000,
    seed: int = 20_061,
    *,
    routes: Sequence[str] | None = None,
    confidence: float = 0.95,
    progress: Progress | None = None,
) -> Rehearsal:
    """Simulate a design under a truth and analyse every replicate by every route.

    Parameters
    ----------
    source : Design or Study
        A design without data, or a study, whose X and sizes are kept.
    truth : Truth, optional
        For a study, its primary fit unless given.
    replicates, seed : int
    routes : sequence of str, optional
        Those of the study, or all of the ledger, unless given. `first_difference` is left out.
    confidence : float
        Of intervals; tests have level one minus it.
    progress : callable, optional
        Called with replicates done and asked for, once two seconds have passed.

    Returns
    -------
    Rehearsal

    Raises
    ------
    OptionError, IdentificationError
        If the design or the truth is impossible, or there are too few replicates.
    """
    check_confidence(confidence)
    check_count("replicates", replicates, FEWEST)
    setting = setting_of(source, truth, routes)
    runs = run(
        setting.curve,
        setting.fits,
        setting.model,
        replicates,
        seed,
        level=1.0 - confidence,
        rows=setting.rows,
        progress=progress,
    )
    if not runs.routes:
        raise OptionError(f"no route is left to rehearse: {dict(runs.left_out)}.")
    primary = setting.primary if setting.primary in runs.routes else next(iter(runs.routes))
    return Rehearsal(runs, confidence, primary, setting.notes)


def growth(
    source: Design | StudyLike,
    truth: Truth | None = None,
    times: Sequence[int] = (1, 2, 4, 8, 16),
    replicates: int = 500,
    seed: int = 20_061,
    *,
    routes: Sequence[str] | None = None,
) -> pd.DataFrame:
    """Show what becomes of bias and error as units are added and their sizes stay.

    Every unit of the design, with its covariates, is repeated: so the limit is one of this design. A consistent route
    has a root mean square error that falls as ``1/sqrt(N)``; where unit effects go with unit means, the bias of most
    routes stays.

    Parameters
    ----------
    source : Design or Study
    truth : Truth, optional
    times : sequence of int
        Copies of each unit.
    replicates, seed : int
        Each number of copies has a seed of its own: `seed`, ``seed + 1``, and so on.
    routes : sequence of str, optional

    Returns
    -------
    DataFrame
        ``times, units, route, term, truth, bias, bias_error, sd, rmse, rmse_error, replicates, rmse_root_units``
        (root mean square error times ``sqrt(N)``: level where the route is consistent).
    """
    check_count("replicates", replicates, FEWEST)
    check_count("seed", seed, 0)
    if not len(times):
        raise OptionError("times is empty: name at least one number of copies.")
    for count in times:
        check_count("times", count, 1)
    setting = setting_of(source, truth, routes)
    parts = []
    for at, count in enumerate(times):
        here = setting if count == 1 else setting.repeated(int(count))
        table = coefficient_table(
            run(here.curve, here.fits, here.model, replicates, seed + at, rows=here.rows)
        )
        table.insert(0, "times", int(count))
        table.insert(1, "units", here.curve.units)
        table["rmse_root_units"] = table["rmse"] * here.curve.units**0.5
        parts.append(table)
    return pd.concat(parts, ignore_index=True)
