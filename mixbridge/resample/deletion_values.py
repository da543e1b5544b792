"""The two parts of a profile deviance, with derivatives, for many panels along common axes.

Formulas as in `mixbridge.routes.likelihood`; each panel at its own ratio or all at a common one.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.deletion_batch import Batch, full, quadratic, solved, trace, trace_of_four
from mixbridge.resample.optima import FIELDS, Values
from mixbridge.routes.likelihood import Kind

__all__ = ["BatchDeviances", "evaluate", "panels_at_once"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

NUMBERS = 2**15
"""Entries of one ``(s, s, m)`` array in work: a quarter of a megabyte, so that eliminations stay in the cache."""


def panels_at_once(order: int) -> int:
    """Return how many panels with this number of coordinates are worked on together."""
    return max(NUMBERS // order**2, 64)


def evaluate(batch: Batch, kind: Kind, psi: FloatArray, m: FloatArray) -> Values:
    """Evaluate r, g and two derivatives of each.

    Parameters
    ----------
    batch : Batch
        Of M panels.
    kind : {"ml", "reml"}
    psi : ndarray of shape (M,) or (1,)
        One ratio per panel, or a common one.
    m : ndarray of shape (M,)
        ``n`` or ``n - K`` of each panel.

    Returns
    -------
    Values
    """
    sizes, order, count = batch.axes.curve.sizes, batch.axes.order, batch.size
    p = order - 1
    axes, whole = np.arange(p), np.arange(order)
    pull = sizes[:, None] / (1.0 + np.multiply.outer(sizes, psi))
    if psi.size == 1:
        pull = pull[:, 0]
    line = solved(batch.within + batch.sums(pull), order, axes)
    c = np.concatenate([-line.slope, np.ones((1, count))])
    s2, s3 = full(batch.sums(pull**2), order, whole), full(batch.sums(pull**3), order, whole)
    s2c = (s2 * c[None]).sum(axis=1)
    r1 = -(s2c * c).sum(axis=0)
    r2 = 2.0 * (quadratic(s3, c) - quadratic(line.inverse, s2c[:p]))
    growth = np.log1p(np.multiply.outer(sizes, psi))
    g = batch.tally(growth if psi.size > 1 else growth[:, 0])
    g1, g2 = batch.tally(pull), -batch.tally(pull**2)
    if kind == "reml":
        s2x = s2[:p, :p]
        g = g + line.log_det
        g1 = g1 - trace(line.inverse, s2x)
        g2 = g2 + 2.0 * trace(line.inverse, s3[:p, :p]) - trace_of_four(line.inverse, s2x, s2x)
    return Values(np.broadcast_to(psi, (count,)), line.residual, r1, np.maximum(r2, 0.0), g, g1, g2, m)


@dataclass(frozen=True, slots=True, eq=False)
class BatchDeviances:
    """Profile deviances of a batch; see `mixbridge.resample.optima.Deviances`.

    Attributes
    ----------
    batch : Batch
        Of R panels.
    kind : {"ml", "reml"}
    m, within_residual, limit : ndarray of shape (R,)
    centre : tuple of float
        A ratio near which most optima lie and their standard deviation about it, NaN where not known.
    """

    batch: Batch
    kind: Kind
    m: FloatArray
    within_residual: FloatArray
    limit: FloatArray
    centre: tuple[float, float] = (np.nan, np.nan)

    @property
    def largest(self) -> float:
        """Largest unit size."""
        return float(self.batch.axes.curve.sizes[-1])

    @property
    def step(self) -> int:
        """Panels in work at one time."""
        return panels_at_once(self.batch.axes.order)

    def on_grid(self, psi: FloatArray) -> Values:
        """Evaluate all at common ratios."""
        count = self.m.size
        table = {name: np.empty((count, psi.size)) for name in FIELDS[1:]}
        for start in range(0, count, self.step):
            part = slice(start, min(start + self.step, count))
            batch = self.batch.take(np.arange(part.start, part.stop))
            for at in range(psi.size):
                values = evaluate(batch, self.kind, psi[at : at + 1], self.m[part])
                for name, column in table.items():
                    column[part, at] = getattr(values, name)
        return Values(psi=psi, **table, m=self.m[:, None])

    def at(self, which: IntArray, psi: FloatArray, value: bool) -> Values:
        """Evaluate some profiles, each at its own ratio."""
        table = {name: np.empty(which.size) for name in FIELDS[1:]}
        for start in range(0, which.size, self.step):
            part = slice(start, start + self.step)
            values = evaluate(self.batch.take(which[part]), self.kind, psi[part], self.m[which[part]])
            for name, column in table.items():
                column[part] = getattr(values, name)
        return Values(psi=psi, **table, m=self.m[which])
