"""How far figures would move: bootstrap under the fitted model."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import pandas as pd

from mixbridge.study.reconciliation import StudyReconciliation

if TYPE_CHECKING:
    from mixbridge.resample import Bootstrap

__all__ = ["StudyResampling"]


class StudyResampling(StudyReconciliation):
    """The part of a study that resamples."""

    def bootstrap(
        self,
        replicates: int = 9_999,
        seed: int = 20_050,
        *,
        under: str | None = None,
        workers: int | None = None,
        progress: Callable[[int, int], None] | None = None,
    ) -> Bootstrap:
        """Draw replicates under a fitted model with normal errors, given X, and refit every route to each.

        Parameters
        ----------
        replicates, seed : int
        under : str, optional
            The route whose fit is taken as the truth; the primary one unless given.
        workers : int, optional
            Threads; results do not depend on them.
        progress : callable, optional
            Called with replicates done and asked for.

        Returns
        -------
        Bootstrap
            Laws of components, coefficients and gaps between routes. It assumes the model that an audit questions.
            `first_difference` is not in the moments and is left out.
        """
        from mixbridge.resample import bootstrap

        return bootstrap(
            self.curve,
            self.fits,
            under=self.primary if under is None else under,
            replicates=replicates,
            seed=seed,
            confidence=self.confidence,
            workers=workers,
            progress=progress,
        )

    def zero_tests(self, replicates: int = 9_999, seed: int = 20_050) -> pd.DataFrame:
        """Test a zero unit variance by the estimate of each route, against its own law at zero in this design.

        Parameters
        ----------
        replicates, seed : int

        Returns
        -------
        DataFrame
            One row per route.
        """
        from mixbridge.resample import zero_tests

        return zero_tests(self.curve, self.fits, replicates, seed)
