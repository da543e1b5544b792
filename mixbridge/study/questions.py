"""Questions of inference that a study answers; the answers are computed where their mathematics lives."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Literal

import numpy as np
import pandas as pd

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.report.progress import progress_line
from mixbridge.routes import Fit
from mixbridge.study.base import StudyBase

if TYPE_CHECKING:
    from mixbridge.inference.hypotheses import HypothesisResult
    from mixbridge.inference.references import Robust
    from mixbridge.inference.robust import RobustCovariance

__all__ = ["StudyQuestions"]

ROBUST = ("CR0", "CR1", "CR2", "CR3")


class StudyQuestions(StudyBase):
    """The part of a study that answers questions of inference."""

    def inference(
        self,
        term: str,
        route: str | None = None,
        robust: tuple[str, ...] = ("CR1", "CR2"),
        **conventions: object,
    ) -> pd.DataFrame:
        """Put estimate, standard error, reference, interval and p value of one term under each rule.

        Parameters
        ----------
        term : str
            A coefficient.
        route : str, optional
            The primary route unless given.
        robust : tuple of str
            Robust covariances shown beside the model-based one: ``CR0``, ``CR1``, ``CR2``, ``CR3``, ``two_way``.
        **conventions
            As in `fit`.

        Returns
        -------
        DataFrame
            One row per rule and covariance; ``exact`` marks what holds exactly under the model in this design,
            ``why`` gives the reason. Robust covariances are left out where neither rows nor units are at hand.
        """
        from mixbridge.inference.references import inference_table

        fit = self.fit(self.primary if route is None else route, **conventions)
        found = (
            {}
            if fit.route == "first_difference" or not self.has_unit_records
            else {kind: self._given(self.robust(fit, kind)) for kind in robust}
        )
        return inference_table(
            self._curve_for(fit.conventions), self.fits, fit, term, self.confidence, robust=found
        )

    def hypothesis(
        self, text: str, route: str | None = None, *, rule: str | None = None, covariance: str = "model"
    ) -> HypothesisResult:
        """Test a linear hypothesis written with coefficient names.

        Parameters
        ----------
        text : str
            ``"forage = feeding"``, ``"forage = 0, feeding = 0"``, ``"2*forage - feeding = 1"``.
        route : str, optional
            The primary route unless given.
        rule : str, optional
            Reference distribution: a key of `mixbridge.inference.RULES`.
        covariance : str
            ``model``, ``CR0``, ``CR1``, ``CR2``, ``CR3`` or ``two_way``.

        Returns
        -------
        HypothesisResult
        """
        from mixbridge.inference.hypotheses import test_hypothesis

        fit = self.fit(self.primary if route is None else route)
        if covariance not in ("model", *ROBUST, "two_way"):
            raise OptionError.not_among("covariance", covariance, ("model", *ROBUST, "two_way"))
        found = {} if covariance == "model" else {covariance: self._given(self.robust(fit, covariance))}
        return test_hypothesis(self.curve, fit, text, rule=rule, covariance=covariance, robust=found)

    def unit_effects(self, route: str | None = None, **conventions: object) -> pd.DataFrame:
        """Predict every unit effect, with prediction standard errors, shrinkage and ranks.

        Parameters
        ----------
        route : str, optional
            A curve route; the primary one unless given.
        **conventions
            As in `fit`.

        Returns
        -------
        DataFrame
            By unit key.
        """
        from mixbridge.inference.effects import predicted_effects

        return predicted_effects(self.opened, self._on_curve(route, conventions))

    def effect_variances(self, route: str | None = None, **conventions: object) -> pd.DataFrame:
        """Set side by side the three quantities that are called variance of the unit effects.

        Parameters
        ----------
        route : str, optional
            A curve route; the primary one unless given.
        **conventions
            As in `fit`.

        Returns
        -------
        DataFrame
            ``quantity``, ``value`` (a variance), ``meaning``.
        """
        from mixbridge.inference.effects import effect_variances

        return effect_variances(self.curve, self.opened, self._on_curve(route, conventions))

    def contrasts(self, route: str | None = None, by: Literal["all", "term"] = "all") -> pd.DataFrame:
        """Contrast routes that agree only if unit effects are unrelated to the covariates.

        Parameters
        ----------
        route : str, optional
            The route whose ratio and variances are used; the primary one unless given.
        by : {"all", "term"}
            Joint contrasts under each convention, or both sides of within - GLS per covariate.

        Returns
        -------
        DataFrame
            Not rejecting proves nothing, and choosing an estimator by the result distorts size and coverage.
        """
        from mixbridge.inference.contrasts import contrast_table, contrast_terms, contrasts

        fit = self._on_curve(route, {})
        if by == "term":
            return contrast_terms(self.curve, fit, self.fit("within"))
        if by != "all":
            raise OptionError.not_among("by", by, ("all", "term"))
        products = self.products if self.panel.N > 1 and self.has_unit_records else None
        table = contrast_table(contrasts(self.curve, fit, products))
        if not self.has_unit_records:
            blank = {name: [np.nan] for name in table.columns if table[name].dtype.kind == "f"}
            row = {
                "contrast": ["unit means"],
                "variance": ["cluster-robust"],
                "between_weights": ["-"],
                "df": [0],
            }
            note = "needs rows or the means of units, which are not at hand"
            table = pd.concat([table, pd.DataFrame({**blank, **row, "note": [note]})], ignore_index=True)
        return table

    def variance_tests(
        self, seed: int = 20_040, draws: int = 100_000, progress: Callable[[int, int], None] | None = None
    ) -> pd.DataFrame:
        """Test ``sigma_a^2 = 0`` by every test in use, with finite-sample laws where they exist.

        Parameters
        ----------
        seed, draws : int
            Of the simulated laws of the likelihood ratios.
        progress : callable, optional
            Called with draws done and draws asked for.

        Returns
        -------
        DataFrame
            One row per test and reference.
        """
        from mixbridge.inference.variance_tests import variance_tests

        return variance_tests(self.curve, self.fits, seed, draws, progress=progress or progress_line("draws"))

    def component_intervals(self, confidence: float | None = None) -> pd.DataFrame:
        """Give intervals for both variances, ratio and ICC by every method, exact ones marked.

        Parameters
        ----------
        confidence : float, optional
            Level; that of the study unless given.

        Returns
        -------
        DataFrame
            ``quantity, route, method, estimate, lower, upper, exact, note``.
        """
        from mixbridge.inference.component_intervals import component_intervals

        return component_intervals(
            self.curve, self.fits, self.confidence if confidence is None else confidence
        )

    def zero_probabilities(self) -> pd.DataFrame:
        """Give the probability of a unit variance estimated as zero, under each fit and under zero.

        Returns
        -------
        DataFrame
            By route.
        """
        from mixbridge.inference.zero_estimate import zero_probabilities

        return zero_probabilities(self.curve, self.fits)

    def criteria(self) -> pd.DataFrame:
        """Give log-likelihoods with AIC and BIC (with n and with N), and say what each may be compared with.

        Returns
        -------
        DataFrame
            ML, and REML with and without ``½ log|X'X|``.
        """
        from mixbridge.inference.comparison import criteria

        return criteria(self.curve, {key: self.fits.get(key) or self.fit(key) for key in ("ml", "reml")})

    def compare(self, other: StudyBase, likelihood: Literal["ml", "reml"] = "ml") -> pd.DataFrame:
        """Compare with another study of the same rows by likelihood.

        Parameters
        ----------
        other : Study
            Same outcome, rows and units.
        likelihood : {"ml", "reml"}
            REML is refused across different fixed parts, with the ML figures in the message.

        Returns
        -------
        DataFrame
            Criteria of both, one below the other.
        """
        from mixbridge.inference.comparison import criteria, same_column_space

        if likelihood not in ("ml", "reml"):
            raise OptionError.not_among("likelihood", likelihood, ("ml", "reml"))
        same = (self.panel.outcome, self.panel.n) == (other.panel.outcome, other.panel.n)
        if not same or not self.panel.row_labels.equals(other.panel.row_labels):
            raise OptionError(
                "likelihoods of different rows or outcomes cannot be compared: fit both on the same rows."
            )
        tables = [
            criteria(study.curve, {key: study.fit(key) for key in ("ml", "reml")}).assign(
                formula=study.panel.formula
            )
            for study in (self, other)
        ]
        if likelihood == "reml" and not same_column_space(self.curve, other.curve):
            figures = [float(table["log_likelihood"].to_numpy()[0]) for table in tables]
            raise IdentificationError(
                "restricted likelihoods of different fixed parts are densities of different data and cannot be "
                "compared. "
                f"ML log-likelihoods instead: {figures[0]:.6g} for {self.panel.formula!r} and {figures[1]:.6g} for "
                f"{other.panel.formula!r}; ask with likelihood='ml'."
            )
        both = pd.concat(tables, ignore_index=True)
        return both[both["likelihood"].str.startswith(likelihood)].reset_index(drop=True)

    def variance_explained(self, route: str | None = None) -> pd.DataFrame:
        """Give squared correlations within, between and overall, and marginal and conditional shares of variance.

        Parameters
        ----------
        route : str, optional
            A curve route; the primary one unless given.

        Returns
        -------
        DataFrame
            ``measure``, ``value``, ``definition``.
        """
        from mixbridge.inference.comparison import variance_explained

        return variance_explained(self.curve, self._on_curve(route, {}))

    def _on_curve(self, route: str | None, conventions: Mapping[str, object]) -> Fit:
        fit = self.fit(self.primary if route is None else route, **conventions)
        if not (fit.estimated and np.isfinite(fit.ratio)):
            raise OptionError(
                f"route {fit.route!r} gives no finite variance ratio here ({fit.status}); name one that does."
            )
        return fit

    def _given(self, found: RobustCovariance) -> Robust:
        """Hand a robust covariance on in the form that tables and hypotheses take."""
        from mixbridge.inference.references import Robust

        if found.kind != "CR2":
            return Robust(found.covariance_array)
        return Robust(
            found.covariance_array,
            rules=("normal", "t_units"),
            satterthwaite=lambda row: float(np.ravel(found.satterthwaite_df(row))[0]),
        )
