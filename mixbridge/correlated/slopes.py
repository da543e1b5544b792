"""Whether the slopes beside their unit means are the within slopes, at several variance ratios.

With the unit mean of every column that varies within units in the model, the column space is closed under
unit averaging, ``span X = span QX + span PX``. In these coordinates ``X'V_0^-1 X`` is block diagonal at
every ψ and the within block does not contain ψ (Mundlak 1978). So the ranks decide
(`SlopeCertificate.closed`), and the numbers check the arithmetic: regression with the means at each ψ
against the within regression of the panel without them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.correlated.augment import Augmented
from mixbridge.display import Printed
from mixbridge.display.text import by_reason, wrapped
from mixbridge.moments import Moments, noise
from mixbridge.ratio import Curve
from mixbridge.routes import fit_route

__all__ = ["RATIOS", "SlopeCertificate", "certify_slopes"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)

RATIOS = (0.0, 0.01, 0.1, 1.0, 10.0, 1e3, 1e6, 1e9)
"""Ratios at which the slopes are compared: pooled, and up to where unit means have lost all weight."""

REASON = (
    "32 (columns + 1) x 2.2e-16 x condition x the largest change of the coefficient per unit length of the "
    "outcome x length of the outcome, for both regressions{stored}; relative to the coefficient or its "
    "standard error, whichever is larger"
)


@dataclass(frozen=True, slots=True)
class SlopeCertificate(Printed):
    """Comparison of slopes beside unit means with within slopes.

    Attributes
    ----------
    holds : bool
        Whether every slope that within variation determines agrees at every ratio.
    closed : bool
        Whether ``rank [PX, QX] = rank X`` with the means added.
    cause : str
        Empty where it holds; else the named cause.
    rows : tuple of (float, str, float, float, float, float)
        Ratio, term, slope beside the means, within slope, relative difference, tolerance.
    not_compared : tuple of (str, str)
        Columns whose slope within variation does not determine, with the reason.
    tolerance_reason : str
        How the tolerance was derived.
    """

    holds: bool
    closed: bool
    cause: str
    rows: tuple[tuple[float, str, float, float, float, float], ...]
    not_compared: tuple[tuple[str, str], ...]
    tolerance_reason: str

    @property
    def table(self) -> pd.DataFrame:
        """The comparison: ``ratio, term, slope, within, difference, tolerance``."""
        columns = ["ratio", "term", "slope", "within", "difference", "tolerance"]
        return pd.DataFrame(list(self.rows), columns=columns)

    @property
    def largest(self) -> float:
        """Largest relative difference; NaN if nothing was compared."""
        return max((row[4] for row in self.rows), default=float("nan"))

    def lines(self) -> list[str]:
        """Return the certificate in words."""
        if not self.rows:
            return [f"Slopes beside unit means against within slopes: not compared. {self.cause}"]
        ratios = sorted({row[0] for row in self.rows})
        head = (
            f"Slopes beside unit means against within slopes, {len({row[1] for row in self.rows})} slopes at "
            f"{len(ratios)} ratios from {ratios[0]:g} to {ratios[-1]:g}"
        )
        found = f"{'equal' if self.holds else 'NOT equal'}; largest relative difference {self.largest:.2g}"
        lines = [f"{head}: {found}. This checks the arithmetic, not the model."]
        if not self.holds:
            lines.append(f"Cause: {self.cause}")
        return lines + [f"Not compared: {text}" for text in by_reason(self.not_compared)]

    def __str__(self) -> str:
        """Return the certificate in words."""
        return "\n".join(wrapped(self.lines()))


def certify_slopes(
    augmented: Augmented, raw: Curve, wide: Curve, ratios: tuple[float, ...] = RATIOS
) -> SlopeCertificate:
    """Compare slopes at several ratios with the within slopes.

    Parameters
    ----------
    augmented : Augmented
    raw, wide : Curve
        Without and with the unit means.
    ratios : tuple of float
        Variance ratios, finite and not negative.

    Returns
    -------
    SlopeCertificate
    """
    within = fit_route(raw, "within", {}, "rows are not at hand")
    closed = wide.rank_between + wide.rank_within == wide.rank
    free = [
        j for j, name in enumerate(raw.names) if name in augmented.varying and np.isfinite(within.beta[j])
    ]
    lost = tuple(
        (name, within.not_estimable.get(name, within.status))
        for j, name in enumerate(raw.names)
        if name in augmented.varying and j not in free
    )
    stored = np.zeros(wide.rank)
    if augmented.dropped:
        stored = _stored(augmented.moments, wide)
    reason = REASON.format(
        stored=", and, a mean being left out as a combination of columns, the rounding of the stored columns"
        if augmented.dropped
        else ""
    )
    if not free:
        return SlopeCertificate(
            False, closed, "no slope is determined by within variation.", (), lost, reason
        )
    right = within.beta[free]
    error = np.sqrt(np.maximum(np.diag(within.covariance_array)[free], 0.0))
    size = np.fmax(np.abs(right), error)
    length = _outcome_length(raw)
    inner = _condition(raw.within[:, : raw.rank] @ raw.within_root) * raw.condition
    known = inner * np.sqrt((within.root[free] ** 2).sum(axis=1)) * length
    known += wide.condition * np.sqrt((wide.at(0.0).root[free] ** 2).sum(axis=1)) * length
    rows: list[tuple[float, str, float, float, float, float]] = []
    for psi in ratios:
        point, reach = wide.at(psi), np.sqrt((wide.at(psi).root[free] ** 2).sum(axis=1))
        ours = wide.condition * _condition_at(wide, psi) * reach * length
        bound = 32.0 * (wide.rank + 1) * EPS * (known + ours)
        bound += reach * float(stored @ np.abs(point.beta))
        difference = np.abs(point.beta[free] - right)
        rows += [
            (float(psi), raw.names[j], float(point.beta[j]), float(b), float(d / s), float(t / s))
            for j, b, d, t, s in zip(free, right, difference, bound, size, strict=True)
        ]
    broken = [row for row in rows if not row[4] <= row[5]]
    cause = _cause(augmented, wide, closed, broken) if broken else ""
    return SlopeCertificate(not broken, closed, cause, tuple(rows), lost, reason)


def _cause(
    augmented: Augmented,
    wide: Curve,
    closed: bool,
    broken: list[tuple[float, str, float, float, float, float]],
) -> str:
    ratio, term, left, right, difference, tolerance = max(broken, key=lambda row: row[4] / row[5])
    worst = f"largest for {term} at ratio {ratio:g}: {left:.10g} against {right:.10g}"
    if augmented.left_out:
        return (
            f"the unit means of {', '.join(augmented.left_out)} are not in the model (partial form); {worst}."
        )
    if not closed:
        return (
            f"the columns are not closed under unit averaging: rank PX + rank QX = {wide.rank_between} + "
            f"{wide.rank_within}, rank X = {wide.rank}; {worst}."
        )
    near = f" ({wide.near_dependency})" if wide.near_dependency else ""
    return (
        f"rounding beyond its bound: condition number {wide.condition:.3g}{near}, relative difference "
        f"{difference:.3g} with tolerance {tolerance:.3g}; {worst}."
    )


def _outcome_length(curve: Curve) -> float:
    """Return the length of the outcome over all rows, from the grand mean where there is a constant."""
    moments = curve.moments
    level = moments.between[:, :, -1]
    if moments.constant is None:
        level = level + moments.shift[-1] / moments.scale[-1] * moments.between[:, :, 0]
    square = (moments.within[:, -1] ** 2).sum() + float(moments.sizes @ (level**2).sum(axis=1))
    return float(moments.scale[-1] * np.sqrt(square))


def _condition_at(curve: Curve, psi: float) -> float:
    """Return the condition number of the whitened columns at ψ, scaled to unit length."""
    p = curve.rank
    products = curve.within_products + curve.weighted_between(curve.sizes / (1.0 + curve.sizes * psi))
    length = np.sqrt(np.diag(products)[:p])
    return _condition(curve.gls_root(psi) * length[:, None])


def _condition(matrix: FloatArray) -> float:
    return float(np.linalg.cond(matrix)) if matrix.size else 1.0


def _stored(moments: Moments, curve: Curve) -> FloatArray:
    """Return the length, per column in data units, that rounding of the stored data can produce."""
    floor = noise(moments) * moments.scale
    return np.array(
        [0.0 if name == moments.constant else floor[moments.columns.index(name)] for name in curve.names]
    )
