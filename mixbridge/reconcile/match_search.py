"""The search: every fit, its presentations in stages, and an account of what was tried.

Let S be the number of figures that depend on standard errors. A fit that reproduces m of the others can reach m + S
at most; a later stage skips fits whose bound lies below the best count so far. The skipped ones cannot be among the
best, so the set of best candidates is that of the whole space.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.reconcile.match_errors import STAGES, errors_at
from mixbridge.reconcile.match_score import Outcome, Part, Sheet, presentations, relative_error
from mixbridge.reconcile.match_space import Searchable, first_difference, fitted_routes, label_of, sides_of
from mixbridge.reconcile.match_values import Fitted, Printout, Side
from mixbridge.reconcile.printed import PrintedFigure
from mixbridge.reconcile.printed_quantities import TERM_KINDS, groups_of

__all__ = ["Account", "Found", "Search", "name_of", "search"]

FloatArray = NDArray[np.float64]
SMALL = 2_000_000
"""Units times squared columns up to which robust covariances are always searched: about a second of work."""


@dataclass(frozen=True, slots=True)
class Found:
    """One printout with its outcome."""

    printout: Printout
    outcome: Outcome


@dataclass(frozen=True, slots=True)
class Account:
    """What was searched.

    Attributes
    ----------
    fits : int
        Distinct fits.
    printouts : int
        Fits with their presentations that were compared with the figures.
    namings : int
        Joint readings of ambiguous names.
    bounded : int
        Pairs of fit and stage skipped because they could not reach the best count.
    stages : tuple of str
        Stages of standard errors that were searched.
    skipped : tuple of str
        Parts of the space that were not searched although this study allows it; with any, ties may be missing.
    absent : tuple of (str, str)
        Routes without figures on these data, with reasons.
    """

    fits: int
    printouts: int
    namings: int
    bounded: int
    stages: tuple[str, ...]
    skipped: tuple[str, ...]
    absent: tuple[tuple[str, str], ...]


@dataclass(frozen=True, slots=True)
class Search:
    """Everything found, best first."""

    sheet: Sheet
    sides: dict[str, Side]
    fitted: tuple[Fitted, ...]
    found: tuple[Found, ...]
    account: Account


def search(study: Searchable, figures: tuple[PrintedFigure, ...], robust: str) -> Search:
    """Compare every printout with the figures.

    Parameters
    ----------
    study : Searchable
    figures : tuple of PrintedFigure
        With terms spelled as in the study.
    robust : {"auto", "always", "if_needed", "never"}
        Whether robust covariances are searched: always where the panel is small, and if no model-based one
        reproduces all figures; in every case; only if needed; not at all.

    Returns
    -------
    Search
    """
    curve = study.curve
    exhaustive = robust == "always" or (robust == "auto" and curve.units * curve.rank**2 <= SMALL)
    kinds = {figure.quantity.partition(":")[0] for figure in figures}
    sides = sides_of(study, exhaustive and "contrast" in kinds)
    groups = groups_of([figure.quantity for figure in figures], len(curve.sizes) == 1)
    sheet = Sheet(figures, groups, relative_error(curve))
    fitted, absent = fitted_routes(study, sides)
    walk = _Walk(study, sheet, fitted)
    skipped: list[str] = []
    for stage, words in STAGES.items():
        if stage != "model":
            if not sheet.on_errors:
                break
            if robust == "never" or (not exhaustive and walk.best == len(figures)):
                skipped.append(words)
                continue
        walk.take(stage)
    if "first_difference" not in absent:
        # it has coefficients and standard errors only, and reads the rows again
        reach = sum(figure.quantity.partition(":")[0] in TERM_KINDS for figure in figures)
        if 0 < reach >= walk.best:
            walk.add(first_difference(study, sides))
        else:
            absent["first_difference"] = "not computed: too few of the figures given are ones it has"
    if "contrast" in kinds and not exhaustive:
        skipped.append("cluster-robust contrasts")
    fitted = walk.fitted
    order = sorted(range(len(walk.found)), key=lambda at: (*_rank(walk.found[at]), at))
    account = Account(
        fits=len(fitted),
        printouts=len(walk.found),
        namings=int(np.prod([len(group.readings) for group in groups])),
        bounded=walk.bounded,
        stages=tuple(STAGES[stage] for stage in walk.stages),
        skipped=tuple(skipped),
        absent=tuple(absent.items()),
    )
    return Search(sheet, sides, tuple(fitted), tuple(walk.found[at] for at in order), account)


def _rank(found: Found) -> tuple[int, int, int]:
    """Order candidates: more figures, then usual rounding, then fewer unusual conventions."""
    outcome = found.outcome
    return -outcome.matched, int(outcome.rounding != "nearest"), len(found.printout.conventions)


class _Walk:
    """The state of one search; lives only inside `search`."""

    def __init__(self, study: Searchable, sheet: Sheet, fitted: list[Fitted]) -> None:
        self.study, self.sheet = study, sheet
        self.found: list[Found] = []
        self.stages: list[str] = []
        self.bounded = self.best = 0
        self.fitted: list[Fitted] = []
        self.parts: list[dict[str, dict[str, Part]]] = []
        self.base: list[int] = []
        for each in fitted:
            self._enter(each)

    def _enter(self, each: Fitted) -> None:
        parts = {"included": self.sheet.parts(each, {})}
        if each.route == "reml":
            parts["omitted"] = self.sheet.parts(each, {"reml_constant": "omitted"})
        self.fitted.append(each)
        self.parts.append(parts)
        self.base.append(max(self.sheet.without_errors(part) for part in parts.values()))

    def add(self, late: list[Fitted]) -> None:
        """Take further fits that have model-based standard errors only."""
        for each in late:
            self._enter(each)
            self._compare(len(self.fitted) - 1, "model")

    def take(self, stage: str) -> None:
        """Go through one stage, the most promising fits first."""
        self.stages.append(stage)
        for at in sorted(range(len(self.fitted)), key=lambda at: -self.base[at]):
            if stage != "model" and self.base[at] + len(self.sheet.on_errors) < self.best:
                self.bounded += 1
                continue
            self._compare(at, stage)

    def _compare(self, at: int, stage: str) -> None:
        each = self.fitted[at]
        given = errors_at(self.study, each, stage)
        if stage == "model" and not self.sheet.on_errors:
            given = given[:1]
        for presentation, errors in presentations(each, self.sheet, given):
            parts = self.parts[at][presentation.get("reml_constant", "included")]
            outcome = self.sheet.outcome(each, parts, errors)
            self.found.append(Found(Printout(each, presentation, errors), outcome))
            self.best = max(self.best, outcome.matched)


def name_of(found: Found) -> str:
    """Return route and conventions in words."""
    return label_of(found.printout.fitted.route, found.printout.conventions)
