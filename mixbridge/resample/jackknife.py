"""Leave-one-unit-out: what every unit does to every route, which units decide a conclusion, jackknife errors."""

from __future__ import annotations

from collections.abc import Mapping
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.stats import norm

from mixbridge.errors import DataError, IdentificationError, OptionError
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve
from mixbridge.resample.deletion import (
    DELETED_ROUTES,
    NO_ORDER,
    Conventions,
    Progress,
    centre_of,
    delete_each,
    given_routes,
)
from mixbridge.resample.deletion_routes import Refits
from mixbridge.resample.jackknife_record import LeaveOneOut, without_names
from mixbridge.resample.jackknife_verdicts import Limits
from mixbridge.routes import Fit, fit_route
from mixbridge.routes.fitting import named_route

__all__ = [
    "NOT_LEARNED_AGAIN",
    "estimated_routes",
    "fits_of",
    "interval_multipliers",
    "leave_one_out",
    "refuse_other_rows",
]

FloatArray = NDArray[np.float64]

NOT_LEARNED_AGAIN = (
    "transforms in the formula (centring, scaling, splines, levels) were not learned again without the rows left out: "
    "columns are those of all rows"
)


def leave_one_out(
    curve: Curve,
    products: UnitProducts,
    routes: tuple[str, ...] = DELETED_ROUTES,
    primary: str = "reml",
    *,
    conventions: Conventions | None = None,
    multipliers: Mapping[str, ArrayLike] | None = None,
    confidence: float = 0.95,
    limits: Limits | None = None,
    names: bool = True,
    own_fits: int = 500,
    progress: Progress | None = None,
) -> LeaveOneOut:
    """Refit every route without each unit in turn.

    Parameters
    ----------
    curve : Curve
    products : UnitProducts
        Of the same rows.
    routes : tuple of str
        Any but `first_difference`.
    primary : str
        The route that is reported; added to `routes` where it is missing.
    conventions : mapping of str to mapping, optional
        Conventions that differ from the defaults, by route.
    multipliers : mapping of str to array_like, optional
        By route, what standard errors are multiplied by to make intervals: one number, or one per term. Normal
        quantiles unless given. They are held for all deletions.
    confidence : float
        Level of the normal quantiles.
    limits : Limits, optional
        What counts as immaterial.
    names : bool
        Whether units are named. Without names they are ``unit 1``, ``unit 2``, ... in order of influence, and
        neither sizes nor the order of the data are kept.
    own_fits : int
        Most units that get a fit of their own where subtraction would lose digits or a route's conditions are in
        doubt. At most about three per direction of X dominate; what is beyond the limit says so in its status.
    progress : callable, optional
        Called with the number of units done and of all.

    Returns
    -------
    LeaveOneOut
    """
    if curve.units < 2:
        raise IdentificationError("there is one unit only: without it nothing is left.")
    refuse_other_rows(curve, products)
    chosen = given_routes(curve, _with_primary(routes, primary), conventions)
    fits = fits_of(curve, chosen)
    estimated = estimated_routes(fits, chosen)
    axes, centre = centre_of(curve, products, fits, estimated, primary)
    refits = delete_each(axes, fits, estimated, centre, own_fits=own_fits, progress=progress)
    found = LeaveOneOut(
        terms=curve.names,
        primary=primary,
        fits=MappingProxyType(fits),
        refits=MappingProxyType({key: refits[key].freeze() for key in chosen}),
        units=products.keys,
        sizes=products.sizes,
        multipliers=MappingProxyType(interval_multipliers(curve, chosen, multipliers, confidence)),
        limits=limits or Limits(),
        named=True,
        notes=_notes(refits, estimated),
    )
    return found if names else without_names(found)


def fits_of(curve: Curve, routes: Conventions) -> dict[str, Fit]:
    """Fit every route to all units; conventions are resolved."""
    return {
        key: fit_route(curve, key, _stated(key, conventions), NO_ORDER) for key, conventions in routes.items()
    }


def estimated_routes(fits: Mapping[str, Fit], routes: Conventions) -> dict[str, Mapping[str, object]]:
    """Return the routes that gave estimates, or a variance, from all units; the others give none without some."""
    return {
        key: conventions
        for key, conventions in routes.items()
        if fits[key].estimated or np.isfinite(fits[key].idiosyncratic_variance)
    }


def interval_multipliers(
    curve: Curve,
    routes: Conventions,
    given: Mapping[str, ArrayLike] | None,
    confidence: float,
) -> dict[str, FloatArray]:
    """Return what standard errors are multiplied by, per route and term."""
    if not 0.0 < confidence < 1.0:
        raise OptionError(f"confidence={confidence!r} is not allowed; allowed: a number between 0 and 1.")
    found: dict[str, FloatArray] = {}
    for key in routes:
        value = np.asarray((given or {}).get(key, norm.ppf(0.5 + confidence / 2.0)), dtype=float)
        if value.shape not in ((), (curve.rank,)) or (value < 0.0).any():
            raise OptionError(
                f"multipliers of {key!r}: give one number, or one for each of {curve.rank} terms."
            )
        found[key] = np.broadcast_to(value, (curve.rank,))
    return found


def _stated(key: str, conventions: Mapping[str, object]) -> dict[str, object]:
    """Leave out what the key itself says."""
    implied = named_route(key)[1]
    return {name: value for name, value in conventions.items() if name not in implied}


def _with_primary(routes: tuple[str, ...], primary: str) -> tuple[str, ...]:
    return routes if primary in routes else (*routes, primary)


def refuse_other_rows(curve: Curve, products: UnitProducts) -> None:
    """Refuse unit products that do not belong to the moments of the curve."""
    sizes, counts = np.unique(products.sizes, return_counts=True)
    moments = curve.moments
    if not (
        np.array_equal(sizes, moments.sizes)
        and np.array_equal(counts, moments.counts)
        and moments.columns == products.columns
        and np.array_equal(moments.shift, products.shift)
        and np.array_equal(moments.scale, products.scale)
    ):
        raise DataError(
            f"the unit products ({products.rows} rows, {products.units} units) and the moments ({curve.n} rows, "
            f"{curve.units} units) are not of the same rows and columns: gather both from the same source."
        )


def _notes(refits: Mapping[str, Refits], estimated: Conventions) -> tuple[str, ...]:
    notes = [
        NOT_LEARNED_AGAIN,
        "first_difference and all that depends on the order of rows is left out: unit products hold no order",
        "intervals use the reference quantiles of all units throughout",
    ]
    alone = int(np.any([refits[key].exact for key in estimated], axis=0).sum()) if estimated else 0
    if alone:
        notes.append(
            f"{alone} unit(s) whose deletion was fitted anew from the units left, not by subtraction"
        )
    for key in estimated:
        count = int((~refits[key].certified).sum())
        if count:
            notes.append(f"{key}: the optimum is not certified for {count} deletion(s)")
        beyond = sum(str(status).startswith("not fitted") for status in refits[key].status)
        if beyond:
            notes.append(f"{key}: {beyond} deletion(s) not fitted; raise own_fits")
    return tuple(notes)
