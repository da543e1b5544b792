"""The `Study`: one panel, every route, and the questions a user asks of them."""

from __future__ import annotations

from copy import deepcopy
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import pandas as pd

from mixbridge.errors import OptionError
from mixbridge.moments import column_table
from mixbridge.routes import iterate
from mixbridge.study.reporting import StudyReport

if TYPE_CHECKING:
    from mixbridge.reconcile.identities import Identity

__all__ = ["Study"]

COMPONENT_COLUMNS = ["unit_variance", "idiosyncratic_variance", "ratio", "icc"]


@dataclass(frozen=True, eq=False, repr=False)
class Study(StudyReport):
    """A cross-check: what `crosscheck` returns.

    Attributes
    ----------
    panel : Panel
        Validated rows, with the account of every row.
    opened : OpenMoments
        Counts and means per unit; can be merged with those of other rows.
    moments : Moments
        Closed moments: all that the routes need.
    primary : str
        The route that the analyst reports.
    routes : tuple of str
        Routes shown side by side.
    confidence : float
        Level of every interval.
    unit_means : Mundlak or None
        Where unit means were added: what was added, and what follows.
    """

    @property
    def reference(self) -> str:
        """Reference distribution of the intervals in the ledger, in words."""
        return "t, Satterthwaite or classical"

    @property
    def accounting(self) -> pd.DataFrame:
        """Rows given, dropped by cause, and used: columns ``cause``, ``column``, ``rows``."""
        account = self.panel.accounting
        rows = [("rows given", "", account.rows_given)]
        rows += [(cause, column, -count) for cause, column, count in account.dropped]
        rows += [("rows used", "", account.rows_used), ("units", self.panel.unit_name, self.panel.N)]
        rows.append(("units with one row", self.panel.unit_name, self.singletons))
        return pd.DataFrame(rows, columns=["cause", "column", "rows"])

    @cached_property
    def columns_report(self) -> pd.DataFrame:
        """Level, share of within variation and spread of every design column and of the outcome."""
        return column_table(self.moments)

    @cached_property
    def ledger(self) -> pd.DataFrame:
        """Every route beside the primary one, term by term, with the class of each gap."""
        return self.agreement()

    @cached_property
    def components(self) -> pd.DataFrame:
        """Variance components of every route with sampling standard errors and status.

        ``unit_variance`` and ``idiosyncratic_variance`` are variances; a negative unit variance is shown as
        estimated.
        """
        rows = []
        for key, fit in self.fits.items():
            errors = fit.component_standard_errors
            values = [fit.unit_variance_raw, fit.idiosyncratic_variance, fit.ratio, fit.icc]
            rows.append([key, *values, *errors.to_numpy(), fit.status])
        columns = ["route", *COMPONENT_COLUMNS, *(f"{name}_se" for name in COMPONENT_COLUMNS), "status"]
        return pd.DataFrame(rows, columns=columns)

    @cached_property
    def identity_results(self) -> tuple[Identity, ...]:
        """What theory says must agree, checked on these data."""
        from mixbridge.reconcile.identities import check_identities

        return check_identities(self.curve, self.fits, None)

    @property
    def identities(self) -> pd.DataFrame:
        """Identities as a table. These check the arithmetic, not the model."""
        from mixbridge.reconcile.identities import identity_table

        return identity_table(self.identity_results)

    def iterate(self, kind: Literal["gls", "minque"], start: str | float = "within") -> pd.DataFrame:
        """Return the path of an iterated estimator: ``"gls"`` or ``"minque"``.

        Parameters
        ----------
        kind : {"gls", "minque"}
            What is iterated: generalised least squares, or minimum-norm estimation of the components.
        start : {"pooled", "within", "between"} or float
            Coefficients, or ratio, to start from; ``"minque"`` starts from a ratio (``"pooled"`` is ratio 0).

        Returns
        -------
        DataFrame
            One row per step.
        """
        return iterate(self.curve, kind, start)

    def quasi_demeaned(self, route: str, **conventions: object) -> pd.DataFrame:
        """Return the quasi-demeaned rows ``z_it - lambda_i zbar_i`` of a route.

        Ordinary least squares on them reproduces the coefficients of the route.

        Parameters
        ----------
        route : str
            A route with a variance ratio; ``"within"`` has an infinite one, which gives deviations from unit
            means.
        **conventions
            As in `fit`.

        Returns
        -------
        DataFrame
            Columns of the design, the outcome last; the index is that of the rows used.

        Raises
        ------
        OptionError
            If the route has no variance ratio.
        """
        fit = self.fit(route, **conventions)
        if not np.isfinite(fit.ratio) and not np.isposinf(fit.ratio):
            raise OptionError(
                f"route {route!r} has no variance ratio ({fit.status}), "
                "so no rows can be quasi-demeaned for it."
            )
        counts = np.asarray(self.opened.counts)
        weight = 1.0 - 1.0 / np.sqrt(1.0 + counts * fit.ratio)
        x, y = self.panel.matrix()
        z = np.column_stack([x, y])
        means = self.opened.means + self.opened.shift
        codes = self.panel.codes
        return pd.DataFrame(
            z - (weight[:, None] * means)[codes],
            columns=[*self.panel.names, self.panel.outcome],
            index=self.panel.row_labels,
        )

    def to_dict(self) -> dict[str, Any]:
        """Return the whole record, unrounded, with the closed moments.

        Everything in it can be recomputed from these moments. JSON-ready; what is not a finite number is a
        string or None.
        """
        return deepcopy(self._record)

    @cached_property
    def _record(self) -> dict[str, Any]:
        from mixbridge.report.record import study_record

        return study_record(self)

    def __str__(self) -> str:
        """Return the first screen: what was fitted, whether the routes agree, where not, components."""
        from mixbridge.report.screen import study_screen

        return study_screen(self)

    def __repr__(self) -> str:
        """Return a one-line form."""
        return (
            f"<Study {self.panel.formula!r}, unit {self.panel.unit_name!r}: {self.panel.n} rows, "
            f"{self.panel.N} units, primary {self.primary!r}; print it for the first screen>"
        )
