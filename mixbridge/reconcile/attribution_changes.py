"""Single changes between estimators of the variance ratio, as data.

A *node* is an estimator that exists: a route with its conventions, one minimum-norm step at the ratio of another
route, its iteration to convergence, and the same for generalised least squares with likelihood divisors. An
*edge* changes one thing. `CHANGES` lists the edges between routes; those that depend on a ratio are made by
`changes_of`:

- an unbiased route -> MINQUE at its own ratio (one expected-information scoring step of REML; Harville 1977)
  -> iterated -> the certified REML optimum;
- a route with likelihood-like divisors, or the within regression -> one step of iterated generalised least
  squares -> iterated (Breusch 1987) -> the certified ML optimum;
- `pooled` -> MINQUE at ratio zero; a prior ratio -> another one; ranks counted -> columns counted.

"""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from mixbridge.reconcile.attribution_node import (
    DIVISORS,
    FIXED,
    FORMS,
    LIKELIHOOD,
    PRIOR,
    RESTRICTED,
    WEIGHTS,
    ZERO,
    Change,
    Node,
    plain,
)

__all__ = ["CHANGES", "changes_of"]

POOLED, WITHIN = Node("pooled"), Node("within")
SA, WK, WH, FC = (
    Node(key) for key in ("swamy_arora", "wansbeek_kapteyn", "wallace_hussain", "fitting_constants")
)
SA_UNWEIGHTED = Node("swamy_arora", (("between", "unweighted"),))
SA_HARMONIC = Node("swamy_arora", (("between", "harmonic"),))
WH_SHORT = Node("wallace_hussain", (("expectation", "short"),))
AMEMIYA, NERLOVE, DIFFERENCE = Node("amemiya"), Node("nerlove"), Node("pooled_minus_within")
NERLOVE_UNITS = Node("nerlove", (("divisor", "units"),))
MINQUE_ZERO = Node("minque", (("prior", 0.0),))
ML, REML = Node("ml"), Node("reml")

CHANGES: tuple[Change, ...] = (
    Change(
        SA,
        WK,
        FORMS,
        "the second form takes unit means less the within slopes, not residuals of a regression of unit means",
        "the second form takes residuals of a regression of unit means, not unit means less the within slopes",
    ),
    Change(
        SA,
        FC,
        FORMS,
        "the second form is the pooled residual sum of squares, not that of a regression of unit means",
        "the second form is the residual sum of squares of a regression of unit means, not the pooled one",
    ),
    Change(
        WK,
        FC,
        FORMS,
        "the second form is the pooled residual sum of squares, not unit means less the within slopes",
        "the second form takes unit means less the within slopes, not the pooled residual sum of squares",
    ),
    Change(
        FC,
        WH,
        FORMS,
        "the first form is the within part of the pooled residuals, not the within residual sum of squares",
        "the first form is the within residual sum of squares, not the within part of the pooled residuals",
    ),
    Change(
        WH,
        WK,
        FORMS,
        "both forms are taken of residuals with the within slopes, not with the pooled ones",
        "both forms are taken of residuals with the pooled slopes, not with the within ones",
    ),
    Change(
        WH_SHORT,
        AMEMIYA,
        FORMS,
        "both forms are taken of residuals with the within slopes, not with the pooled ones",
        "both forms are taken of residuals with the pooled slopes, not with the within ones",
    ),
    Change(
        WK,
        AMEMIYA,
        DIVISORS,
        "the divisors are n - N and N, as if no coefficient had been estimated",
        "expectations are exact: they count the estimated coefficients",
    ),
    Change(
        WH,
        WH_SHORT,
        DIVISORS,
        "the divisors are n - N and N, as if no coefficient had been estimated",
        "expectations are exact: they count the estimated coefficients",
    ),
    Change(
        FC,
        DIFFERENCE,
        DIVISORS,
        "the pooled residual variance over n - K is taken for the sum of both variances",
        "the pooled residual sum of squares gets its exact expectation",
    ),
    Change(
        SA_UNWEIGHTED,
        SA_HARMONIC,
        DIVISORS,
        "the harmonic mean size stands for the exact expectation",
        "the exact expectation stands in place of the harmonic mean size",
    ),
    Change(
        NERLOVE,
        NERLOVE_UNITS,
        DIVISORS,
        "the variance of the unit intercepts is divided by N, not N - 1",
        "the variance of the unit intercepts is divided by N - 1, not N",
    ),
    Change(
        WK,
        NERLOVE,
        DIVISORS,
        "the sample variance of the unit intercepts, each counted once, is taken as it stands, sampling error "
        "included, and the within sum of squares is divided by n (two changes: nothing in use lies between)",
        "unit remainders are weighted by size and get exact expectations (two changes: nothing in use lies "
        "between)",
    ),
    Change(
        SA,
        SA_UNWEIGHTED,
        WEIGHTS,
        "each unit mean counts once, whatever its size",
        "each unit mean counts by its number of rows",
    ),
    Change(
        WH,
        MINQUE_ZERO,
        WEIGHTS,
        "squared unit totals of the pooled residuals are added up: a unit mean counts by its size squared",
        "squared unit means of the pooled residuals count by their size, not its square",
    ),
    Change(
        POOLED,
        WH,
        ZERO,
        "the unit variance is estimated from the pooled residuals instead of set to zero",
        "the unit variance is set to zero",
    ),
    Change(
        POOLED,
        MINQUE_ZERO,
        ZERO,
        "the unit variance is estimated by minimum-norm forms at ratio zero instead of set to zero",
        "the unit variance is set to zero",
    ),
    Change(
        WITHIN,
        WK,
        FIXED,
        "unit effects are draws whose variance is estimated from the within residuals, not parameters",
        "unit effects are parameters, not draws",
    ),
    Change(
        REML,
        ML,
        RESTRICTED,
        "the likelihood does not take out the degrees of freedom of the coefficients",
        "the restricted likelihood takes out the degrees of freedom of the coefficients",
    ),
)
"""Every single change between two routes that depends on no ratio."""

UNBIASED = (SA, SA_UNWEIGHTED, WK, WH, FC)
LIKELIHOOD_DIVISORS = (AMEMIYA, WH_SHORT, WITHIN)


def changes_of(ends: Iterable[Node]) -> tuple[Change, ...]:
    """Return every change, those that depend on the two ends and on ratios included.

    Parameters
    ----------
    ends : iterable of Node

    Returns
    -------
    tuple of Change
    """
    found = list(CHANGES)
    asked: list[Node] = []
    counted: set[Node] = set()
    for end in ends:
        if end.route == "minque":
            asked.append(end)
        elif ("count", "columns") in end.conventions:
            counted.add(end)
    for node in counted:
        ranks = Node(node.route, tuple(item for item in node.conventions if item[0] != "count"))
        found.append(
            Change(
                ranks,
                node,
                DIVISORS,
                "degrees of freedom count columns, not ranks",
                "degrees of freedom count ranks, not columns",
            )
        )
    priors = dict.fromkeys([MINQUE_ZERO, *asked])
    for node in list(priors)[1:]:
        prior = dict(node.conventions)["prior"]
        there, here = f"forms are built at prior ratio {plain(prior)}", "forms are built at prior ratio 0"
        found.append(Change(MINQUE_ZERO, node, PRIOR, there, here))
    for node in asked:
        found += [
            Change(
                Node("minque", (), "minque", start),
                node,
                PRIOR,
                f"forms are built at prior ratio {plain(dict(node.conventions)['prior'])}",
                f"forms are built at the ratio of {start.label}",
            )
            for start in UNBIASED
        ]
    for node in (*UNBIASED, *priors):
        found += _to_reml(node)
    for node in LIKELIHOOD_DIVISORS:
        found += _to_ml(node)
    return tuple(found)


def _to_reml(node: Node) -> Iterator[Change]:
    start = node
    if node.route != "minque":
        start = Node("minque", (), "minque", node)
        yield Change(
            node,
            start,
            LIKELIHOOD,
            "one step of minimum-norm estimation at this ratio (a scoring step of the restricted likelihood)",
            "forms are those of the route, not minimum-norm forms at its ratio",
        )
    end = Node("minque", (), "iterated_minque", start)
    yield Change(
        start,
        end,
        LIKELIHOOD,
        "the step is repeated until the ratio stays: a stationary point of the restricted likelihood",
        "one minimum-norm step is made instead of repeating it",
    )
    yield Change(
        end,
        REML,
        LIKELIHOOD,
        "the certified optimum among the stationary points is taken",
        "the stationary point reached by iteration is taken, not the certified optimum",
    )


def _to_ml(node: Node) -> Iterator[Change]:
    start = Node("gls", (), "gls", node)
    cause = FIXED if node == WITHIN else LIKELIHOOD
    yield Change(
        node,
        start,
        cause,
        "the ratio maximises the likelihood given the coefficients at this ratio",
        "unit effects are parameters, not draws" if node == WITHIN else "the ratio comes from its two forms",
    )
    end = Node("gls", (), "iterated_gls", start)
    yield Change(
        start,
        end,
        LIKELIHOOD,
        "the step is repeated until the ratio stays: a stationary point of the likelihood",
        "one step of generalised least squares is made instead of repeating it",
    )
    yield Change(
        end,
        ML,
        LIKELIHOOD,
        "the certified optimum among the stationary points is taken",
        "the stationary point reached by iteration is taken, not the certified optimum",
    )
