"""What each design column is made of: its class, its share of within variation, its exact dependencies."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.moments.closed import Moments

__all__ = ["Dependency", "Span", "column_table", "dependency_text", "noise", "span_of"]

FloatArray = NDArray[np.float64]
EPS = float(np.finfo(float).eps)


@dataclass(frozen=True, slots=True)
class Dependency:
    """A column that is a combination of earlier ones: ``column = sum coefficient * other``."""

    column: int
    others: tuple[int, ...]
    coefficients: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Span:
    """The column space of a factor: independent columns, dependent ones, and the null directions.

    Attributes
    ----------
    kept : ndarray of int
        Columns that are independent of the earlier kept ones.
    dependencies : tuple of Dependency
        One for each column that is not.
    null : ndarray of shape (p, p - rank)
        Basis of ``{v : F v = 0}``.
    """

    kept: NDArray[np.intp]
    dependencies: tuple[Dependency, ...]
    null: FloatArray

    @property
    def rank(self) -> int:
        """Rank of the factor."""
        return int(self.kept.size)


def dependency_text(
    column: int, null: FloatArray, names: Sequence[str], small: FloatArray | None = None
) -> str:
    """Say in words that a combination of columns vanishes, solved for one of them: ``x3 = 2·x1 - x2``.

    Parameters
    ----------
    column : int
        The column that goes on the left side.
    null : ndarray of shape (p,)
        Coefficients of the vanishing combination.
    names : sequence of str
        Names of the columns.
    small : ndarray of shape (p,), optional
        Typical size of each column; terms that contribute less than 1e-8 of the largest are left out as
        rounding.

    Returns
    -------
    str
        Coefficients as short fractions where these fit to nine digits.
    """
    values = -null / null[column]
    reach = np.abs(values) * (1.0 if small is None else small)
    used = [j for j in np.flatnonzero(reach > 1e-8 * reach.max()).tolist() if j != column]
    if not used:
        return f"{names[column]} = 0"
    parts: list[str] = []
    for other in used:
        value = float(values[other])
        size = "" if abs(abs(value) - 1.0) < 1e-9 else f"{_plain(abs(value))}·"
        sign = ("-" if value < 0 else "") if not parts else (" - " if value < 0 else " + ")
        parts.append(f"{sign}{size}{names[other]}")
    return f"{names[column]} = {''.join(parts)}"


def noise(moments: Moments) -> FloatArray:
    """Bound what rounding leaves of a scaled column that does not vary, within units or between their means.

    Parameters
    ----------
    moments : Moments

    Returns
    -------
    ndarray of shape (k,)
        Root sum of squares over all rows, in units of `Moments.scale`: four roundings of the stored rows, or 1e-12 of
        what the column varies in all (a column centred on its unit means before it came here has means of that kind),
        whichever is larger.
    """
    stored = 4.0 * EPS * np.sqrt(moments.rows) * moments.magnitude / moments.scale
    weights = moments.sizes.astype(float)
    means = (weights[:, None, None] * moments.between[:, :, 1:] ** 2).sum(axis=(0, 1))
    return np.asarray(np.maximum(stored, 1e-12 * np.sqrt((moments.within**2).sum(axis=0) + means)))


def span_of(factor: FloatArray, floor: FloatArray, relative: float = 1e-12) -> Span:
    """Find independent columns of a factor from left to right, by Gram-Schmidt with one repetition.

    Parameters
    ----------
    factor : ndarray of shape (r, p)
    floor : ndarray of shape (p,)
        Length of each column that rounding of the data alone can produce.
    relative : float
        Length of what is left of a column, relative to the column, that counts as nothing.

    Returns
    -------
    Span
    """
    p = factor.shape[1]
    length = np.sqrt((factor**2).sum(axis=0))
    basis = np.zeros((factor.shape[0], 0))
    kept: list[int] = []
    found: list[Dependency] = []
    for j in range(p):
        if length[j] <= floor[j]:
            found.append(Dependency(j, (), ()))
            continue
        column = factor[:, j] / length[j]
        for _ in range(2):
            column = column - basis @ (basis.T @ column)
        rest = float(np.sqrt(column @ column))
        if rest < 1e-5 and kept:
            earlier, target = factor[:, kept] / length[kept], factor[:, j] / length[j]
            coefficients = np.linalg.lstsq(earlier, target, rcond=None)[0]
            carried = np.abs(coefficients) @ (floor[kept] / length[kept]) * length[j]
            rounding = (floor[j] + carried) / length[j]
            if rest <= relative + rounding:
                values = coefficients * length[j] / length[kept]
                used = np.abs(coefficients) > 1e-8
                found.append(
                    Dependency(j, tuple(np.array(kept)[used].tolist()), tuple(values[used].tolist()))
                )
                continue
        kept.append(j)
        basis = np.column_stack([basis, column / rest])
    null = np.zeros((p, len(found)))
    for at, dependency in enumerate(found):
        null[dependency.column, at] = 1.0
        null[list(dependency.others), at] = -np.array(dependency.coefficients)
    return Span(np.array(kept, dtype=np.intp), tuple(found), null)


def column_table(moments: Moments) -> pd.DataFrame:
    """Return class and spread of every design column and of the outcome.

    Returns
    -------
    DataFrame
        ``column``; ``level`` (``within``, ``between``, ``both``, ``constant``); ``within_share`` of the sum
        of squares about the grand mean; ``mean``; ``sd_within`` with divisor n - N and ``sd_between``
        (row-weighted) with divisor N - 1.
    """
    n, units = moments.rows, moments.units
    weights = moments.sizes.astype(float)
    products = np.einsum("g,gri,grj->ij", weights, moments.between, moments.between)
    level = products[0, 1:] / n
    between = np.maximum(np.diag(products)[1:] - n * level**2, 0.0)
    within = (moments.within**2).sum(axis=0)
    bound = noise(moments) ** 2
    rows: list[dict[str, object]] = []
    for j, name in enumerate(moments.columns):
        varies = within[j] > bound[j], between[j] > bound[j]
        kind = {(True, True): "both", (True, False): "within", (False, True): "between"}.get(
            varies, "constant"
        )
        total = within[j] * varies[0] + between[j] * varies[1]
        rows.append(
            {
                "column": name,
                "level": kind,
                "within_share": within[j] * varies[0] / total if total > 0 else np.nan,
                "mean": moments.shift[j] + moments.scale[j] * level[j],
                "sd_within": moments.scale[j] * np.sqrt(within[j] / max(n - units, 1)) * varies[0],
                "sd_between": moments.scale[j] * np.sqrt(between[j] / max(units - 1, 1)) * varies[1],
            }
        )
    if moments.constant is not None:
        rows.insert(
            moments.design.index(moments.constant),
            {
                "column": moments.constant,
                "level": "constant",
                "within_share": np.nan,
                "mean": 1.0,
                "sd_within": 0.0,
                "sd_between": 0.0,
            },
        )
    return pd.DataFrame(rows)


def _plain(value: float) -> str:
    """Return a short fraction where one fits to nine digits, else six significant digits."""
    fraction = Fraction(value).limit_denominator(60)
    if abs(float(fraction) - value) <= 1e-9 * max(1.0, abs(value)):
        return str(fraction)
    return f"{value:.6g}"
