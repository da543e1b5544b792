"""How far figures would move: bootstrap under the fitted model."""

from __future__ import annotations

from collections.abc import Callable, Hashable, Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np

from mixbridge.errors import OptionError
from mixbridge.report.progress import progress_line
from mixbridge.study.reconciliation import StudyReconciliation

if TYPE_CHECKING:
    import pandas as pd

    from mixbridge.resample import Bootstrap
    from mixbridge.resample.jackknife_record import LeaveOneOut
    from mixbridge.resample.jackknife_sets import LeftOut
    from mixbridge.resample.unit_bootstrap import UnitBootstrap
    from mixbridge.resample.wild_record import WildBootstrap

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
            Called with replicates done and asked for; a line on the terminal past two seconds unless given.

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
            progress=progress or progress_line("replicates"),
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

    def leave_one_out(
        self,
        routes: Sequence[str] | None = None,
        *,
        names: bool = True,
        progress: Callable[[int, int], None] | None = None,
    ) -> LeaveOneOut:
        """Refit every route without each unit in turn, exactly, from products of the units.

        Parameters
        ----------
        routes : sequence of str, optional
            Routes refitted; those of the study unless given, first differences left out.
        names : bool
            Whether units are named; who was influential may disclose a confidential unit.
        progress : callable, optional
            Called with units done and their number; a line on the terminal past two seconds unless given.

        Returns
        -------
        LeaveOneOut
            Influence, deciding units, jackknife standard errors. Formula transforms are not learned again.
        """
        from mixbridge.resample.jackknife import leave_one_out

        chosen = self._deletable(routes)
        multipliers = {}
        for key in dict.fromkeys([*chosen, self.primary]):
            fit = self.fits.get(key) or self.fit(key)
            if fit.estimated:
                rows = self.intervals(fit).values()
                multipliers[key] = [row.half_width / row.standard_error for row in rows]
        return leave_one_out(
            self.curve,
            self.products,
            chosen,
            self.primary,
            multipliers=multipliers,
            confidence=self.confidence,
            names=names,
            progress=progress or progress_line("units left out"),
        )

    def leave_two_out(self, units: Sequence[Hashable], routes: Sequence[str] | None = None) -> LeftOut:
        """Leave out every pair of some named units: what one hides when the other is there.

        Parameters
        ----------
        units : sequence
            Keys of two units or more.
        routes : sequence of str, optional
            As for `leave_one_out`.

        Returns
        -------
        LeftOut
        """
        from mixbridge.resample.jackknife_sets import leave_two_out

        return leave_two_out(self.curve, self.products, units, self._deletable(routes), self.primary)

    def leave_one_period_out(self, routes: Sequence[str] | None = None) -> LeftOut:
        """Leave out every period in turn, by one pass over the rows each.

        Parameters
        ----------
        routes : sequence of str, optional
            As for `leave_one_out`.

        Returns
        -------
        LeftOut
        """
        from mixbridge.resample.jackknife_sets import leave_one_period_out

        if self.panel.period_ordinals is None:
            raise OptionError(
                "no period to leave out: name the column with period=. " + (self.panel.period_note or "")
            )
        periods = np.unique(self.panel.period_ordinals).tolist()
        return leave_one_period_out(
            self.curve,
            self._period_blocks,
            self.panel.unit_keys,
            periods,
            routes=self._deletable(routes),
            primary=self.primary,
        )

    def unit_bootstrap(
        self, replicates: int = 999, seed: int = 20_050, routes: Sequence[str] | None = None
    ) -> UnitBootstrap:
        """Draw whole units with replacement and refit: no model for the errors within a unit.

        Parameters
        ----------
        replicates, seed : int
        routes : sequence of str, optional
            As for `leave_one_out`.

        Returns
        -------
        UnitBootstrap
        """
        from mixbridge.resample.unit_bootstrap import unit_bootstrap

        return unit_bootstrap(self.curve, self.products, self._deletable(routes), replicates, seed)

    def wild_bootstrap(
        self,
        hypothesis: str | Mapping[str, float],
        value: float = 0.0,
        *,
        route: str | None = None,
        replicates: int = 9_999,
        seed: int = 20_050,
    ) -> WildBootstrap:
        """Test one linear combination by the wild cluster bootstrap with restricted residuals.

        Parameters
        ----------
        hypothesis : str or mapping of str to float
            A coefficient, or weights of several.
        value : float
            What the combination is under the hypothesis.
        route : str, optional
            The primary route unless given; its ratio counts as known.
        replicates, seed : int

        Returns
        -------
        WildBootstrap
        """
        from mixbridge.resample.wild import wild_bootstrap

        fit = self.fit(self.primary if route is None else route)
        return wild_bootstrap(
            self.curve, self.products, fit, hypothesis, value, replicates=replicates, seed=seed
        )

    def _deletable(self, routes: Sequence[str] | None) -> tuple[str, ...]:
        given = self.routes if routes is None else routes
        return tuple(key for key in given if key != "first_difference" or routes is not None)
