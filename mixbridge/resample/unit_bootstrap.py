"""Bootstrap by unit: N units drawn with replacement, every route refitted to each draw, from the unit products.

A draw is a vector of multiplicities ``m_i``: ``W = sum m_i S_i`` and ``B_T = sum m_i zbar_i zbar_i'``, a unit drawn
twice being two units. It assumes that units are independent and alike in law, not normal errors, nor that unit effects
are unrelated to the covariates; with few units it is rough. The number of rows varies between draws.
"""

from __future__ import annotations

from collections.abc import Mapping
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import partial
from types import MappingProxyType

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.display.text import frame_lines, sentence, wrapped
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import Curve
from mixbridge.resample.deletion import (
    DELETED_ROUTES,
    Conventions,
    Progress,
    centre_of,
    fit_moments,
    given_routes,
)
from mixbridge.resample.deletion_axes import UnitAxes, pack
from mixbridge.resample.deletion_batch import Batch
from mixbridge.resample.deletion_rest import moments_of
from mixbridge.resample.deletion_routes import Centre, Refits, fit_batch
from mixbridge.resample.deletion_sums import Sums
from mixbridge.resample.deletion_values import panels_at_once
from mixbridge.resample.jackknife import NOT_LEARNED_AGAIN, estimated_routes, fits_of, refuse_other_rows
from mixbridge.resample.simulated import check_confidence, quantiles
from mixbridge.routes import Fit

__all__ = ["UnitBootstrap", "multiplicities", "unit_bootstrap"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]
BoolArray = NDArray[np.bool_]

DRAWN = 2**22
"""Multiplicities in work at one time per worker: 32 megabytes."""
AT_ONCE = 2**12
"""Units whose outer products are in work at one time."""


@dataclass(frozen=True, slots=True, eq=False)
class UnitBootstrap(Printed):
    """Every route on every draw of units.

    Attributes
    ----------
    terms : tuple of str
        Coefficients.
    fits : mapping of str to Fit
        Routes fitted to the data.
    refits : mapping of str to Refits
        The same routes on the draws.
    seed : int
    notes : tuple of str
        What a reader of the figures should know.
    """

    terms: tuple[str, ...]
    fits: Mapping[str, Fit]
    refits: Mapping[str, Refits]
    seed: int
    notes: tuple[str, ...]

    @property
    def replicates(self) -> int:
        """Number of draws."""
        return next(iter(self.refits.values())).ratio.size

    def __str__(self) -> str:
        """Return how every quantity of one route varies over draws of units."""
        key = "reml" if "reml" in self.fits else next(iter(self.fits))
        table = self.table()
        others = ", ".join(route for route in self.fits if route != key)
        lines = [f"Bootstrap by unit; {key}"]
        lines += frame_lines(table[table["route"] == key].drop(columns="route"))
        texts = [
            f"Routes besides: {others or 'none'}.",
            *(sentence(note) for note in self.notes),
        ]
        return "\n".join([*lines, *wrapped(texts)])

    def table(self) -> pd.DataFrame:
        """Return mean, bias and standard error of every quantity of every route.

        Returns
        -------
        DataFrame
            ``route, quantity, estimate, mean, bias, standard_error`` (standard deviation over draws), ``draws`` (those
            with a value). Quantities: the terms, ``unit_variance_raw``, ``idiosyncratic_variance``, ``ratio``.
        """
        rows: list[list[object]] = []
        for key, fit in self.fits.items():
            for name in (*self.terms, "unit_variance_raw", "idiosyncratic_variance", "ratio"):
                values, estimate = self._values(key, name), _of_fit(fit, name)
                kept = values[np.isfinite(values)]
                if not np.isfinite(estimate) or kept.size < 2:
                    continue
                mean = float(kept.mean())
                rows.append([key, name, estimate, mean, mean - estimate, float(kept.std(ddof=1)), kept.size])
        return pd.DataFrame(
            rows, columns=["route", "quantity", "estimate", "mean", "bias", "standard_error", "draws"]
        )

    def interval(self, quantity: str, route: str, confidence: float = 0.95) -> tuple[float, float]:
        """Return the percentile interval of a coefficient or component.

        Parameters
        ----------
        quantity : str
            A term, ``unit_variance_raw``, ``idiosyncratic_variance`` or ``ratio``.
        route : str
        confidence : float

        Returns
        -------
        float, float

        Raises
        ------
        OptionError
            If there are too few draws for the level.
        """
        return self._quantiles(self._values(route, quantity), f"{quantity!r} by {route!r}", confidence)

    def gap(self, term: str, a: str, b: str, confidence: float = 0.95) -> pd.Series:
        """Set the gap between two routes beside its own sampling noise.

        Parameters
        ----------
        term : str
        a, b : str
            Routes; the gap is the estimate by `a` minus that by `b`.
        confidence : float

        Returns
        -------
        Series
            ``gap, standard_error, gap_in_se, lower, upper`` (percentiles).
        """
        values = self._values(a, term) - self._values(b, term)
        observed = _of_fit(self.fits[a], term) - _of_fit(self.fits[b], term)
        low, high = self._quantiles(values, f"{term!r} by {a!r} and {b!r}", confidence)
        error = float(values[np.isfinite(values)].std(ddof=1))
        in_se = observed / error if error > 0.0 else np.nan
        labels = ["gap", "standard_error", "gap_in_se", "lower", "upper"]
        return pd.Series([observed, error, in_se, low, high], index=labels, name=term)

    def statuses(self) -> pd.DataFrame:
        """Return how many draws have each status, by route, and how many optima are not certified."""
        rows = []
        for key, found in self.refits.items():
            names, counts = np.unique(
                [str(status).partition(":")[0] for status in found.status], return_counts=True
            )
            certified = int((~found.certified).sum())
            rows.append(
                {"route": key, **dict(zip(names, counts.tolist(), strict=True)), "not certified": certified}
            )
        return pd.DataFrame(rows).fillna(0)

    def _values(self, route: str, quantity: str) -> FloatArray:
        if route not in self.refits:
            raise OptionError.not_among("route", route, self.refits)
        found = self.refits[route]
        if quantity in self.terms:
            return np.asarray(found.coefficients[:, self.terms.index(quantity)])
        components = ("unit_variance_raw", "idiosyncratic_variance", "ratio")
        if quantity not in components:
            raise OptionError.not_among("quantity", quantity, (*self.terms, *components))
        return np.asarray(getattr(found, quantity))

    def _quantiles(self, values: FloatArray, what: str, confidence: float) -> tuple[float, float]:
        check_confidence(confidence)
        low, high = quantiles(values, ((1.0 - confidence) / 2.0, (1.0 + confidence) / 2.0), what)
        return float(low), float(high)


def multiplicities(units: int, seed: int, replicate: int) -> IntArray:
    """Return how often each unit is drawn in a replicate, which depends on the seed and on its number only."""
    stream = np.random.Generator(np.random.PCG64(np.random.SeedSequence(seed, spawn_key=(replicate,))))
    return np.bincount(stream.integers(0, units, units), minlength=units)


def unit_bootstrap(
    curve: Curve,
    products: UnitProducts,
    routes: tuple[str, ...] = DELETED_ROUTES,
    replicates: int = 999,
    seed: int = 20_050,
    *,
    conventions: Conventions | None = None,
    own_fits: int = 500,
    workers: int = 1,
    progress: Progress | None = None,
) -> UnitBootstrap:
    """Draw units with replacement and refit every route to each draw.

    Parameters
    ----------
    curve : Curve
    products : UnitProducts
        Of the same rows.
    routes : tuple of str
        Any but `first_difference`.
    replicates : int
    seed : int
        Equal seeds give equal draws, whatever the number of replicates and workers.
    conventions : mapping of str to mapping, optional
        Conventions that differ from the defaults, by route.
    own_fits : int
        Most draws that get a fit of their own, where a direction is lost or a route's conditions are in doubt; those
        beyond say so in their status.
    workers : int
        Threads.
    progress : callable, optional
        Called with draws done and their number.

    Returns
    -------
    UnitBootstrap
    """
    for name, given, least in (("replicates", replicates, 2), ("workers", workers, 1), ("seed", seed, 0)):
        if isinstance(given, bool) or not isinstance(given, int) or given < least:
            raise OptionError(f"{name}={given!r} is not allowed; allowed: an integer, at least {least}.")
    if curve.units < 2:
        raise IdentificationError("there is one unit only: drawing units tells nothing.")
    refuse_other_rows(curve, products)
    chosen = given_routes(curve, routes, conventions)
    fits = fits_of(curve, chosen)
    estimated = estimated_routes(fits, chosen)
    axes, centre = centre_of(curve, products, fits, estimated, routes[0])
    refits = {key: Refits.empty(replicates, curve.rank) for key in chosen}
    for key in set(chosen) - set(estimated):
        refits[key].status[:] = f"not estimable with all units: {fits[key].status}"
    bare = Centre(centre.optima, {}, centre.marks)
    doubt = _draw_all(axes, estimated, bare, refits, seed=seed, workers=workers, progress=progress)
    alone = np.flatnonzero(doubt.any(axis=0))
    for turn, draw in enumerate(alone):
        wanted = {key: estimated[key] for at, key in enumerate(estimated) if doubt[at, draw]}
        times = multiplicities(curve.units, seed, int(draw))
        made = (
            fit_moments(partial(moments_of, products, times), wanted)
            if turn < own_fits
            else f"not fitted: {own_fits} fits are done"
        )
        for key in wanted:
            refits[key].put_alone(int(draw), made if isinstance(made, str) else made[key])
    return UnitBootstrap(
        terms=curve.names,
        fits=MappingProxyType(fits),
        refits=MappingProxyType({key: found.freeze() for key, found in refits.items()}),
        seed=seed,
        notes=(
            f"{replicates} draws of {curve.units} units with replacement, seed {seed}",
            NOT_LEARNED_AGAIN,
            f"{alone.size} draw(s) fitted from the units drawn by each route's own code",
        ),
    )


def _draw_all(
    axes: UnitAxes,
    routes: Conventions,
    centre: Centre,
    refits: Mapping[str, Refits],
    *,
    seed: int,
    workers: int,
    progress: Progress | None,
) -> BoolArray:
    """Fit every draw, filling `refits`; return by route and draw whether it needs a fit of its own."""
    replicates, units = next(iter(refits.values())).ratio.size, axes.curve.units
    doubt = np.zeros((len(routes), replicates), dtype=bool)
    step = max(min(DRAWN // units, panels_at_once(axes.order)), 1)
    order = np.argsort(axes.classes, kind="stable")

    def work(start: int) -> int:
        stop = min(start + step, replicates)
        times = np.array([multiplicities(units, seed, draw) for draw in range(start, stop)], dtype=float)
        batch = _drawn(axes, times, order)
        found = fit_batch(batch, routes, centre, Sums(batch).thin())
        for at, (key, (made, unsure, _)) in enumerate(found.items()):
            refits[key].put(slice(start, stop), made)
            doubt[at, start:stop] = unsure
        return stop

    if not routes:
        return doubt
    starts = range(0, replicates, step)
    pool = ThreadPoolExecutor(workers) if workers > 1 else None
    try:
        for done in map(work, starts) if pool is None else pool.map(work, starts):
            if progress is not None:
                progress(done, replicates)
    finally:
        if pool is not None:
            pool.shutdown(wait=True, cancel_futures=True)
    return doubt


def _drawn(axes: UnitAxes, times: FloatArray, order: IntArray) -> Batch:
    """Return the panels that multiplicities of shape (R, N) make; `order` sorts units by size."""
    rows, columns, _ = pack(axes.order)
    groups = axes.curve.sizes.size
    within = np.zeros((times.shape[0], axes.products.packed.shape[1]))
    between = np.zeros((groups, rows.size, times.shape[0]))
    counts = np.zeros((groups, times.shape[0]))
    ordered = axes.classes[order]
    edges = np.unique(
        np.concatenate([np.searchsorted(ordered, np.arange(groups)), np.arange(0, order.size, AT_ONCE)])
    )
    for start, stop in zip(edges, np.append(edges[1:], order.size), strict=True):
        at, group = order[start:stop], ordered[start]
        part, means = times[:, at], axes.unit_means(at)
        within += part @ axes.products.packed[at]
        between[group] += (means[rows] * means[columns]) @ part.T
        counts[group] += part.sum(axis=1)
    return Batch(axes, axes.from_packed.T @ within.T, between, counts, None, np.zeros(0, dtype=np.intp))


def _of_fit(fit: Fit, quantity: str) -> float:
    if quantity in fit.terms:
        return float(fit.beta[fit.terms.index(quantity)])
    return float(getattr(fit, quantity))
