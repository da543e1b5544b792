"""Every route without each unit in turn, exactly: by subtraction where digits allow it, else from the units left.

A deletion takes the unit's within products off W, the outer product of its mean off the B_T of its size class, and one
off the count of that class (which may empty it). Where the unit carries nearly all of a direction, within units or
between their means, or nearly all of a sum of squares, the rest is summed anew (`deletion_rest`) and every route fitted
with its own code; so is a route whose degrees of freedom, sign or optimum is in doubt, which also gives it the reason.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import DataError, IdentificationError, OptionError
from mixbridge.moments import Moments
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve, curve_of
from mixbridge.resample.deletion_axes import UnitAxes, pack, unit_axes
from mixbridge.resample.deletion_batch import Batch, deletions, solved
from mixbridge.resample.deletion_bounds import neighbourhood
from mixbridge.resample.deletion_rest import without
from mixbridge.resample.deletion_routes import Centre, Refits, fit_batch
from mixbridge.resample.deletion_sums import Sums
from mixbridge.resample.deletion_values import panels_at_once
from mixbridge.routes import Fit, fit_route, resolve
from mixbridge.routes.fitting import LIKELIHOOD, named_route

__all__ = ["DELETED_ROUTES", "NO_ORDER", "centre_of", "delete_each", "fit_moments", "given_routes"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.intp]
Conventions = Mapping[str, Mapping[str, object]]
Progress = Callable[[int, int], None]

NO_ORDER = "unit products hold no order of rows, so there are no differences here"

DELETED_ROUTES = (
    "pooled",
    "within",
    "between",
    "swamy_arora",
    "wansbeek_kapteyn",
    "wallace_hussain",
    "amemiya",
    "nerlove",
    "pooled_minus_within",
    "fitting_constants",
    "minque_0",
    "minque_1",
    "ml",
    "reml",
)
"""Routes refitted unless others are named: all that moments give."""

CROWDED = 0.9
"""Trace of a unit's leverage from which its eigenvalues are looked at."""


def given_routes(
    curve: Curve, routes: tuple[str, ...], given: Conventions | None
) -> dict[str, Mapping[str, object]]:
    """Check routes and conventions.

    Parameters
    ----------
    curve : Curve
    routes : tuple of str
        Keys, such as ``minque_1``.
    given : mapping of str to mapping, optional
        Conventions that differ from the defaults, by route.

    Returns
    -------
    dict
        Conventions by route, resolved.
    """
    if not routes:
        raise OptionError("no route is named.")
    stray = [key for key in given or {} if key not in routes]
    if stray:
        raise OptionError.not_among("conventions for route", stray[0], routes)
    chosen: dict[str, Mapping[str, object]] = {}
    for key in routes:
        route, implied = named_route(key)
        if route == "first_difference":
            raise OptionError(f"first_difference cannot be refitted here: {NO_ORDER}.")
        own = dict((given or {}).get(key, {}))
        if own.get("covariance", "model") != "model":
            raise OptionError(
                f"{key}: covariance={own['covariance']!r} is not refitted; only the one of the model is."
            )
        if own.get("one_row_units") == "dropped" and (curve.sizes == 1.0).any():
            raise OptionError(
                f"{key}: leave the one-row units out of the moments and of the unit products instead."
            )
        chosen[key] = resolve(route, {**implied, **own})
    return chosen


def fit_moments(moments: Callable[[], Moments], routes: Conventions) -> dict[str, Fit] | str:
    """Fit every route to the moments that a call returns; where nothing can be fitted, say why."""
    try:
        curve = curve_of(moments())
    except (IdentificationError, DataError) as error:
        return f"not estimable: {error}"
    return {
        key: fit_route(curve, named_route(key)[0], conventions, NO_ORDER)
        for key, conventions in routes.items()
    }


def centre_of(
    curve: Curve, products: UnitProducts, fits: Mapping[str, Fit], routes: Conventions, primary: str
) -> tuple[UnitAxes, Centre]:
    """Prepare the panel of all units.

    Parameters
    ----------
    curve : Curve
    products : UnitProducts
    fits : mapping of str to Fit
        Of all units.
    routes : mapping of str to mapping
        Those that are refitted, with their conventions, resolved.
    primary : str
        The outcome is measured from the coefficients of this route.

    Returns
    -------
    UnitAxes, Centre
    """
    ratios = [fits[key].ratio for key in (primary, *fits)]
    reference = next((ratio for ratio in ratios if np.isfinite(ratio)), curve.units / curve.n)
    axes = unit_axes(curve, products, float(reference))
    whole = Batch(
        axes, axes.within[:, None], axes.between, curve.counts[:, None], None, np.zeros(0, dtype=np.intp)
    )
    optima = {
        key: (fits[key].ratio, float(fits[key].component_standard_errors["ratio"]))
        for key in routes
        if key in LIKELIHOOD
    }
    near = {
        key: neighbourhood(axes, LIKELIHOOD[key], psi) if fits[key].certificate is not None else None
        for key, (psi, _) in optima.items()
    }
    bare = Centre(optima, {}, {})
    marks = {
        key: marks[:, 0]
        for key, (_, _, marks) in fit_batch(whole, routes, bare, np.zeros(1, dtype=bool)).items()
    }
    return axes, Centre(optima, near, marks)


def delete_each(
    axes: UnitAxes,
    fits: Mapping[str, Fit],
    routes: Conventions,
    centre: Centre,
    *,
    own_fits: int,
    progress: Progress | None,
) -> dict[str, Refits]:
    """Refit every route without each unit in turn.

    Parameters
    ----------
    axes : UnitAxes
    fits : mapping of str to Fit
        Of all units.
    routes : mapping of str to mapping
        Conventions by route, resolved.
    centre : Centre
    own_fits : int
        Most units that get a fit of their own.
    progress : callable or None
        Called with units done and their number.

    Returns
    -------
    dict of str to Refits
    """
    total = axes.products.units
    found = {key: Refits.empty(total, axes.curve.rank) for key in fits}
    doubt = {key: np.zeros(total, dtype=bool) for key in routes}
    for key in set(fits) - set(routes):
        found[key].status[:] = f"not estimable with all units: {fits[key].status}"
    step = panels_at_once(axes.order)
    leverages = _leverage_maps(axes)

    for start in range(0, total, step):
        part = slice(start, min(start + step, total))
        batch, own = deletions(axes, part)
        lost = _lost(batch, own, leverages)
        for key, (refits, unsure, _) in fit_batch(batch, routes, centre, lost, own).items():
            found[key].put(part, refits)
            doubt[key][part] = unsure
        if progress is not None:
            progress(part.stop, total)
    _fit_alone(axes.products, routes, found, doubt, own_fits)
    return found


def _leverage_maps(axes: UnitAxes) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return what makes the trace of a unit's leverage of packed products: within, between weighted and not."""
    rows, columns, _ = pack(axes.order)
    maps = []
    for packed, at in (
        (axes.within, axes.inner),
        (axes.curve.sizes @ axes.between, axes.outer),
        (axes.between.sum(axis=0), axes.outer),
    ):
        inverse = np.zeros((axes.order, axes.order))
        inverse[np.ix_(at, at)] = solved(packed[:, None], axes.order, at).inverse[:, :, 0]
        maps.append(inverse[rows, columns] * np.where(rows == columns, 1.0, 2.0))
    return maps[0], maps[1], maps[2]


def _lost(
    batch: Batch, own_within: FloatArray, leverages: tuple[FloatArray, FloatArray, FloatArray]
) -> BoolArray:
    """Tell which panels lose a direction, or the digits of one, with their unit."""
    assert batch.own is not None
    sizes = batch.axes.curve.sizes[batch.own_class]
    crowded = leverages[0] @ own_within > CROWDED
    crowded |= sizes * (leverages[1] @ batch.own) > CROWDED
    crowded |= leverages[2] @ batch.own > CROWDED
    lost = np.zeros(batch.size, dtype=bool)
    at = np.flatnonzero(crowded)
    if at.size:
        lost[at] = Sums(batch.take(at)).thin()
    return lost


def _fit_alone(
    products: UnitProducts,
    routes: Conventions,
    found: Mapping[str, Refits],
    doubt: Mapping[str, BoolArray],
    most: int,
) -> None:
    """Fit the routes that subtraction left in doubt to the units that are left."""
    units = np.flatnonzero(np.any(list(doubt.values()), axis=0)) if doubt else np.zeros(0, dtype=np.intp)
    for turn, unit in enumerate(units):
        wanted = {key: routes[key] for key in routes if doubt[key][unit]}
        made = (
            fit_moments(partial(without, products, np.array([unit])), wanted)
            if turn < most
            else f"not fitted: {most} fits are done"
        )
        for key in wanted:
            found[key].put_alone(int(unit), made if isinstance(made, str) else made[key])
