"""Draws by rows, where errors have heavy tails or are correlated in time: as few numbers as normal ones leave.

Rows of errors are drawn and reduced at once to the coordinates of `mixbridge.resample.moment_draws`, with orthonormal
bases taken from the rows of X, so that everything after it is the same as for normal errors.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from mixbridge.ratio import Curve
from mixbridge.rehearse.design import Rows
from mixbridge.rehearse.truth import Model
from mixbridge.resample.moment_draws import BLOCK, Coordinates, Draws, coordinates_of

__all__ = ["RowSpace", "draw_rows", "row_space"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
NUMBERS = 2**20
"""Errors held at one time, about."""


@dataclass(frozen=True, slots=True, eq=False)
class RowSpace:
    """Coordinates of a panel with the bases that lead to them.

    Attributes
    ----------
    space : Coordinates
    within : ndarray of shape (n, K_w)
        Orthonormal basis of QX.
    means : tuple of ndarray of shape (m_T, r_T)
        Per size, an orthonormal basis of the unit means.
    members : tuple of ndarray of int
        Units of each size.
    starts : ndarray of int, shape (N,)
        First row of each unit.
    counts : ndarray of int, shape (N,)
    steps : ndarray of shape (n,)
    """

    space: Coordinates
    within: FloatArray
    means: tuple[FloatArray, ...]
    members: tuple[IntArray, ...]
    starts: IntArray
    counts: IntArray
    steps: FloatArray


def row_space(curve: Curve, rows: Rows) -> RowSpace:
    """Take the bases from the rows of X.

    Parameters
    ----------
    curve : Curve
        Of the same rows.
    rows : Rows

    Returns
    -------
    RowSpace
    """
    space = coordinates_of(curve)
    counts = np.bincount(rows.codes).astype(np.intp)
    starts = (np.cumsum(counts) - counts).astype(np.intp)
    # by unit, around one row of it: an offset of a column costs no digits within
    near = rows.x - rows.x[starts][rows.codes]
    shift = np.add.reduceat(near, starts, axis=0) / counts[:, None]
    means = (rows.x[starts] + shift) @ space.to_beta
    inside = (near - shift[rows.codes]) @ space.to_beta
    k, p = curve.rank_constant, curve.rank
    basis, upper = np.linalg.qr(inside[:, k:])
    order = curve.rank_within
    x = [np.zeros((order, p))]
    x[0][:, k:] = upper[:order]
    block, place, bases, members = [np.full(order, -1)], [np.arange(order)], [], []
    for at, size in enumerate(curve.sizes):
        here = np.flatnonzero(counts == int(size)).astype(np.intp)
        one, stacked = np.linalg.qr(np.sqrt(size) * means[here])
        x.append(stacked)
        bases.append(one)
        members.append(here)
        block.append(np.full(len(stacked), at))
        place.append(np.arange(len(stacked)))
    ranks = np.array([one.shape[1] for one in bases])
    return RowSpace(
        space=replace(
            space,
            x=np.vstack(x),
            block=np.concatenate(block).astype(np.intp),
            row=np.concatenate(place).astype(np.intp),
            rest_df=np.concatenate([[float(curve.df_within)], curve.counts - ranks]),
        ),
        within=basis[:, :order],
        means=tuple(bases),
        members=tuple(members),
        starts=starts,
        counts=counts,
        steps=rows.steps,
    )


def draw_rows(rows: RowSpace, model: Model, seed: int, start: int, stop: int) -> Draws:
    """Draw the replicates ``start .. stop - 1`` by rows.

    Parameters
    ----------
    rows : RowSpace
    model : Model
    seed : int
        Equal seeds give equal replicates by number.
    start, stop : int
        The first is a multiple of `BLOCK`.

    Returns
    -------
    Draws
        Without the contextual part.
    """
    truth, variances, n = model.truth, model.normal, len(rows.within)
    found = Draws(
        np.empty((stop - start, rows.space.order)), np.zeros((stop - start, rows.space.rest_df.size))
    )
    step = int(max(NUMBERS // n, 1))
    for first in range(start, stop, BLOCK):
        stream = np.random.Generator(
            np.random.PCG64(np.random.SeedSequence(seed, spawn_key=(first // BLOCK, 1)))
        )
        sample = _sampler(stream, truth.unit_tail_df)
        effects = np.sqrt(variances.unit) * sample((BLOCK, rows.counts.size))
        sample = _sampler(stream, truth.tail_df)
        last = min(first + BLOCK, stop)
        for low in range(first, last, step):
            high = min(low + step, last)
            errors = np.sqrt(variances.idiosyncratic) * sample((high - low, n))
            if truth.serial != 0.0:
                _correlate(errors, rows, truth.serial)
            here = np.s_[low - start : high - start]
            reduce_rows(rows, effects[low - first : high - first], errors, found.e[here], found.rest[here])
    return found


def reduce_rows(
    rows: RowSpace, effects: FloatArray, errors: FloatArray, e: FloatArray, rest: FloatArray
) -> None:
    """Reduce unit effects and errors of some replicates to their coordinates, into `e` and `rest`.

    Parameters
    ----------
    rows : RowSpace
    effects : ndarray of shape (R, N)
    errors : ndarray of shape (R, n)
    e : ndarray of shape (R, D)
    rest : ndarray of shape (R, 1 + G)
    """
    means = np.add.reduceat(errors, rows.starts, axis=1) / rows.counts
    inside = errors - np.repeat(means, rows.counts, axis=1)
    order = rows.within.shape[1]
    e[:, :order] = inside @ rows.within
    inside -= e[:, :order] @ rows.within.T
    rest[:, 0] = (inside**2).sum(axis=1)
    means += effects
    at = order
    for k, (basis, units) in enumerate(zip(rows.means, rows.members, strict=True)):
        scaled = np.sqrt(rows.space.curve.sizes[k]) * means[:, units]
        here = scaled @ basis
        e[:, at : at + basis.shape[1]] = here
        at += basis.shape[1]
        if basis.shape[1] < units.size:
            scaled -= here @ basis.T
            rest[:, 1 + k] = (scaled**2).sum(axis=1)


def _sampler(stream: np.random.Generator, df: float | None) -> Callable[[tuple[int, int]], FloatArray]:
    """Return a source of numbers with mean 0 and variance 1."""
    if df is None:
        return stream.standard_normal
    return lambda shape: stream.standard_t(df, shape) / np.sqrt(df / (df - 2.0))


def _correlate(errors: FloatArray, rows: RowSpace, serial: float) -> None:
    """Turn independent errors into autocorrelated ones of the same variance, in place."""
    for t in range(1, int(rows.counts.max())):
        here = rows.starts[rows.counts > t] + t
        keep = np.sign(serial) ** rows.steps[here] * np.abs(serial) ** rows.steps[here]
        errors[:, here] = keep * errors[:, here - 1] + np.sqrt(1.0 - keep**2) * errors[:, here]
