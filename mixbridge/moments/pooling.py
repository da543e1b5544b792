r"""Closed moments of disjoint units put together, and moved to another origin.

A part measured from its own shift s_p and in its own scale c_p is moved to a common one: with ``f = c_p / c``,

    W_p -> diag(f) W_p diag(f),      (1, z) -> (1, f z + (s_p - s) / c),

on the factors, so that a unit mean is rounded at the size of its distance from s, never of its distance from zero.
Factors are then stacked and made square by QR, W over all parts, B_T over the parts that have units of size T. The
common shift is the mean of the shifts, weighted by rows; the common scale the power of two next to the spread

    c^2 = sum_p n_p (c_p^2 + (s_p - s)^2) / n,

over the parts in which the column varies. Both depend on shifts, scales and rows only: closed moments and unit
products of the same parts get the same ones.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import reduce
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import DataError
from mixbridge.moments.factors import factor_from_rows, stack_factors
from mixbridge.moments.files import same_coding

__all__ = ["POOLED", "ClosedPart", "Described", "common_frame", "pooled", "recentred", "same_design"]

FloatArray = NDArray[np.float64]
POOLED = "pooled from parts whose units are taken to be distinct"


class Described(Protocol):
    """What says which columns a part has and how they are measured."""

    @property
    def design(self) -> tuple[str, ...]:
        """Names of the design columns."""

    @property
    def constant(self) -> str | None:
        """Name of the column of ones."""

    @property
    def outcome(self) -> str:
        """Name of the outcome."""

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the entries of z."""

    @property
    def shift(self) -> FloatArray:
        """Origin of each entry of z."""

    @property
    def scale(self) -> FloatArray:
        """Unit of each entry of z."""

    @property
    def rows(self) -> int:
        """Number of rows."""

    @property
    def coding(self) -> str | None:
        """How categories are coded."""


class ClosedPart(Described, Protocol):
    """`Moments`, seen from here."""

    @property
    def magnitude(self) -> FloatArray:
        """Root mean square of each column."""

    @property
    def sizes(self) -> NDArray[np.int64]:
        """Unit sizes."""

    @property
    def counts(self) -> NDArray[np.int64]:
        """Units of each size."""

    @property
    def within(self) -> FloatArray:
        """Factor of W."""

    @property
    def between(self) -> FloatArray:
        """Factors of B_T."""

    @property
    def note(self) -> str:
        """How W was obtained."""


def same_design(parts: Sequence[Described], what: str) -> str | None:
    """Refuse parts of different columns or coding; return the coding.

    Parameters
    ----------
    parts : sequence
    what : str
        What is pooled, for messages.

    Returns
    -------
    str or None
    """
    first = parts[0]
    for part in parts[1:]:
        if (part.design, part.outcome) != (first.design, first.outcome):
            raise DataError(
                f"{what} of different designs cannot be pooled: "
                f"{list(first.design)} -> {first.outcome!r} against {list(part.design)} -> {part.outcome!r}. "
                "Build all parts from the same formula and levels."
            )
    return reduce(same_coding, (part.coding for part in parts))


def common_frame(
    rows: Sequence[int],
    shifts: Sequence[FloatArray],
    scales: Sequence[FloatArray],
    varies: Sequence[NDArray[np.bool_]],
) -> tuple[FloatArray, FloatArray]:
    """Return the shift and the scale of all parts together.

    Parameters
    ----------
    rows : sequence of int
        Of each part.
    shifts, scales : sequence of ndarray of shape (k,)
    varies : sequence of ndarray of bool, shape (k,)
        Whether the column varies in the part; the scale of one that does not says nothing.

    Returns
    -------
    shift, scale : ndarray of shape (k,)
        Those of the parts, exactly, where all parts have the same.
    """
    share = np.array(rows) / sum(rows)
    gaps = np.array(shifts) - shifts[0]
    move = share @ gaps
    known = share[:, None] * np.array(varies)
    weight = known.sum(axis=0)
    own = (known * np.array(scales) ** 2).sum(axis=0)
    inside = np.divide(own, weight, out=np.zeros_like(own), where=weight > 0.0)
    spread = np.sqrt(inside + share @ (gaps - move) ** 2)
    return shifts[0] + move, np.exp2(np.round(np.log2(np.where(spread > 0.0, spread, 1.0))))


def pooled(parts: Sequence[ClosedPart]) -> dict[str, Any]:
    """Return the attributes of the moments of all parts together.

    Parameters
    ----------
    parts : sequence of Moments
        At least one; no unit may be in two of them.

    Returns
    -------
    dict
        By name of the attribute.

    Raises
    ------
    DataError
        If designs or codings differ, or if two parts are the same.
    """
    coding = same_design(parts, "moments")
    _refuse_twice(parts)
    rows = [part.rows for part in parts]
    apart = len({part.constant for part in parts}) > 1
    opened = [_with_constant(part) if apart else _as_it_is(part) for part in parts]
    shifts, scales, magnitudes, withins, betweens = (list(column) for column in zip(*opened, strict=True))
    varies = [
        (within != 0.0).any(axis=0) | (between[:, :, 1:] != 0.0).any(axis=(0, 1))
        for within, between in zip(withins, betweens, strict=True)
    ]
    shift, scale = common_frame(rows, shifts, scales, varies)
    classes: dict[int, list[FloatArray]] = {}
    counts: dict[int, int] = {}
    for place, part in enumerate(parts):
        moved = _moved(betweens[place], shifts[place], scales[place], shift, scale)
        for size, count, factor in zip(part.sizes.tolist(), part.counts.tolist(), moved, strict=True):
            classes.setdefault(size, []).append(factor)
            counts[size] = counts.get(size, 0) + count
    sizes = sorted(classes)
    within = stack_factors(*(own * (unit / scale) for own, unit in zip(withins, scales, strict=True)))
    between = np.array([stack_factors(*classes[size]) for size in sizes])
    magnitude = np.sqrt(np.array(rows) @ np.array(magnitudes) ** 2 / sum(rows))
    lost = any(part.note.startswith("ill-conditioned") for part in parts)
    found = {
        "constant": parts[0].constant,
        "shift": shift,
        "scale": scale,
        "magnitude": magnitude,
        "sizes": np.array(sizes, dtype=np.int64),
        "counts": np.array([counts[size] for size in sizes], dtype=np.int64),
        "within": within,
        "between": between,
        "note": f"ill-conditioned within products in a part; {POOLED}" if lost else POOLED,
        "coding": coding,
    }
    if apart:
        ones: NDArray[np.bool_] = np.logical_and.reduce([level == 1.0 for level in shifts])
        found |= _take_constant(found, parts[0].design, ones & ~np.array(varies).any(axis=0))
    return found


def recentred(part: ClosedPart) -> dict[str, Any]:
    """Return shift, scale, magnitude and factors with the grand mean of the units that are there as the origin.

    Parameters
    ----------
    part : Moments
        Whose shift may come from other units too.

    Returns
    -------
    dict
        By name of the attribute.

    Raises
    ------
    DataError
        If the outcome has one value in all that is left.
    """
    weights = part.sizes.astype(float)
    level = np.einsum("g,gr,grj->j", weights, part.between[:, :, 0], part.between[:, :, 1:]) / part.rows
    shift = part.shift + part.scale * level
    moved = _moved(part.between, part.shift, part.scale, shift, part.scale)
    squares = np.einsum("g,grj,grj->j", weights, moved[:, :, 1:], moved[:, :, 1:])
    spread = part.scale * np.sqrt(((part.within**2).sum(axis=0) + squares) / part.rows)
    if spread[-1] <= 4.0 * np.finfo(float).eps * part.magnitude[-1]:
        raise DataError(
            f"the outcome {part.outcome!r} has the same value in every row that is left: nothing can be fitted."
        )
    scale = np.exp2(np.round(np.log2(np.where(spread > 0.0, spread, 1.0))))
    between = _moved(part.between, part.shift, part.scale, shift, scale)
    return {
        "shift": shift,
        "scale": scale,
        "magnitude": np.hypot(spread, shift),
        "within": part.within * (part.scale / scale),
        "between": np.array([factor_from_rows(factor) for factor in between]),
    }


def _moved(
    between: FloatArray, shift: FloatArray, scale: FloatArray, to_shift: FloatArray, to_scale: FloatArray
) -> FloatArray:
    """Return factors of means measured from another origin and in another scale."""
    moved = between.copy()
    moved[:, :, 1:] *= scale / to_scale
    moved[:, :, 1:] += between[:, :, :1] * ((shift - to_shift) / to_scale)
    return moved


def _as_it_is(part: ClosedPart) -> tuple[FloatArray, ...]:
    return part.shift, part.scale, part.magnitude, part.within, part.between


def _with_constant(part: ClosedPart) -> tuple[FloatArray, ...]:
    """Return shift, scale, magnitude and factors with the column of ones among the others.

    What is a constant in one part (an indicator, where all its units are of one category) may vary in another.
    """
    if part.constant is None:
        return _as_it_is(part)
    at = part.design.index(part.constant)
    ones = [np.insert(values, at, 1.0) for values in (part.shift, part.scale, part.magnitude)]
    return (*ones, np.insert(part.within, at, 0.0, axis=1), np.insert(part.between, at + 1, 0.0, axis=2))


def _take_constant(found: dict[str, Any], design: tuple[str, ...], ones: NDArray[np.bool_]) -> dict[str, Any]:
    """Take the first column that is one in every part out again."""
    candidates = np.flatnonzero(ones[:-1])
    if candidates.size == 0:
        return {"constant": None}
    at = int(candidates[0])
    return {
        "constant": design[at],
        **{name: np.delete(found[name], at) for name in ("shift", "scale", "magnitude")},
        "within": factor_from_rows(np.delete(found["within"], at, axis=1)),
        "between": np.array([factor_from_rows(rows) for rows in np.delete(found["between"], at + 1, axis=2)]),
    }


def _refuse_twice(parts: Sequence[ClosedPart]) -> None:
    """Refuse a part that is there twice: the one overlap of units that closed moments show."""
    seen: dict[bytes, int] = {}
    for place, part in enumerate(parts, start=1):
        arrays = (part.sizes, part.counts, part.shift, part.scale, part.within, part.between)
        earlier = seen.setdefault(b"|".join(array.tobytes() for array in arrays), place)
        if earlier != place:
            raise DataError(
                f"parts {earlier} and {place} hold the same moments: their units would count twice. Closed moments "
                "hold no keys, so that other overlaps are not found; where units may be in several parts, merge "
                "OpenMoments or UnitProducts."
            )
