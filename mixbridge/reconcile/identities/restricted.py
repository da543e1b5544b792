"""Identities 7, 8 and 9: minimum-norm steps, the estimating equations of REML, and its constant."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.reconcile.identities.plain import least_squares
from mixbridge.reconcile.identities.registry import Compared, Unmet, identity
from mixbridge.reconcile.identities.setting import Setting, components_ratio, multiple
from mixbridge.routes import Fit, Profile, log_likelihood
from mixbridge.routes.quadratic import NotEstimableError, minque_pair, solve

__all__: list[str] = []

FloatArray = NDArray[np.float64]


def _usable_reml(setting: Setting) -> str | None:
    """Say why there is no REML optimum to look at."""
    missing = setting.missing("reml")
    if missing is None and "reml" not in setting.solved:
        missing = "route reml: no finite ratio"
    return missing


@dataclass(frozen=True, slots=True)
class _Step:
    """One scoring step from a ratio: where it leads, standard errors there, and how rounding is amplified.

    All are NaN where the information is not positive.
    """

    components: FloatArray
    errors: FloatArray
    amplified: float


def scoring_step(setting: Setting, psi: float) -> _Step:
    """Take one expected-information step of REML in both variances, from the profile's derivatives.

    With ``D = m log sigma_u^2 + g(psi) + r(psi) / sigma_u^2`` and ``P_0 V_0 P_0 = P_0``: ``tr P_0ZZ' = g'``,
    ``tr P_0ZZ'P_0ZZ' = -g''``, ``tr P_0P_0ZZ' = g' + psi g''``, ``tr P_0P_0 = m - 2 psi g' - psi^2 g''``.
    The step is taken from
    ``sigma_u^2 = r / m``; the end does not depend on it.
    """
    v = Profile(setting.curve, "reml").values(np.array([psi]))
    m, r, r1, g1, g2 = float(v.m), float(v.r[0]), float(v.r1[0]), float(v.g1[0]), float(v.g2[0])
    start = r / m
    unit = g1 + r1 / start
    score = np.array([m - r / start - psi * unit, unit]) / start
    information = np.array([[m - psi * (2.0 * g1 + psi * g2), g1 + psi * g2], [g1 + psi * g2, -g2]])
    if not (np.diag(information) > 0.0).all():
        return _Step(np.full(2, np.nan), np.full(2, np.nan), np.nan)
    scale = np.sqrt(np.diag(information))
    scaled = information / np.outer(scale, scale)
    inverse = np.linalg.inv(scaled) / np.outer(scale, scale)
    end = start * np.array([1.0, psi]) - start**2 * inverse @ score
    errors = start * np.sqrt(2.0 * np.diag(inverse))
    # the traces are differences: of the larger terms above from what they leave
    lost = (m + 2.0 * psi * g1 + psi**2 * abs(g2)) / information[0, 0]
    weights = setting.curve.sizes / (1.0 + setting.curve.sizes * psi)
    removed = float(setting.curve.counts @ weights**2) / abs(g2) + float(setting.curve.counts @ weights) / g1
    condition = float(np.linalg.cond(scaled)) * max(lost, 1.0) * max(removed, 1.0)
    root = setting.curve.gls_root(psi)
    inner = float(np.linalg.cond(root / np.sqrt((root**2).sum(axis=1))[:, None])) ** 2
    # score over its standard error: sums of n terms, so rounding of a score is the square root of n larger
    # than of one term
    amplified = condition * inner * float(v.amplified[0]) * np.sqrt(m)
    return _Step(setting.curve.unit * end, setting.curve.unit * errors, amplified)


def _step_compared(
    setting: Setting,
    left: FloatArray,
    right: FloatArray,
    *,
    step: _Step,
    names: tuple[str, str],
    condition: str,
) -> Compared:
    """Compare two pairs ``(sigma_u^2, sigma_a^2)``."""
    size = np.maximum(np.abs(right), step.errors)
    difference = np.abs(left - right) / size
    at = int(np.argmax(np.where(np.isfinite(difference), difference, np.inf)))
    what = ("idiosyncratic variance", "unit variance")[at]
    return Compared(
        condition,
        left[at],
        right[at],
        f"{what}: {names[0]}",
        f"{what}: {names[1]}",
        difference[at],
        multiple(setting.curve.rank) * step.amplified,
        f"64 (columns + 1) x 2.2e-16 x {step.amplified:.3g}: conditions of the information and of the "
        "weighted covariates, what is lost in traces and residuals by subtraction, and the square root of "
        "n - K; relative to the component or its standard error, whichever is larger",
    )


@identity(
    number=7,
    name="fixed point",
    statement="a minimum-norm quadratic step with the interior REML ratio as prior gives back the REML "
    "components",
    source="Harville 1977",
)
def minque_fixed_point(setting: Setting) -> Compared | Unmet:
    """Compare the stated REML components with one MINQUE step from their ratio."""
    missing = _usable_reml(setting)
    if missing:
        return Unmet(missing)
    fit = setting.fits["reml"]
    psi = components_ratio(fit)
    if not psi > 0.0:
        return Unmet("interior optimum: the REML unit variance is zero")
    try:
        step = solve(setting.curve, minque_pair(setting.curve, psi))
    except NotEstimableError as reason:
        return Unmet(f"minimum-norm step from the REML ratio: {reason}")
    left, right = (
        np.array([step.idiosyncratic, step.unit]),
        np.array([fit.idiosyncratic_variance, fit.unit_variance]),
    )
    names = ("minimum-norm step from the REML ratio", "REML")
    return _step_compared(
        setting, left, right, step=scoring_step(setting, psi), names=names, condition="interior optimum"
    )


@identity(
    number=7,
    name="minimum norm as scoring",
    statement="one minimum-norm quadratic step = one expected-information scoring step of REML in both "
    "variances, from the same ratio",
    source="Harville 1977",
)
def minque_is_scoring(setting: Setting) -> Compared | Unmet:
    """Compare each minimum-norm route with a scoring step from derivatives of the profile likelihood."""
    found = []
    for key, fit in setting.fits.items():
        if "prior" in fit.conventions and np.isfinite(fit.idiosyncratic_variance):
            prior = float(str(fit.conventions["prior"]))
            step = scoring_step(setting, prior)
            if not np.isfinite(step.amplified):
                continue
            left = np.array([fit.idiosyncratic_variance, fit.unit_variance_raw])
            names = (f"{key}, prior {prior:g}", f"scoring step from ratio {prior:g}")
            found.append(
                _step_compared(setting, left, step.components, step=step, names=names, condition="any panel")
            )
    if not found:
        return Unmet(
            "positive information: no minimum-norm route has estimates on these rows, or both are confounded"
        )
    return max(
        found, key=lambda one: one.difference / one.tolerance if np.isfinite(one.difference) else np.inf
    )


def _equations(setting: Setting, fit: Fit) -> tuple[FloatArray, FloatArray, float]:
    """Return ``(y'PZZ'Py, y'PPy)``, ``(tr PZZ', tr P)``, and the amplification of rounding."""
    plain, psi = setting.plain, components_ratio(fit)
    solved, p = setting.solved["reml"], setting.plain.rank
    shrink = 1.0 / (1.0 + plain.sizes * psi)
    weights = plain.sizes * shrink
    c = np.append(-solved.slope, 1.0)
    means, inside = ((plain.between @ c) ** 2).sum(axis=1), float(((plain.within @ c) ** 2).sum())
    forms = np.array([weights**2 @ means, inside + (weights * shrink) @ means]) * plain.unit**2
    rows = plain.between[:, :, :p] @ solved.root
    spread = (rows**2).sum(axis=(1, 2))  # tr of JJ'B_T
    within = float(((plain.within[:, :p] @ solved.root) ** 2).sum())
    free = float(setting.curve.n - setting.curve.units)
    whole = np.array([plain.counts @ weights, free + plain.counts @ shrink])
    traces = whole - np.array([weights**2 @ spread, within + (weights * shrink) @ spread])
    sigma = fit.idiosyncratic_variance
    size = (np.abs(plain.between) @ np.abs(c)) ** 2
    rough = (
        np.array(
            [
                weights**2 @ size.sum(axis=1),
                ((np.abs(plain.within) @ np.abs(c)) ** 2).sum() + (weights * shrink) @ size.sum(axis=1),
            ]
        )
        * plain.unit**2
    )
    total = max(solved.total, setting.engine_total(psi)) / solved.residual
    amplified = float(
        solved.condition * (np.sqrt(rough / forms).max() + np.sqrt(total) + (whole / traces).max())
    )
    stored = setting.snapped * setting.stored_length(fit.beta) / plain.unit / np.sqrt(solved.residual)
    amplified += setting.engine_condition(psi) ** 2  # the optimum was found from products
    return forms / sigma**2, traces / sigma, amplified * np.sqrt(total) + 2.0 * stored / multiple(p)


@identity(
    number=8,
    name="unit equation of REML",
    statement="at an interior REML optimum y'PZZ'Py = tr PZZ'; at zero the first is not above the second",
    source="Patterson & Thompson 1971; Harville 1977",
)
def reml_unit_equation(setting: Setting) -> Compared | Unmet:
    """Compare the unit form with its expectation at the stated REML components."""
    return _equation(setting, 0, ("y'PZZ'Py", "tr PZZ'"))


@identity(
    number=8,
    name="idiosyncratic equation of REML",
    statement="at a REML optimum y'PPy = tr P",
    source="Patterson & Thompson 1971; Harville 1977",
)
def reml_idiosyncratic_equation(setting: Setting) -> Compared | Unmet:
    """Compare the identity form with its expectation at the stated REML components."""
    return _equation(setting, 1, ("y'PPy", "tr P"))


def _equation(setting: Setting, at: int, names: tuple[str, str]) -> Compared | Unmet:
    missing = _usable_reml(setting)
    if missing:
        return Unmet(missing)
    fit = setting.fits["reml"]
    forms, traces, amplified = _equations(setting, fit)
    boundary = components_ratio(fit) == 0.0
    gap = (forms[at] - traces[at]) / traces[at]
    return Compared(
        "optimum at zero" if boundary else "interior optimum",
        forms[at],
        traces[at],
        f"{names[0]} at the REML components",
        f"{names[1]} at the REML components",
        max(gap, 0.0) if boundary and at == 0 else abs(gap),
        multiple(setting.plain.rank) * amplified,
        f"64 (columns + 1) x 2.2e-16 x {amplified:.3g}: condition of the weighted covariates x what is lost "
        "in residuals and traces by subtraction; relative to the trace"
        + ("; only an excess counts" if boundary and at == 0 else ""),
    )


def _recombined(setting: Setting, fit: Fit) -> tuple[float, float, float, float]:
    """Return log-likelihoods of columns XR with and without the constant, ``log |det R|``, and rounding.

    R undoes the units and origins of the columns and then doubles every column.
    """
    plain, solved = setting.plain, setting.solved["reml"]
    p, m = plain.rank, setting.curve.n - plain.rank
    pooled = least_squares(plain.stacked(plain.sizes))
    doubled = 2.0 * p * np.log(2.0)
    variance = solved.residual * plain.unit**2 / m
    logs = float(plain.counts @ np.log1p(plain.sizes * components_ratio(fit)))
    without = -0.5 * (m * np.log(2.0 * np.pi * variance) + m + logs + solved.log_det + doubled)
    total = max(solved.total, setting.engine_total(components_ratio(fit))) / solved.residual
    rounding = m * solved.condition * np.sqrt(total) + p * max(solved.condition, pooled.condition)
    stored = setting.snapped * setting.stored_length(fit.beta) / plain.unit / np.sqrt(solved.residual)
    rounding += m * stored / multiple(p)
    return (
        without + 0.5 * (pooled.log_det + doubled),
        without,
        plain.log_det_back + p * np.log(2.0),
        float(rounding),
    )


@identity(
    number=9,
    name="constant of REML",
    statement="with half of log|X'X| the REML log-likelihood is the same for X and XR; without it, that "
    "of XR is lower by log|det R|",
    source="Harville 1974",
)
def reml_constant(setting: Setting) -> Compared | Unmet:
    """Compare the stated log-likelihood with one from recombined columns, brought back by its convention."""
    missing = _usable_reml(setting)
    if missing:
        return Unmet(missing)
    fit = setting.fits["reml"]
    included, without, determinant, rounding = _recombined(setting, fit)
    stated = str(fit.conventions.get("reml_constant", "included"))
    right = included if stated == "included" else without + determinant
    size = max(abs(right), 1.0)
    return Compared(
        f"any panel; the constant is {stated}",
        fit.log_likelihood,
        right,
        "REML log-likelihood as stated",
        "REML log-likelihood in recombined columns, brought back",
        abs(fit.log_likelihood - right) / size,
        multiple(setting.plain.rank) * max(rounding / size, 1.0),
        f"64 (columns + 1) x 2.2e-16 x {rounding:.3g}: n - K times the relative rounding of the residual "
        "sum of squares, and the condition of X for each column; relative to the log-likelihood, or to one",
    )


@identity(
    number=9,
    name="shift without the constant",
    statement="without half of log|X'X| the REML log-likelihood of XR less that of X is -log|det R|",
    source="Harville 1974",
)
def reml_shift(setting: Setting) -> Compared | Unmet:
    """Compare the shift between the columns given and recombined ones with the determinant."""
    missing = _usable_reml(setting)
    if missing:
        return Unmet(missing)
    fit = setting.fits["reml"]
    _, without, determinant, rounding = _recombined(setting, fit)
    own = log_likelihood(setting.curve, "reml", components_ratio(fit), constant=False)
    left, right = without - own, -determinant
    size = max(abs(own), abs(determinant), 1.0)
    return Compared(
        "any panel",
        left,
        right,
        "log-likelihood of recombined columns less that of the columns given, both without the constant",
        "-log|det R|",
        abs(left - right) / size,
        multiple(setting.plain.rank) * max(rounding / size, 1.0),
        f"as for the constant of REML ({rounding:.3g} x rounding); relative to the log-likelihood or the "
        "shift, or to one",
    )
