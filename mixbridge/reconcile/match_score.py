"""How many of the printed figures one printout reproduces, under the reading that suits it best.

A figure is reproduced if the computed value lies in the interval that the printed text stands for, widened by
computing error: relative 1e-9, for programs that stop an iteration, plus 64 roundings times the condition of the
columns. One printed set is rounded in one way, to nearest or by cutting digits off, and uses one naming.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.ratio import Curve
from mixbridge.reconcile.match_errors import Presented
from mixbridge.reconcile.match_values import Fitted, Printout
from mixbridge.reconcile.printed import PrintedFigure
from mixbridge.reconcile.printed_quantities import Group, Naming

__all__ = ["ROUNDINGS", "Outcome", "Part", "Sheet", "presentations", "relative_error"]

FloatArray = NDArray[np.float64]
ROUNDINGS = ("nearest", "cut")
"""Ways of rounding, the first preferred."""
ITERATED = 1e-9
EPS = float(np.finfo(float).eps)


def relative_error(curve: Curve) -> float:
    """Return the computing error allowed, relative to the value."""
    return ITERATED + 64.0 * EPS * curve.condition


@dataclass(frozen=True, slots=True)
class Outcome:
    """A printout set against the printed figures.

    Attributes
    ----------
    rounding : str
        ``nearest`` or ``cut``: the one that reproduces more.
    hits : tuple of bool
        Which figures are reproduced.
    values : tuple of float
        Computed values, under the first of the best readings.
    namings : tuple of tuple
        For each group with several readings: the choices that do best; empty where all do equally well.
    """

    rounding: str
    hits: tuple[bool, ...]
    values: tuple[float, ...]
    namings: tuple[tuple[Naming, ...], ...]

    @property
    def matched(self) -> int:
        """Number of figures reproduced."""
        return sum(self.hits)


@dataclass(frozen=True, slots=True)
class Part:
    """What does not depend on the covariance, for one way of rounding; fields as in `Outcome`."""

    hits: tuple[bool, ...]
    values: tuple[float, ...]
    namings: tuple[tuple[Naming, ...], ...]


@dataclass(frozen=True, slots=True)
class Sheet:
    """The printed figures with their readings.

    Attributes
    ----------
    figures : tuple of PrintedFigure
    groups : tuple of Group
    error : float
        Computing error allowed, relative.
    """

    figures: tuple[PrintedFigure, ...]
    groups: tuple[Group, ...]
    error: float

    @property
    def on_errors(self) -> tuple[int, ...]:
        """Places of the figures that depend on standard errors."""
        return tuple(
            place
            for place, figure in enumerate(self.figures)
            if figure.quantity.partition(":")[0] in ("se", "z", "t")
        )

    def hit(self, place: int, value: float, rounding: str, size: float = 0.0) -> bool:
        """Tell whether a value can have been printed as the figure at a place.

        Parameters
        ----------
        place : int
        value : float
        rounding : str
        size : float
            What the computing error is relative to, besides the value.
        """
        figure = self.figures[place]
        low, high = figure.interval if rounding == "nearest" else figure.cut
        slack = self.error * (abs(value) + size)
        return bool(low - slack <= value <= high + slack)

    def parts(self, fitted: Fitted, presentation: dict[str, str]) -> dict[str, Part]:
        """Evaluate all that standard errors do not enter, by way of rounding."""
        printout = Printout(fitted, presentation, np.full(len(fitted.fit.terms), np.nan))
        sizes = dict(
            zip(
                fitted.fit.terms,
                fitted.root_lengths * np.sqrt(max(np.nan_to_num(fitted.fit.scale), 0.0)),
                strict=True,
            )
        )
        found = {}
        for rounding in ROUNDINGS:
            hits, values = [False] * len(self.figures), [np.nan] * len(self.figures)
            namings: list[tuple[Naming, ...]] = []
            for group in self.groups:
                if group.places[0] in self.on_errors:
                    continue
                best: list[tuple[int, Naming, list[bool], list[float]]] = []
                for naming, keys in group.readings:
                    numbers = [
                        printout.value(key, self.figures[place].text.startswith(("-", "−")))
                        for place, key in zip(group.places, keys, strict=True)
                    ]
                    marks = [
                        self.hit(
                            place,
                            number,
                            rounding,
                            float(np.nan_to_num(sizes.get(key.partition(":")[2], 0.0))),
                        )
                        for place, key, number in zip(group.places, keys, numbers, strict=True)
                    ]
                    best.append((sum(marks), naming, marks, numbers))
                top = max(item[0] for item in best)
                chosen = [item for item in best if item[0] == top]
                for place, mark, number in zip(group.places, chosen[0][2], chosen[0][3], strict=True):
                    hits[place], values[place] = mark, number
                if len(group.readings) > 1:
                    every = len(chosen) == len(best)
                    namings.append(() if every else tuple(item[1] for item in chosen))
            found[rounding] = Part(tuple(hits), tuple(values), tuple(namings))
        return found

    def outcome(self, fitted: Fitted, parts: dict[str, Part], errors: FloatArray) -> Outcome:
        """Add the figures that depend on standard errors, and choose the way of rounding."""
        terms, beta = fitted.fit.terms, fitted.fit.beta
        best: Outcome | None = None
        for rounding in ROUNDINGS:
            part = parts[rounding]
            hits, values = list(part.hits), list(part.values)
            for place in self.on_errors:
                kind, _, term = self.figures[place].quantity.partition(":")
                at = terms.index(term)
                with np.errstate(divide="ignore", invalid="ignore"):
                    value = float(errors[at] if kind == "se" else beta[at] / errors[at])
                hits[place] = self.hit(place, value, rounding, 0.0 if kind == "se" else 1.0)
                values[place] = value
            made = Outcome(rounding, tuple(hits), tuple(values), part.namings)
            if best is None or made.matched > best.matched:
                best = made
        assert best is not None
        return best

    def without_errors(self, parts: dict[str, Part]) -> int:
        """Return how many figures are reproduced before any standard error is looked at."""
        return max(sum(part.hits) for part in parts.values())


def presentations(fitted: Fitted, sheet: Sheet, given: Sequence[Presented]) -> list[Presented]:
    """Cross standard errors with the REML constant where a figure depends on it."""
    criteria = ("log_likelihood", "minus_2_log_likelihood", "aic", "bic")
    asked = any(figure.quantity in criteria for figure in sheet.figures)
    if not (asked and "omitted" in fitted.likelihoods):
        return list(given)
    return [
        ({**presentation, **extra}, errors)
        for extra in ({}, {"reml_constant": "omitted"})
        for presentation, errors in given
    ]
