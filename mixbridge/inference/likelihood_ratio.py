"""Likelihood ratios of sigma_a^2 = 0, restricted and not, with their finite-sample null laws by simulation.

In the spectral form (see `spectrum`), with ``w_k^2`` chi-square with one degree of freedom and ``w_0^2`` with
``n - N - K_w``, all independent,

    r(psi)       = w_0^2 + sum_k w_k^2 / (1 + mu_k psi)
    restricted:    sup_psi  (n - K) log(r(0)/r(psi)) - sum_k log(1 + mu_k psi)
    not restricted: sup_psi  n log(r(0)/r(psi)) - sum_T m_T log(1 + T psi)

over ψ >= 0 have exactly the law of the statistics under sigma_a^2 = 0 and normal errors, whatever β and
``sigma_u^2`` (Crainiceanu & Ruppert 2004). Each draw is searched on a grid of ψ, about twelve points a
decade, and every local maximum that could be the largest is polished by Newton steps kept inside its grid
cell, so the supremum is not the grid's.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import scipy
from numpy.typing import NDArray

from mixbridge.errors import OptionError
from mixbridge.inference.spectrum import Spectrum
from mixbridge.ratio import Curve
from mixbridge.routes import Profile
from mixbridge.routes.likelihood import Kind

__all__ = ["NullLaw", "Suprema", "draw_squares", "mixture_p", "null_laws", "observed_ratio", "suprema"]

FloatArray = NDArray[np.float64]
PER_DECADE = 12
POLISH = 40
"""Most Newton or halving steps; two or three are usual."""


@dataclass(frozen=True, slots=True)
class Suprema:
    """Suprema over ψ >= 0 for several outcomes.

    Attributes
    ----------
    value : ndarray of shape (M,)
        Likelihood ratio statistics, at least 0.
    psi : ndarray of shape (M,)
        Where they are attained; exactly 0 where the likelihood is highest there.
    """

    value: FloatArray
    psi: FloatArray


@dataclass(frozen=True, slots=True)
class NullLaw:
    """Simulated null law of one statistic.

    Attributes
    ----------
    kind : str
        ``ml`` or ``reml``.
    sorted : ndarray of shape (draws,)
        Draws of the statistic, increasing.
    seed : int
    """

    kind: Kind
    sorted: FloatArray
    seed: int

    @property
    def zero(self) -> float:
        """Share of draws with statistic zero, that is with an estimate of zero under sigma_a^2 = 0."""
        return float((self.sorted == 0.0).mean())

    def p_value(self, statistic: float) -> tuple[float, float]:
        """Return ``(1 + draws not below the statistic) / (1 + draws)`` and its Monte Carlo standard error.

        With the one added to both, a test at any level is exact at that level over repeated simulation too
        (Barnard 1963).
        """
        draws = self.sorted.size
        if statistic <= 0.0:
            return 1.0, 0.0
        above = draws - int(np.searchsorted(self.sorted, statistic, side="left"))
        p = (1.0 + above) / (1.0 + draws)
        return p, float(np.sqrt(p * (1.0 - p) / draws))


def observed_ratio(curve: Curve, kind: Kind, psi: float) -> float:
    """Return ``D(0) - D(psi)``, the statistic of the data when ψ is the optimum; exactly 0 at ψ = 0."""
    if psi == 0.0:
        return 0.0
    deviance = Profile(curve, kind).values(np.array([0.0, psi])).deviance
    return max(float(deviance[0] - deviance[1]), 0.0)


def mixture_p(statistic: float) -> float:
    """Return the p-value under the half-and-half mixture of chi-squares with 0 and 1 degrees of freedom."""
    return 1.0 if statistic <= 0.0 else 0.5 * float(scipy.stats.chi2.sf(statistic, 1))


def null_laws(
    spectrum: Spectrum,
    draws: int = 100_000,
    seed: int = 20_040,
    *,
    psi: float = 0.0,
    progress: Callable[[int, int], None] | None = None,
) -> Mapping[Kind, NullLaw]:
    """Simulate both statistics from the same draws.

    Parameters
    ----------
    spectrum : Spectrum
        With at least one zero eigenvalue (``n - N - K_w >= 1``) and one that is not.
    draws : int
    seed : int
        Of numpy's default generator; equal arguments give equal draws.
    psi : float
        True ratio of the draws: 0 for the null law, else the law under that alternative.
    progress : callable, optional
        Called with draws done and draws asked for, after each batch.

    Returns
    -------
    mapping from ``ml`` and ``reml`` to NullLaw
    """
    if isinstance(draws, bool) or not isinstance(draws, int) or draws < 1:
        raise OptionError(f"draws={draws!r} is not allowed; allowed: a positive integer.")
    found: dict[Kind, list[FloatArray]] = {"ml": [], "reml": []}
    done = 0
    for between, within in draw_squares(spectrum, draws, np.random.default_rng(seed), psi):
        for kind, parts in found.items():
            parts.append(suprema(spectrum, between, within, kind).value)
        done += within.size
        if progress is not None:
            progress(done, draws)
    return {kind: NullLaw(kind, np.sort(np.concatenate(parts)), seed) for kind, parts in found.items()}


def draw_squares(
    spectrum: Spectrum, draws: int, rng: np.random.Generator, psi: float = 0.0
) -> Iterator[tuple[FloatArray, FloatArray]]:
    """Yield batches of ``(c_k^2 summed by eigenvalue, RSS_w)`` at ``sigma_u^2 = 1``."""
    k = spectrum.values.size
    inflate = 1.0 + spectrum.values * psi
    single = spectrum.multiplicities == 1.0
    several = spectrum.multiplicities[~single]
    batch = max(256, 2**18 // max(k, 1))
    for start in range(0, draws, batch):
        rows = min(batch, draws - start)
        between = np.empty((rows, k))
        between[:, single] = rng.standard_normal((rows, k - several.size)) ** 2
        between[:, ~single] = rng.chisquare(several, (rows, several.size))
        between *= inflate
        yield between, rng.chisquare(spectrum.zeros, rows)


def suprema(spectrum: Spectrum, between: FloatArray, within: FloatArray, kind: Kind) -> Suprema:
    """Maximise the likelihood ratio over ψ >= 0 for many outcomes at once.

    Parameters
    ----------
    spectrum : Spectrum
    between : ndarray of shape (M, k)
        ``c_k^2`` summed over equal eigenvalues.
    within : ndarray of shape (M,)
        ``RSS_w``, positive.
    kind : {"ml", "reml"}

    Returns
    -------
    Suprema
    """
    total = between.sum(axis=1) + within
    criterion = _Criterion.of(spectrum, kind)
    grid = _grid(spectrum)
    share = np.multiply.outer(spectrum.values, grid)
    drop = (between @ (share / (1.0 + share))) / total[:, None]
    height = (
        -criterion.m * np.log1p(-drop) - np.log1p(np.multiply.outer(grid, criterion.roots)) @ criterion.powers
    )
    rising = criterion.m * (between @ spectrum.values) / total > criterion.powers @ criterion.roots
    at, *bracket = _cells(grid, height, rising)
    top, place = _polish(criterion, between[at], total[at], (bracket[0], bracket[1], bracket[2]))
    value, psi = np.zeros(within.size), np.zeros(within.size)
    np.maximum.at(value, at, top)
    highest = (top > 0.0) & (top == value[at])
    psi[at[highest]] = place[highest]
    return Suprema(value, psi)


@dataclass(frozen=True, slots=True)
class _Criterion:
    """``-m log(1 - drop(psi)/total) - sum powers log(1 + roots psi)``, the height to be maximised."""

    m: int
    values: FloatArray
    roots: FloatArray
    powers: FloatArray

    @classmethod
    def of(cls, spectrum: Spectrum, kind: Kind) -> _Criterion:
        if kind == "reml":
            return cls(spectrum.n - spectrum.rank, spectrum.values, spectrum.values, spectrum.multiplicities)
        return cls(spectrum.n, spectrum.values, spectrum.sizes, spectrum.counts)

    def at(
        self, psi: FloatArray, between: FloatArray, total: FloatArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return height, slope and bend, each row at its own ψ."""
        pull = self.values / (1.0 + psi[:, None] * self.values)
        first = between * pull
        drop = psi * first.sum(axis=1)
        r = total - drop
        first *= 1.0 - psi[:, None] * pull
        r1 = -first.sum(axis=1) / r
        first *= pull
        r2 = 2.0 * first.sum(axis=1) / r
        weight = self.roots / (1.0 + psi[:, None] * self.roots)
        g = np.log1p(psi[:, None] * self.roots) @ self.powers
        height = -self.m * np.log1p(-drop / total) - g
        slope = -self.m * r1 - weight @ self.powers
        return height, slope, -self.m * (r2 - r1**2) + (weight**2) @ self.powers


def _grid(spectrum: Spectrum) -> FloatArray:
    """Return 0 and equal steps in log ψ over the ψ at which any eigenvalue still counts."""
    largest, smallest = spectrum.values[-1], max(spectrum.values[0], 1e-9 * spectrum.values[-1])
    first, last = np.log10(1e-3 / largest), np.log10(1e3 / smallest)
    return np.concatenate([[0.0], np.logspace(first, last, int(np.ceil(PER_DECADE * (last - first))) + 1)])


def _cells(
    grid: FloatArray, height: FloatArray, rising: NDArray[np.bool_]
) -> tuple[NDArray[np.intp], FloatArray, FloatArray, FloatArray]:
    """Return row, bracket and starting point of each local maximum seen on the grid."""
    up = np.diff(height, axis=1) >= 0.0
    peak = up & np.column_stack([~up[:, 1:], np.ones(len(height), dtype=bool)])
    at, j = np.nonzero(peak)
    j = j + 1
    low, high = grid[j - 1], np.append(grid, np.inf)[j + 1]
    # the vertex of the parabola through three points, in steps of log ψ
    inner = (j > 1) & (j < grid.size - 1)
    before, here, after = height[at, j - 1], height[at, j], height[at, np.minimum(j + 1, grid.size - 1)]
    curved = before - 2.0 * here + after
    shift = np.where(
        inner & (curved < 0.0), 0.5 * (before - after) / np.where(curved < 0.0, curved, 1.0), 0.0
    )
    start = grid[j] * (grid[2] / grid[1]) ** np.clip(shift, -1.0, 1.0)
    early = np.flatnonzero(rising & ~up[:, 0])  # rises at 0, back below it at the first step
    first = np.full(early.size, grid[1])
    return (
        np.concatenate([at, early]),
        np.concatenate([low, 0.0 * first]),
        np.concatenate([high, first]),
        np.concatenate([start, 0.5 * first]),
    )


def _polish(
    criterion: _Criterion,
    between: FloatArray,
    total: FloatArray,
    bracket: tuple[FloatArray, FloatArray, FloatArray],
) -> tuple[FloatArray, FloatArray]:
    """Find the maximum in each bracket (low, high, start): Newton steps, halved where they would leave it."""
    low, high, start = bracket
    value, psi = np.zeros(start.size), start.copy()
    open_ = np.arange(start.size)
    for _ in range(POLISH):
        if open_.size == 0:
            break
        here = psi[open_]
        height, slope, bend = criterion.at(here, between[open_], total[open_])
        rises = slope > 0.0
        low[open_[rises]], high[open_[~rises]] = here[rises], here[~rises]
        a, b = low[open_], high[open_]
        with np.errstate(divide="ignore", invalid="ignore"):
            step = np.where(bend < 0.0, -slope / bend, np.nan)
            inside = (here + step > a) & (here + step < b)
            middle = np.where(np.isinf(b), 8.0 * here, np.where(a > 0.0, np.sqrt(a * b), 0.5 * b))
        new = np.where(inside, here + step, middle)
        done = (
            (inside & (np.abs(step) <= 1e-3 * here)) | (slope == 0.0) | (b - a <= 1e-12 * b) | (here > 1e200)
        )
        gain = np.where(inside & done, 0.5 * slope * step, 0.0)
        value[open_] = height + np.nan_to_num(gain)
        psi[open_] = new
        open_ = open_[~done]
    return value, psi
