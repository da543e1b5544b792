"""The record of a rehearsal."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import pandas as pd

from mixbridge.display import Printed
from mixbridge.errors import OptionError
from mixbridge.rehearse import tables, text
from mixbridge.rehearse.figure import figure_of
from mixbridge.rehearse.replicates import Runs

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["Rehearsal"]


@dataclass(frozen=True, eq=False)
class Rehearsal(Printed):
    """How every route behaves on one design under a stated truth.

    Tables are made once; do not change them in place.

    Attributes
    ----------
    runs : Runs
        Draws and estimates: ``rehearsal.runs.routes["reml"].ratio``.
    confidence : float
        Of intervals; tests have level one minus it.
    primary : str
        The route that `paragraph` is about.
    notes : tuple of str
        How errors were drawn, and what is not as it seems.
    """

    runs: Runs
    confidence: float
    primary: str
    notes: tuple[str, ...]

    @cached_property
    def coefficients(self) -> pd.DataFrame:
        """Bias and root mean square error of every coefficient of every route."""
        return tables.coefficient_table(self.runs)

    @cached_property
    def intervals(self) -> pd.DataFrame:
        """Coverage and rejection by route, term and interval rule; `half_width` is the mean."""
        return tables.interval_table(self.runs, self.confidence)

    @cached_property
    def components(self) -> pd.DataFrame:
        """Bias and root mean square error of the variance components, and the share of estimates at zero."""
        return tables.component_table(self.runs)

    @cached_property
    def tests(self) -> pd.DataFrame:
        """Rejection rates of the tests of a zero unit variance and of unrelated unit effects."""
        return tables.test_table(self.runs)

    def statuses(self) -> pd.DataFrame:
        """Return how many replicates have each status, by route."""
        return tables.status_table(self.runs)

    def text(self) -> str:
        """Return the tables as text of at most 100 columns."""
        return text.printout(self.runs, self._tables(), confidence=self.confidence, notes=self.notes)

    def __str__(self) -> str:
        """Return the tables as text."""
        return self.text()

    def paragraph(self, term: str | None = None, route: str | None = None) -> str:
        """Return sentences for a protocol, written before the data come.

        Parameters
        ----------
        term : str, optional
            The first one after the intercept unless given.
        route : str, optional
            The primary one unless given.

        Returns
        -------
        str
        """
        key = self.primary if route is None else route
        rows = self.coefficients[self.coefficients["route"] == key]
        if rows.empty:
            raise OptionError.not_among("route", key, self.runs.routes)
        terms = rows["term"].tolist()
        constant = self.runs.curve.moments.constant
        name = next((one for one in terms if one != constant), terms[0]) if term is None else term
        if name not in terms:
            raise OptionError.not_among("term", name, terms)
        return text.paragraph(
            self.runs, self._tables(), name, key, confidence=self.confidence, notes=self.notes
        )

    def figure(self, term: str) -> Figure:
        """Return bias, root mean square error and coverage of one term as a figure.

        Parameters
        ----------
        term : str

        Returns
        -------
        matplotlib.figure.Figure
        """
        return figure_of(self.coefficients, self.intervals, term, self.confidence)

    def to_dict(self) -> dict[str, object]:
        """Return tables and settings as plain values."""
        return {
            "replicates": self.runs.count,
            "seed": self.runs.seed,
            "confidence": self.confidence,
            "truth": text.truth_sentence(self.runs),
            "notes": list(self.notes),
            **{name: table.to_dict("records") for name, table in self._tables().items()},
        }

    def _tables(self) -> dict[str, pd.DataFrame]:
        return {
            "coefficients": self.coefficients,
            "intervals": self.intervals,
            "components": self.components,
            "tests": self.tests,
        }
