"""Search for small unbalanced panels whose profile deviance has two local minima over psi >= 0.

A fast scan in double precision on a grid of psi; a found panel is a candidate that the 50-digit likelihood
confirms.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

GRID = np.concatenate([[0.0], np.logspace(-4, 6, 81)])
KINDS = ("reml", "ml")


@dataclass(frozen=True)
class Found:
    """A panel made by `draw(seed, attempt)`, and the kinds of likelihood with two minima on the grid."""

    seed: int
    attempt: int
    kinds: tuple[str, ...]
    lowest_at_zero: tuple[bool, ...]  # by kind


def draw(seed: int, attempt: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Draw X, y, units: 3 to 7 units, of 1 to 3 or of 8 to 20 rows, one or two covariates."""
    rng = np.random.default_rng([seed, attempt])
    N = int(rng.integers(3, 8))
    small = rng.integers(1, 4, size=N)
    large = rng.integers(8, 21, size=N)
    sizes = np.where(rng.random(N) < 0.5, small, large)
    sizes[0], sizes[1] = small[0], large[1]
    units = np.repeat(np.arange(N), sizes)
    n = len(units)
    columns = [np.ones(n), rng.normal(size=n) + rng.normal(size=N)[units]]
    if rng.random() < 0.5:
        columns.append(rng.normal(size=N)[units] if N > 3 else rng.normal(size=n))
    X = np.column_stack(columns)
    psi = 10.0 ** rng.uniform(-2, 1)
    y = X.sum(axis=1) + np.sqrt(psi) * rng.normal(size=N)[units] + rng.normal(size=n)
    return X, y, units


def slopes(X: np.ndarray, y: np.ndarray, units: np.ndarray, kind: str) -> tuple[np.ndarray, np.ndarray]:
    """Return deviance and slope on the grid, from unit products in double precision."""
    z = np.column_stack([X, y])
    p, n = X.shape[1], len(y)
    labels, index = np.unique(units, return_inverse=True)
    sizes = np.bincount(index).astype(float)
    means = np.array([z[index == i].mean(axis=0) for i in range(len(labels))])
    centred = z - means[index]
    within = centred.T @ centred
    deviance, slope = np.empty(len(GRID)), np.empty(len(GRID))
    for k, psi in enumerate(GRID):
        weight = sizes / (1 + sizes * psi)
        A = within + (means * weight[:, None]).T @ means
        inverse = np.linalg.inv(A[:p, :p])
        beta = inverse @ A[:p, p]
        r = A[p, p] - A[p, :p] @ beta
        direction = np.append(-beta, 1.0)
        slope_r = -((weight * (means @ direction)) ** 2).sum()
        g = np.log1p(sizes * psi).sum()
        slope_g = weight.sum()
        m = n
        if kind == "reml":
            m = n - p
            g += np.linalg.slogdet(A[:p, :p])[1]
            slope_g -= np.einsum("ij,ni,nj,n->", inverse, means[:, :p], means[:, :p], weight**2)
        deviance[k] = m * np.log(r) + g
        slope[k] = m * slope_r / r + slope_g
    return deviance, slope


def minima_on_grid(deviance: np.ndarray, slope: np.ndarray) -> list[int]:
    """Return grid places next to a local minimum: 0 if the slope is not negative, each change to plus."""
    at = [0] if slope[0] >= 0 else []
    return at + [k for k in range(1, len(slope)) if slope[k - 1] < 0 <= slope[k]]


def search_two_minima(seed: int, tries: int) -> list[Found]:
    """Try `tries` panels and return those with two or more local minima for REML or for ML."""
    found = []
    for attempt in range(tries):
        X, y, units = draw(seed, attempt)
        if np.linalg.matrix_rank(X) < X.shape[1] or len(y) - len(np.unique(units)) <= X.shape[1]:
            continue
        kinds, zero = [], []
        for kind in KINDS:
            deviance, slope = slopes(X, y, units, kind)
            at = minima_on_grid(deviance, slope)
            if len(at) > 1:
                kinds.append(kind)
                zero.append(min(at, key=lambda k: deviance[k]) == 0)
        if kinds:
            found.append(Found(seed, attempt, tuple(kinds), tuple(zero)))
    return found
