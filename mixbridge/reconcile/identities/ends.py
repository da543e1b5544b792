"""Identity 11: the ends of the curve, and what one-row units do not change."""

from __future__ import annotations

import numpy as np

from mixbridge.errors import IdentificationError
from mixbridge.ratio import curve_of
from mixbridge.reconcile.identities.plain import largest, least_squares
from mixbridge.reconcile.identities.registry import Compared, Unmet, identity
from mixbridge.reconcile.identities.setting import Setting, multiple

__all__ = ["ENDLESS", "SIZE", "within_bounds"]

ENDLESS = 1e80
"""Size times ratio that stands for infinity: no between variation weighs anything beside within variation."""

SIZE = "relative to the coefficient or its standard error, whichever is larger"


@identity(
    number=11,
    name="pooled end of the curve",
    statement="generalised least squares at ratio 0 = ordinary least squares on all rows",
    source="Fuller & Battese 1974",
)
def pooled_end(setting: Setting) -> Compared | Unmet:
    """Compare the pooled fit with ordinary least squares from the total products."""
    missing = setting.missing("pooled")
    if missing:
        return Unmet(missing)
    plain, left = setting.plain, setting.fits["pooled"].beta
    right = plain.beta(_by_singular_values(plain.stacked(plain.sizes)))
    solved = plain.at(0.0)
    size, amplified = plain.bounds(right, solved, setting.curve.n - plain.rank)
    tolerance = multiple(plain.rank) * amplified
    if setting.snapped:
        tolerance = (
            tolerance
            + solved.condition * plain.reach(solved) * setting.stored_length(right) / plain.unit / size
        )
    at, difference = largest(left, right, size, tolerance)
    name = setting.curve.names[at]
    return Compared(
        "any panel",
        left[at],
        right[at],
        f"{name}: pooled",
        f"{name}: singular value decomposition of the total products",
        difference[at],
        tolerance[at],
        f"64 (columns + 1) x 2.2e-16 x condition {solved.condition:.3g} x amplification in this "
        f"coefficient; {SIZE}",
    )


@identity(
    number=11,
    name="within end of the curve",
    statement="slopes of generalised least squares as the ratio grows without bound = within slopes",
    source="Maddala 1971; Hausman & Taylor 1981",
)
def within_end(setting: Setting) -> Compared | Unmet:
    """Compare the curve at a ratio beyond rounding with the within fit."""
    return _slopes(
        setting, setting.curve.at(ENDLESS / setting.curve.sizes[0]).beta, "curve at an endless ratio"
    )


@identity(
    number=11,
    name="one-row units",
    statement="units with one row leave the within slopes unchanged",
    source="they have no deviations from their own mean",
)
def one_row_units(setting: Setting) -> Compared | Unmet:
    """Compare the within slopes with the end of the curve of the panel without one-row units."""
    moments = setting.curve.moments
    if 1 not in moments.sizes:
        return Unmet("one-row units: there are none")
    if len(moments.sizes) == 1:
        return Unmet("units with two rows: there are none")
    try:
        shorter = curve_of(moments.without_one_row_units())
    except IdentificationError as error:
        return Unmet(f"estimable without one-row units: {error}")
    right = shorter.at(ENDLESS / shorter.sizes[0]).beta
    lost = ~shorter.free_within
    return _slopes(
        setting,
        np.where(lost, np.nan, right),
        "curve without one-row units, endless ratio",
        shorter.condition,
    )


def _slopes(setting: Setting, right: np.ndarray, what: str, condition: float = 1.0) -> Compared | Unmet:
    """Compare the within fit with other figures for its slopes."""
    missing = setting.missing("within")
    if missing:
        return Unmet(missing)
    left = setting.fits["within"].beta
    free = np.flatnonzero(np.isfinite(left))
    size, amplified, inner = within_bounds(setting, free)
    engine = max(condition, setting.curve.condition) * setting.engine_condition(
        ENDLESS / setting.curve.sizes[0]
    )
    tolerance = multiple(setting.plain.rank) * engine * amplified
    at, difference = largest(left[free], right[free], size, tolerance)
    name = setting.curve.names[free[at]]
    return Compared(
        "slopes estimable from within variation",
        left[free[at]],
        right[free[at]],
        f"{name}: within",
        f"{name}: {what}",
        difference[at],
        tolerance[at],
        f"64 (columns + 1) x 2.2e-16 x condition for the engine {engine:.3g} x condition of QX {inner:.3g} "
        f"x amplification in this coefficient; {SIZE}",
    )


def within_bounds(setting: Setting, free: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """Return size and amplification (as `Plain.bounds`) of the within slopes, and the condition of QX."""
    plain, kept = setting.plain, setting.curve.within_span.kept
    solved = least_squares(plain.within[:, [*kept, plain.rank]])
    reach = np.zeros(plain.rank)
    reach[kept] = np.sqrt((solved.root**2).sum(axis=1)) * np.diag(plain.back)[kept]
    beta = np.abs(setting.fits["within"].beta)
    size = np.maximum(beta, reach * np.sqrt(solved.residual / max(setting.curve.df_within, 1)))
    total = plain.stacked(plain.sizes)[
        :, plain.rank
    ]  # the engine subtracts the pooled fit first, between variation included
    amplified = solved.condition * reach * np.sqrt(total @ total) / size
    return size[free], np.maximum(amplified[free], 1.0), solved.condition


def _by_singular_values(factor: np.ndarray) -> np.ndarray:
    """Return least-squares coefficients of the last column, by a singular value decomposition of the others."""
    length = np.sqrt((factor[:, :-1] ** 2).sum(axis=0))
    left, values, right = np.linalg.svd(factor[:, :-1] / length, full_matrices=False)
    return np.asarray(right.T @ (left.T @ factor[:, -1] / values) / length)
