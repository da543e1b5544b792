"""Conventions as data: one table of axes, allowed values and defaults.

``study.fit(key, **conventions)``, the search of printed figures, the documentation and the tests are
generated from it.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import cast

from mixbridge.errors import OptionError, nearest

__all__ = ["AXES", "Axis", "axes_of", "resolve"]

Value = str | float | int | None

CURVE_ROUTES = (
    "pooled",
    "swamy_arora",
    "wansbeek_kapteyn",
    "wallace_hussain",
    "amemiya",
    "nerlove",
    "pooled_minus_within",
    "fitting_constants",
    "minque",
    "ml",
    "reml",
)
ALL_ROUTES = (*CURVE_ROUTES, "within", "between", "first_difference")


@dataclass(frozen=True, slots=True)
class Axis:
    """One way in which printed results of the same route differ.

    Attributes
    ----------
    name : str
        Keyword of ``study.fit``.
    values : tuple
        Allowed values, the default first. For a number, the default alone.
    routes : tuple of str
        Routes that have this axis.
    meaning : str
        What it decides.
    source : str
        Where the variants come from.
    check : callable or None
        For axes that take a number: tells whether a value is allowed.
    allowed : str
        For axes that take a number: the allowed values in words.
    """

    name: str
    values: tuple[Value, ...]
    routes: tuple[str, ...]
    meaning: str
    source: str
    check: Callable[[object], bool] | None = None
    allowed: str = ""


def _prior(value: object) -> bool:
    return (
        isinstance(value, (int, float))
        and not isinstance(value, bool)
        and math.isfinite(value)
        and value >= 0
    )


def _step(value: object) -> bool:
    return value is None or (isinstance(value, int) and not isinstance(value, bool) and value > 0)


AXES: tuple[Axis, ...] = (
    Axis(
        "between",
        ("size_weighted", "unweighted"),
        ("between",),
        "weight of a unit mean: its number of rows, or one",
        "common practice",
    ),
    Axis(
        "between",
        ("size_weighted", "harmonic", "unweighted"),
        ("swamy_arora",),
        "form of the second residual sum of squares: unit means weighted by size with exact expectation; "
        "unweighted with the harmonic mean size in place of the exact expectation; unweighted with exact "
        "expectation",
        "Swamy & Arora 1972; Baltagi & Chang 1994; harmonic mean: common practice",
    ),
    Axis(
        "expectation",
        ("exact", "short"),
        ("wallace_hussain",),
        "expectations of both forms exact, or divisors n - N and N without the correction for estimated "
        "coefficients",
        "Wallace & Hussain 1969; Baltagi & Chang 1994",
    ),
    Axis(
        "divisor",
        ("units_minus_one", "units"),
        ("nerlove",),
        "divisor of the sample variance of the estimated unit intercepts",
        "Nerlove 1971; common practice",
    ),
    Axis(
        "prior",
        (0.0,),
        ("minque",),
        "prior variance ratio at which the minimum-norm forms are built",
        "Rao 1971",
        _prior,
        "any finite number >= 0",
    ),
    Axis(
        "count",
        ("rank", "columns"),
        ("within", "between", "swamy_arora", "wansbeek_kapteyn", "pooled_minus_within", "fitting_constants"),
        "degrees of freedom count ranks of X, QX and PX, or columns (wrong where unit means are collinear, "
        "but printed)",
        "common practice",
    ),
    Axis(
        "scale",
        ("own", "gls_residuals", "gls_residuals_n"),
        CURVE_ROUTES[1:],
        "variance that multiplies the inverse cross-products: the route's own idiosyncratic variance, or the "
        "residual sum of squares of the quasi-demeaned regression over n - K (for `reml` the same as its "
        "own; for `ml` what is printed as 'components over n - K'), or over n (for `ml` the same as its own)",
        "common practice; Wooldridge prints the second (Table 14.2; from memory)",
    ),
    Axis(
        "covariance",
        ("model", "CR0", "CR1", "CR2", "CR3", "two_way"),
        tuple(route for route in ALL_ROUTES if route != "first_difference"),
        "covariance of the coefficients: of the model, or robust to dependence within units "
        "(sum of score products; with a "
        "multiplier; with leverage adjustment of order 1/2; of order 1), or within units and within periods",
        "Liang & Zeger 1986; Bell & McCaffrey 2002; Pustejovsky & Tipton 2018; Cameron, Gelbach & Miller 2011",
    ),
    Axis(
        "multiplier",
        (
            "default",
            "none",
            "units",
            "units_and_rows",
            "units_and_rank",
            "units_and_rows_constant",
            "units_and_rows_intercepts",
            "jackknife",
            "smallest",
            "smallest_and_rows",
        ),
        tuple(route for route in ALL_ROUTES if route != "first_difference"),
        "small-sample multiplier of a robust covariance; each kind allows some of these and says which it used",
        "common practice",
    ),
    Axis(
        "reference",
        (
            "default",
            "normal",
            "t_residual",
            "t_rows",
            "t_within",
            "t_units",
            "t_between",
            "t_constant",
            "by_level",
            "satterthwaite",
            "kenward_roger",
        ),
        ALL_ROUTES,
        "reference distribution of intervals: Satterthwaite on the curve and the classical t elsewhere, "
        "unless named; with "
        "Kenward-Roger the adjusted covariance too",
        "Satterthwaite 1946; Kenward & Roger 1997; common practice",
    ),
    Axis(
        "reml_constant",
        ("included", "omitted"),
        ("reml",),
        "whether the restricted log-likelihood contains half the log-determinant of X'X",
        "Harville 1974 (with); Patterson & Thompson 1971 (without); attribution from memory",
    ),
    Axis(
        "one_row_units",
        ("kept", "dropped"),
        tuple(route for route in ALL_ROUTES if route != "first_difference"),
        "whether units with a single row take part",
        "common practice",
    ),
    Axis(
        "step",
        (None,),
        ("first_difference",),
        "number of period steps between consecutive rows; the smallest one seen unless stated",
        "common practice",
        _step,
        "None or a positive integer",
    ),
)


def axes_of(route: str) -> tuple[Axis, ...]:
    """Return the axes that a route has.

    Parameters
    ----------
    route : str
        Key of a route; ledger keys such as ``minque_1`` have none of their own.

    Returns
    -------
    tuple of Axis
    """
    return tuple(axis for axis in AXES if route in axis.routes)


def resolve(route: str, given: Mapping[str, object]) -> Mapping[str, Value]:
    """Check conventions given by the user and fill in the defaults.

    Parameters
    ----------
    route : str
        Key of a route.
    given : mapping
        Conventions that differ from the defaults.

    Returns
    -------
    mapping
        Every convention of the route with its value, read-only.

    Raises
    ------
    OptionError
        If the route has no such axis, or the axis no such value.
    """
    axes = {axis.name: axis for axis in axes_of(route)}
    for name in given:
        if name not in axes:
            raise OptionError(
                f"route {route!r} has no convention {name!r}; it has: {', '.join(axes) or 'none'}."
                + nearest(name, axes)
            )
    chosen: dict[str, Value] = {}
    for name, axis in axes.items():
        value = given.get(name, axis.values[0])
        if axis.check is not None:
            if not axis.check(value):
                raise OptionError(f"{name}={value!r} is not allowed for {route!r}; allowed: {axis.allowed}.")
        elif value not in axis.values:
            raise OptionError.not_among(f"{route}: {name}", value, axis.values)
        chosen[name] = cast(Value, value)  # among `axis.values`, or let through by `axis.check`
    return MappingProxyType(chosen)
