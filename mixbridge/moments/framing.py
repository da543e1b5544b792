"""Framed coordinates of unit products: in them the within products of all units add up to the identity."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg.blas import dtrsm

from mixbridge.moments.factors import upper_factor

__all__ = ["frame_of", "framed_rows", "places_of", "square_of"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
DEPENDENT = 1e-10
"""Share of a column that is left after the earlier ones, below which it stays unscaled in the frame."""


def frame_of(within: FloatArray) -> FloatArray:
    """Return an invertible triangular R with ``R'R = W``; columns that depend on earlier ones get a row of I.

    Parameters
    ----------
    within : ndarray of shape (m, k)
        F with ``F'F = W``.

    Returns
    -------
    ndarray of shape (k, k)
    """
    k = within.shape[1]
    length = np.sqrt((within**2).sum(axis=0))
    safe = np.where(length > 0.0, length, 1.0)
    upper = upper_factor(within / safe)
    frame = np.zeros((k, k))
    frame[: upper.shape[0]] = upper * safe
    weak = ~(np.abs(np.diag(frame)) > DEPENDENT * length)
    frame[weak] = np.eye(k)[weak]
    return frame


def framed_rows(d: FloatArray, frame: FloatArray) -> FloatArray:
    """Return f with ``f frame = d`` by substitution, which unlike an inverse leaves rows their digits; spends d.

    Parameters
    ----------
    d : ndarray of shape (m, k)
    frame : ndarray of shape (k, k)
        Upper triangular.

    Returns
    -------
    ndarray of shape (m, k)
    """
    return np.asarray(dtrsm(1.0, frame, d.T, trans_a=1, overwrite_b=1)).T


def places_of(k: int) -> IntArray:
    """Return for each entry of a (k, k) matrix its position in the packed upper triangle."""
    places = np.zeros((k, k), dtype=np.intp)
    rows, columns = np.triu_indices(k)
    places[rows, columns] = places[columns, rows] = np.arange(rows.size)
    return places


def square_of(packed: FloatArray, k: int) -> FloatArray:
    """Return full symmetric matrices, shape (..., k, k), from packed upper triangles."""
    return np.asarray(np.take(packed, places_of(k), axis=-1))
