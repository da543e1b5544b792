"""What a match holds, and its tables."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from mixbridge.reconcile.match_parts import Candidate, Chance, Consistency, Fault, Separator, TieClass
from mixbridge.reconcile.match_ratio import RatioUnion
from mixbridge.reconcile.match_search import Account
from mixbridge.reconcile.printed import PrintedFigure

__all__ = ["MatchRecord"]


@dataclass(frozen=True, slots=True)
class MatchRecord:
    """Printed figures against every route and convention.

    Attributes
    ----------
    figures : tuple of PrintedFigure
    candidates : tuple of Candidate
        Ranked by figures matched; ties in the order: usual rounding, fewer unusual conventions.
    classes : tuple of TieClass
        The best candidates, grouped by what they print in full precision.
    separators : tuple of Separator
        Further figures that would tell these classes apart.
    ratios : tuple of RatioUnion
        Ratios that the printed coefficients allow, one-row units kept and, where there are any, dropped.
    inside : tuple of (str, str, float)
        Curve routes whose ratio lies in such a set: label, one-row units, ratio.
    chance : Chance
    consistency : tuple of Consistency
        Relations inside the printed set.
    faults : tuple of Fault
        Hypotheses of slips in copying.
    account : Account
        What was searched.
    """

    figures: tuple[PrintedFigure, ...]
    candidates: tuple[Candidate, ...]
    classes: tuple[TieClass, ...]
    separators: tuple[Separator, ...]
    ratios: tuple[RatioUnion, ...]
    inside: tuple[tuple[str, str, float], ...]
    chance: Chance
    consistency: tuple[Consistency, ...]
    faults: tuple[Fault, ...]
    account: Account

    @property
    def best(self) -> int:
        """Most figures that any candidate reproduces."""
        return self.candidates[0].matched if self.candidates else 0

    @property
    def complete(self) -> bool:
        """Whether the whole space that this study allows was searched."""
        return not self.account.skipped

    @property
    def all_matched(self) -> bool:
        """Whether some candidate reproduces every figure."""
        return self.best == len(self.figures)

    @property
    def unique(self) -> bool:
        """Whether exactly one class reproduces every figure, in a search that left nothing out."""
        return self.all_matched and self.complete and len(self.classes) == 1

    def table(self) -> pd.DataFrame:
        """Return the candidates with the first figure each fails."""
        rows = []
        for one in self.candidates:
            first = one.first_failure
            rows.append(
                [
                    one.label,
                    one.route,
                    one.matched,
                    one.figures,
                    one.rounding,
                    " and ".join(one.naming),
                    "" if first is None else first.quantity,
                    "" if first is None else first.printed,
                    np.nan if first is None else first.computed,
                    np.nan if first is None else first.units_off,
                    one.ratio,
                    one.status,
                ]
            )
        columns = [
            "candidate",
            "route",
            "matched",
            "figures",
            "rounding",
            "naming",
            "first_failure",
            "printed",
        ]
        return pd.DataFrame(rows, columns=[*columns, "computed", "units_off", "ratio", "status"])

    def failures_table(self) -> pd.DataFrame:
        """Return every figure that every candidate fails."""
        rows = [
            [one.label, failure.quantity, failure.printed, failure.computed, failure.units_off]
            for one in self.candidates
            for failure in one.failures
        ]
        return pd.DataFrame(rows, columns=["candidate", "quantity", "printed", "computed", "units_off"])

    def ties_table(self) -> pd.DataFrame:
        """Return the best candidates with their class and what each class would print of the separating figures."""
        extra = [f"{one.quantity} ({one.digits} digits)" for one in self.separators]
        columns = ["class", "candidate", "only_cut", *extra]
        rows = []
        for place, tied in enumerate(self.classes):
            values = [one.values[place] if place < len(one.values) else "" for one in self.separators]
            rows += [[place + 1, one.label, tied.only_cut, *values] for one in tied.candidates]
        return pd.DataFrame(rows, columns=columns)

    def chance_table(self) -> pd.DataFrame:
        """Return how telling each figure is."""
        rows = [[one.quantity, one.width, one.low, one.high, one.probability] for one in self.chance.figures]
        return pd.DataFrame(rows, columns=["quantity", "width", "lowest", "highest", "probability"])

    def ratio_table(self) -> pd.DataFrame:
        """Return the ratios that the printed coefficients allow, for each alone and for all together."""
        rows: list[list[object]] = []
        for union in self.ratios:
            parts = (*union.by_term, ("all", union.intervals))
            for term, intervals in parts:
                rows += [
                    [union.one_row_units, term, low, high] for low, high in intervals or ((np.nan, np.nan),)
                ]
        return pd.DataFrame(rows, columns=["one_row_units", "term", "lower", "upper"])

    def consistency_table(self) -> pd.DataFrame:
        """Return the relations inside the printed set."""
        columns = [
            "relation",
            "quantity",
            "printed",
            "implied_low",
            "implied_high",
            "holds",
            "units_off",
            "naming",
        ]
        rows = [
            [
                *(one.relation, one.quantity, one.printed, one.low, one.high, one.holds, one.units_off),
                " or ".join(one.naming),
            ]
            for one in self.consistency
        ]
        return pd.DataFrame(rows, columns=columns)

    def faults_table(self) -> pd.DataFrame:
        """Return the hypotheses of slips in copying."""
        columns = ["hypothesis", "quantity", "printed", "corrected", "would_complete", "tried", "weak"]
        rows = [
            [
                one.hypothesis,
                one.quantity,
                one.printed,
                one.corrected,
                "; ".join(one.labels),
                one.tried,
                one.weak,
            ]
            for one in self.faults
        ]
        return pd.DataFrame(rows, columns=columns)
