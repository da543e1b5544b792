"""Agreement classes and conclusions of many refits at once, by the rules of the ledger."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import OptionError
from mixbridge.resample.deletion_routes import Refits

__all__ = ["CLASSES", "NOT_AVAILABLE", "Limits", "against_zero", "agreement"]

FloatArray = NDArray[np.float64]
CodeArray = NDArray[np.int8]

NOT_AVAILABLE = 4
CLASSES = ("identical", "immaterial", "visible", "conflicting", "not available")
"""Class of a gap between a route and the primary one by code, mildest first; the last where there is none."""
SIGNS = {1: "above zero", -1: "below zero", 0: "holding zero", 2: "not available"}
"""Where an interval lies."""


@dataclass(frozen=True, slots=True)
class Limits:
    """What counts as immaterial; the same as the thresholds of the ledger.

    Attributes
    ----------
    gap : float
        Largest immaterial gap, in standard errors of the primary route.
    width : float
        Largest immaterial relative difference of interval half-widths.
    rounding : float
        Gap, in standard errors, and relative difference of half-widths, that counts as none.
    """

    gap: float = 0.1
    width: float = 0.1
    rounding: float = 1e-9

    def __post_init__(self) -> None:
        """Refuse limits that are not positive numbers."""
        for name in ("gap", "width", "rounding"):
            value = getattr(self, name)
            if not (isinstance(value, (int, float)) and 0.0 < value < np.inf):
                raise OptionError(f"{name}={value!r} is not allowed; allowed: a positive number.")


def against_zero(refits: Refits, multiplier: FloatArray) -> CodeArray:
    """Tell where each interval, estimate plus and minus a multiple of its standard error, lies.

    Parameters
    ----------
    refits : Refits
    multiplier : ndarray of shape (p,)
        Of the standard errors.

    Returns
    -------
    ndarray of int8, shape (m, p)
        Keys of `SIGNS`.
    """
    half = multiplier * refits.standard_errors
    estimate = refits.coefficients
    with np.errstate(invalid="ignore"):
        sign = (estimate - half > 0.0).astype(np.int8) - (estimate + half < 0.0).astype(np.int8)
    sign[~np.isfinite(estimate - half)] = 2
    return sign


def agreement(
    refits: Refits, primary: Refits, multiplier: FloatArray, base: FloatArray, limits: Limits
) -> CodeArray:
    """Class the gap of a route from the primary one, panel by panel and term by term.

    Parameters
    ----------
    refits, primary : Refits
        Of the same panels.
    multiplier, base : ndarray of shape (p,)
        Multiples of the standard errors that make the intervals of the route and of the primary one.
    limits : Limits

    Returns
    -------
    ndarray of int8, shape (m, p)
        Places in `CLASSES`.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        gap = np.abs(refits.coefficients - primary.coefficients) / primary.standard_errors
        width = np.abs(multiplier * refits.standard_errors / (base * primary.standard_errors) - 1.0)
    known = np.isfinite(refits.coefficients) & (primary.standard_errors > 0.0) & np.isfinite(gap)
    code = np.where(against_zero(refits, multiplier) == against_zero(primary, base), 2, 3)
    code[(gap < limits.gap) & (width < limits.width)] = 1
    code[(gap <= limits.rounding) & (width <= limits.rounding)] = 0
    code[~known] = NOT_AVAILABLE
    return code.astype(np.int8)
