"""What is searched: every route under every convention of the table `AXES` that changes a printed figure.

Conventions of estimation give distinct fits, each made once. Conventions of presentation (scale, covariance and its
multiplier, Kenward-Roger, the REML constant) only change standard errors or likelihoods of a fit: they are cheap
variations, see `match_errors`. The reference distribution changes no figure that is searched.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping
from dataclasses import replace
from types import MappingProxyType
from typing import Protocol

from mixbridge.inference.robust import RobustCovariance
from mixbridge.moments import Moments
from mixbridge.moments.products import UnitProducts
from mixbridge.panel import Panel
from mixbridge.ratio import Curve, curve_of
from mixbridge.reconcile.match_values import Fitted, Side
from mixbridge.routes import ROUTES, Fit, axes_of, fit_route

__all__ = [
    "ESTIMATION",
    "PRESENTATION",
    "UNSEEN",
    "Searchable",
    "conventions_of",
    "first_difference",
    "fitted_routes",
    "label_of",
    "sides_of",
]

ESTIMATION = ("between", "expectation", "divisor", "prior", "count", "one_row_units", "step")
"""Axes of which each value is another fit."""
PRESENTATION = ("scale", "covariance", "multiplier", "reml_constant")
"""Axes that change standard errors or likelihoods only."""
UNSEEN = ("reference",)
"""Axes that change intervals and p-values only, but for Kenward-Roger, whose covariance is searched."""
PRIORS = (0.0, 1.0)
"""Prior ratios of `minque` that are searched: those in common use."""


class Searchable(Protocol):
    """What the search needs of a study."""

    @property
    def curve(self) -> Curve:
        """The panel reduced to the variance ratio."""

    @property
    def moments(self) -> Moments:
        """Closed moments."""

    @property
    def panel(self) -> Panel:
        """Rows, units and periods."""

    @property
    def products(self) -> UnitProducts:
        """Products of every unit's rows."""

    @property
    def singletons(self) -> int:
        """Number of units with one row."""

    def fit(self, route: str, **conventions: object) -> Fit:
        """Fit one route."""

    def robust(self, fit: Fit, kind: str, multiplier: object = None) -> RobustCovariance:
        """Compute a robust covariance."""


def sides_of(study: Searchable, with_products: bool) -> dict[str, Side]:
    """Return the panel with one-row units kept and, where there are any, dropped.

    Parameters
    ----------
    study : Searchable
    with_products : bool
        Whether unit products are gathered, for cluster-robust contrasts.
    """
    products = study.products if with_products and study.curve.units > 1 else None
    sides = {"kept": Side("kept", study.curve, products)}
    if 0 < study.singletons < study.curve.units:
        curve = curve_of(study.moments.without_one_row_units())
        sides["dropped"] = Side("dropped", curve, None if products is None else products.without_sizes(1))
    return sides


def conventions_of(route: str, dropped: bool) -> Iterator[dict[str, object]]:
    """Yield every choice of the estimation axes of a route, defaults left out.

    Parameters
    ----------
    route : str
    dropped : bool
        Whether there are one-row units to drop.
    """
    axes = [axis for axis in axes_of(route) if axis.name in ESTIMATION]
    narrowed = {"prior": PRIORS} if dropped else {"prior": PRIORS, "one_row_units": ("kept",)}
    values = [narrowed.get(axis.name, axis.values) for axis in axes]
    for chosen in itertools.product(*values):
        yield {axis.name: value for axis, value in zip(axes, chosen, strict=True) if value != axis.values[0]}


def first_difference(study: Searchable, sides: Mapping[str, Side]) -> list[Fitted]:
    """Return the fit of `first_difference`; none where it has no coefficients."""
    fit = study.fit("first_difference")
    return [Fitted(sides["kept"], "first_difference", MappingProxyType({}), fit)] if fit.estimated else []


def fitted_routes(study: Searchable, sides: Mapping[str, Side]) -> tuple[list[Fitted], dict[str, str]]:
    """Fit every route but `first_difference` under every convention of estimation.

    Parameters
    ----------
    study : Searchable
    sides : mapping of str to Side
        As from `sides_of`.

    Returns
    -------
    fitted : list of Fitted
        Those with coefficients or components, in the order of the registry; equal fits of a route are one, the
        conventions that made no difference kept in `same`.
    absent : dict of str to str
        Route with its conventions -> why it gives no figures.
    """
    found: list[Fitted] = []
    absent: dict[str, str] = {}
    for route in ROUTES:
        mine: list[Fitted] = []
        same: list[list[str]] = []
        if route == "first_difference":
            if study.panel.period_name is None:
                absent[route] = "no period given, so rows have no order to difference in"
            continue
        for conventions in conventions_of(route, "dropped" in sides):
            side = sides[str(conventions.get("one_row_units", "kept"))]
            fit = fit_route(side.curve, route, conventions, "not asked for here")
            if not fit.estimated and math.isnan(fit.unit_variance_raw):
                absent[label_of(route, conventions)] = fit.status
                continue
            made = Fitted(side, route, MappingProxyType(conventions), fit)
            twin = next((place for place, each in enumerate(mine) if each.equals(made)), None)
            if twin is None:
                mine.append(made)
                same.append([])
            else:
                same[twin].append(label_of(route, conventions))
        found += [replace(each, same=tuple(twins)) for each, twins in zip(mine, same, strict=True)]
    return found, absent


def label_of(route: str, conventions: Mapping[str, object]) -> str:
    """Return a route and its conventions in words."""
    said = [f"{name}={_plain(value)}" for name, value in conventions.items()]
    return ", ".join([route, *said])


def _plain(value: object) -> str:
    return f"{value:g}" if isinstance(value, float) else str(value)
