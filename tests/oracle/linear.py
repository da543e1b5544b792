"""Rank-revealing least squares by orthogonalisation, in whatever float type the arrays have.

NumPy's factorisations stop at double precision. The oracle must carry more digits than what it checks, so
the one factorisation it needs is written out here: Gram-Schmidt with column pivoting, every step done twice
("twice is enough": Giraud, Langou & Rozloznik 2005), which keeps the basis orthogonal to working precision
for any condition of the columns. Columns are scaled to unit length first: tolerances are relative.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

#: A column whose remainder is shorter than this share of its length is taken to be dependent. The test panels
#: hold near dependencies down to 1e-5; rounding of stored doubles makes exact ones come out below 1e-12.
DEPENDENT = 1e-10

#: A column shorter than this share of the column it came from (by a projection) is taken to be zero.
ZERO = 1e-12


@dataclass(frozen=True)
class Columns:
    """Columns factorised: an orthonormal basis, a basic inverse of the cross-product, the null space."""

    basis: np.ndarray  # n x r, orthonormal
    left: np.ndarray  # p x n, F @ left @ F = F: takes f to coefficients, zero outside the pivots
    inverse: np.ndarray  # p x p, symmetric g-inverse of F'F, zero outside the pivots
    null: np.ndarray  # p x (p - r), F @ null = 0
    pivots: tuple[int, ...]
    scale: np.ndarray  # p, lengths used for scaling

    @property
    def rank(self) -> int:
        return self.basis.shape[1]

    @property
    def projector(self) -> np.ndarray:
        return self.basis @ self.basis.T

    @property
    def estimable(self) -> np.ndarray:
        """Coefficients fixed by the columns: e_j in the row space, so row j of the null space is zero."""
        return not_in_null(self.null, self.scale)


def not_in_null(null: np.ndarray, scale: np.ndarray) -> np.ndarray:
    """Mark the coordinates that no null vector moves, lengths measured in column lengths."""
    if null.shape[1] == 0:
        return np.ones(null.shape[0], dtype=bool)
    scaled = np.abs(null * scale[:, None])
    return np.all(scaled <= 1e-7 * scaled.max(axis=0), axis=1)


def lengths(F: np.ndarray) -> np.ndarray:
    """Return the Euclidean length of each column."""
    return np.sqrt((F * F).sum(axis=0))


def factorise(F: np.ndarray, reference: np.ndarray | None = None) -> Columns:
    """Factorise the columns of F; those shorter than `ZERO` times `reference` count as zero."""
    n, p = F.shape
    length = lengths(F)
    floor = np.zeros(p, dtype=F.dtype) if reference is None else ZERO * reference
    is_zero = length <= floor
    scale = np.where(is_zero, np.asarray(1, dtype=F.dtype), length)
    if reference is not None:
        scale = np.where(is_zero & (reference > 0), reference, scale)
    G = np.where(is_zero, np.asarray(0, dtype=F.dtype), F / scale)
    basis = np.zeros((n, 0), dtype=F.dtype)
    pivots: list[int] = []
    rest = G.copy()
    for _ in range(min(n, p)):
        size = lengths(rest)
        size[pivots] = 0
        j = int(np.argmax(size))
        if size[j] <= DEPENDENT:
            break
        q = rest[:, j] / size[j]
        q = q - basis @ (basis.T @ q)
        q = q - basis @ (basis.T @ q)
        q = q / np.sqrt(q @ q)
        basis = np.column_stack([basis, q])
        pivots.append(j)
        rest = G - basis @ (basis.T @ G)
        rest = rest - basis @ (basis.T @ rest)
    R = basis.T @ G
    r = len(pivots)
    root = upper_inverse(R[:, pivots])
    left = np.zeros((p, n), dtype=F.dtype)
    left[pivots] = (root @ basis.T) / scale[pivots][:, None]  # not inverse @ F', which squares the condition
    inverse = np.zeros((p, p), dtype=F.dtype)
    inverse[np.ix_(pivots, pivots)] = root @ root.T / np.outer(scale[pivots], scale[pivots])
    others = [j for j in range(p) if j not in pivots]
    null = np.zeros((p, p - r), dtype=F.dtype)
    for k, j in enumerate(others):
        null[pivots, k] = -(root @ R[:, j])
        null[j, k] = 1
    return Columns(basis, left, inverse, null / scale[:, None], tuple(pivots), scale)


def upper_inverse(R: np.ndarray) -> np.ndarray:
    """Invert an upper triangular matrix by back substitution."""
    r = R.shape[0]
    out = np.zeros((r, r), dtype=R.dtype)
    for k in range(r):
        out[k, k] = 1 / R[k, k]
        for i in range(k - 1, -1, -1):
            out[i, k] = -(R[i, i + 1 : k + 1] @ out[i + 1 : k + 1, k]) / R[i, i]
    return out


def coefficients(F: np.ndarray, f: np.ndarray, columns: Columns) -> np.ndarray:
    """Return least-squares coefficients with zeros outside the pivots, one step of refinement included."""
    solution = np.zeros(F.shape[1], dtype=F.dtype)
    for _ in range(2):
        solution = solution + columns.left @ (f - F @ solution)
    return solution


def solve_two(C: np.ndarray) -> np.ndarray | None:
    """Invert a 2 x 2 matrix; None when its determinant is rounding only."""
    a, b, c, d = C[0, 0], C[0, 1], C[1, 0], C[1, 1]
    determinant = a * d - b * c
    if abs(determinant) <= 1e-10 * (abs(a * d) + abs(b * c)):
        return None
    return np.array([[d, -b], [-c, a]], dtype=C.dtype) / determinant
