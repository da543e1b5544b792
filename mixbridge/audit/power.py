"""Departures that a test would detect with a stated power, from the noncentral laws."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from scipy import stats
from scipy.optimize import brentq

__all__ = ["detectable_chi_square", "detectable_f", "detectable_normal"]


@lru_cache(maxsize=256)
def detectable_chi_square(df: int, level: float, power: float) -> float:
    """Return the noncentrality at which a chi-square test of the level has the power."""
    critical = float(stats.chi2.isf(level, df))
    return float(brentq(lambda size: stats.ncx2.sf(critical, df, size) - power, 1e-9, 1e4))


@lru_cache(maxsize=256)
def detectable_f(df: int, df_error: int, level: float, power: float) -> float:
    """Return the noncentrality at which an F test of the level has the power; infinite if none is found."""
    critical = float(stats.f.isf(level, df, df_error))
    high = 16.0
    while stats.ncf.sf(critical, df, df_error, high) < power:
        high *= 4.0
        if high > 1e7:
            return float("inf")
    return float(brentq(lambda size: stats.ncf.sf(critical, df, df_error, size) - power, 1e-9, high))


def detectable_normal(level: float, power: float, *, sides: int = 2) -> float:
    """Return the shift, in standard errors, at which a normal test of the level has the power.

    For two sides the rejections on the wrong side are left out (below 1e-5 at the usual levels).
    """
    return float(np.asarray(stats.norm.isf(level / sides) + stats.norm.ppf(power)))
