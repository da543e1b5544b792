"""Sentences on a gap, built from its numbers; nothing is computed here but their rounding."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from mixbridge.inference.contrasts import Contrast
from mixbridge.reconcile.attribution_chains import Link, weight_at
from mixbridge.reconcile.attribution_contrast import GapPart
from mixbridge.reconcile.attribution_width import WidthFactor

__all__ = ["Gap", "attribution_sentences", "say", "say_signed"]

NONE = 1e-9
"""Changes of lambda, of coefficients in standard errors, and of log half-widths that are called none: rounding and
the tolerance of iterations."""
VISIBLE = 5e-4
"""Ranges of lambda below it are left out of the sentences (not of the tables)."""


@dataclass(frozen=True, slots=True)
class Gap:
    """Two estimates of one term.

    Attributes
    ----------
    term, a, b : str
    estimate_a, estimate_b : float
    standard_error : float
        Of b: what the gap is measured in.
    ratio_a, ratio_b : float
        NaN off the curve.
    size : float
        Median unit size.
    quotient : float
        Half-width of a over that of b; NaN where no intervals were given.
    """

    term: str
    a: str
    b: str
    estimate_a: float
    estimate_b: float
    standard_error: float
    ratio_a: float
    ratio_b: float
    size: float
    quotient: float

    @property
    def value(self) -> float:
        """Estimate of a minus estimate of b."""
        return self.estimate_a - self.estimate_b

    @property
    def in_se(self) -> float:
        """The same in standard errors of b."""
        return self.value / self.standard_error if self.standard_error > 0.0 else np.nan

    @property
    def weight_a(self) -> float:
        """``lambda`` of a at the median size."""
        return weight_at(self.ratio_a, self.size)

    @property
    def weight_b(self) -> float:
        """``lambda`` of b at the median size."""
        return weight_at(self.ratio_b, self.size)


def say(value: float, digits: int = 3) -> str:
    """Return a number as the sentences print it."""
    return f"{value:.{digits}g}"


def say_signed(value: float, digits: int = 2) -> str:
    """Return a number with its sign as the sentences print it."""
    return f"{value:+.{digits}g}"


def attribution_sentences(
    gap: Gap,
    *,
    chains: Sequence[Sequence[Link]],
    causes: pd.DataFrame,
    factors: Sequence[WidthFactor],
    parts: Sequence[GapPart],
    joint: Sequence[Contrast],
    base: str,
    notes: Sequence[str],
) -> tuple[str, ...]:
    """Return the gap in plain words.

    Parameters
    ----------
    gap, chains, causes, factors, parts, joint, base, notes
        As in `attribution.Attribution`.

    Returns
    -------
    tuple of str
    """
    if parts:
        found = [f"{_apart(gap)}.", *_off_curve(gap, parts, joint, base)]
    else:
        found = [_through_ratio(gap), *_causes(gap, chains, causes)]
    return (*found, *_width(gap, factors), *(f"Note: {note}." for note in notes))


def _apart(gap: Gap) -> str:
    return (
        f"{gap.term}: {gap.a} gives {say(gap.estimate_a, 5)}, {gap.b} {say(gap.estimate_b, 5)}; they differ by "
        f"{say_signed(gap.in_se)} standard errors of {gap.b} ({say_signed(gap.value, 3)})"
    )


def _through_ratio(gap: Gap) -> str:
    if gap.ratio_a == gap.ratio_b:
        return f"{_apart(gap)}: both take the variance ratio {_ratio(gap.ratio_a)}."
    places = (
        f"the variance ratio is {_ratio(gap.ratio_a)} in {gap.a} and {_ratio(gap.ratio_b)} in {gap.b}, so of a unit "
        f"with {gap.size:g} rows the share {say(gap.weight_a)} of its mean is subtracted instead of "
        f"{say(gap.weight_b)}"
    )
    if abs(gap.in_se) <= NONE:
        return f"{_apart(gap)}, although {places}: this coefficient does not depend on the ratio here."
    if abs(gap.in_se) < 0.1 * abs(gap.weight_a - gap.weight_b):
        return f"{_apart(gap)}: {places}, and this coefficient hardly depends on the ratio there."
    return f"{_apart(gap)}, because {places}."


def _ratio(value: float) -> str:
    return "infinite" if np.isinf(value) else say(value, 4)


def _causes(gap: Gap, chains: Sequence[Sequence[Link]], causes: pd.DataFrame) -> list[str]:
    if not chains:
        return []
    total = gap.weight_a - gap.weight_b
    shares = [
        f"{say_signed(row['weight'], 3)} from {row['cause']}"
        + _range(row["weight_lowest"], row["weight_highest"], VISIBLE)
        for _, row in causes.iterrows()
        if max(abs(row["weight_lowest"]), abs(row["weight_highest"])) > NONE
    ]
    if not shares:
        return [f"No change between {gap.b} and {gap.a} moves the ratio on these data."]
    over = f", averages over {len(chains)} legal chains" if len(chains) > 1 else ""
    moved = [
        f"{link.move.start} to {link.move.end} {say_signed(link.weight_change, 3)} ({link.move.sentence})"
        for link in chains[0]
        if abs(link.weight_change) > NONE
    ]
    lines = [
        f"Of the change of lambda from {gap.b} to {gap.a}, {say_signed(total, 3)}: {', '.join(shares)}{over}."
    ]
    if moved:
        lines.append(f"Shortest chain, changes that move it: {'; '.join(moved)}.")
    return lines


def _range(low: float, high: float, least: float) -> str:
    return f" ({say_signed(low, 3)} to {say_signed(high, 3)})" if high - low > least else ""


def _width(gap: Gap, factors: Sequence[WidthFactor]) -> list[str]:
    if not factors:
        return []
    total = float(np.log(gap.quotient))
    if all(abs(item.log) <= NONE for item in factors):
        return ["Their intervals have the same half-width, factor by factor."]
    wider = "wider" if total > 0.0 else "narrower"
    shares = [
        f"{say_signed(item.log, 3)} {item.name}{_range(item.lowest, item.highest, NONE)}"
        for item in sorted(factors, key=lambda item: -abs(item.log))
        if abs(item.log) > NONE
    ]
    return [
        f"The interval of {gap.a} is {say(abs(gap.quotient - 1.0) * 100.0, 2)}% {wider} than that of {gap.b}; "
        f"the logarithm {say_signed(total, 3)} is {', '.join(shares)}."
    ]


def _off_curve(gap: Gap, parts: Sequence[GapPart], joint: Sequence[Contrast], base: str) -> list[str]:
    off = " and ".join(route for route in (gap.a, gap.b) if route in ("between", "first_difference"))
    lines = [
        f"No variance ratio explains this: {off} uses other variation than generalised least squares at any ratio, "
        "and answers the same question only if unit effects and covariates are unrelated"
        + (" and outcomes respond to covariates of the same period only" if "first_difference" in off else "")
    ]
    pieces = []
    for part in parts:
        text = f"{part.name} is {say_signed(part.value, 3)}"
        if part.standard_error > 0.0:
            text += (
                f", {say_signed(part.z)} of its own standard errors under the model at the ratio of {base}"
            )
        elif part.standard_error == 0.0:
            text += ", which the model requires to be zero"
        pieces.append(text)
    lines.append("; ".join(pieces))
    for item in joint[:1]:
        if np.isfinite(item.statistic):
            lines.append(
                f"Over all {item.df} coefficients that both determine, {item.name} has chi-square "
                f"{say(item.statistic, 4)} (p {say(item.p_value, 2)}); not rejecting would prove nothing"
            )
    return [f"{line}." for line in lines]
