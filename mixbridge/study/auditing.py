"""The audit of what every route assumes."""

from __future__ import annotations

from typing import TYPE_CHECKING

from mixbridge.report.progress import progress_line
from mixbridge.study.resampling import StudyResampling

if TYPE_CHECKING:
    import pandas as pd

    from mixbridge.audit import Audit
    from mixbridge.rehearse import Rehearsal, Truth

__all__ = ["StudyAudit"]


class StudyAudit(StudyResampling):
    """The part of a study about the assumptions that all routes share."""

    def audit(self) -> Audit:
        """Say for every shared assumption what the data show, what it would do, and what may not be concluded.

        Returns
        -------
        Audit
            One row per check: statistic, reference, p value, size of the departure, consequence, conclusion with the
            departure detectable at power 0.8. Tests never choose the estimator. Print it for sentences.
        """
        from mixbridge.audit import audit

        return audit(self)

    def rehearse(self, truth: Truth | None = None, replicates: int = 2_000, seed: int = 20_061) -> Rehearsal:
        """Simulate this design under a stated truth and analyse every replicate by every route.

        Parameters
        ----------
        truth : Truth, optional
            What is taken as true (`mixbridge.rehearse.Truth`); the primary fit unless given.
        replicates, seed : int

        Returns
        -------
        Rehearsal
            Bias, root mean square error, coverage, size and power by route, with Monte Carlo errors.
        """
        from mixbridge.rehearse import rehearse

        return rehearse(
            self, truth, replicates, seed, confidence=self.confidence, progress=progress_line("replicates")
        )

    def minimum_detectable(
        self, route: str | None = None, power: float = 0.8, level: float = 0.05
    ) -> pd.DataFrame:
        """Return the smallest departures that the tests of this design detect with the power stated.

        Parameters
        ----------
        route : str, optional
            The primary route unless given; its variances are taken as known.
        power, level : float

        Returns
        -------
        DataFrame
            For each coefficient, and for the contrast tests along each covariate.
        """
        from mixbridge.rehearse import minimum_detectable

        return minimum_detectable(
            self.curve, self.fit(self.primary if route is None else route), power, level
        )
