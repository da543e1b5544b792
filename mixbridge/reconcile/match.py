"""Work backwards from printed figures to the routes and conventions that are compatible with them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from mixbridge.display import Printed
from mixbridge.errors import OptionError
from mixbridge.reconcile.match_chance import chance_of
from mixbridge.reconcile.match_consistency import consistency_of
from mixbridge.reconcile.match_faults import faults_of
from mixbridge.reconcile.match_ratio import compatible_ratios
from mixbridge.reconcile.match_record import MatchRecord
from mixbridge.reconcile.match_search import Search, search
from mixbridge.reconcile.match_space import Searchable, label_of
from mixbridge.reconcile.match_text import match_screen
from mixbridge.reconcile.match_ties import candidate_of, classes_of, separators
from mixbridge.reconcile.printed import PrintedFigure, figure_list
from mixbridge.reconcile.printed_quantities import match_terms

__all__ = ["Match", "match_reported"]

ROBUST = ("auto", "always", "if_needed", "never")
LOOKED_AT = 400
"""Candidates from the top in which slips of copying are sought, and tied ones that are grouped."""


@dataclass(frozen=True, slots=True)
class Match(MatchRecord, Printed):
    """Printed figures against every route and convention; print it for the screen."""

    def __str__(self) -> str:
        """Return the screen."""
        return match_screen(self)

    def __repr__(self) -> str:
        """Return a one-line form."""
        return (
            f"<Match: {self.best} of {len(self.figures)} figures, {len(self.classes)} best classes; print it>"
        )


def match_reported(
    figures: Mapping[str, str] | Iterable[tuple[str, str]] | Iterable[PrintedFigure],
    study: Searchable,
    *,
    robust: Literal["auto", "always", "if_needed", "never"] = "auto",
) -> Match:
    """Find the routes and conventions that are compatible with printed figures.

    Parameters
    ----------
    figures : mapping of str to str, or iterable of pairs or of PrintedFigure
        Quantity and text as printed, rounding kept: ``{"b:forage": "0.31", "se:forage": ".042", "icc": "0.4"}``.
        `mixbridge.reconcile.QUANTITIES` lists the quantities. The order matters for "the first figure it fails".
    study : Study
        The rows and the model.
    robust : {"auto", "always", "if_needed", "never"}
        Whether robust standard errors are searched after the model-based ones (CR0 and CR1, then CR2 and CR3, then
        two-way): "if_needed" stops at the first stage that reproduces every figure, so ties in later stages go unseen,
        and says so; "auto" is "always" on panels where this costs little (units times squared columns up to two
        million), else "if_needed".

    Returns
    -------
    Match
        Ranked candidates, ties and what would separate them, ratios that the coefficients allow, chance, internal
        consistency, and hypotheses of slips. It speaks of compatibility, never of where the figures came from.

    Raises
    ------
    DataError
        If a figure cannot be read.
    OptionError
        If a term is not in the study.

    Examples
    --------
    >>> import mixbridge
    >>> from mixbridge.reconcile.match import match_reported
    >>> data = mixbridge.demo.apiaries()
    >>> study = mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary", period="season")
    >>> fit = study.fit("wallace_hussain")
    >>> printed = {"b:forage": f"{fit.coefficients['forage']:.4f}", "icc": f"{fit.icc:.4f}"}
    >>> [one.label for one in match_reported(printed, study).candidates if one.matched == 2]
    ['wallace_hussain']
    """
    if robust not in ROBUST:
        raise OptionError.not_among("robust", robust, ROBUST)
    names = study.curve.names
    read = tuple(
        replace(figure, quantity=match_terms(figure.quantity, names)) for figure in figure_list(figures)
    )
    result = search(study, read, robust)
    candidates = [candidate_of(found, read) for found in result.found]
    best = candidates[0].matched if candidates else 0
    tied = [place for place, one in enumerate(candidates) if one.matched == best][:LOOKED_AT] if best else []
    classes, first = classes_of([result.found[at] for at in tied], [candidates[at] for at in tied])
    unions = [
        union
        for name, side in result.sides.items()
        if (union := compatible_ratios(side.curve, read, result.sheet.error, name)) is not None
    ]
    looked = range(min(LOOKED_AT, len(candidates)))
    return Match(
        figures=read,
        candidates=tuple(candidates),
        classes=tuple(classes),
        separators=separators(first) if best == len(read) else (),
        ratios=tuple(unions),
        inside=_inside(result, {union.one_row_units: union.holds for union in unions}),
        chance=chance_of(result),
        consistency=consistency_of(read, study.curve),
        faults=faults_of(
            [candidates[at] for at in looked], [result.found[at].outcome.values for at in looked], read
        )
        if best < len(read)
        else (),
        account=result.account,
    )


def _inside(result: Search, holds: Mapping[str, object]) -> tuple[tuple[str, str, float], ...]:
    """Return the fits on the curve whose ratio the printed coefficients allow."""
    found = []
    for fitted in result.fitted:
        side, ratio = fitted.side.one_row_units, fitted.fit.ratio
        test = holds.get(side)
        if callable(test) and not np.isnan(ratio) and test(ratio):
            found.append((label_of(fitted.route, fitted.conventions), side, float(ratio)))
    return tuple(found)
