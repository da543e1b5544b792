"""How easily figures of this many digits are matched by chance.

The model, said wherever the numbers are shown: over the searched printouts a quantity spreads over some range; a wrong
printout's value is taken to be even on it, and prints as the given text with probability ``width / (range + width)``.
Figures of one printout hang together (coefficients all move with the variance ratio), so the truth lies between two
ends: figures independent, and figures that move as one.
"""

from __future__ import annotations

import numpy as np

from mixbridge.reconcile.match_parts import Chance, FigureChance
from mixbridge.reconcile.match_search import Search

__all__ = ["chance_of"]


def chance_of(search: Search) -> Chance:
    """Return the probabilities of a match by chance for the given figures over the searched space."""
    figures = search.sheet.figures
    table = np.array([found.outcome.values for found in search.found])
    finite = np.where(np.isfinite(table), table, np.nan)
    each = []
    for figure, column in zip(figures, finite.T, strict=True):
        known = column[np.isfinite(column)]
        width = 2.0 * figure.half_unit
        low, high = (float(known.min()), float(known.max())) if known.size else (np.nan, np.nan)
        probability = width / (high - low + width) if known.size else 0.0
        each.append(FigureChance(figure.quantity, width, low, high, float(probability)))
    with np.errstate(divide="ignore", invalid="ignore"):
        power = np.floor(np.log10(np.abs(finite)))
        rounded = np.where(finite == 0.0, 0.0, np.round(finite / 10.0**power, 8) * 10.0**power)
    distinct = len({tuple("none" if np.isnan(v) else f"{v:.9g}" for v in row) for row in rounded})
    independent = float(np.prod([one.probability for one in each])) * search.account.namings
    dependent = min(one.probability for one in each) * search.account.namings
    independent, dependent = min(independent, 1.0), min(dependent, 1.0)
    others = max(distinct - 1, 0)
    return Chance(
        figures=tuple(each),
        distinct=distinct,
        independent=independent,
        dependent=dependent,
        any_independent=-float(np.expm1(others * np.log1p(-independent))) if independent < 1.0 else 1.0,
        any_dependent=min(1.0, others * dependent),
    )
