"""Two-stage least squares on quasi-demeaned rows with instruments within and between units, and its tests.

In coordinates in which instruments are orthonormal, two-stage least squares is least squares of

    [Q_w'F_w ; Q_b'G] = projections of the within factor F_w on Qx, and of the weighted unit means G on the instruments

so that no cross-product is formed. Its residual sum of squares over ``sigma_u^2`` is the statistic of
overidentification (Sargan 1958; Hansen 1982); the within contrast ``(b_w - b)'[V_w - V]^- (b_w - b)``, with
one ``sigma_u^2`` for both, is the same number where the extra instruments are no more than the slopes
(Hausman & Taylor 1981).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
import scipy
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.display.text import frame_lines, sentence, wrapped
from mixbridge.errors import IdentificationError
from mixbridge.moments import Moments, span_of
from mixbridge.moments.coordinates import ModelCoordinates
from mixbridge.moments.factors import root_of
from mixbridge.routes import Fit
from mixbridge.routes.record import FITTED, TRUNCATED

__all__ = ["Instrumented", "Overidentification", "Roles", "estimate"]

FloatArray = NDArray[np.float64]

NORMAL_ONLY = "large-sample normal reference: the components count as known, the instruments as strong"
WEAK = 10.0
"""First-stage F below which the note on weak instruments is shown (rule of thumb of Staiger & Stock 1997)."""


@dataclass(frozen=True, slots=True)
class Roles:
    """What the analyst declares of each column; ``1``: unrelated to the unit effect.

    Attributes
    ----------
    x1, x2 : tuple of str
        Columns that vary within units.
    z1, z2 : tuple of str
        Columns that do not; the constant is in `z1`.
    """

    x1: tuple[str, ...]
    x2: tuple[str, ...]
    z1: tuple[str, ...]
    z2: tuple[str, ...]

    @property
    def text(self) -> str:
        """The declaration in words."""

        def listed(names: tuple[str, ...]) -> str:
            return ", ".join(names) or "none"

        return (
            f"Declared unrelated to the unit effect: {listed(self.x1)} (varying within units) and "
            f"{listed(self.z1)} (unit-constant). May be related: {listed(self.x2)} (varying) and "
            f"{listed(self.z2)} (unit-constant). This is the analyst's declaration; the overidentification "
            "test can contradict it and cannot confirm it."
        )


@dataclass(frozen=True, slots=True)
class Overidentification:
    """One form of the test.

    Attributes
    ----------
    form : str
    statistic : float
    df : int
        Instruments beyond the coefficients.
    p_value : float
        Upper tail of chi-square; NaN without degrees of freedom.
    note : str
    """

    form: str
    statistic: float
    df: int
    p_value: float
    note: str


@dataclass(frozen=True, slots=True, eq=False)
class Instrumented(Printed):
    """Estimates with internal instruments.

    Attributes
    ----------
    fit : Fit
        Coefficients, covariance, components, status; its route is the method.
    roles : Roles
    statement : str
        What was declared and how the instruments are built.
    tests : tuple of Overidentification
    strength : tuple of (str, float, int, int, float, float)
        First stage between units: column, F, its two degrees of freedom, p value, partial R squared.
    instruments : int
        Number of independent instruments, within and between.
    """

    fit: Fit
    roles: Roles
    statement: str
    tests: tuple[Overidentification, ...] = ()
    strength: tuple[tuple[str, float, int, int, float, float], ...] = ()
    instruments: int = 0

    @property
    def status(self) -> str:
        """``fitted``, ``unit variance truncated`` or ``not estimable: <reason>``."""
        return self.fit.status

    @property
    def table(self) -> pd.DataFrame:
        """Coefficients with declared role: ``term, role, estimate, standard_error, z, p_value``."""
        declared = {name: role for role in ("x1", "x2", "z1", "z2") for name in getattr(self.roles, role)}
        words = {
            "x1": "varying, unrelated",
            "x2": "varying, may be related",
            "z1": "unit-constant, unrelated",
            "z2": "unit-constant, may be related",
        }
        estimates, errors = self.fit.coefficients, self.fit.standard_errors
        z = estimates / errors
        return pd.DataFrame(
            {
                "term": list(self.fit.terms),
                "role": [words[declared[name]] for name in self.fit.terms],
                "estimate": estimates.to_numpy(),
                "standard_error": errors.to_numpy(),
                "z": z.to_numpy(),
                "p_value": scipy.stats.chi2.sf(z.to_numpy() ** 2, 1),
            }
        )

    @property
    def overidentification(self) -> pd.DataFrame:
        """The test in its forms: ``form, statistic, df, p_value, note``."""
        rows = [[t.form, t.statistic, t.df, t.p_value, t.note] for t in self.tests]
        return pd.DataFrame(rows, columns=["form", "statistic", "df", "p_value", "note"])

    @property
    def first_stage(self) -> pd.DataFrame:
        """Strength between units: ``column, statistic, df1, df2, p_value, partial_r_squared``.

        For each unit-constant column that may be related to the unit effect, the F statistic of the
        instruments beyond the unrelated unit-constant columns; in the row ``jointly`` the smallest
        eigenvalue of Cragg & Donald (1993) over the number of these instruments, which has no F law.
        """
        columns = ["column", "statistic", "df1", "df2", "p_value", "partial_r_squared"]
        return pd.DataFrame(list(self.strength), columns=columns)

    def __str__(self) -> str:
        """Return coefficients with their roles, the test, the strength of the instruments and what was declared."""
        lines = [f"{self.fit.route}: {self.status}; {self.instruments} instruments"]
        for table in (self.table, self.overidentification, self.first_stage):
            lines += [*frame_lines(table, widest=48), ""] if len(table) else []
        return "\n".join([*lines, *wrapped([self.statement, *map(sentence, self.fit.notes)])])


def estimate(
    *,
    moments: Moments,
    model: ModelCoordinates,
    roles: Roles,
    components: tuple[float, float],
    regressors: FloatArray,
    instruments: FloatArray,
    floor: FloatArray,
    excluded: FloatArray,
    excluded_floor: FloatArray,
    method: str,
    conventions: Mapping[str, object],
    statement: str,
) -> Instrumented:
    """Run the last step.

    Parameters
    ----------
    moments, model
        The panel.
    roles : Roles
    components : (float, float)
        Unit (before truncation) and idiosyncratic variance, over the squared scale of the outcome.
    regressors : ndarray of shape (m, p + 1)
        Unit means of model columns and outcome, times ``sqrt(T) (1 - theta)``; m rows may stand for all
        units.
    instruments : ndarray of shape (m, q)
        Instruments between units, on the same rows.
    floor : ndarray of shape (q,)
        Length of each that rounding of the data can produce.
    excluded : ndarray of shape (m, .)
        Quasi-demeaned, those that are not unit-constant columns of the model; for the first stage.
    excluded_floor : ndarray
        Likewise.
    method : str
        Name of the estimator.
    conventions : mapping
    statement : str

    Returns
    -------
    Instrumented
    """
    p, names = len(model.names), model.names
    unit, idiosyncratic = components
    x = [j for j, name in enumerate(names) if name in (*roles.x1, *roles.x2)]
    span = span_of(instruments, floor, 1e-10)
    between = _basis(instruments[:, span.kept])
    within = _basis(model.within[:, x])
    stacked = np.vstack([within.T @ model.within, between.T @ regressors])
    rank = span_of(stacked[:, :p], np.zeros(p), 1e-10)
    if rank.rank < p:
        lost = ", ".join(names[d.column] for d in rank.dependencies)
        raise IdentificationError(
            f"rank condition: the instruments do not determine the coefficients of {lost}."
        )
    root = root_of(stacked[:, :p])
    b = root @ (root.T @ (stacked[:, :p].T @ stacked[:, p]))
    b += root @ (root.T @ (stacked[:, :p].T @ (stacked[:, p] - stacked[:, :p] @ b)))
    left = np.append(-b, 1.0)
    residual = float(((model.within @ left) ** 2).sum() + ((regressors @ left) ** 2).sum())
    criterion = float(((stacked @ left) ** 2).sum()) / idiosyncratic
    square = float(moments.scale[-1] ** 2)
    own = conventions.get("scale", "own") == "own"
    count = len(x) + int(span.rank)
    strength = _strength(moments, model, roles, regressors, excluded=excluded, floor=excluded_floor)
    contrast = _within_contrast(model, x, b, root=root, variance=idiosyncratic, extra=count - p)
    notes = [NORMAL_ONLY]
    status = FITTED
    if unit < 0.0:
        status = TRUNCATED
        notes.append(f"unit variance {unit * square:.6g} is negative: ratio 0 used")
    weak = [f"{name} {value:.3g}" for name, value, *_ in strength if value < WEAK]
    if weak:
        notes.append(
            f"weak instruments between units, first-stage statistic below {WEAK:g}: {', '.join(weak)}; "
            "estimates of these coefficients are then biased towards those without instruments and intervals "
            "are too short"
        )
    fit = Fit(
        route=method,
        conventions=conventions,
        status=status,
        notes=tuple(notes),
        terms=names,
        beta=float(moments.scale[-1]) * (model.to_model @ b) + model.offset,
        root=model.to_model @ root,
        not_estimable={},
        sizes=moments.sizes,
        rows=moments.rows,
        units=moments.units,
        unit_variance_raw=unit * square,
        unit_variance=max(unit, 0.0) * square,
        idiosyncratic_variance=idiosyncratic * square,
        ratio=max(unit, 0.0) / idiosyncratic,
        scale=(idiosyncratic if own else residual / (moments.rows - p)) * square,
        residual_df=float(moments.rows - p),
        rank=p,
    )
    sargan = _sargan(criterion, count - p)
    return Instrumented(fit, roles, statement, (sargan, contrast), strength, count)


def _sargan(criterion: float, df: int) -> Overidentification:
    form = "residuals on instruments"
    if df == 0:
        return Overidentification(form, 0.0, 0, np.nan, "just identified: nothing is left to test")
    return Overidentification(form, criterion, df, float(scipy.stats.chi2.sf(criterion, df)), "")


def _within_contrast(
    model: ModelCoordinates, x: list[int], b: FloatArray, *, root: FloatArray, variance: float, extra: int
) -> Overidentification:
    """Compare the slopes with the within slopes, with one idiosyncratic variance for both."""
    form = "within contrast"
    inner = root_of(model.within[:, x])
    within = inner @ (inner.T @ (model.within[:, x].T @ model.within[:, -1]))
    mine = np.linalg.solve(inner, root[x])  # coordinates in which the within covariance is the identity
    values, vectors = np.linalg.eigh(np.eye(len(x)) - mine @ mine.T)
    df = min(extra, len(x))
    if df == 0:
        return Overidentification(form, 0.0, 0, np.nan, "just identified: the slopes are the within slopes")
    used = np.argsort(values)[len(x) - df :]
    if values[used].min() <= 1e-10:
        # rounding of the eigenvalues is of the order 1e-15 times the columns; below 1e-10 there is no direction
        used = used[values[used] > 1e-10]
    gap = vectors.T @ np.linalg.solve(inner, within - b[x])
    statistic = float((gap[used] ** 2 / values[used]).sum() / variance)
    df = int(used.size)
    note = (
        "" if df == extra else f"{extra} instruments beyond the coefficients, {df} directions in the slopes"
    )
    return Overidentification(form, statistic, df, float(scipy.stats.chi2.sf(statistic, df)), note)


def _strength(
    moments: Moments,
    model: ModelCoordinates,
    roles: Roles,
    regressors: FloatArray,
    *,
    excluded: FloatArray,
    floor: FloatArray,
) -> tuple[tuple[str, float, int, int, float, float], ...]:
    """Return the first stage between units, quasi-demeaned: F per column, smallest eigenvalue jointly."""
    if not roles.z2:
        return ()
    names = list(model.names)
    known = regressors[:, [names.index(name) for name in roles.z1]]
    target = regressors[:, [names.index(name) for name in roles.z2]]
    base = _basis(known) if known.size else np.zeros((known.shape[0], 0))
    alone = target - base @ (base.T @ target)
    rest = excluded - base @ (base.T @ excluded)
    length, before = (np.sqrt((part**2).sum(axis=0)) for part in (rest, excluded))
    nothing = np.maximum(1e-10 * before, floor)
    span = span_of(np.where(length > nothing, rest, 0.0), nothing, 1e-10)
    basis = _basis(rest[:, span.kept])
    q, df = span.rank, moments.units - base.shape[1] - span.rank
    if q == 0 or df < 1:
        return tuple((name, np.nan, q, df, np.nan, np.nan) for name in roles.z2)
    explained = basis.T @ alone
    unexplained = alone - basis @ explained
    found: list[tuple[str, float, int, int, float, float]] = []
    for j, name in enumerate(roles.z2):
        inside, outside = float((explained[:, j] ** 2).sum()), float((unexplained[:, j] ** 2).sum())
        value = inside / q / (outside / df)
        found.append((name, value, q, df, float(scipy.stats.f.sf(value, q, df)), inside / (inside + outside)))
    if len(roles.z2) > 1:
        turned = explained @ root_of(unexplained) * np.sqrt(df)
        smallest = float(np.linalg.svd(turned, compute_uv=False)[-1] ** 2) / q
        found.append(("jointly", smallest, q, df, np.nan, np.nan))
    return tuple(found)


def _basis(columns: FloatArray) -> FloatArray:
    length = np.sqrt((columns**2).sum(axis=0))
    return np.asarray(np.linalg.qr(columns / length)[0])
