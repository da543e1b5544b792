"""Move columns near zero before the dense algebra, and map the coefficients back.

With a constant column in X, adding constants to y and to other columns moves the intercept and nothing else.
The shift of a column is a multiple of a power of two no larger than its range, so subtracting it is exact or
rounds in the last place of the difference, and the range, not the offset, sets the rounding error after it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .linear import Columns


@dataclass(frozen=True)
class Shifted:
    """Shifted y and X in the working float type, and the linear map back."""

    X: np.ndarray
    y: np.ndarray
    back: np.ndarray  # p x p: coefficients = back @ shifted coefficients + offset
    offset: np.ndarray

    def coefficients(self, solution: np.ndarray) -> np.ndarray:
        return self.back @ solution + self.offset

    def covariance(self, covariance: np.ndarray) -> np.ndarray:
        return self.back @ covariance @ self.back.T

    def estimable(self, columns: Columns) -> np.ndarray:
        """Mark coefficients of the unshifted columns that no null vector moves."""
        null = columns.null * columns.scale[:, None]
        if null.shape[1] == 0:
            return np.ones(len(self.offset), dtype=bool)
        size = np.abs(null).max(axis=0)
        null = np.where(np.abs(null) <= 1e-9 * size, 0, null) / columns.scale[:, None]
        moved = self.back @ null
        noise = np.abs(self.back) @ np.abs(null)
        limit = np.maximum(1e-7 * size, 1e-12 * noise * columns.scale[:, None])
        return np.all(np.abs(moved) * columns.scale[:, None] <= limit, axis=1)


def shift_of(column: np.ndarray) -> float:
    """Return the multiple of a power of two nearest to the middle of the column; 0 for a constant one."""
    low, high = float(column.min()), float(column.max())
    if high == low:
        return 0.0
    grain = 2.0 ** np.floor(np.log2(high - low))
    return float(np.round((low / 2 + high / 2) / grain) * grain)


def shifted(X: np.ndarray, y: np.ndarray, exact: bool) -> Shifted:
    """Return the panel in long double and near zero (`exact`), or as it is in double."""
    p = X.shape[1]
    kind = np.longdouble if exact else np.float64
    X, y = np.asarray(X, dtype=np.float64).astype(kind), np.asarray(y, dtype=np.float64).astype(kind)
    back, offset = np.eye(p, dtype=kind), np.zeros(p, dtype=kind)
    constant = [j for j in range(p) if X[0, j] != 0 and np.all(X[:, j] == X[0, j])]
    if not exact or not constant:
        return Shifted(X, y, back, offset)
    j0 = constant[0]
    level = X[0, j0]
    X = X.copy()
    for j in range(p):
        if j not in constant:
            move = kind(shift_of(X[:, j]))
            X[:, j] = X[:, j] - move
            back[j0, j] = -move / level
    move = kind(shift_of(y))
    offset[j0] = move / level
    return Shifted(X, y - move, back, offset)
