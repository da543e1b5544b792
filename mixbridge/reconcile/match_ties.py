"""Candidates from outcomes, classes of tied ones, and the further figures that would tell them apart."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from mixbridge.reconcile.match_parts import Candidate, Failure, Separator, TieClass
from mixbridge.reconcile.match_search import Found, name_of
from mixbridge.reconcile.match_values import SAME
from mixbridge.reconcile.printed import PrintedFigure
from mixbridge.reconcile.printed_quantities import Naming

__all__ = ["candidate_of", "classes_of", "separators"]

FloatArray = NDArray[np.float64]
MOST_DIGITS = 10
MOST_NAMED = 3
RAW = "unit_variance, before it is set to zero"
MOST_CLASSES = 60
"""Tied classes told apart; with more, figures say next to nothing and separators are sought among the first."""


def candidate_of(found: Found, figures: tuple[PrintedFigure, ...]) -> Candidate:
    """Return the public form of one outcome."""
    outcome, fitted = found.outcome, found.printout.fitted
    failures = tuple(
        Failure(figure.quantity, figure.text, value, figure.units_off(value))
        for figure, hit, value in zip(figures, outcome.hits, outcome.values, strict=True)
        if not hit
    )
    return Candidate(
        label=name_of(found),
        route=fitted.route,
        conventions=found.printout.conventions,
        naming=tuple(_said(choices) for choices in outcome.namings if choices),
        rounding=outcome.rounding,
        matched=outcome.matched,
        figures=len(figures),
        failures=failures,
        ratio=fitted.fit.ratio,
        status=fitted.fit.status,
        same=fitted.same,
    )


def _said(choices: tuple[Naming, ...]) -> str:
    """Say the choices; what differs among alternatives is listed axis by axis."""
    axes = dict.fromkeys(axis for naming in choices for axis, _ in naming)
    parts = []
    for axis in axes:
        values = list(dict.fromkeys(choice for naming in choices for name, choice in naming if name == axis))
        shown = " or ".join(values[:MOST_NAMED])
        more = f" or {len(values) - MOST_NAMED} more forms" if len(values) > MOST_NAMED else ""
        parts.append(f"{axis} {shown}{more}")
    return "; ".join(parts)


def classes_of(found: Sequence[Found], candidates: Sequence[Candidate]) -> tuple[list[TieClass], list[Found]]:
    """Group the best candidates by what they print in full precision.

    Parameters
    ----------
    found, candidates : sequence
        The best ones, in order.

    Returns
    -------
    classes : list of TieClass
    first : list of Found
        One printout of each class.
    """
    vectors: list[FloatArray] = []
    members: list[list[int]] = []
    for place, each in enumerate(found):
        vector = _everything(each)
        twin = next((at for at, other in enumerate(vectors) if _equal(vector, other)), None)
        if twin is None:
            vectors.append(vector)
            members.append([place])
        else:
            members[twin].append(place)
    classes = [
        TieClass(
            tuple(candidates[place] for place in places),
            all(candidates[place].rounding != "nearest" for place in places),
        )
        for places in members
    ]
    return classes, [found[places[0]] for places in members]


def _everything(found: Found) -> FloatArray:
    """Return all that can be printed, free of units: what is near zero is compared in units of its own noise."""
    printout, fit = found.printout, found.printout.fitted.fit
    own = printout.fitted.root_lengths * np.sqrt(max(np.nan_to_num(fit.scale), 0.0))
    with np.errstate(divide="ignore", invalid="ignore"):
        beta = np.where(own > 0.0, fit.beta / own, fit.beta)
        errors = np.log(printout.errors)
        variances = [
            fit.unit_variance_raw / fit.idiosyncratic_variance,
            np.log(np.abs(fit.idiosyncratic_variance)),
        ]
    return np.concatenate(
        [beta, errors, variances, [fit.ratio, printout.log_likelihood, fit.rows, fit.units]]
    )


def _equal(a: FloatArray, b: FloatArray) -> bool:
    return a.shape == b.shape and bool(np.isclose(a, b, rtol=SAME, atol=SAME, equal_nan=True).all())


def separators(first: Sequence[Found], most: int = 3) -> tuple[Separator, ...]:
    """Find further figures that tell tied classes apart, those that need the fewest digits first.

    Parameters
    ----------
    first : sequence of Found
        One printout of each class.
    most : int
        Number returned at most.
    """
    shown = first[:MOST_CLASSES]
    if len(shown) < 2:
        return ()
    terms = shown[0].printout.fitted.fit.terms
    keys = ["unit_sd", "idiosyncratic_sd", "icc", *(f"b:{term}" for term in terms), "log_likelihood", RAW]
    keys += [f"se:{term}" for term in terms]
    found: list[Separator] = []
    for key in keys:
        values = [each.printout.value(key.partition(",")[0], negative=key == RAW) for each in shown]
        if np.isnan(values).all():
            continue
        best: Separator | None = None
        for digits in range(1, MOST_DIGITS + 1):
            texts = tuple("none" if np.isnan(value) else f"{value:.{digits}g}" for value in values)
            parts = len({"none" if np.isnan(value) else f"{value:.{digits - 1}e}" for value in values})
            if best is None or parts > best.parts:
                best = Separator(key, digits, parts, texts)
        if best is not None and best.parts > 1:
            found.append(best)
    found.sort(key=lambda one: (-one.parts, one.digits))
    return tuple(found[:most])
