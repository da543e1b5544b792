"""Draws of the moments of a panel under normal errors, given X: a few numbers instead of n rows.

Let ``QX = Q_w R_w`` with ``Q_w'Q_w = I`` of rank K_w, and for the m_T units of size T ``sqrt(T) Xbar_T = Q_T R_T``
with r_T columns. Under ``y = X beta + alpha + u``, normal, with ``e = y - X beta``,

    Q_w'e ~ N(0, sigma_u^2 I),            what is left of e'Qe ~ sigma_u^2 chi^2(n - N - K_w)
    sqrt(T) Q_T'ebar ~ N(0, v_T I),       what is left of T sum ebar^2 ~ v_T chi^2(m_T - r_T)

with ``v_T = sigma_u^2 + T sigma_a^2``, all independent. These numbers are the joint law of ``W_xy, W_yy`` and, per
size, of ``sum xbar ybar`` and ``sum ybar^2``: ``X'Qe = R_w'(Q_w'e)``, and so on. The law is exact for any m_T: with
fewer units than columns, r_T is m_T and nothing is left. Any r_T between the rank of Xbar_T and m_T gives the same
law, so no rank is decided here.

Replicates come in blocks of `BLOCK`, each with a stream of its own, indexed by its number: replicate i is the same
numbers whatever the number of workers, the batches, or how many replicates are asked for.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.moments import Moments
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["BLOCK", "Coordinates", "Draws", "Truth", "coordinates_of", "draw", "moments_of", "truth_of"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

BLOCK = 100
"""Replicates that share one random stream."""


@dataclass(frozen=True, slots=True)
class Truth:
    """The model that is drawn from.

    Attributes
    ----------
    coefficients : ndarray of shape (p,)
        In the units of the data.
    unit, idiosyncratic : float
        ``sigma_a^2 >= 0`` and ``sigma_u^2 > 0``, variances.
    """

    coefficients: FloatArray
    unit: float
    idiosyncratic: float

    def __post_init__(self) -> None:
        """Refuse what is not a model."""
        if not np.isfinite(self.coefficients).all():
            raise OptionError("the coefficients to draw under must be finite numbers, one per term.")
        if not (np.isfinite(self.unit) and self.unit >= 0.0):
            raise OptionError(f"unit={self.unit!r} is not allowed; allowed: a variance, at least 0.")
        if not (np.isfinite(self.idiosyncratic) and self.idiosyncratic > 0.0):
            raise OptionError(
                f"idiosyncratic={self.idiosyncratic!r} is not allowed; allowed: a variance above 0."
            )
        self.coefficients.setflags(write=False)

    @property
    def ratio(self) -> float:
        """``psi = sigma_a^2 / sigma_u^2``."""
        return self.unit / self.idiosyncratic


def truth_of(fit: Fit) -> Truth:
    """Take the model to draw from a fit.

    Parameters
    ----------
    fit : Fit
        A route on the curve, with a finite ratio.

    Returns
    -------
    Truth

    Raises
    ------
    OptionError
        If the route has no finite variance ratio.
    IdentificationError
        If the route gave no estimates.
    """
    if not np.isfinite(fit.ratio):
        if fit.route in ("within", "between", "first_difference"):
            raise OptionError(
                f"route {fit.route!r} gives no unit variance, so it describes no model to draw from; "
                "name a route on the curve, such as 'reml'."
            )
        raise IdentificationError(f"route {fit.route!r} gives no model to draw from: {fit.status}.")
    return Truth(fit.beta.copy(), fit.unit_variance, fit.idiosyncratic_variance)


@dataclass(frozen=True, slots=True)
class Coordinates:
    """The design in orthonormal coordinates of the within space and of the unit means of each size.

    Attributes
    ----------
    curve : Curve
        The panel; of its outcome nothing is used.
    x : ndarray of shape (D, p)
        ``R_w`` above the ``R_T``, whitened columns: ``x'x = X'X = I``.
    block : ndarray of int, shape (D,)
        Size class of each coordinate, -1 within.
    row : ndarray of int, shape (D,)
        Place of each coordinate in its factor.
    rest_df : ndarray of shape (1 + G,)
        Degrees of freedom of what is left: within, then per size.
    to_beta : ndarray of shape (p, p)
        From whitened coefficients to those of the data.
    """

    curve: Curve
    x: FloatArray
    block: IntArray
    row: IntArray
    rest_df: FloatArray
    to_beta: FloatArray
    turn_within: FloatArray
    turn_between: FloatArray

    @property
    def order(self) -> int:
        """Number D of coordinates."""
        return len(self.x)

    @property
    def within_order(self) -> int:
        """``K_w``, the number of coordinates within."""
        return self.curve.rank_within

    def spread(self, on_within: float, on_means: FloatArray) -> FloatArray:
        """Return a weight on Q and weights on the P_T as one weight per coordinate.

        Parameters
        ----------
        on_within : float
        on_means : ndarray of shape (..., G)

        Returns
        -------
        ndarray of shape (..., D)
        """
        inside = np.full((*on_means.shape[:-1], self.within_order), on_within)
        return np.concatenate([inside, on_means[..., self.block[self.within_order :]]], axis=-1)


@dataclass(frozen=True, slots=True)
class Draws:
    """Replicates of the errors of a panel, in `Coordinates`, in the units of the outcome.

    Attributes
    ----------
    e : ndarray of shape (R, D)
        Coordinates of the errors along the columns of X.
    rest : ndarray of shape (R, 1 + G)
        Sums of squares of what is left: within, then per size times that size.
    """

    e: FloatArray
    rest: FloatArray


def coordinates_of(curve: Curve) -> Coordinates:
    """Turn the factors of X so that as few numbers as possible are drawn.

    Parameters
    ----------
    curve : Curve

    Returns
    -------
    Coordinates
    """
    p, inside = curve.rank, curve.rank_within
    constants = curve.rank_constant
    turn_within, upper = np.linalg.qr(curve.within[:, constants:p], mode="complete")
    within = np.zeros((inside, p))
    within[:, constants:] = upper[:inside]
    turn_between, stacked = np.linalg.qr(curve.between[:, :, :p], mode="complete")
    ranks = np.minimum(curve.counts, p).astype(np.intp)
    for at in np.flatnonzero(curve.counts < p):
        # as many rows as units: pivoting leaves only rounding below them
        turn_between[at], rows, order = qr(curve.between[at, :, :p], pivoting=True)
        stacked[at][:, order] = rows
    live = np.arange(stacked.shape[1])[None, :] < ranks[:, None]
    block, row = np.nonzero(live)
    means = np.sqrt(curve.sizes)[block, None] * stacked[block, row]
    return Coordinates(
        curve=curve,
        x=np.vstack([within, means]),
        block=np.concatenate([np.full(inside, -1), block]),
        row=np.concatenate([np.arange(inside), row]),
        rest_df=np.concatenate([[float(curve.df_within)], curve.counts - ranks]),
        to_beta=_sign(curve) * curve.to_beta[:, :p] / np.sqrt(curve.unit),
        turn_within=turn_within,
        turn_between=turn_between,
    )


def _sign(curve: Curve) -> float:
    """Return the sign of the outcome's whitened axis: ``X to_beta`` is plus or minus the whitened X."""
    moments, p = curve.moments, curve.rank
    place = [curve.names.index(name) for name in moments.columns[:-1]]
    x = np.zeros((len(moments.columns), p))  # from (1, scaled x) to X
    x[0, place] = moments.shift[:-1]
    x[np.arange(1, len(place) + 1), place] = moments.scale[:-1]
    if moments.constant is not None:
        x[0, curve.names.index(moments.constant)] = 1.0
    turned = x @ curve.to_beta[:, :p]
    inside = (moments.within[:, :-1] @ turned[1:] * curve.within[:, :p]).sum()
    means = np.einsum(
        "g,gri,ij,grj->", curve.sizes, moments.between[:, :, :-1], turned, curve.between[:, :, :p]
    )
    return float(np.sign(inside + means))


def draw(space: Coordinates, truth: Truth, seed: int, start: int, stop: int) -> Draws:
    """Draw the replicates ``start .. stop - 1``.

    Parameters
    ----------
    space : Coordinates
    truth : Truth
    seed : int
        Equal seeds give equal replicates by number.
    start, stop : int
        The first is a multiple of `BLOCK`.

    Returns
    -------
    Draws
    """
    e = np.empty((stop - start, space.order))
    rest = np.zeros((stop - start, space.rest_df.size))
    live = np.flatnonzero(space.rest_df > 0.0)
    for first in range(start, stop, BLOCK):
        stream = np.random.Generator(
            np.random.PCG64(np.random.SeedSequence(seed, spawn_key=(first // BLOCK,)))
        )
        last = min(first + BLOCK, stop)
        e[first - start : last - start] = stream.standard_normal((BLOCK, space.order))[: last - first]
        squares = stream.chisquare(space.rest_df[live], (BLOCK, live.size))
        rest[first - start : last - start, live] = squares[: last - first]
    variance = truth.idiosyncratic + space.curve.sizes * truth.unit
    e *= np.sqrt(space.spread(truth.idiosyncratic, variance))
    rest *= np.append(truth.idiosyncratic, variance)
    return Draws(e, rest)


def moments_of(space: Coordinates, truth: Truth, draws: Draws, which: int) -> Moments:
    """Return the closed moments of one replicate: those of the panel with another outcome.

    Parameters
    ----------
    space : Coordinates
    truth : Truth
        The one drawn under.
    draws : Draws
    which : int
        Place in `draws`.

    Returns
    -------
    Moments
        Every route can be fitted to them; the columns of X are those of the panel, digit by digit.
    """
    curve, moments = space.curve, space.curve.moments
    inside, p = space.within_order, curve.rank
    e, rest = draws.e[which], np.sqrt(draws.rest[which])
    slope = np.array([truth.coefficients[curve.names.index(name)] for name in moments.columns[:-1]])
    level = -moments.shift[-1] + float(slope @ moments.shift[:-1])
    if moments.constant is not None:
        level += truth.coefficients[curve.names.index(moments.constant)]
    scaled, unit = slope * moments.scale[:-1] / moments.scale[-1], moments.scale[-1]
    within, between = moments.within.copy(), moments.between.copy()
    within[:, -1] = (
        within[:, :-1] @ scaled + space.turn_within @ _column(e[:inside], rest[0], inside, len(within)) / unit
    )
    for at, size in enumerate(curve.sizes):
        here = space.block == at
        column = np.zeros(between.shape[1])
        column[space.row[here]] = e[here]
        column[p] = rest[1 + at]
        errors = space.turn_between[at] @ column / np.sqrt(size)
        between[at, :, -1] = between[at, :, 1:-1] @ scaled + (between[at, :, 0] * level + errors) / unit
    return replace(moments, within=within, between=between, note=moments.note)


def _column(e: FloatArray, rest: float, at: int, length: int) -> FloatArray:
    column = np.zeros(length)
    column[:at] = e
    column[at] = rest
    return column
