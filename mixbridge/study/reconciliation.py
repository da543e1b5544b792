"""Where a gap comes from, whether it matters, and what a coefficient could be: questions of reconciliation."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Literal

import pandas as pd

from mixbridge.errors import DisagreementError, IdentificationError, OptionError
from mixbridge.routes import Fit
from mixbridge.study.correlated import StudyCorrelated

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from mixbridge.reconcile.attribution import Attribution
    from mixbridge.reconcile.path import Path
    from mixbridge.resample import Bootstrap

__all__ = ["StudyReconciliation"]


class StudyReconciliation(StudyCorrelated):
    """The part of a study that explains gaps."""

    def agreement(
        self,
        immaterial: float = 0.1,
        half_width: float = 0.1,
        *,
        routes: Sequence[str] | None = None,
        reference: str | None = None,
        margin: float | Mapping[str, float] | None = None,
        noise: Bootstrap | None = None,
    ) -> pd.DataFrame:
        """Set every route beside the primary one.

        Parameters
        ----------
        immaterial : float
            Largest immaterial gap, in standard errors of the primary route.
        half_width : float
            Largest immaterial relative difference of interval half-widths.
        routes : sequence of str, optional
            Routes to show; all of the study unless given.
        reference : str, optional
            One reference distribution for all intervals, a key of `mixbridge.inference.references.RULES`.

        margin : float or mapping of str to float, optional
            Largest gap that does not matter, in units of the coefficient: adds ``margin, gap_in_margin,
            within_margin``.
        noise : Bootstrap, optional
            From `bootstrap`: adds each gap over its own standard deviation under the fitted model. It assumes the
            model that an audit questions.

        Returns
        -------
        DataFrame
            ``term, route, estimate, standard_error, lower, upper, gap, gap_in_se, verdict, reason``.
        """
        from mixbridge.reconcile.agreement import Thresholds, ledger
        from mixbridge.reconcile.require_scales import gap_scales

        chosen = {
            key: self.fits.get(key) or self.fit(key)
            for key in dict.fromkeys([*(routes or self.routes), self.primary])
        }
        intervals = {key: self.intervals(fit, reference) for key, fit in chosen.items()}
        table = ledger(self.curve, chosen, intervals, self.primary, Thresholds(immaterial, half_width))
        if margin is None and noise is None:
            return table
        spread: dict[tuple[str, str], float] | None = None
        if noise is not None:
            gaps = noise.gaps(self.primary)
            keys = zip(gaps["term"], gaps["route"], strict=True)
            spread = {
                (str(term), str(route)): float(sd) for (term, route), sd in zip(keys, gaps["sd"], strict=True)
            }
        return gap_scales(table, noise=spread, margin=margin)

    def attribution(self, term: str, a: str | Fit, b: str | Fit | None = None) -> Attribution:
        """Split the gap between two routes in one coefficient into named changes that add up exactly.

        Parameters
        ----------
        term : str
        a : str or Fit
            A route, or a fit with conventions of its own.
        b : str or Fit, optional
            What it is compared with; the primary route unless given.

        Returns
        -------
        Attribution
            Of the coefficient, all through the ratio, and of the interval's half-width; for routes off the curve the
            contrast instead. Print it for sentences.
        """
        from mixbridge.reconcile.attribution import attribute

        left = self._named(a)
        right = self._named(self.primary if b is None else b)
        intervals = (self.intervals(left), self.intervals(right))
        return attribute(
            self.curve, self.fits, term, left, right, intervals=intervals, errors=self._errors_of_kind
        )

    def path(self, term: str, points: int = 101) -> Path:
        """Follow one coefficient from pooled to within, with every route's place and the exact set of ratios on it.

        Parameters
        ----------
        term : str
        points : int
            Ratios shown.

        Returns
        -------
        Path
        """
        from mixbridge.reconcile.path import coefficient_path

        return coefficient_path(self.curve, self.fits, term, points=points, confidence=self.confidence)

    def efficiency(self, route: str | None = None) -> pd.DataFrame:
        """Set the exact sampling variance of each quadratic route's components against the REML bound.

        Parameters
        ----------
        route : str, optional
            The fit at which variances are taken; the primary one unless given.

        Returns
        -------
        DataFrame
            By route.
        """
        from mixbridge.reconcile.efficiency import relative_efficiency

        return relative_efficiency(self.curve, self.fits, self._on_curve(route, {}))

    def require(
        self, term: str, agree: Literal["identical", "immaterial", "visible"] = "immaterial"
    ) -> pd.DataFrame:
        """Require that every random-effects route agrees with the primary one in a term.

        Parameters
        ----------
        term : str
        agree : {"identical", "immaterial", "visible"}
            Worst class allowed.

        Returns
        -------
        DataFrame
            The rows compared.

        Raises
        ------
        DisagreementError
            With the explanation, and all routes compared.
        """
        from mixbridge.reconcile.require import require

        table = self.agreement()
        return require(table, term, agree, explain=lambda route: self._explained(term, route))

    def crosswalk(self, route: str | None = None) -> pd.DataFrame:
        """Name every quantity of a fit as each field names it, with formula and value.

        Parameters
        ----------
        route : str, optional
            The primary route unless given.

        Returns
        -------
        DataFrame
        """
        from mixbridge.reconcile.crosswalk import crosswalk

        fit = self.fit(self.primary if route is None else route)
        return crosswalk(fit, self.moments.counts)

    def _errors_of_kind(self, fit: Fit, kind: str) -> NDArray[np.float64]:
        """Return the standard errors of a fit under another kind of covariance."""
        kept = ("between", "expectation", "divisor", "count", "prior", "scale", "one_row_units")
        conventions = {name: value for name, value in fit.conventions.items() if name in kept}
        return self.fit(fit.route, covariance=kind, **conventions).standard_errors.to_numpy(dtype=float)

    def _named(self, route: str | Fit) -> Fit:
        if isinstance(route, Fit):
            return route
        return self.fits.get(route) or self.fit(route)

    def _explained(self, term: str, route: str) -> str:
        try:
            return str(self.attribution(term, route))
        except (IdentificationError, OptionError, DisagreementError) as reason:
            return str(reason)
