"""Identities 3 and 4: what adding unit means does to the slopes of columns that vary within units."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mixbridge.reconcile.identities.ends import ENDLESS, within_bounds
from mixbridge.reconcile.identities.plain import Solved, largest
from mixbridge.reconcile.identities.registry import Compared, Unmet, identity
from mixbridge.reconcile.identities.setting import Setting, components_ratio, multiple

__all__: list[str] = []

FloatArray = NDArray[np.float64]
SIZE = "relative to the coefficient or its standard error, whichever is larger"


def _estimable(setting: Setting) -> NDArray[np.intp] | Unmet:
    """Return the slopes that within variation determines, or why there is nothing to compare."""
    missing = setting.missing("within")
    if missing:
        return Unmet(missing)
    if setting.with_means.rank >= setting.curve.n:
        return Unmet(
            f"more rows than columns with unit means: {setting.curve.n} rows, {setting.with_means.rank} "
            "columns"
        )
    curve, wide = setting.curve, setting.with_means.rank
    if wide < curve.rank_within + curve.rank_between:
        return Unmet(
            f"unit means told apart from their columns: rank with means {wide}, rank QX + rank PX = "
            f"{curve.rank_within + curve.rank_between}"
        )
    return np.flatnonzero(np.isfinite(setting.fits["within"].beta))


def _tolerance(
    setting: Setting, solved: Solved, free: NDArray[np.intp]
) -> tuple[FloatArray, FloatArray, str]:
    """Return size and tolerance of slopes, from the regression with means and the within regression."""
    size, amplified, inner = within_bounds(setting, free)
    wide = setting.with_means
    reach = wide.reach(solved)[free]
    ours = np.maximum(solved.condition * reach * np.sqrt(solved.total) / size, 1.0)
    engine = setting.curve.condition * setting.engine_condition(ENDLESS / setting.curve.sizes[0])
    tolerance = multiple(wide.rank) * (ours + engine * amplified)
    stored = ""
    if setting.curve.columns_within > len(setting.source):
        p = setting.plain.rank
        coefficients = (np.abs(wide.beta(solved.slope)) + wide.reach(solved) * np.sqrt(solved.total))[:p]
        tolerance = tolerance + solved.condition * reach * (setting.stored @ coefficients) / wide.unit / size
        stored = " and, a mean being left out as a combination of columns, the rounding of the stored columns"
    reason = (
        f"64 (columns + 1) x 2.2e-16 x (condition with means {solved.condition:.3g} x its amplification + "
        f"condition of X {setting.curve.condition:.3g} x condition of QX {inner:.3g} x its amplification in "
        f"this coefficient){stored}; {SIZE}"
    )
    return size, tolerance, reason


@identity(
    number=3,
    name="slopes beside their unit means",
    statement="with the unit mean of every within-varying column added, their slopes = within slopes, at "
    "every ratio",
    source="Mundlak 1978; Wooldridge 2019",
)
def slopes_with_means(setting: Setting) -> Compared | Unmet:
    """Compare the slopes beside the means with the within fit, at ratio 0, one, and that of REML."""
    free = _estimable(setting)
    if isinstance(free, Unmet):
        return free
    right, found = setting.fits["within"].beta[free], []
    for psi, solved in setting.wide.items():
        left = setting.with_means.beta(solved.slope)[free]
        size, tolerance, reason = _tolerance(setting, solved, free)
        at, difference = largest(left, right, size, tolerance)
        name = setting.curve.names[free[at]]
        outcome = Compared(
            f"{len(free)} slopes estimable from within variation, {len(setting.source)} means added",
            left[at],
            right[at],
            f"{name}: regression with unit means at ratio {psi:.6g}",
            f"{name}: within",
            difference[at],
            tolerance[at],
            reason,
        )
        found.append((difference[at] / tolerance[at], outcome))
    return max(found, key=lambda pair: np.inf if np.isnan(pair[0]) else pair[0])[1]


@identity(
    number=4,
    name="contextual decomposition",
    statement="slope at a ratio = within slope + C g: g the coefficients of the unit means at that ratio, "
    "C the coefficients of the means regressed on X with the same weights",
    source="Mundlak 1978; omitted-variable algebra",
)
def contextual_decomposition(setting: Setting) -> Compared | Unmet:
    """Compare slopes of two fits with the within slopes plus weighted contextual coefficients."""
    free = _estimable(setting)
    if isinstance(free, Unmet):
        return free
    keys = [key for key in ("reml", "pooled", *setting.solved) if key in setting.solved][:2]
    if not keys:
        return Unmet("no route on these rows is generalised least squares at a finite ratio")
    wide, p, found = setting.with_means, setting.plain.rank, []
    for key in dict.fromkeys(keys):
        fit = setting.fits[key]
        psi = components_ratio(fit)
        full = wide.stacked(wide.sizes / (1.0 + wide.sizes * psi))
        solved, short = setting.wide.get(psi) or wide.at(psi), setting.solved[key]
        # the means regressed on the columns of X, both in scaled columns; the slopes of X brought to units
        # of the outcome
        weights = short.root @ (short.root.T @ (full[:, :p].T @ full[:, p : wide.rank]))
        moved = setting.plain.back @ weights @ solved.slope[p:]
        left, right = fit.beta[free], setting.fits["within"].beta[free] + moved[free]
        size, tolerance, reason = _tolerance(setting, solved, free)
        own, amplified = setting.plain.bounds(fit.beta, short, setting.curve.n - p)
        length = np.sqrt(((full[:, p : wide.rank] @ solved.slope[p:]) ** 2).sum())
        carried = short.condition * setting.plain.reach(short) * length
        tolerance += multiple(wide.rank) * short.condition * (amplified * own + carried)[free] / size
        at, difference = largest(left, right, size, tolerance)
        name = setting.curve.names[free[at]]
        outcome = Compared(
            f"{len(free)} slopes estimable from within variation, {len(setting.source)} means added",
            left[at],
            right[at],
            f"{name}: {key}",
            f"{name}: within + C g at ratio {psi:.6g}",
            difference[at],
            tolerance[at],
            f"{reason}; and condition of X squared {short.condition**2:.3g} for C",
        )
        found.append((difference[at] / tolerance[at], outcome))
    return max(found, key=lambda pair: np.inf if np.isnan(pair[0]) else pair[0])[1]
