"""The random-intercept model with unit means of its columns (Mundlak 1978; Wooldridge 2019)."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from mixbridge.correlated.augment import Augmented, augment
from mixbridge.correlated.coordinates import Coordinates, coordinates
from mixbridge.correlated.slopes import RATIOS, SlopeCertificate, certify_slopes
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.contrasts import contrasts
from mixbridge.inference.hypotheses import HypothesisResult, test_hypothesis
from mixbridge.inference.references import Robust
from mixbridge.moments import Moments, OpenMoments
from mixbridge.panel import Panel
from mixbridge.ratio import Curve, curve_of
from mixbridge.routes import Fit

__all__ = ["Mundlak", "mundlak"]


@dataclass(frozen=True, slots=True, eq=False)
class Mundlak:
    """A panel with unit means, and what follows from fits on it.

    Attributes
    ----------
    augmented : Augmented
        The panel with unit means: rows, open and closed moments, what was added and what not.
    raw, curve : Curve
        Without and with the unit means.
    """

    augmented: Augmented
    raw: Curve = field(repr=False)
    curve: Curve = field(repr=False)

    def coordinates(
        self, fit: Fit, rule: str | None = None, robust: Robust | None = None, covariance: str = "robust"
    ) -> Coordinates:
        """Return within, between and contextual coefficients with one joint covariance.

        Parameters
        ----------
        fit : Fit
            Any route on `curve`.
        rule, robust, covariance
            As for `mixbridge.correlated.coordinates.coordinates`.
        """
        return coordinates(
            self.augmented, self.raw, self.curve, fit, rule=rule, robust=robust, covariance=covariance
        )

    def certificate(self, ratios: tuple[float, ...] = RATIOS) -> SlopeCertificate:
        """Check at several ratios that slopes beside their means are the within slopes."""
        return certify_slopes(self.augmented, self.raw, self.curve, ratios)

    def test_means(
        self,
        fit: Fit,
        columns: Sequence[str] | None = None,
        rule: str | None = None,
        robust: Robust | None = None,
        covariance: str = "robust",
    ) -> HypothesisResult:
        """Test that the coefficients of some unit means are all zero.

        Parameters
        ----------
        fit : Fit
            Any route on `curve`.
        columns : sequence of str, optional
            Columns whose unit means are tested; all unless given.
        rule, robust, covariance
            As for `coordinates`.

        Returns
        -------
        HypothesisResult

        Raises
        ------
        IdentificationError
            If the route does not estimate them.
        OptionError
            If a column has no unit mean in the model.
        """
        wanted = self.augmented.source.values() if columns is None else columns
        names = []
        for column in wanted:
            name = self.augmented.mean_of(column)
            if name is None:
                raise OptionError.not_among("column", column, self.augmented.source.values())
            names.append(name)
        if not names:
            raise IdentificationError("no unit mean was added, so there is none to test.")
        if not np.isfinite(fit.beta[[fit.terms.index(name) for name in names]]).any():
            raise IdentificationError(f"route {fit.route!r} estimates no coefficient of these unit means.")
        text = ", ".join(f"{name} = 0" for name in names)
        if robust is None:
            return test_hypothesis(self.curve, fit, text, rule=rule)
        return test_hypothesis(
            self.curve, fit, text, rule=rule, covariance=covariance, robust={covariance: robust}
        )

    def mean_tests(
        self,
        fit: Fit,
        rule: str | None = None,
        robust: Robust | None = None,
        covariance: str = "robust",
    ) -> pd.DataFrame:
        """Test the unit means jointly and for each term of the formula.

        Parameters
        ----------
        fit : Fit
            A route on `curve` that estimates the means.
        rule, robust, covariance
            As for `coordinates`.

        Returns
        -------
        DataFrame
            ``tested, columns, statistic, df1, df2, p_value, wald, contrast, note``: an F statistic with its
            degrees of freedom; ``wald`` without scaling, to be set beside ``contrast``, the within - GLS
            contrast of the panel without means at the same ratio and idiosyncratic variance. With a
            model-based covariance and all means these two are one number (Hausman & Taylor 1981; Arellano
            1993).
        """
        source, terms = self.augmented.source, self.augmented.panel.terms
        design = self.augmented.panel.names
        groups = {"all unit means": list(source.values())}
        for term, at in terms.items():
            inside = [column for column in design[at] if column in source.values()]
            if inside:
                groups[term] = inside
        rows: list[list[object]] = []
        for name, columns in groups.items():
            joint = name == "all unit means"
            contrast = (
                self._contrast(fit) if joint and robust is None and not self.augmented.partial else np.nan
            )
            try:
                found = self.test_means(fit, columns, rule, robust, covariance)
            except IdentificationError as reason:
                rows.append([name, len(columns), *[np.nan] * 5, contrast, str(reason)])
                continue
            wald = found.df1 * found.statistic / found.scaling
            law = [found.statistic, found.df1, found.df2, found.p_value, wald]
            rows.append([name, len(columns), *law, contrast, "; ".join(found.notes)])
        header = ["tested", "columns", "statistic", "df1", "df2", "p_value", "wald", "contrast", "note"]
        return pd.DataFrame(rows, columns=header)

    def _contrast(self, fit: Fit) -> float:
        """Return the within - GLS contrast of the panel without means at the ratio and variance of a fit."""
        found = contrasts(self.raw, fit)
        return next(
            (
                item.statistic
                for item in found
                if item.name == "within - gls" and item.variance == "one idiosyncratic variance"
            ),
            np.nan,
        )

    def lines(self) -> list[str]:
        """Return in words what was added, what was not, and whether slopes are the within slopes."""
        return [self.augmented.statement, *self.certificate().lines()]


def mundlak(
    panel: Panel,
    opened: OpenMoments | None,
    moments: Moments,
    *,
    means_of: Sequence[str] | None = None,
    raw: Curve | None = None,
) -> Mundlak:
    """Add unit means to a panel and reduce it to a curve.

    Parameters
    ----------
    panel, opened, moments
        Of one study.
    means_of : sequence of str, optional
        Terms or columns whose means are added; every column that varies within units unless given.
    raw : Curve, optional
        Of `moments`; computed unless given.

    Returns
    -------
    Mundlak

    Raises
    ------
    IdentificationError
        If no column varies within units, or the columns with unit means are no fewer than the rows.
    """
    augmented = augment(panel, opened, moments, means_of=means_of)
    return Mundlak(augmented, curve_of(moments) if raw is None else raw, curve_of(augmented.moments))
