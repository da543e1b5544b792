"""Profile likelihoods of replicates in the spectral form that all of them share.

X being given, so is the spectrum: with K an orthonormal basis of what is orthogonal to X, ``K'ZZ'K`` has eigenvalues
``mu_k`` that are common to all replicates, and

    r(psi) = RSS_w + sum_k c_k^2 / (1 + mu_k psi)
    REML:  g(psi) = sum_k log(1 + mu_k psi)       ML:  g(psi) = sum_T m_T log(1 + T psi)

(see `mixbridge.inference.spectrum`). The ``c_k`` are an orthogonal map of the numbers drawn (`moment_draws`), and what
is left in a size class has the eigenvalue T and needs no map. All terms of r and of its derivatives have one sign, so
nothing cancels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.resample.moment_draws import Coordinates, Draws
from mixbridge.resample.optima import Values
from mixbridge.routes.likelihood import Kind

__all__ = ["Modes", "SpectralDeviances", "modes_of"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]


@dataclass(frozen=True, slots=True)
class Modes:
    """Eigenvalues that the replicates share, and the map to their coordinates.

    Attributes
    ----------
    space : Coordinates
    turn : ndarray of shape (D, k)
        Columns orthonormal and orthogonal to X; ``c = e turn``.
    values : ndarray of shape (k + G,)
        ``mu_k``, then the unit sizes, for what is left in their classes.
    powers : ndarray of shape (k + G,)
        Multiplicities: 1, then ``m_T - r_T``.
    """

    space: Coordinates
    turn: FloatArray
    values: FloatArray
    powers: FloatArray

    def squares(self, draws: Draws) -> FloatArray:
        """Return ``c_k^2`` and what is left in the classes, shape (R, k + G)."""
        result = np.empty((draws.e.shape[0], self.values.size))
        k = self.turn.shape[1]
        np.matmul(draws.e, self.turn, out=result[:, :k])
        result[:, :k] **= 2
        result[:, k:] = draws.rest[:, 1:]
        return result


def modes_of(space: Coordinates) -> Modes:
    """Return the eigenvalues and their coordinates.

    Parameters
    ----------
    space : Coordinates

    Returns
    -------
    Modes
    """
    curve, p = space.curve, space.curve.rank
    free = np.linalg.qr(space.x, mode="complete")[0][:, p:]
    weights = space.spread(0.0, curve.sizes)
    values, vectors = np.linalg.eigh((free.T * weights) @ free)
    return Modes(
        space=space,
        turn=free @ vectors,
        values=np.concatenate([np.maximum(values, 0.0), curve.sizes]),
        powers=np.concatenate([np.ones(values.size), space.rest_df[1:]]),
    )


@dataclass(frozen=True, slots=True)
class SpectralDeviances:
    """Profile deviances of replicates; see `mixbridge.resample.optima.Deviances`.

    Attributes
    ----------
    modes : Modes
    kind : {"ml", "reml"}
    squares : ndarray of shape (R, k + G)
        From `Modes.squares`.
    within_residual : ndarray of shape (R,)
        ``RSS_w``.
    near : float
        A ratio near which most optima lie.
    """

    modes: Modes
    kind: Kind
    squares: FloatArray
    within_residual: FloatArray
    near: float

    @property
    def multiplier(self) -> int:
        """``n``, or ``n - K``."""
        curve = self.modes.space.curve
        return curve.n - (curve.rank if self.kind == "reml" else 0)

    @property
    def m(self) -> FloatArray:
        """Multiplier of ``log r``, the same for all."""
        return np.full(self.within_residual.size, float(self.multiplier))

    @property
    def largest(self) -> float:
        """Largest unit size."""
        return float(self.modes.space.curve.sizes[-1])

    @property
    def limit(self) -> FloatArray:
        """``lim psi^2 |r'| = sum c_k^2 / mu_k``."""
        with np.errstate(divide="ignore"):
            return np.asarray(self.squares @ np.where(self.modes.powers > 0.0, 1.0 / self.modes.values, 0.0))

    @property
    def centre(self) -> tuple[float, float]:
        """The ratio given, and the standard deviation of the optimum there by its expected information."""
        pull = self.modes.values / (1.0 + self.modes.values * self.near)
        first, second = self.modes.powers @ pull, self.modes.powers @ pull**2
        bend = float(second - first**2 / self.multiplier)
        return self.near, float(np.sqrt(2.0 / bend)) if bend > 0.0 else np.nan

    @property
    def _roots(self) -> tuple[FloatArray, FloatArray]:
        """Return the eigenvalues and multiplicities that g is made of."""
        if self.kind == "reml":
            return self.modes.values, self.modes.powers
        return self.modes.space.curve.sizes, self.modes.space.curve.counts

    def on_grid(self, psi: FloatArray) -> Values:
        """Evaluate all replicates at common ratios."""
        values, (roots, powers) = self.modes.values, self._roots
        shrink = 1.0 / (1.0 + np.multiply.outer(values, psi))
        drop = -values[:, None] * shrink**2
        weight = roots / (1.0 + np.multiply.outer(psi, roots))
        return Values(
            psi=psi,
            r=self.within_residual[:, None] + self.squares @ shrink,
            r1=self.squares @ drop,
            r2=self.squares @ (-2.0 * values[:, None] * drop * shrink),
            g=np.log1p(np.multiply.outer(psi, roots)) @ powers,
            g1=weight @ powers,
            g2=-(weight**2) @ powers,
            m=self.m[:, None],
        )

    def at(self, which: IntArray, psi: FloatArray, value: bool) -> Values:
        """Evaluate some replicates, each at its own ratio."""
        values, (roots, powers) = self.modes.values, self._roots
        whole = which.size == self.within_residual.size and bool((np.diff(which) == 1).all())
        part = self.squares if whole else self.squares[which]
        scaled = np.multiply.outer(psi, values)
        scaled += 1.0
        pull = values / scaled
        part = part / scaled
        r = self.within_residual[which] + part.sum(axis=1)
        part *= pull
        r1 = -part.sum(axis=1)
        part *= pull
        r2 = 2.0 * part.sum(axis=1)
        if self.kind == "reml":
            weight, outer = pull, scaled
        else:
            outer = 1.0 + np.multiply.outer(psi, roots)
            weight = roots / outer
        g = np.log(outer) @ powers if value else np.zeros(psi.size)
        g1 = weight @ powers
        return Values(psi, r, r1, r2, g, g1, -(weight**2) @ powers, np.full(psi.size, float(self.multiplier)))
