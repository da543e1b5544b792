"""Parametric-bootstrap tests of sigma_a^2 = 0: replicates drawn at ψ = 0, the statistic of each route on each.

The statistics are free of β and ``sigma_u^2``: the likelihood ratio ``D(0) - D(psi_hat)`` of `ml` and `reml`, and
``sigma_a^2/sigma_u^2`` before truncation of the quadratic routes. So nothing estimated enters their null laws, and
each test is exact under normality at every level that the number of replicates can show.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import OptionError
from mixbridge.inference.likelihood_ratio import observed_ratio
from mixbridge.ratio import Curve
from mixbridge.resample.moment_draws import Truth
from mixbridge.resample.replicates import Progress, replicate
from mixbridge.resample.simulated import share_at_least
from mixbridge.routes import Fit
from mixbridge.routes.fitting import LIKELIHOOD, named_route
from mixbridge.routes.quadratic import QUADRATIC

__all__ = ["zero_tests"]

FloatArray = NDArray[np.float64]
COLUMNS = ["route", "statistic", "value", "p_value", "monte_carlo_error", "share_zero", "replicates", "note"]


def zero_tests(
    curve: Curve,
    fits: Mapping[str, Fit],
    replicates: int = 9_999,
    seed: int = 20_050,
    *,
    workers: int | None = None,
    progress: Progress | None = None,
) -> pd.DataFrame:
    """Test sigma_a^2 = 0 by the estimate of each route, against its law at ψ = 0 in this design.

    Parameters
    ----------
    curve : Curve
    fits : mapping of str to Fit
        Routes fitted to this panel; those without a unit variance are passed over.
    replicates, seed : int
    workers : int, optional
        Threads.
    progress : callable, optional
        As in `mixbridge.resample.replicate`.

    Returns
    -------
    DataFrame
        One row per route: ``route, statistic`` (its name), ``value`` (of the data), ``p_value`` (one-sided),
        ``monte_carlo_error, share_zero`` (replicates at ψ = 0 whose unit variance is estimated as zero or below),
        ``replicates`` (those with a value), ``note`` (or the reason why there is no test).
    """
    chosen = {
        key: fit for key, fit in fits.items() if {named_route(fit.route)[0]} & {*QUADRATIC, *LIKELIHOOD}
    }
    if not chosen:
        raise OptionError(f"no route given estimates a unit variance: {', '.join(fits) or 'none given'}.")
    truth = Truth(np.zeros(curve.rank), 0.0, curve.unit / curve.n)
    found = replicate(curve, chosen, truth, replicates, seed, workers=workers, progress=progress)
    rows: list[list[object]] = []
    for key, fit in chosen.items():
        if key in found.left_out:
            rows.append([key, "", np.nan, np.nan, np.nan, np.nan, 0, f"not computed: {found.left_out[key]}"])
            continue
        here = found.routes[key]
        route = named_route(fit.route)[0]
        if route in LIKELIHOOD:
            name, values, observed = (
                "likelihood ratio",
                here.fall,
                observed_ratio(curve, LIKELIHOOD[route], fit.ratio),
            )
        else:
            name = "raw unit variance / idiosyncratic variance"
            values = _ratio(here.unit_variance_raw, here.idiosyncratic_variance)
            observed = float(
                _ratio(np.array([fit.unit_variance_raw]), np.array([fit.idiosyncratic_variance]))[0]
            )
        share = share_at_least(values, observed, f"a statistic by {key!r}")
        lost = int((~here.certified).sum())
        note = "exact under normality up to the Monte Carlo error"
        if lost:
            note += f"; {lost} optima not certified"
        zero = float((here.unit_variance_raw <= 0.0).mean())
        rows.append([key, name, observed, share.value, share.error, zero, share.used, note])
    return pd.DataFrame(rows, columns=COLUMNS)


def _ratio(unit: FloatArray, idiosyncratic: FloatArray) -> FloatArray:
    """Return raw ratios; where sigma_u^2 is not positive, the end of the line on the side of the unit variance."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = unit / idiosyncratic
    return np.where(idiosyncratic > 0.0, ratio, np.where(unit > 0.0, np.inf, -np.inf))
