"""The random-intercept model with the unit effect projected on covariates.

Sources: Chamberlain (1982; 1984) for balanced panels, Abrevaya (2013) for patterns of periods seen, Wooldridge (2019)
for terms by unit size.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from types import MappingProxyType
from typing import Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.correlated.augment import Augmented
from mixbridge.correlated.means import varying_columns
from mixbridge.correlated.period_table import period_table, periods_of_panel
from mixbridge.correlated.projection_columns import Columns, Origin, by_pattern, by_size
from mixbridge.correlated.slopes import RATIOS, SlopeCertificate, certify_slopes
from mixbridge.correlated.unit_columns import add_unit_columns
from mixbridge.errors import IdentificationError
from mixbridge.inference.hypotheses import HypothesisResult, test_hypothesis
from mixbridge.inference.references import Robust
from mixbridge.moments import Moments, OpenMoments
from mixbridge.panel import Panel
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import Fit

__all__ = ["FORMS", "Form", "Projection", "project", "projection_size"]

FloatArray = NDArray[np.float64]
Form = Literal["chamberlain", "mundlak_sizes", "mundlak_size_linear"]
FORMS: tuple[str, ...] = ("chamberlain", "mundlak_sizes", "mundlak_size_linear")


@dataclass(frozen=True, slots=True, eq=False)
class Projection:
    """A panel with the columns of a projection, and what follows from fits on it.

    Attributes
    ----------
    form : str
        ``chamberlain``, ``mundlak_sizes`` or ``mundlak_size_linear``.
    augmented : Augmented
        The panel with the added columns: rows, open and closed moments, what was added and what not.
    origins : mapping of str to Origin
        Added column -> design column, period and group.
    raw, curve : Curve
        Without and with the added columns.
    """

    form: str
    augmented: Augmented
    origins: MappingProxyType[str, Origin] = field(repr=False)
    raw: Curve = field(repr=False)
    curve: Curve = field(repr=False)

    @property
    def statement(self) -> str:
        """What was added, and what this form assumes."""
        return self.augmented.statement

    def certificate(self, ratios: tuple[float, ...] = RATIOS) -> SlopeCertificate:
        """Check at several ratios that slopes beside the added columns are the within slopes."""
        return certify_slopes(self.augmented, self.raw, self.curve, ratios)

    def coefficients(self, fit: Fit) -> pd.DataFrame:
        """Return the coefficients of the projection.

        Parameters
        ----------
        fit : Fit
            Any route on `curve`.

        Returns
        -------
        DataFrame
            ``column, period, group, estimate, standard_error``; the period is its ordinal, the column is empty for
            constants of groups.
        """
        errors = fit.standard_errors
        rows = [
            (origin.column, origin.period, origin.group, float(fit.coefficients[name]), float(errors[name]))
            for name, origin in self.origins.items()
        ]
        table = pd.DataFrame(rows, columns=["column", "period", "group", "estimate", "standard_error"])
        return table.astype({"period": "Int64"})

    def tests(
        self, fit: Fit, rule: str | None = None, robust: Robust | None = None, covariance: str = "model"
    ) -> pd.DataFrame:
        """Test the restrictions inside the projection.

        Parameters
        ----------
        fit : Fit
            Any route on `curve`.
        rule : str, optional
            Reference distribution, a key of `mixbridge.inference.RULES`.
        robust, covariance
            A robust covariance and its name; model-based unless given.

        Returns
        -------
        DataFrame
            ``tested, restrictions, statistic, df1, df2, p_value, note``: F statistics. ``no correlation`` sets all
            coefficients on covariates to zero; ``equal over periods`` is the restriction under which the projection is
            that on unit means (Mundlak 1978), in all and for each column; ``equal over groups`` that patterns or sizes
            share one projection on unit means. Not rejecting proves nothing.
        """
        rows = []
        for name, equations in self._restrictions().items():
            try:
                found = self._test(fit, equations, rule, robust, covariance)
            except IdentificationError as reason:
                rows.append([name, len(equations), *[np.nan] * 4, str(reason)])
                continue
            law = [found.statistic, found.df1, found.df2, found.p_value]
            rows.append([name, len(equations), *law, "; ".join(found.notes)])
        header = ["tested", "restrictions", "statistic", "df1", "df2", "p_value", "note"]
        return pd.DataFrame(rows, columns=header)

    def lines(self) -> list[str]:
        """Return in words what was added, what was not, and whether slopes are the within slopes."""
        return [self.statement, *self.certificate().lines()]

    def _test(
        self, fit: Fit, equations: Sequence[str], rule: str | None, robust: Robust | None, covariance: str
    ) -> HypothesisResult:
        text = ", ".join(equations)
        if robust is None:
            return test_hypothesis(self.curve, fit, text, rule=rule)
        return test_hypothesis(
            self.curve, fit, text, rule=rule, covariance=covariance, robust={covariance: robust}
        )

    def _restrictions(self) -> dict[str, list[str]]:
        """Return the equations of each test; a test without an equation is left out."""
        own = {name: origin for name, origin in self.origins.items() if origin.column}
        found = {"no correlation": [f"{name} = 0" for name in own]}
        series: dict[tuple[str, str], list[str]] = {}
        for name, origin in own.items():
            if origin.period is not None:
                series.setdefault((origin.column, origin.group), []).append(name)
        equal: dict[str, list[str]] = {}
        for (column, _), names in series.items():
            equal.setdefault(column, []).extend(f"{a} = {b}" for a, b in pairwise(names))
        found["equal over periods"] = [text for texts in equal.values() for text in texts]
        if len(equal) > 1:
            found |= {f"equal over periods: {column}": texts for column, texts in equal.items()}
        if self.form != "chamberlain":
            found["equal over groups"] = [
                f"{name} = 0" for name, origin in self.origins.items() if origin.group
            ]
        return {name: texts for name, texts in found.items() if texts}


def projection_size(panel: Panel, opened: OpenMoments, moments: Moments) -> dict[str, int]:
    """Say how large the projection on all periods would be, before it is made.

    Parameters
    ----------
    panel, opened, moments
        Of one study.

    Returns
    -------
    dict
        ``columns`` that vary within units, ``periods``, ``coefficients`` at most (their product; period indicators and
        trends stay out), ``units``.
    """
    periods = periods_of_panel(panel, "the projection on all periods")
    varying = len(varying_columns(moments))
    return {
        "columns": varying,
        "periods": int(periods.size),
        "coefficients": varying * int(periods.size),
        "units": len(opened.keys),
    }


def project(
    panel: Panel, opened: OpenMoments, moments: Moments, form: str, raw: Curve | None = None
) -> Projection:
    """Add the columns of a projection of the unit effect.

    Parameters
    ----------
    panel, opened, moments
        Of one study.
    form : {"chamberlain", "mundlak_sizes", "mundlak_size_linear"}
        Values of all periods; unit means with terms by size class; unit means with size itself.
    raw : Curve, optional
        Of `moments`; computed unless given.

    Returns
    -------
    Projection

    Raises
    ------
    IdentificationError
        If no column varies within units, or the columns are too many for the units, with both numbers.
    OptionError
        If periods are needed and there are none in order.
    """
    varying = varying_columns(moments)
    if not varying:
        raise IdentificationError("no column varies within units: there is nothing to project on.")
    at = [opened.columns.index(name) for name in varying]
    means = opened.means[:, at] + opened.shift[at]
    if form == "chamberlain":
        what = "the projection on all periods"
        columns = by_pattern(period_table(panel, opened, varying, what), means, panel.unit_name)
    else:
        columns = by_size(varying, means, np.asarray(opened.counts), linear=form == "mundlak_size_linear")
    names = _free_names(columns.names, opened.columns)
    wide = add_unit_columns(panel, opened, columns.values, names)
    origins = {names[j]: columns.origins[j] for j in wide.kept}
    augmented = Augmented(
        panel=wide.panel,
        opened=wide.opened,
        moments=wide.moments,
        names=wide.moments.design,
        varying=varying,
        source=MappingProxyType({name: origin.column or name for name, origin in origins.items()}),
        dropped=MappingProxyType(wide.dropped),
        left_out=(),
        statement=_statement(panel, columns, len(origins), wide.dropped, len(opened.keys)),
    )
    curve = curve_of(augmented.moments)
    if curve.rank_constant >= len(opened.keys):
        raise IdentificationError(
            f"with the projection {curve.rank_constant} columns are constant within units, for {len(opened.keys)} "
            "units: nothing is left between units. Use correlated('mundlak')."
        )
    first = curve_of(moments) if raw is None else raw
    return Projection(form, augmented, MappingProxyType(origins), first, curve)


def _free_names(names: Sequence[str], taken: Sequence[str]) -> tuple[str, ...]:
    used, found = set(taken), []
    for name in names:
        free = name
        while free in used:
            free = f"unit_{free}"
        used.add(free)
        found.append(free)
    return tuple(found)


def _statement(panel: Panel, columns: Columns, added: int, dropped: dict[str, str], units: int) -> str:
    parts = [
        f"Projection of the {panel.unit_name} effect on {columns.text}: {added} columns added for {units} units."
    ]
    if columns.left_out:
        parts.append(
            f"Out of the projection, having one value per period for all units: {', '.join(columns.left_out)}."
        )
    if dropped:
        shown = list(dropped.values())
        more = f"; and {len(shown) - 2} more, see augmented.dropped" if len(shown) > 2 else ""
        parts.append(f"Not added, being combinations of other columns: {'; '.join(shown[:2])}{more}.")
    parts.append(
        f"The {panel.unit_name} effect may be related to all columns in this form. Slopes of columns that vary within "
        "units then equal the within slopes at every variance ratio. Strict exogeneity given the unit effect is still "
        "assumed; time-varying confounding, reverse causality and measurement error are not cured, and the "
        "coefficients of the projection are not causal."
    )
    return " ".join(parts)
