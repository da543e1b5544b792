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
    from mixbridge.correlated import (
        Coordinates,
        Instrumented,
        MinimumDistance,
        Mundlak,
        NoisyMeans,
        SlopeCertificate,
    )
    from mixbridge.inference.references import Robust

__all__ = ["StudyCorrelated"]


class StudyCorrelated(StudyQuestions):
    """The part of a study about correlated effects."""

    def correlated(
        self,
        form: Literal["mundlak", "chamberlain", "mundlak_sizes", "mundlak_size_linear"] = "mundlak",
        *,
        means_of: Sequence[str] | None = None,
    ) -> Self:
        """Return the study of the same rows with columns that the unit effect may be related to.

        Parameters
        ----------
        form : str
            Every route runs again on the columns. ``mundlak``: the unit mean, over the rows used, of every design
            column that varies within units (Mundlak 1978). ``chamberlain``: their values in all periods (Chamberlain
            1982), by pattern of periods seen where units differ in it (Abrevaya 2013). ``mundlak_sizes``: unit means
            with terms for each unit size (Wooldridge 2019); ``mundlak_size_linear``: with unit size itself and its
            products with the means.
        means_of : sequence of str, optional
            Terms or columns whose means are added, for ``mundlak``; all unless given. A partial form takes the unit
            effects as unrelated to the other covariates.

        Returns
        -------
        Study
            With `unit_means` and `coordinates`, `mean_tests`, `noisy_means` and `unit_constant` besides the rest; or
            with `projection` and `projection_tests`.
        """
        from mixbridge.correlated import mundlak, project
        from mixbridge.correlated.projection import FORMS

        if form not in ("mundlak", *FORMS):
            raise OptionError.not_among("form", form, ("mundlak", *FORMS))
        if self.unit_means is not None or self.projection is not None:
            raise OptionError("this study has added columns already; ask the study without them.")
        if form != "mundlak":
            if means_of is not None:
                raise OptionError(f"means_of goes with form 'mundlak' only, not with {form!r}.")
            found = project(self.panel, self.opened, self.moments, form, raw=self.curve)
            wide = found.augmented
            return replace(
                self, panel=wide.panel, unit_moments=wide.opened, moments=wide.moments, projection=found
            )
        record = mundlak(self.panel, self.unit_moments, self.moments, means_of=means_of, raw=self.curve)
        wide = record.augmented
        return replace(
            self, panel=wide.panel, unit_moments=wide.opened, moments=wide.moments, unit_means=record
        )

    def projection_size(self) -> dict[str, int]:
        """Say how large the projection on all periods would be, before it is made.

        Returns
        -------
        dict
            ``columns`` that vary within units, ``periods``, ``coefficients`` (at most) and ``units``.
        """
        from mixbridge.correlated import projection_size

        return projection_size(self.panel, self.opened, self.moments)

    def projection_tests(
        self, route: str | None = None, *, rule: str | None = None, covariance: str = "model"
    ) -> pd.DataFrame:
        """Test the restrictions inside the projection: no correlation, coefficients equal over periods or groups.

        Parameters
        ----------
        route, rule, covariance
            As for `coordinates`.

        Returns
        -------
        DataFrame
            F statistics. Coefficients equal over periods make the projection one on unit means. Not rejecting proves
            nothing.
        """
        if self.projection is None:
            raise OptionError(
                "this needs a projection: ask study.correlated('chamberlain') for a study that has one."
            )
        fit = self.fit(self.primary if route is None else route)
        return self.projection.tests(fit, rule, self._robust_or_none(fit, covariance), covariance)

    def minimum_distance(self, route: str | None = None) -> MinimumDistance:
        """Fit the model with a projected unit effect to the unrestricted reduced form (Chamberlain 1982).

        Parameters
        ----------
        route : str, optional
            The route whose ratio makes the simplest of three kinds of weights; the primary one unless given.

        Returns
        -------
        MinimumDistance
            Slopes, projection and tests with optimal, homoscedastic and random-effects weights, each with a status.
            `minimum_distance_size` says before how large the problem is.
        """
        from mixbridge.correlated.minimum_distance_record import minimum_distance
        from mixbridge.correlated.reduced_form import require_balanced

        if self.unit_means is not None or self.projection is not None:
            raise OptionError("this study has added columns already; ask the study without them.")
        require_balanced(self.panel, self.opened)
        wide = self.correlated("chamberlain")
        assert wide.projection is not None
        fit = wide.fit(self.primary if route is None else route)
        return minimum_distance(
            self.panel,
            self.opened,
            wide.projection,
            fit=fit,
            within=self.fit("within"),
            confidence=self.confidence,
        )

    def minimum_distance_size(self) -> dict[str, int]:
        """Say how large the reduced form is, before minimum distance is run on it.

        Returns
        -------
        dict
            ``units``, ``periods``, ``coefficients`` of the reduced form and ``parameters`` of the model, both at most.
            Optimal weights need more units than coefficients, and many more to be trusted.
        """
        from mixbridge.correlated.reduced_form_size import reduced_form_size

        return reduced_form_size(self.panel, self.opened, self.moments)

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
        """Check at several ratios that slopes beside the added columns are the within slopes.

        Returns
        -------
        SlopeCertificate
            With the cause where it breaks.
        """
        if self.projection is not None:
            return self.projection.certificate()
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
