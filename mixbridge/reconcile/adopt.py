"""Take a fitted statsmodels result as the start of a cross-check, and check that fit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Generic, Protocol, TypeVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.display.text import wrapped
from mixbridge.errors import IdentificationError, MixbridgeError, OptionError
from mixbridge.reconcile.adopt_check import (
    DIFFERS,
    Check,
    Placed,
    check_curve,
    check_optimum,
    nearest_errors,
    placed_fit,
)
from mixbridge.reconcile.adopt_layout import Layout, key_of_rows, layouts, refuse_units, same_columns
from mixbridge.reconcile.adopt_read import Readout, read_result
from mixbridge.reconcile.match_errors import JOINT, errors_at
from mixbridge.reconcile.match_space import Searchable
from mixbridge.reconcile.match_values import Fitted, Side
from mixbridge.routes import Fit

__all__ = ["Adopted", "adopt_result"]

FloatArray = NDArray[np.float64]
WORSE = 1e-3
"""Deviance above the certified optimum from which a fit counts as stuck."""

SCALES = {
    "own": "model-based, times its own idiosyncratic variance",
    "gls_residuals": "model-based, times the residual sum of squares over n - K",
    "gls_residuals_n": "model-based, times the residual sum of squares over n",
}


class Adoptive(Searchable, Protocol):
    """What adoption needs of a study besides what the search needs."""

    @property
    def identities(self) -> pd.DataFrame:
        """Identities as a table."""


StudyT = TypeVar("StudyT", bound=Adoptive)
StudyOut_co = TypeVar("StudyOut_co", bound=Adoptive, covariant=True)


class MakeStudy(Protocol[StudyOut_co]):
    """The cross-check, handed in because it is made of later parts than this one."""

    def __call__(
        self, formula: str, data: object, *, unit: str, period: str | None = None, primary: str = "reml"
    ) -> StudyOut_co:
        """Cross-check one model."""


@dataclass(frozen=True, slots=True, eq=False)
class Adopted(Printed, Generic[StudyT]):
    """A fitted model of another program with a study of the same rows, and what was found about that fit.

    Attributes
    ----------
    study : Study
    kind : str
        The model in words.
    route : str
        Route of the study that it is, or ``gls`` or ``gee``: a point of the curve whose ratio came from elsewhere.
    note : str
        Where formula and data came from.
    coefficients, standard_errors : ndarray of shape (p,)
        Of the fit, in the order of the study's terms.
    terms : tuple of str
    ratio : float
        Its variance ratio.
    excess : float
        Its deviance above the certified optimum; NaN where it is not a likelihood fit.
    checks : tuple of Check
    conventions : tuple of str
        Conventions that give its standard errors in every coefficient.
    nearest, distance : str, float
        The nearest convention, and the largest relative difference from it.
    """

    study: StudyT
    kind: str
    route: str
    note: str
    coefficients: FloatArray
    standard_errors: FloatArray
    terms: tuple[str, ...]
    ratio: float
    excess: float
    checks: tuple[Check, ...]
    conventions: tuple[str, ...]
    nearest: str
    distance: float

    @property
    def sound(self) -> bool:
        """Whether no check differs."""
        return all(check.verdict != DIFFERS for check in self.checks)

    @property
    def stuck(self) -> bool:
        """Whether a likelihood fit is not at its optimum."""
        return any(check.name == "optimum" and check.verdict == DIFFERS for check in self.checks)

    def table(self) -> pd.DataFrame:
        """Return the checks."""
        names = ["name", "verdict", "theirs", "ours", "difference", "allowed", "statement", "note"]
        return pd.DataFrame(
            [[getattr(check, name) for name in names] for check in self.checks], columns=names
        )

    def coefficients_table(self) -> pd.DataFrame:
        """Return its coefficients and standard errors by term."""
        return pd.DataFrame(
            {"estimate": self.coefficients, "standard_error": self.standard_errors}, index=list(self.terms)
        )

    def __str__(self) -> str:
        """Return what was found, at most 100 columns wide."""
        lines = [f"Adopted: {self.kind}; {self.note}; variance ratio {self.ratio:.6g}"]
        for check in self.checks:
            numbers = (
                f" ({check.theirs:.8g}, here {check.ours:.8g}; {check.difference:.2g})" if check.note else ""
            )
            lines.append(f"{check.verdict}: {check.statement}{numbers}{'; ' * bool(check.note)}{check.note}.")
        if self.conventions:
            lines.append(f"Its standard errors are: {'; or '.join(self.conventions)}.")
        else:
            lines.append(
                f"Its standard errors are none of the conventions here; nearest: {self.nearest}, which differs by up "
                f"to {self.distance:.2g} of their size."
            )
        table = self.study.identities["verdict"].value_counts()
        lines.append(
            f"Identities on these rows: {int(table.get('holds', 0))} hold, {int(table.get('FAILS', 0))} fail. "
            "They check the arithmetic, not the model."
        )
        return "\n".join(wrapped(lines, rest="  "))

    def __repr__(self) -> str:
        """Return a one-line form."""
        found = "sound" if self.sound else "stuck" if self.stuck else "checks differ"
        return f"<Adopted {self.kind}: {found}; print it>"


def adopt_result(
    result: object,
    crosscheck: MakeStudy[StudyT],
    *,
    unit: object = None,
    period: object = None,
    worse: float = WORSE,
) -> Adopted[StudyT]:
    """Make a study from a fitted statsmodels result and check the fit.

    Parameters
    ----------
    result : object
        A mixed model with one random intercept, OLS, GLS with exchangeable errors within units, or GEE with an
        exchangeable or independent working correlation, fitted from a formula or from arrays.
    crosscheck : callable
        `mixbridge.crosscheck`.
    unit : str or array_like, optional
        Units: a column of the data, or a key for each row. Needed for OLS and GLS; the others hold it.
    period : str or array_like, optional
        Periods, likewise.
    worse : float
        Deviance above the certified optimum from which a fit counts as stuck.

    Returns
    -------
    Adopted

    Raises
    ------
    OptionError
        If the model is outside the scope, or units or periods are not there.
    """
    if not (isinstance(worse, (int, float)) and 0.0 < worse < np.inf):
        raise OptionError(f"worse={worse!r} is not allowed; allowed: a positive deviance, such as {WORSE:g}.")
    data = getattr(getattr(result, "model", None), "data", None)
    n = len(getattr(data, "endog", ()))
    frame, rows = getattr(data, "frame", None), getattr(data, "row_labels", None)
    index = None if rows is None else pd.Index(rows)
    given = key_of_rows("unit", unit, frame, index, n)
    readout = read_result(result, given)
    groups = refuse_units(given if given is not None else readout.groups, readout.kind)
    if given is not None and readout.groups is not None and not _same_units(given, readout.groups):
        raise OptionError("unit names other units than those the model was fitted with.")
    when = key_of_rows("period", period, frame, index, n)
    names = tuple(each if isinstance(each, str) else None for each in (unit, period))
    study, layout, places = _study(readout, layouts(readout, groups, when, names), crosscheck)
    order = list(places)
    ratio = readout.ratio
    placed = Placed(
        readout,
        readout.coefficients[order],
        readout.standard_errors[order],
        study.curve.at(ratio) if np.isfinite(ratio) and ratio >= 0.0 else None,
    )
    best = study.fit("reml" if readout.route == "reml" else "ml")
    checks = [
        *check_optimum(study.curve, placed, best, worse),
        *check_curve(study.curve, placed, _means(readout, groups)),
    ]
    equal, nearest, distance = nearest_errors(placed.errors, _offered(study, placed, best))
    excess = next((check.difference for check in checks if check.name == "optimum"), np.nan)
    return Adopted(
        study=study,
        kind=readout.kind,
        route=readout.route,
        note=layout.note,
        coefficients=placed.beta,
        standard_errors=placed.errors,
        terms=study.curve.names,
        ratio=ratio,
        excess=float(excess),
        checks=tuple(checks),
        conventions=tuple(equal),
        nearest=nearest,
        distance=distance,
    )


def _same_units(a: NDArray[Any], b: NDArray[Any]) -> bool:
    """Tell whether two keys group the rows alike."""
    left, right = pd.factorize(pd.Series(a))[0], pd.factorize(pd.Series(b))[0]
    return np.array_equal(left, right)


def _study(
    readout: Readout, offered: list[Layout], crosscheck: MakeStudy[StudyT]
) -> tuple[StudyT, Layout, tuple[int, ...]]:
    """Return the first study that holds the model's very rows and columns."""
    primary = readout.route if readout.route in ("ml", "pooled") else "reml"
    trouble: MixbridgeError | None = None
    for layout in offered:
        try:
            study = crosscheck(
                layout.formula, layout.frame, unit=layout.unit, period=layout.period, primary=primary
            )
        except IdentificationError:
            raise  # the design itself is at fault, whatever way it is handed on
        except MixbridgeError as error:
            trouble = error
            continue
        places = same_columns(readout, *study.panel.matrix(), study.curve.names)
        if places is not None:
            return study, layout, places
    if trouble is not None:
        raise trouble
    raise OptionError("the rows and columns of the model could not be laid out again.")


def _means(readout: Readout, groups: NDArray[Any]) -> Mapping[object, tuple[int, float]]:
    """Return the number of rows and the mean residual of every unit."""
    residual = readout.y - readout.x @ readout.coefficients
    keys, codes = np.unique(groups, return_inverse=True)
    counts = np.bincount(codes)
    means = np.bincount(codes, residual) / counts
    return {
        key: (int(count), float(mean)) for key, count, mean in zip(keys.tolist(), counts, means, strict=True)
    }


def _offered(study: Searchable, placed: Placed, best: Fit) -> list[tuple[str, FloatArray]]:
    """Return standard errors of the fit under each convention, in words."""
    if placed.point is None:
        return []
    route = placed.readout.route if placed.readout.route in ("reml", "pooled") else "ml"
    like = study.fit("pooled") if route == "pooled" else best
    fitted = Fitted(Side("kept", study.curve), route, {}, placed_fit(placed, like))
    stages = ("model", "unit sums", "adjusted", "two-way") if study.curve.units > 1 else ("model",)
    return [
        (_words(presentation), errors)
        for stage in stages
        for presentation, errors in errors_at(study, fitted, stage)
    ]


def _words(presentation: Mapping[str, str]) -> str:
    if presentation.get("reference") == "kenward_roger":
        return "Kenward-Roger"
    if "covariance" not in presentation:
        return SCALES[presentation.get("scale", "own")]
    kind = presentation["covariance"]
    if kind == JOINT:
        return "from the joint observed information of coefficients and variance ratio"
    multiplier = presentation.get("multiplier")
    return f"{kind}, robust to dependence within units" + (f", multiplier {multiplier}" if multiplier else "")
