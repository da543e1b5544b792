"""The `Study`: one panel, every route, and the questions a user asks of them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from types import MappingProxyType
from typing import Any, Literal

import numpy as np
import pandas as pd
from scipy.special import ndtri

from mixbridge.errors import IdentificationError, OptionError
from mixbridge.moments import Moments, OpenMoments, collect, column_table
from mixbridge.panel import Panel, build_panel
from mixbridge.ratio import Curve, curve_of
from mixbridge.reconcile.agreement import Interval, Thresholds, ledger
from mixbridge.reconcile.identities import Identity, check_identities, identity_table
from mixbridge.report.record import study_record
from mixbridge.report.screen import study_screen
from mixbridge.routes import LEDGER_ROUTES, Differences, Fit, differences_of, fit_route, iterate, named_route

__all__ = ["Study", "crosscheck"]

COMPONENT_COLUMNS = ["unit_variance", "idiosyncratic_variance", "ratio", "icc"]


@dataclass(frozen=True, eq=False)
class Study:
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
    """

    panel: Panel
    opened: OpenMoments = field(repr=False)
    moments: Moments = field(repr=False)
    primary: str = "reml"
    routes: tuple[str, ...] = LEDGER_ROUTES
    confidence: float = 0.95

    @cached_property
    def curve(self) -> Curve:
        """The panel reduced to what depends on the variance ratio."""
        return curve_of(self.moments)

    @cached_property
    def fits(self) -> MappingProxyType[str, Fit]:
        """Every route shown, with default conventions."""
        return MappingProxyType({key: self.fit(key) for key in self.routes})

    @property
    def reference(self) -> str:
        """Reference distribution of the intervals in the ledger."""
        return "normal"

    @property
    def accounting(self) -> pd.DataFrame:
        """Rows given, dropped by cause, and used: columns ``cause``, ``column``, ``rows``."""
        account = self.panel.accounting
        rows = [("rows given", "", account.rows_given)]
        rows += [(cause, column, -count) for cause, column, count in account.dropped]
        rows += [("rows used", "", account.rows_used), ("units", self.panel.unit_name, self.panel.N)]
        rows.append(("units with one row", self.panel.unit_name, self.singletons))
        return pd.DataFrame(rows, columns=["cause", "column", "rows"])

    @property
    def singletons(self) -> int:
        """Number of units with one row."""
        return int(self.moments.counts[self.moments.sizes == 1].sum())

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
        return check_identities(self.curve, self.fits, None)

    @property
    def identities(self) -> pd.DataFrame:
        """Identities as a table. These check the arithmetic, not the model."""
        return identity_table(self.identity_results)

    def fit(self, route: str, **conventions: object) -> Fit:
        """Fit one route.

        Parameters
        ----------
        route : str
            For example ``"reml"``, ``"swamy_arora"``, ``"minque_1"``.
        **conventions
            Conventions that differ from the defaults; the table `mixbridge.routes.AXES` lists them.

        Returns
        -------
        Fit
            With a status; a route that cannot be computed says why.
        """
        curve = self.curve
        if conventions.get("one_row_units") == "dropped" and self.singletons:
            curve = self._curve_without_singletons
        return fit_route(curve, route, conventions, self._differences())

    @cached_property
    def _curve_without_singletons(self) -> Curve:
        if not (self.moments.sizes > 1).any():
            raise IdentificationError(
                "every unit has one row: nothing is left when one-row units are dropped."
            )
        return curve_of(self.moments.without_sizes(1))

    def agreement(
        self, immaterial: float = 0.1, half_width: float = 0.1, routes: Sequence[str] | None = None
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

        Returns
        -------
        DataFrame
            ``term, route, estimate, standard_error, lower, upper, gap, gap_in_se, verdict, reason``.
        """
        chosen = {
            key: self.fits.get(key) or self.fit(key)
            for key in dict.fromkeys([*(routes or self.routes), self.primary])
        }
        intervals = {key: self._intervals(fit) for key, fit in chosen.items()}
        return ledger(self.curve, chosen, intervals, self.primary, Thresholds(immaterial, half_width))

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
        return study_record(self)

    def __str__(self) -> str:
        """Return the first screen: what was fitted, whether the routes agree, where not, components."""
        return study_screen(self)

    def __repr__(self) -> str:
        """Return a one-line form."""
        return (
            f"<Study {self.panel.formula!r}, unit {self.panel.unit_name!r}: {self.panel.n} rows, "
            f"{self.panel.N} units, primary {self.primary!r}; print it for the first screen>"
        )

    def _intervals(self, fit: Fit) -> dict[str, Interval]:
        """Return normal-reference intervals of every term."""
        factor = float(ndtri(0.5 + self.confidence / 2.0))
        errors = fit.standard_errors.to_numpy()
        low, high = fit.beta - factor * errors, fit.beta + factor * errors
        rows = zip(fit.terms, fit.beta.tolist(), errors.tolist(), low.tolist(), high.tolist(), strict=True)
        return {term: Interval(*values) for term, *values in rows}

    def _differences(self) -> Callable[[int | None], Differences] | str:
        if self.panel.period_name is None:
            return "no period given, so rows have no order to difference in; name the column with period="
        ordinals = self.panel.period_ordinals
        if ordinals is None:
            return self.panel.period_note or "periods have no order"

        def gather(step: int | None) -> Differences:
            x, y = self.panel.matrix()
            return differences_of(x, y, self.panel.codes, ordinals, step)

        return gather


def crosscheck(
    formula: str,
    data: object,
    *,
    unit: str,
    period: str | None = None,
    primary: str = "reml",
    routes: Sequence[str] | None = None,
    confidence: float = 0.95,
    incomplete_rows: Literal["drop", "refuse"] = "drop",
    trusted: bool = True,
) -> Study:
    """Fit one random-intercept model by every route and set the results side by side.

    Parameters
    ----------
    formula : str
        Fixed part in patsy's notation, ``"honey ~ forage + feeding"``; the grouping factor is `unit`, never
        part of it.
    data : DataFrame, object with an Arrow stream, or path
        One row per unit and period.
    unit : str
        Column of the grouping factor (apiary, firm, school, patient).
    period : str, optional
        Column that orders the rows of a unit; needed by ``first_difference``.
    primary : str
        The route that is reported.
    routes : sequence of str, optional
        Routes shown; all of `mixbridge.routes.LEDGER_ROUTES` unless given. The primary one is always among
        them.
    confidence : float
        Level of the intervals, between 0 and 1.
    incomplete_rows : {"drop", "refuse"}
        Whether rows with missing values are dropped and counted, or refused.
    trusted : bool
        False restricts the formula to column names and a fixed list of transforms.

    Returns
    -------
    Study

    Raises
    ------
    DataError, FormulaError, OptionError, IdentificationError
        Each says what is wrong, where, and what to do.

    Examples
    --------
    >>> import mixbridge
    >>> data = mixbridge.demo.apiaries()
    >>> study = mixbridge.crosscheck("honey ~ forage + feeding + altitude", data, unit="apiary")
    >>> study.fit("reml").status
    'fitted'
    """
    if not (isinstance(confidence, (int, float)) and 0.0 < confidence < 1.0):
        raise OptionError(
            f"confidence={confidence!r} is not allowed; allowed: a number between 0 and 1, such as 0.95."
        )
    chosen = tuple(dict.fromkeys(LEDGER_ROUTES if routes is None else routes))
    for key in (*chosen, primary):
        named_route(key)
    panel = build_panel(
        formula, data, unit=unit, period=period, incomplete_rows=incomplete_rows, trusted=trusted, env=1
    )
    columns = (*panel.names, panel.outcome)
    codes = panel.codes
    opened, moments = collect(
        lambda: ((codes[start : start + y.size], x, y) for start, x, y in panel.blocks()),
        columns,
        panel.unit_keys,
    )
    study = Study(
        panel, opened, moments, primary, chosen if primary in chosen else (*chosen, primary), confidence
    )
    _ = study.curve  # an unidentified design is refused here, not at the first question
    return study
