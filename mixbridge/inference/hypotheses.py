"""Tests of linear hypotheses under any covariance and reference."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.display import Printed
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.inference.hypothesis_text import read_hypothesis
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.references import RULES, Reference, Robust, default_rule, degrees_of_freedom
from mixbridge.inference.satterthwaite import Decomposition, joint_satterthwaite
from mixbridge.ratio import Curve
from mixbridge.routes.record import Fit

__all__ = ["HypothesisResult", "test_hypothesis"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class HypothesisResult(Printed):
    """Result of one test.

    Attributes
    ----------
    text : str
        The hypothesis as written.
    route, covariance, rule : str
        Route of the fit, name of the covariance, key of the reference rule.
    matrix, values : ndarray of shape (q, p), (q,)
        L and c of ``L beta = c``.
    estimate, standard_error : ndarray of shape (q,)
        ``L beta_hat - c`` and its standard errors, row by row.
    statistic : float
        F: the Wald statistic over q, times `scaling`. With one row, the square of estimate over standard
        error.
    df1, df2 : float
        Degrees of freedom; an infinite `df2` means that ``q * statistic`` is referred to chi-square with q.
    p_value : float
    scaling : float
        λ of Kenward & Roger, or of a robust covariance; else 1.
    notes : tuple of str
        What a reader should know.
    """

    text: str
    route: str
    covariance: str
    rule: str
    matrix: FloatArray
    values: FloatArray
    estimate: FloatArray
    standard_error: FloatArray
    statistic: float
    df1: int
    df2: float
    p_value: float
    scaling: float
    notes: tuple[str, ...]

    def __str__(self) -> str:
        """Return the test in words and numbers."""
        law = (
            f"F({self.df1}, {self.df2:.6g})"
            if np.isfinite(self.df2)
            else f"chi-square({self.df1}) / {self.df1}"
        )
        scaled = f", scaled by {self.scaling:.4g}" if self.scaling != 1.0 else ""
        lines = [
            f"{self.text}   [{self.route}, covariance {self.covariance}, reference {self.rule}]",
            f"  F = {self.statistic:.6g} against {law}{scaled}: p = {self.p_value:.4g}",
        ]
        for estimate, error in zip(self.estimate, self.standard_error, strict=True):
            lines.append(f"  left minus right: {estimate:.6g} (standard error {error:.4g})")
        return "\n".join([*lines, *(f"  note: {note}" for note in self.notes)])


def test_hypothesis(  # the name is the user's word; no test of this project is collected from here
    curve: Curve,
    fit: Fit,
    text: str,
    *,
    rule: str | None = None,  # noqa: PT028
    covariance: str = "model",  # noqa: PT028
    robust: Mapping[str, Robust] | None = None,  # noqa: PT028
    decomposition: Decomposition = "invariant",  # noqa: PT028
) -> HypothesisResult:
    """Test a linear hypothesis.

    Parameters
    ----------
    curve : Curve
        The panel the fit was made on.
    fit : Fit
        Any route.
    text : str
        See `mixbridge.inference.hypothesis_text`.
    rule : str, optional
        Key of `references.RULES`. Default: that of the ledger with the model-based covariance; with another
        covariance its own Satterthwaite rule where it has one, else ``t_units``. ``kenward_roger`` brings its
        own covariance.
    covariance : str
        ``model`` or a key of `robust`.
    robust : mapping of str to Robust, optional
        Covariances from elsewhere.
    decomposition : {"invariant", "as_written"}
        See `joint_satterthwaite`.

    Raises
    ------
    FormulaError
        If the text cannot be read: unknown name, not linear.
    IdentificationError
        If rows are redundant or contradict each other, a coefficient is not estimable, or the covariance of
        the combinations is singular.
    OptionError
        If the rule or the covariance is not known.
    """
    given = dict(robust or {})
    if covariance not in ("model", *given):
        raise OptionError.not_among("covariance", covariance, ("model", *given))
    hypothesis = read_hypothesis(text, fit.terms)
    rows, q = hypothesis.matrix, hypothesis.matrix.shape[0]
    used = (rows != 0.0).any(axis=0)
    _require_estimable(fit, used)
    name = _rule(fit, rule, given.get(covariance), q)
    estimate = rows[:, used] @ fit.beta[used] - hypothesis.values
    scaling = 1.0
    notes: tuple[str, ...] = ()
    if name == "kenward_roger":
        if covariance != "model":
            raise OptionError("Kenward-Roger brings its own adjusted covariance: leave covariance='model'.")
        adjusted = kenward_roger(curve, fit)
        upper, covariance = adjusted.wald_root(rows), "kenward_roger"
        reference = adjusted.scaled_f(rows)
        df2, scaling, notes = reference.df, reference.scaling, reference.notes
    elif covariance != "model":
        upper = _root_of(
            given[covariance].matrix[np.ix_(used, used)], rows[:, used], hypothesis.equations, covariance
        )
        df2, scaling, notes = _robust_law(
            curve, fit, rows, name=name, robust=given[covariance], covariance=covariance
        )
    else:
        upper = np.sqrt(fit.scale) * np.linalg.qr(fit.root.T @ rows.T, mode="r")
        if name == "satterthwaite":
            joint = joint_satterthwaite(curve, fit, rows, decomposition)
            df2, notes = joint.df, joint.notes
        else:
            df2 = float(degrees_of_freedom(curve, fit, rows, name).min())
    _require_regular(upper, hypothesis.equations, covariance)
    if not df2 > 0.0:
        why = "; ".join(notes) or f"no degrees of freedom are left by: {RULES[name]}"
        raise IdentificationError(
            f"the rule {name!r} is not available for {text!r} on route {fit.route!r}: {why}."
        )
    whitened = np.linalg.solve(upper.T, estimate)
    statistic = scaling * float(whitened @ whitened) / q
    return HypothesisResult(
        text=text,
        route=fit.route,
        covariance=covariance,
        rule=name,
        matrix=rows,
        values=hypothesis.values,
        estimate=estimate,
        standard_error=np.sqrt((upper**2).sum(axis=0)),
        statistic=statistic,
        df1=q,
        df2=df2,
        p_value=Reference(name, df2).joint_p_value(statistic, q),
        scaling=scaling,
        notes=notes,
    )


def _rule(fit: Fit, rule: str | None, robust: Robust | None, q: int) -> str:
    if rule is not None:
        if rule not in RULES:
            raise OptionError.not_among("reference", rule, RULES)
        return rule
    if robust is None:
        return default_rule(fit)
    own = robust.satterthwaite if q == 1 else robust.joint
    return "t_units" if own is None else "satterthwaite"


def _robust_law(
    curve: Curve, fit: Fit, rows: FloatArray, *, name: str, robust: Robust, covariance: str
) -> tuple[float, float, tuple[str, ...]]:
    if name != "satterthwaite":
        return float(degrees_of_freedom(curve, fit, rows, name).min()), 1.0, ()
    if rows.shape[0] == 1 and robust.satterthwaite is not None:
        return float(robust.satterthwaite(rows[0])), 1.0, ()
    if rows.shape[0] > 1 and robust.joint is not None:
        df, scaling = robust.joint(rows)
        return float(df), float(scaling), ()
    raise OptionError(
        f"the covariance {covariance!r} has no Satterthwaite rule for this hypothesis; "
        f"allowed: {', '.join(robust.rules)}."
    )


def _require_estimable(fit: Fit, used: NDArray[np.bool_]) -> None:
    lost = [
        name
        for name, is_used, value in zip(fit.terms, used, fit.beta, strict=True)
        if is_used and not np.isfinite(value)
    ]
    if lost:
        reasons = "; ".join(f"{name}: {fit.not_estimable.get(name, fit.status)}" for name in lost)
        raise IdentificationError(
            f"route {fit.route!r} does not estimate {', '.join(map(repr, lost))} ({reasons})."
        )
    if not np.isfinite(fit.scale):
        raise IdentificationError(f"route {fit.route!r} gives no standard errors: {fit.status}.")


def _root_of(matrix: FloatArray, rows: FloatArray, equations: tuple[str, ...], covariance: str) -> FloatArray:
    """Return U upper triangular with ``U'U = L C L'``; refuse a singular product, naming the row."""
    product = rows @ matrix @ rows.T
    length = np.sqrt(np.maximum(np.diag(product), 0.0))
    if not (length > 0.0).all():
        at = int(np.flatnonzero(~(length > 0.0))[0])
        raise IdentificationError(f"the covariance {covariance!r} gives {equations[at]!r} no variance.")
    relative = product / np.outer(length, length)
    for at in range(1, len(equations)):
        inside = relative[:at, :at]
        left = relative[at, at] - relative[at, :at] @ np.linalg.solve(inside, relative[:at, at])
        # 1e-10 is the square of 1e-5, the angle that products in double precision still tell from none
        if left <= 1e-10:
            raise _singular(at, equations, covariance)
    return np.asarray(np.linalg.cholesky(relative).T * length)


def _require_regular(upper: FloatArray, equations: tuple[str, ...], covariance: str) -> None:
    length = np.sqrt((upper**2).sum(axis=0))
    short = np.abs(np.diag(upper)) <= 1e-12 * length
    if short.any():
        raise _singular(int(np.flatnonzero(short)[0]), equations, covariance)


def _singular(at: int, equations: tuple[str, ...], covariance: str) -> IdentificationError:
    return IdentificationError(
        f"the covariance {covariance!r} of the joint hypothesis is singular: {equations[at]!r} has no "
        "variation of its own beside "
        f"{', '.join(map(repr, equations[:at]))}; too few units for so many equations. "
        "Test fewer at once, or use the model covariance."
    )
