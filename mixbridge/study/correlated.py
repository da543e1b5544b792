"""What becomes of a study when unit effects are allowed to be correlated with covariates."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Literal, Self

import numpy as np
import pandas as pd

from mixbridge.errors import OptionError
from mixbridge.routes import Fit
from mixbridge.study.questions import StudyQuestions

if TYPE_CHECKING:
    from mixbridge.correlated import Coordinates, Instrumented, Mundlak, NoisyMeans, SlopeCertificate
    from mixbridge.inference.references import Robust

__all__ = ["StudyCorrelated"]


class StudyCorrelated(StudyQuestions):
    """The part of a study about correlated effects."""

    def correlated(
        self, form: Literal["mundlak"] = "mundlak", *, means_of: Sequence[str] | None = None
    ) -> Self:
        """Return the study of the same rows with unit means added, in which every route runs again.

        Parameters
        ----------
        form : {"mundlak"}
            The unit mean, over the rows used, of every design column that varies within units (Mundlak 1978).
        means_of : sequence of str, optional
            Terms or columns whose means are added; all unless given. A partial form takes the unit effects as
            unrelated to the other covariates.

        Returns
        -------
        Study
            With `unit_means`, `coordinates`, `mean_tests`, `noisy_means` and `unit_constant` besides the rest.
        """
        from mixbridge.correlated import mundlak

        if form != "mundlak":
            raise OptionError.not_among("form", form, ("mundlak",))
        if self.unit_means is not None:
            raise OptionError("this study has unit means already; ask the study without them.")
        record = mundlak(self.panel, self.unit_moments, self.moments, means_of=means_of, raw=self.curve)
        wide = record.augmented
        return replace(
            self, panel=wide.panel, unit_moments=wide.opened, moments=wide.moments, unit_means=record
        )

    def coordinates(
        self, route: str | None = None, *, rule: str | None = None, covariance: str = "model"
    ) -> Coordinates:
        """Give within, between and contextual coefficients of one fit, with one joint covariance.

        Parameters
        ----------
        route : str, optional
            The primary route unless given.
        rule : str, optional
            Reference distribution, a key of `mixbridge.inference.RULES`.
        covariance : str
            ``model``, or a robust one: ``CR0`` to ``CR3``, ``two_way``.

        Returns
        -------
        Coordinates
            Contextual coefficients are not causal effects, and unit means do not cure time-varying confounding, reverse
            causality or measurement error.
        """
        record, fit = self._unit_means(), self.fit(self.primary if route is None else route)
        return record.coordinates(fit, rule, self._robust_or_none(fit, covariance), covariance)

    def mean_tests(
        self, route: str | None = None, *, rule: str | None = None, covariance: str = "model"
    ) -> pd.DataFrame:
        """Test the unit means jointly and for each term: the contrast test in the form of a regression.

        Parameters
        ----------
        route, rule, covariance
            As for `coordinates`.

        Returns
        -------
        DataFrame
            Not rejecting proves nothing.
        """
        record, fit = self._unit_means(), self.fit(self.primary if route is None else route)
        return record.mean_tests(fit, rule, self._robust_or_none(fit, covariance), covariance)

    def slope_certificate(self) -> SlopeCertificate:
        """Check at several ratios that slopes beside their unit means are the within slopes.

        Returns
        -------
        SlopeCertificate
            With the cause where it breaks.
        """
        return self._unit_means().certificate()

    def noisy_means(
        self, route: str | None = None, *, sampled: Sequence[str] | None = None, population: float = np.inf
    ) -> NoisyMeans:
        """Report the reliability of unit means, and contextual coefficients corrected for it, beside the uncorrected.

        Parameters
        ----------
        route : str, optional
            The primary route unless given.
        sampled : sequence of str, optional
            Terms or columns whose rows are a sample of what the unit is like.
        population : float
            Number of rows of which a unit's value is the mean; where the rows seen are all there are, their number.

        Returns
        -------
        NoisyMeans
        """
        from mixbridge.correlated import noisy_means

        fit = self.fit(self.primary if route is None else route)
        return noisy_means(self._unit_means(), fit, sampled=sampled, population=population)

    def unit_constant(self) -> pd.DataFrame:
        """Set coefficients of unit-constant covariates without and with unit means side by side.

        Returns
        -------
        DataFrame
            One row per column and route, with what identifies each and what the unit means do to its meaning.
        """
        from mixbridge.correlated import unit_constant_table

        record = self._unit_means()
        raw = replace(
            self,
            moments=record.raw.moments,
            unit_means=None,
            routes=tuple(route for route in self.routes if route != "first_difference"),
        )
        return unit_constant_table(record.augmented, record.raw, record.curve, raw.fits, self.fits)

    def instrumented(
        self, estimator: Literal["hausman_taylor", "amemiya_macurdy"], unrelated: Sequence[str]
    ) -> Instrumented:
        """Estimate with internal instruments, where the analyst names what is unrelated to the unit effect.

        Parameters
        ----------
        estimator : {"hausman_taylor", "amemiya_macurdy"}
            The second needs a balanced panel with periods.
        unrelated : sequence of str
            Columns or terms declared unrelated to the unit effect. That is an assumption, never a result.

        Returns
        -------
        Instrumented
            With the overidentification test and the strength of the first stage.
        """
        from mixbridge.correlated import amemiya_macurdy, hausman_taylor

        if estimator == "hausman_taylor":
            return hausman_taylor(self.moments, unrelated, terms=self.panel.terms)
        if estimator == "amemiya_macurdy":
            return amemiya_macurdy(self.panel, self.opened, self.moments, unrelated)
        raise OptionError.not_among("estimator", estimator, ("hausman_taylor", "amemiya_macurdy"))

    def _unit_means(self) -> Mundlak:
        if self.unit_means is None:
            raise OptionError(
                "this needs unit means: ask study.correlated('mundlak') for a study that has them."
            )
        return self.unit_means

    def _robust_or_none(self, fit: Fit, covariance: str) -> Robust | None:
        if covariance == "model":
            return None
        return self._given(self.robust(fit, covariance))
