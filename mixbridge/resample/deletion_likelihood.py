"""The optimum of the likelihood of each of many panels, with its certificate.

For a panel without one of many units the optimum lies next to that of all units: there Newton steps find it, and
`deletion_bounds` shows cheaply that it is the only stationary point. What is not shown that way is searched on all of
ψ >= 0 (`mixbridge.resample.optima`).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.deletion_batch import Batch
from mixbridge.resample.deletion_bounds import Neighbourhood, convex
from mixbridge.resample.deletion_sums import Sums
from mixbridge.resample.deletion_values import BatchDeviances, evaluate
from mixbridge.resample.optima import optima
from mixbridge.routes.likelihood import Kind

__all__ = ["find_optima"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

STEPS = 6
ARRIVED = 3e-8
"""Newton step, relative to ψ, after which the next one would be below rounding."""


def find_optima(
    sums: Sums,
    kind: Kind,
    usable: BoolArray,
    *,
    centre: tuple[float, float],
    near: Neighbourhood | None = None,
    own_within: FloatArray | None = None,
) -> tuple[FloatArray, BoolArray]:
    """Return the ratio at the optimum of each panel, and whether it is certified.

    Parameters
    ----------
    sums : Sums
        Of the batch.
    kind : {"ml", "reml"}
    usable : ndarray of bool, shape (m,)
        Panels whose likelihood has a maximum.
    centre : tuple of float
        A ratio near which most optima lie and their standard deviation about it, NaN where not known.
    near : Neighbourhood, optional
        For panels without one unit each.
    own_within : ndarray of shape (h, m), optional
        Packed within products of that unit.

    Returns
    -------
    psi : ndarray of shape (m,)
        NaN where not usable.
    certified : ndarray of bool, shape (m,)
    """
    batch = sums.batch
    psi, certified = np.full(batch.size, np.nan), np.zeros(batch.size, dtype=bool)
    multiplier = sums.rows - (batch.axes.curve.rank if kind == "reml" else 0)
    residual, limit = sums.within.residual, sums.remainders(False)
    if near is not None and own_within is not None:
        psi, arrived = _newton(batch, near, multiplier)
        certified = arrived & usable
        certified &= near.excludes(batch, own_within, multiplier, residual, limit)
        if not near.plain:
            certified &= _convex_inside(batch, near, multiplier)
    rest = np.flatnonzero(usable & ~certified)
    psi[~usable] = np.nan
    if rest.size:
        deviances = BatchDeviances(
            batch.take(rest), kind, multiplier[rest], residual[rest], limit[rest], centre
        )
        found = optima(deviances)
        psi[rest], certified[rest] = found.psi, found.certified
    return psi, certified


def _newton(batch: Batch, near: Neighbourhood, multiplier: FloatArray) -> tuple[FloatArray, BoolArray]:
    """Take Newton steps from the optimum of all units; return where they end and whether they arrived."""
    psi, arrived = np.full(batch.size, near.psi), np.zeros(batch.size, dtype=bool)
    if near.psi == 0.0:
        return psi, np.asarray(evaluate(batch, near.kind, np.zeros(1), multiplier).slope >= 0.0)
    open_ = np.arange(batch.size)
    for turn in range(STEPS):
        part = batch if open_.size == batch.size else batch.take(open_)
        at = psi[:1] if turn == 0 else psi[open_]
        values = evaluate(part, near.kind, at, multiplier[open_])
        with np.errstate(divide="ignore", invalid="ignore"):
            step = values.slope / values.bend
        new = psi[open_] - step
        good = (values.bend > 0.0) & (new >= near.a) & (new <= near.b)
        psi[open_[good]] = new[good]
        done = good & (np.abs(step) <= ARRIVED * new)
        arrived[open_[done]] = True
        open_ = open_[good & ~done]
        if open_.size == 0:
            break
    return psi, arrived


def _convex_inside(batch: Batch, near: Neighbourhood, multiplier: FloatArray) -> BoolArray:
    """Tell where D is convex on ``[a, b]``, from exact values at both ends."""
    a, b = (evaluate(batch, near.kind, np.array([end]), multiplier) for end in (near.a, near.b))
    return np.asarray(convex(a, b) > 0.0)
