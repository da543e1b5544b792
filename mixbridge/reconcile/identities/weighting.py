"""Identities 1 and 2: quasi-demeaned rows, generalised least squares and penalised unit effects are one."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mixbridge.moments.factors import PRODUCT_FLOOR
from mixbridge.reconcile.identities.plain import EPS, Plain, Solved, largest, least_squares
from mixbridge.reconcile.identities.registry import Compared, Unmet, identity
from mixbridge.reconcile.identities.setting import Rows, Setting, components_ratio, multiple
from mixbridge.routes import Fit

__all__: list[str] = []

FloatArray = NDArray[np.float64]
NONE = "no route on these rows is generalised least squares at a finite ratio"


def ridge(plain: Plain, solved: Solved, psi: float) -> FloatArray:
    """Return the coefficients of X beside unit indicators, the indicators penalised by ``1 / psi``.

    The equations ``X'(y - Xb - Zu) = 0`` and ``Z'(y - Xb - Zu) = u / psi`` are solved by refinement: what a
    trial solution
    leaves of the first, u being taken from the second, corrects b. Any start leads to the same b.
    """
    p = plain.rank
    slope = solved.slope
    for _ in range(2):
        c = np.append(-slope, 1.0)
        inside, means = plain.within @ c, plain.between @ c
        effect = (
            (plain.sizes / (plain.sizes + 1.0 / psi))[:, None] * means if psi > 0.0 else np.zeros_like(means)
        )
        # what the effects leave of a unit mean; by the second equation also effect / (T psi), without
        # cancellation
        strong = plain.sizes * psi > 1.0
        left = np.where(
            strong[:, None], effect / np.where(strong, plain.sizes * psi, 1.0)[:, None], means - effect
        )
        rest = plain.within[:, :p].T @ inside + (
            (plain.sizes[:, None] * left)[:, None, :] @ plain.between[:, :, :p]
        ).sum(axis=(0, 1))
        slope = slope + solved.root @ (solved.root.T @ rest)
    return plain.beta(slope)


@identity(
    number=1,
    name="ridge on unit indicators",
    statement="generalised least squares at the stated components = least squares with unit indicators "
    "penalised by the inverse ratio",
    source="Robinson 1991; Henderson's equations",
)
def ridge_on_indicators(setting: Setting) -> Compared | Unmet:
    """Compare every random-effects fit with the penalised regression at its stated components."""
    sides = {}
    for key, fit in setting.on_curve():
        sides[key] = ridge(setting.plain, setting.solved[key], components_ratio(fit))
    reason = "least squares by triangular factors on both sides: "
    return _worst(
        setting,
        sides,
        what="least squares on indicators, penalised",
        loss={},
        reason=reason,
        condition="any panel",
    )


@identity(
    number=1,
    name="quasi-demeaned rows",
    statement="least squares on rows less the stated share of their unit mean, one share per unit = "
    "generalised least squares",
    source="Fuller & Battese 1974",
)
def quasi_demeaned_rows(setting: Setting) -> Compared | Unmet:
    """Compare every random-effects fit with a regression of rows, its own weights applied."""
    if setting.rows is None:
        return Unmet("rows: the rows are not at hand, only their moments")
    sides = {}
    x, y, back = _near_zero(setting, setting.rows)
    counts = np.bincount(setting.rows.codes)
    sums = np.column_stack([np.bincount(setting.rows.codes, column) for column in (*x.T, y)])
    averages = (sums / counts[:, None])[setting.rows.codes]
    for key, fit in setting.on_curve():
        share = fit.quasi_demeaning.reindex(counts).to_numpy()[setting.rows.codes]
        rows = np.column_stack([x, y]) - share[:, None] * averages
        sides[key] = back @ np.append(least_squares(rows).slope, 1.0)
    # 1 - share carries the rounding of the share, larger by 1 / (1 - share) = sqrt(1 + T psi)
    largest_size, taking = float(setting.curve.sizes[-1]), _taking(setting)
    loss = {key: taking * np.sqrt(1.0 + largest_size * components_ratio(setting.fits[key])) for key in sides}
    reason = "taking of moments and 1 / (1 - largest share): "
    return _worst(
        setting,
        sides,
        what="least squares on quasi-demeaned rows",
        loss=loss,
        reason=reason,
        condition="any panel, rows at hand",
    )


def _worst(
    setting: Setting,
    sides: dict[str, FloatArray],
    *,
    what: str,
    loss: dict[str, float],
    reason: str,
    condition: str,
) -> Compared | Unmet:
    """Pick the coefficient of the route whose two sides are furthest apart for their tolerance."""
    if not sides:
        return Unmet(NONE)
    found: list[tuple[float, Compared]] = []
    df = setting.curve.n - setting.curve.rank
    engines = {
        ratio: setting.engine_condition(ratio)
        for ratio in {components_ratio(setting.fits[key]) for key in sides}
    }
    for key, right in sides.items():
        left, solved = setting.fits[key].beta, setting.solved[key]
        total = setting.engine_total(components_ratio(setting.fits[key]))
        size, amplified = setting.plain.bounds(right, solved, df, total)
        more = loss.get(key, 1.0)
        engine = engines[components_ratio(setting.fits[key])]
        tolerance = multiple(setting.plain.rank) * more * amplified * (1.0 + engine / solved.condition)
        if setting.snapped:
            stored = setting.stored_length(right) / setting.plain.unit
            tolerance = tolerance + solved.condition * setting.plain.reach(solved) * stored / size
        at, difference = largest(left, right, size, tolerance)
        found.append(
            (
                difference[at] / tolerance[at],
                Compared(
                    condition,
                    left[at],
                    right[at],
                    f"{setting.curve.names[at]}, {key}: generalised least squares",
                    f"{setting.curve.names[at]}: {what}",
                    difference[at],
                    tolerance[at],
                    f"{reason}{more:.3g} x 64 (columns + 1) x 2.2e-16 x (condition for the engine "
                    f"{engine:.3g} + condition {solved.condition:.3g}) x amplification in this coefficient; "
                    "relative to the coefficient or its standard error, whichever is larger",
                ),
            )
        )
    return max(found, key=lambda pair: np.inf if np.isnan(pair[0]) else pair[0])[1]


def _near_zero(setting: Setting, rows: Rows) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return rows moved near zero if the model has a constant, and the map from ``(slope, 1)`` back."""
    p, names = setting.plain.rank, setting.plain.names
    back = np.column_stack([np.eye(p), np.zeros(p)])
    constant = setting.curve.moments.constant
    if constant is None:
        return rows.x, rows.y, back
    place = names.index(constant)
    origin = np.where(np.arange(p) == place, 0.0, rows.x[0])
    back[place, :p] -= origin
    back[place, p] = rows.y[0]
    back[place] /= rows.x[0, place]
    return rows.x - origin, rows.y - rows.y[0], back


def _taking(setting: Setting) -> float:
    """Return by how much the taking of moments may amplify rounding, beyond the condition of the regression.

    Rows are summed unit by unit and over units: the square root of n. Where products stood in for rows,
    their factor adds its
    condition once more.
    """
    moments, factor = setting.curve.moments, setting.plain.within
    largest_condition = 1.0
    if moments.note != "within products by QR of unit-centred rows":
        length = np.sqrt((factor**2).sum(axis=0))
        live = length > 0.0
        values = np.linalg.svd(factor[:, live] / length[live], compute_uv=False) if live.any() else np.ones(1)
        largest_condition = float(values[0] / values[values > 1e-12 * values[0]][-1])
    if moments.counts.max() > 8 * moments.between.shape[2]:
        largest_condition = max(largest_condition, PRODUCT_FLOOR**-0.5)
    return float(np.sqrt(setting.curve.n)) * largest_condition


def effects_first(plain: Plain, pooled: Solved, psi: float) -> tuple[FloatArray, float]:
    """Return predicted unit effects from the mixed-model equations with the fixed part eliminated first.

    ``(Z'MZ + I/psi) u = Z'My``, M the residual maker of X. Units of a size enter through the factor of their
    means: turning them
    among themselves turns their effects alike. Also returned: the length of what the effects take from the pooled fit.
    """
    p = plain.rank
    shrink = plain.sizes / (plain.sizes + 1.0 / psi)
    means = plain.between[:, :, :p] @ pooled.root
    left = plain.between @ np.append(-pooled.slope, 1.0)
    weighted = (plain.sizes * shrink)[:, None, None] * means
    rows = means.shape[0] * means.shape[1]
    flat, heavy = means.reshape(rows, p), weighted.reshape(rows, p)
    try:
        shared = np.linalg.solve(np.eye(p) - flat.T @ heavy, heavy.T @ left.reshape(rows))
    except np.linalg.LinAlgError:  # the ratio leaves nothing of a direction beside its effects
        return np.full(left.shape, np.nan), np.inf
    return np.asarray(shrink[:, None] * (left + means @ shared)), float(np.sqrt(shared @ shared))


@identity(
    number=2,
    name="predicted effects",
    statement="predicted effects from the mixed-model equations = shrinkage x (mean outcome - mean "
    "covariates x coefficients)",
    source="Henderson 1975; Robinson 1991",
)
def predicted_effects(setting: Setting) -> Compared | Unmet:
    """Compare predicted effects of one fit, all units at once, by the root of their mean square."""
    keys = [key for key, fit in setting.on_curve() if components_ratio(fit) > 0.0]
    if not keys:
        return Unmet("positive unit variance: no route on these rows has one")
    key = "reml" if "reml" in keys else keys[0]
    fit, plain = setting.fits[key], setting.plain
    psi, solved, pooled = components_ratio(fit), setting.solved[key], plain.at(0.0)
    (right, taken), left = effects_first(plain, pooled, psi), _shrunken(plain, fit)
    length = float(np.sqrt((right**2).sum()))
    if not length > 0.0:
        return Unmet(f"effects to compare: from the mixed-model equations they have length {length:.3g}")
    scale = plain.unit / np.sqrt(setting.curve.units)
    columns = np.sqrt((plain.between**2).sum(axis=(0, 1)))
    reach = np.sqrt((solved.root**2).sum(axis=1)) * np.sqrt(max(solved.total, setting.engine_total(psi)))
    strength = 1.0 + float(plain.sizes[-1]) * psi
    carried = solved.condition * float(columns[:-1] @ reach)
    lost = strength * pooled.condition * (float(columns[-1]) + taken)
    origins = float(np.abs(plain.origin[:-1]) @ np.abs(fit.beta) + abs(plain.origin[-1])) / scale
    stored = (
        setting.snapped * solved.condition * np.sqrt(strength) * setting.stored_length(fit.beta) / plain.unit
    )
    tolerance = multiple(plain.rank) * (carried + lost) + 4.0 * (plain.rank + 1) * EPS * origins + stored
    return Compared(
        "any panel, positive unit variance",
        float(np.sqrt((left**2).sum())) * scale,
        length * scale,
        f"root mean square predicted effect, {key}: shrinkage x unit residual",
        "root mean square predicted effect: mixed-model equations",
        float(np.sqrt(((left - right) ** 2).sum())) / length,
        tolerance / length,
        "distance of the two sets of effects relative to their length; 64 (columns + 1) x 2.2e-16 x "
        f"(rounding of coefficients in unit means {carried / length:.3g} + (1 + largest size x ratio) x "
        f"condition of X x unit means {lost / length:.3g}), and the last place of coefficients times origins",
    )


def _shrunken(plain: Plain, fit: Fit) -> FloatArray:
    """Return ``s_T (ybar - xbar'b)`` in scaled outcome units, b and s as the fit states them."""
    c = np.append(-plain.slope(fit.beta), 1.0)
    return np.asarray(fit.shrinkage.to_numpy()[:, None] * (plain.between @ c))
