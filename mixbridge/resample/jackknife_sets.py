"""Chosen sets of rows left out: pairs of named units, and each period; every route fitted anew to what is left."""

from __future__ import annotations

from collections.abc import Callable, Hashable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from itertools import combinations
from types import MappingProxyType

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.display.text import frame_lines, sentence, wrapped
from mixbridge.errors import OptionError
from mixbridge.moments import Block, Moments, collect
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve
from mixbridge.resample.deletion import DELETED_ROUTES, Conventions, Progress, fit_moments, given_routes
from mixbridge.resample.deletion_rest import keyed, without
from mixbridge.resample.jackknife import NOT_LEARNED_AGAIN, fits_of, refuse_other_rows
from mixbridge.routes import Fit

__all__ = ["LeftOut", "leave_one_period_out", "leave_two_out"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
PeriodBlock = tuple[IntArray, FloatArray, FloatArray, IntArray]

MOST_UNITS = 30
"""Most named units whose pairs are left out: 435 pairs."""
MOST_PERIODS = 60
"""Most periods that are left out in turn: each is a pass over the rows."""
COLUMNS = [
    "left_out",
    "route",
    "term",
    "estimate",
    "standard_error",
    "moved",
    "moved_in_se",
    "ratio",
    "status",
]


@dataclass(frozen=True, slots=True, eq=False)
class LeftOut(Printed):
    """Routes fitted without sets of rows.

    Attributes
    ----------
    primary : str
        Moves are measured in standard errors of this route.
    fits : mapping of str to Fit
        Routes fitted to all rows.
    without : mapping of str to (mapping of str to Fit, or str)
        By what was left out: the routes, or why nothing can be fitted.
    notes : tuple of str
    """

    primary: str
    fits: Mapping[str, Fit]
    without: Mapping[str, Mapping[str, Fit] | str]
    notes: tuple[str, ...]

    def table(self) -> pd.DataFrame:
        """Return every estimate beside the one from all rows.

        Returns
        -------
        DataFrame
            ``left_out, route, term, estimate, standard_error, moved`` (minus the estimate from all rows),
            ``moved_in_se`` (standard errors of the primary route, all rows), ``ratio, status``.
        """
        errors = self.fits[self.primary].standard_errors
        rows: list[list[object]] = []
        for label, made in self.without.items():
            for key, whole in self.fits.items():
                fit = None if isinstance(made, str) else made[key]
                for at, term in enumerate(whole.terms):
                    if fit is None:
                        rows.append([label, key, term, *[np.nan] * 5, made])
                        continue
                    moved = fit.beta[at] - whole.beta[at]
                    error = fit.standard_errors.iloc[at]
                    in_se = moved / errors[term] if errors[term] > 0.0 else np.nan
                    rows.append([label, key, term, fit.beta[at], error, moved, in_se, fit.ratio, fit.status])
        return pd.DataFrame(rows, columns=COLUMNS)

    def __str__(self) -> str:
        """Return how far each coefficient of the primary route moves, by what was left out."""
        table = self.table()
        own = table[table["route"] == self.primary].drop_duplicates(["left_out", "term"])
        moved = own.pivot(index="left_out", columns="term", values="moved_in_se")
        shown = moved.reindex(
            index=list(self.without), columns=list(self.fits[self.primary].terms)
        ).reset_index()
        lines = [f"Moves of {self.primary} in its standard errors, by what was left out", *frame_lines(shown)]
        reasons = [f"{label}: {made}." for label, made in self.without.items() if isinstance(made, str)]
        return "\n".join([*lines, *wrapped([*reasons, *(sentence(note) for note in self.notes)])])


def leave_two_out(
    curve: Curve,
    products: UnitProducts,
    units: Sequence[Hashable],
    routes: tuple[str, ...] = DELETED_ROUTES,
    primary: str = "reml",
    *,
    conventions: Conventions | None = None,
    progress: Progress | None = None,
) -> LeftOut:
    """Leave out every pair of some named units: what one hides when the other is there.

    Parameters
    ----------
    curve : Curve
    products : UnitProducts
        Of the same rows.
    units : sequence
        Keys of two units or more, at most 30.
    routes : tuple of str
        Any but `first_difference`; the primary route is added where it is missing.
    primary : str
        The route that is reported.
    conventions : mapping of str to mapping, optional
        Conventions that differ from the defaults, by route.
    progress : callable, optional
        Called with pairs done and their number.

    Returns
    -------
    LeftOut
        By ``first + second``.
    """
    keys = pd.Index(list(units))
    if not 2 <= len(keys) <= MOST_UNITS or keys.has_duplicates:
        raise OptionError(f"{len(keys)} units are named; name 2 to {MOST_UNITS} different ones.")
    refuse_other_rows(curve, products)
    at = keyed(products, keys)
    chosen = given_routes(curve, routes if primary in routes else (*routes, primary), conventions)
    pairs = list(combinations(range(len(keys)), 2))

    def sets() -> Iterator[tuple[str, Callable[[], Moments]]]:
        for i, j in pairs:
            yield f"{keys[i]} + {keys[j]}", partial(without, products, at[[i, j]])

    made = _each(sets(), len(pairs), chosen, progress)
    return LeftOut(primary, MappingProxyType(fits_of(curve, chosen)), made, (NOT_LEARNED_AGAIN,))


def leave_one_period_out(
    curve: Curve,
    blocks: Callable[[], Iterable[PeriodBlock]],
    keys: pd.Index,
    periods: Sequence[Hashable],
    *,
    routes: tuple[str, ...] = DELETED_ROUTES,
    primary: str = "reml",
    conventions: Conventions | None = None,
    progress: Progress | None = None,
) -> LeftOut:
    """Leave out every period in turn: one pass over the rows for each.

    Parameters
    ----------
    curve : Curve
        Of all rows.
    blocks : callable
        Returns a fresh iterator of ``(unit codes, x, y, period codes)`` each time it is called; x has the columns of
        the curve, in its order.
    keys : pandas.Index
        Unit keys by code.
    periods : sequence
        Names of the periods by code; at most 60.
    routes : tuple of str
        Any but `first_difference`; the primary route is added where it is missing.
    primary : str
        The route that is reported.
    conventions : mapping of str to mapping, optional
        Conventions that differ from the defaults, by route.
    progress : callable, optional
        Called with periods done and their number.

    Returns
    -------
    LeftOut
        By period. Where leaving a period out makes columns dependent (its indicator), the reason stands instead.
    """
    if not 2 <= len(periods) <= MOST_PERIODS:
        raise OptionError(
            f"there are {len(periods)} periods; 2 to {MOST_PERIODS} can be left out, each by a pass over the rows."
        )
    chosen = given_routes(curve, routes if primary in routes else (*routes, primary), conventions)
    columns = (*curve.names, curve.moments.outcome)

    def rest(period: int) -> Iterator[Block]:
        for codes, x, y, when in blocks():
            stays = when != period
            if stays.any():
                yield codes[stays], x[stays], y[stays]

    def moments(period: int) -> Moments:
        return collect(partial(rest, period), columns, keys)[1]

    def sets() -> Iterator[tuple[str, Callable[[], Moments]]]:
        for at, name in enumerate(periods):
            yield str(name), partial(moments, at)

    made = _each(sets(), len(periods), chosen, progress)
    return LeftOut(primary, MappingProxyType(fits_of(curve, chosen)), made, (NOT_LEARNED_AGAIN,))


def _each(
    sets: Iterator[tuple[str, Callable[[], Moments]]],
    total: int,
    routes: Conventions,
    progress: Progress | None,
) -> Mapping[str, Mapping[str, Fit] | str]:
    """Fit every route to what each set leaves."""
    made: dict[str, Mapping[str, Fit] | str] = {}
    for done, (label, moments) in enumerate(sets, start=1):
        made[label] = fit_moments(moments, routes)
        if progress is not None:
            progress(done, total)
    return MappingProxyType(made)
