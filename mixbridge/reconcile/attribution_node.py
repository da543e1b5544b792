"""Estimators of the variance ratio as nodes, and what a change between two of them can be."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from mixbridge.routes import Fit, axes_of, named_route

__all__ = [
    "CAUSES",
    "DIVISORS",
    "FIXED",
    "FORMS",
    "LIKELIHOOD",
    "PRIOR",
    "RESTRICTED",
    "TRUNCATION",
    "UNSPLIT",
    "WEIGHTS",
    "ZERO",
    "Change",
    "Node",
    "label_of",
    "node_of",
    "plain",
]

FORMS = "quadratic forms"
DIVISORS = "divisors and degrees of freedom"
WEIGHTS = "size weights"
TRUNCATION = "truncation at zero"
LIKELIHOOD = "moments to likelihood"
RESTRICTED = "ML to REML"
PRIOR = "prior ratio"
ZERO = "unit variance set to zero"
FIXED = "unit effects fixed or random"
UNSPLIT = "not split"

CAUSES: Mapping[str, str] = {
    FORMS: "which residuals the sums of squares are taken of",
    DIVISORS: "what the sums of squares are divided by",
    WEIGHTS: "how units of different sizes are weighted",
    TRUNCATION: "a negative unit variance is replaced by zero",
    LIKELIHOOD: "forms fixed in advance, or forms that follow the estimate until it is a stationary point",
    RESTRICTED: "degrees of freedom of the coefficients, taken out by the restricted likelihood",
    PRIOR: "the ratio at which minimum-norm forms are built",
    ZERO: "the unit variance is zero by assumption, or estimated",
    FIXED: "unit effects are parameters, or draws with a variance",
    UNSPLIT: "no chain of estimators connects the two routes on these data",
}
"""Each cause of a difference in the ratio with its meaning."""

RATIO_AXES = ("between", "expectation", "divisor", "prior", "count")
"""Conventions that move the ratio."""
DEFAULTS: Mapping[str, object] = {
    "between": "size_weighted",
    "expectation": "exact",
    "divisor": "units_minus_one",
    "count": "rank",
}


@dataclass(frozen=True, slots=True)
class Node:
    """One estimator of the ratio.

    Attributes
    ----------
    route : str
        Key of the route.
    conventions : tuple of (str, object)
        Those that move the ratio and differ from the defaults; for `minque` always the prior, unless it is the
        ratio of `start`.
    made : {"fit", "minque", "iterated_minque", "gls", "iterated_gls"}
        A route; or one minimum-norm step, or its iteration, from the ratio of `start`; or the same with
        generalised least squares.
    start : Node or None
        Where a step or an iteration starts.
    """

    route: str
    conventions: tuple[tuple[str, object], ...] = ()
    made: str = "fit"
    start: Node | None = None

    @property
    def label(self) -> str:
        """Short name."""
        if self.start is not None:
            start = self.start
            if self.made.startswith("iterated") and start.start is not None:
                start = start.start  # the first step of an iteration is the step itself
            words = {
                "minque": "minque at the ratio of {}",
                "iterated_minque": "iterated minque from {}",
                "gls": "one GLS step from {}",
                "iterated_gls": "iterated GLS from {}",
            }
            prior = dict(start.conventions).get("prior")
            return words[self.made].format(start.label if prior is None else f"prior {plain(prior)}")
        if not self.conventions:
            return self.route
        values = ", ".join(f"{name}={plain(value)}" for name, value in self.conventions)
        return f"{self.route} ({values})"


def plain(value: object) -> str:
    """Return the value of a convention as text."""
    return f"{value:g}" if isinstance(value, float) else str(value)


@dataclass(frozen=True, slots=True)
class Change:
    """One change between two nodes; it can be gone through both ways.

    Attributes
    ----------
    a, b : Node
    cause : str
        Key of `CAUSES`.
    sentence : str
        What is done in b instead of in a.
    back : str
        What is done in a instead of in b.
    """

    a: Node
    b: Node
    cause: str
    sentence: str
    back: str


def node_of(fit: Fit) -> Node:
    """Return the node of a fit: its route and the conventions that move the ratio.

    Parameters
    ----------
    fit : Fit

    Returns
    -------
    Node
    """
    route = named_route(fit.route)[0]
    kept: list[tuple[str, object]] = []
    for name in RATIO_AXES:
        if name not in fit.conventions or route in ("within", "between"):
            continue
        value = fit.conventions[name]
        if name == "prior":
            kept.append((name, float(str(value))))
        elif value != DEFAULTS[name]:
            kept.append((name, value))
    return Node(route, tuple(kept))


def label_of(fit: Fit) -> str:
    """Return the key of a fit with the conventions that are not the defaults.

    Parameters
    ----------
    fit : Fit

    Returns
    -------
    str
        For example ``swamy_arora (between=harmonic, covariance=CR1)``.
    """
    route, implied = named_route(fit.route)
    defaults = {axis.name: axis.values[0] for axis in axes_of(route)} | implied
    changed = [
        f"{name}={plain(value)}" for name, value in fit.conventions.items() if value != defaults.get(name)
    ]
    return f"{fit.route} ({', '.join(changed)})" if changed else fit.route
