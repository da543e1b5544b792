"""Sentences on the path of a coefficient, built from its numbers."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from mixbridge.inference.pivot import RatioSet
from mixbridge.reconcile.attribution_text import say

__all__ = ["path_sentences"]

SIGNS = {1: "is above zero", -1: "is below zero", 0: "holds zero"}
Range = tuple[float, float]


def path_sentences(
    term: str,
    *,
    size: float,
    quantile: float,
    confidence: float,
    ranges: tuple[Range, Range],
    turns: Sequence[float],
    allowed: RatioSet | None,
    why_none: str,
    changes: Sequence[tuple[float, int, int]],
    searched: int,
) -> tuple[str, ...]:
    """Return the path in plain words.

    Parameters
    ----------
    term, size, quantile, confidence, turns, allowed, why_none, changes, searched
        As in `path.Path`.
    ranges : pair of (float, float)
        Lowest and highest coefficient over all ratios, and over the exact set.

    Returns
    -------
    tuple of str
    """
    (low, high), inside = ranges
    lines = [
        f"{term}: whatever the variance ratio, generalised least squares gives between {say(low, 5)} and {say(high, 5)}"
    ]
    if turns:
        places = ", ".join(say(psi, 4) for psi in turns)
        lines[0] += f"; on the way from pooled to within the coefficient turns at ratio {places}"
    if allowed is None:
        lines.append(f"There is no exact confidence set of the ratio here: {why_none}")
    elif allowed.empty:
        lines.append(f"The exact {confidence:.0%} set of the ratio is empty: {allowed.note}")
    else:
        ends = (
            f"{say(allowed.lower, 4)} to {'infinity' if np.isinf(allowed.upper) else say(allowed.upper, 4)}"
        )
        lines.append(
            f"Over the ratios that the data allow, the exact {confidence:.0%} set {ends}, it gives between "
            f"{say(inside[0], 5)} and {say(inside[1], 5)}"
        )
    lines.append(_about_zero(allowed, changes, quantile))
    lines.append(
        f"Extrema and changes were looked for on {searched} ratios; lambda is that of a unit with {size:g} rows"
    )
    return tuple(f"{line}." for line in lines)


def _about_zero(allowed: RatioSet | None, changes: Sequence[tuple[float, int, int]], quantile: float) -> str:
    rule = f"coefficient plus and minus {say(quantile, 4)} standard errors"
    if not changes:
        return f"What the interval ({rule}) says about zero is the same at every ratio"
    steps = "; ".join(
        f"below ratio {say(psi, 4)} it {SIGNS[before]}, above it {SIGNS[after]}"
        for psi, before, after in changes
    )
    text = f"The interval ({rule}) changes its answer about zero along the path: {steps}"
    if allowed is None or allowed.empty:
        return text
    within = [psi for psi, _, _ in changes if allowed.lower < psi < allowed.upper]
    verdict = "among" if within else "but not among"
    return f"{text}, {verdict} the ratios that the data allow"
