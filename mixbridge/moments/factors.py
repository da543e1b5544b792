"""Triangular factors of cross-products: from the products where they carry the digits, else from the rows.

Every cross-product ``P = Z'Z`` is kept as a factor ``F`` with ``F'F = P``. A factor taken from the products
loses about ``log10(condition**2)`` digits, one taken from the rows by QR only ``log10(condition)``
(Golub & Van Loan, *Matrix Computations*, ch. 5; section from memory). So products are used only where the
squared condition of the columns, scaled to unit length, is below ``1 / PRODUCT_FLOOR``.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

__all__ = [
    "PRODUCT_FLOOR",
    "eigen_factor",
    "factor_from_products",
    "factor_from_rows",
    "root_of",
    "stack_factors",
    "upper_factor",
]

FloatArray = NDArray[np.float64]

PRODUCT_FLOOR = 1e-5
"""Smallest eigenvalue of scaled products that is trusted; rounding then costs at most 1e-16 / 1e-5."""


def factor_from_products(products: FloatArray) -> FloatArray | None:
    """Return an upper triangular ``F`` with ``F'F = products``, or None where rounding would show.

    Parameters
    ----------
    products : ndarray of shape (k, k)
        Symmetric cross-products. Columns whose diagonal is exactly zero are taken as zero columns.

    Returns
    -------
    ndarray of shape (k, k) or None
        None if the smallest eigenvalue of the products, columns scaled to unit length, is below
        `PRODUCT_FLOOR`.
    """
    k = products.shape[0]
    length = np.sqrt(np.maximum(np.diag(products), 0.0))
    live = np.flatnonzero(length > 0.0)
    factor = np.zeros((k, k))
    if live.size == 0:
        return factor
    scaled = products[np.ix_(live, live)] / np.outer(length[live], length[live])
    smallest = float(np.linalg.eigvalsh(scaled)[0])
    if not smallest > PRODUCT_FLOOR:
        return None
    factor[np.ix_(live, live)] = np.linalg.cholesky(scaled).T * length[live]
    return factor


def upper_factor(rows: FloatArray) -> FloatArray:
    """Return the triangular factor of a QR decomposition, ``F'F = rows'rows``.

    Parameters
    ----------
    rows : ndarray of shape (m, k)

    Returns
    -------
    ndarray of shape (min(m, k), k)
        Upper triangular; the signs of its diagonal are those of the decomposition.
    """
    return np.asarray(np.linalg.qr(rows, mode="r"), dtype=float)


def factor_from_rows(rows: FloatArray) -> FloatArray:
    """Return a square ``F`` with ``F'F = rows'rows``, by QR of the rows.

    Parameters
    ----------
    rows : ndarray of shape (m, k)

    Returns
    -------
    ndarray of shape (k, k)
        Upper triangular (zero rows below when m < k). Zero columns stay exactly zero.
    """
    m, k = rows.shape
    factor = np.zeros((k, k))
    if m == 0:
        return factor
    length = np.abs(rows).max(axis=0)
    live = np.flatnonzero(length > 0.0)
    if live.size == 0:
        return factor
    upper = upper_factor(rows[:, live] / length[live])
    factor[: upper.shape[0], live] = upper * length[live]
    return factor


def eigen_factor(products: FloatArray) -> FloatArray:
    """Return a square factor of products whose small eigenvalues are rounding.

    Parameters
    ----------
    products : ndarray of shape (k, k)
        Symmetric cross-products.

    Returns
    -------
    ndarray of shape (k, k)
        ``F`` with ``F'F`` the products, negative eigenvalues counted as zero; not triangular.
    """
    length = np.sqrt(np.maximum(np.diag(products), 0.0))
    safe = np.where(length > 0.0, length, 1.0)
    values, vectors = np.linalg.eigh(products / np.outer(safe, safe))
    return np.asarray(np.sqrt(np.maximum(values, 0.0))[:, None] * vectors.T * length)


def stack_factors(*factors: FloatArray) -> FloatArray:
    """Return one square factor of the sum of the cross-products of several.

    Parameters
    ----------
    *factors : ndarray of shape (m, k)
        Factors, or rows, with the same columns.

    Returns
    -------
    ndarray of shape (k, k)
        As from `factor_from_rows`.
    """
    return factor_from_rows(np.vstack(factors))


def root_of(factor: FloatArray) -> FloatArray:
    """Return J with ``JJ' = (F'F)^-1``.

    Parameters
    ----------
    factor : ndarray of shape (r, k)
        F, of full column rank.

    Returns
    -------
    ndarray of shape (k, k)
    """
    if factor.shape[1] == 0:
        return np.zeros((0, 0))
    length = np.sqrt((factor**2).sum(axis=0))
    upper = upper_factor(factor / length)
    return np.asarray(solve_triangular(upper, np.eye(upper.shape[0])) / length[:, None])
