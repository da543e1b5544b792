"""Routes whose variance components solve two quadratic forms: each a short function of the curve.

A route returns its forms and the matrix C of ``E q = C (sigma_u^2, sigma_a^2)'`` that it solves. C is exact
where the route is unbiased; where a published form uses simpler divisors, C holds those divisors and the
sampling covariance stays exact. `RSS_w` below is the within residual sum of squares, ``n - N - K_w`` its
degrees of freedom.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.ratio import Curve, root_of
from mixbridge.routes.forms import Form, covariance, expectations, value

__all__ = ["QUADRATIC", "Components", "NotEstimableError", "Pair", "minque_pair", "solve", "within_form"]

FloatArray = NDArray[np.float64]
Conventions = Mapping[str, object]


class NotEstimableError(Exception):
    """A route cannot be computed on these data; the message is the reason shown to the user."""


@dataclass(frozen=True, slots=True)
class Pair:
    """Two forms and the linear system solved for the components.

    Attributes
    ----------
    forms : tuple of Form
        Two quadratic forms.
    system : ndarray of shape (2, 2)
        C; rows are forms, columns ``sigma_u^2`` and ``sigma_a^2``.
    unbiased : bool
        Whether C is the exact expectation.
    """

    forms: tuple[Form, Form]
    system: FloatArray
    unbiased: bool


@dataclass(frozen=True, slots=True)
class Components:
    """Solved components before any truncation.

    Attributes
    ----------
    idiosyncratic, unit : float
        ``sigma_u^2`` and ``sigma_a^2``, variances.
    values : ndarray of shape (2,)
        The forms.
    pair : Pair
        Where they came from.
    """

    idiosyncratic: float
    unit: float
    values: FloatArray
    pair: Pair

    def sampling_covariance(self, curve: Curve) -> FloatArray:
        """Return the sampling covariance of ``(unit, idiosyncratic)``, the two variances, under normality.

        The formula is exact, the estimates are plugged in: a negative unit variance as zero; with a
        non-positive idiosyncratic variance the result is undefined.

        Parameters
        ----------
        curve : Curve
            The one that `pair` was made for.

        Returns
        -------
        ndarray of shape (2, 2)
        """
        if not self.idiosyncratic > 0.0:
            return np.full((2, 2), np.nan)
        spread = covariance(curve, self.pair.forms, self.idiosyncratic, max(self.unit, 0.0))
        inverse = np.linalg.inv(self.pair.system)
        both = inverse @ spread @ inverse.T
        return both[::-1, ::-1]


def solve(curve: Curve, pair: Pair) -> Components:
    """Solve the two equations ``q = C (sigma_u^2, sigma_a^2)'``.

    Parameters
    ----------
    curve : Curve
    pair : Pair

    Returns
    -------
    Components

    Raises
    ------
    NotEstimableError
        If C is singular.
    """
    q = np.array([value(curve, form) for form in pair.forms])
    scale = np.abs(pair.system).max(axis=1)
    if scale.min() <= 1e-12 * curve.n or np.linalg.cond(pair.system / scale[:, None]) > 1e12:
        raise NotEstimableError(
            "the two forms have proportional expectations, so the components cannot be separated"
        )
    components = np.linalg.solve(pair.system / scale[:, None], q / scale)
    return Components(float(components[0]), float(components[1]), q, pair)


def within_form(curve: Curve) -> Form:
    """Return ``RSS_w``, the residual sum of squares of the within regression."""
    nothing, root = np.zeros(len(curve.sizes)), curve.within_root
    return Form("within residual sum of squares", 1.0, nothing, root, root.T, np.zeros_like(root.T), nothing)


def within_df(curve: Curve, conventions: Conventions) -> int:
    """Return ``n - N - K_w``, with columns counted instead of ranks where the convention says so."""
    extra = 0
    if conventions.get("count") == "columns":
        extra = curve.columns_within - curve.rank_within
    df = curve.df_within - extra
    if df < 1:
        terms = f"{curve.n} - {curve.units} - {curve.rank_within + extra}"
        raise NotEstimableError(f"no degrees of freedom within units: n - N - K_w = {terms} = {df}")
    return df


def between_df(curve: Curve, conventions: Conventions) -> int:
    """Return ``N - K_p``, with columns counted instead of ranks where the convention says so."""
    columns = curve.rank if conventions.get("count") == "columns" else curve.rank_between
    df = curve.units - columns
    if df < 1:
        raise NotEstimableError(
            f"no degrees of freedom between units: N - K_p = {curve.units} - {columns} = {df}"
        )
    return df


def pooled_form(curve: Curve, name: str, on_within: float, on_means: FloatArray) -> Form:
    """Return a form in the residuals of pooled least squares (whitened: ``X'X = I``)."""
    one = np.eye(curve.rank)
    return Form(name, on_within, on_means, one, one, one, np.ones(len(curve.sizes)))


def unit_means_form(curve: Curve, weighted: bool) -> Form:
    """Return the residual sum of squares of the regression of unit means.

    Each mean is weighted by its number of rows, or counted once.
    """
    ones = np.ones(len(curve.sizes))
    if weighted:
        root, weights = curve.between_root, ones
        name = "between residual sum of squares, size-weighted"
    else:
        root, weights = curve.unweighted_root, 1.0 / curve.sizes
        name = "between residual sum of squares, unweighted"
    return Form(name, 0.0, weights, root, np.zeros_like(root.T), root.T, weights)


def remainder_form(curve: Curve, weighted: bool) -> Form:
    """Return the form in unit remainders ``ybar - xbar'b_w``, weighted by size or each counted once.

    The unit-constant directions of X are regressed out of the remainders: ``{Xv : QXv = 0}``, which is the
    constant, unit-constant columns, and combinations that cancel within units. Their number is ``K_c``, and
    the form does not depend on which of several equal within fits ``b_w`` is.
    """
    p, c = curve.rank, curve.rank_constant
    on_means = np.ones(len(curve.sizes)) if weighted else 1.0 / curve.sizes
    weights = np.sqrt(on_means * curve.sizes)
    stacked = (weights[:, None, None] * curve.between[:, :, :p]).reshape(-1, p)
    constant = np.zeros((p, c))
    constant[:c] = root_of(stacked[:, :c])
    root = curve.within_root
    carried = (stacked @ constant).T @ (stacked @ root) @ root.T
    return Form(
        "unit remainders, size-weighted" if weighted else "unit remainders, unweighted",
        0.0,
        on_means,
        np.hstack([root, constant]),
        np.vstack([root.T, -carried]),
        np.vstack([np.zeros_like(root.T), constant.T]),
        on_means,
    )


def exact(curve: Curve, *forms: Form) -> FloatArray:
    """Return the exact expectations of forms as rows."""
    return np.array([expectations(curve, form) for form in forms])


def swamy_arora(curve: Curve, conventions: Conventions) -> Pair:
    """Swamy & Arora 1972; size-weighted with unbalanced expectation: Baltagi & Chang 1994.

    ``E q_b = (N - K_p) sigma_u^2 + (n - tr[(X'PX)^+ X'ZZ'X]) sigma_a^2``; `unweighted` uses the unweighted
    residual sum of squares with its exact expectation; `harmonic` replaces that expectation by
    ``(N - K_p)(sigma_a^2 + sigma_u^2 / T_h)`` with the harmonic mean size T_h.
    """
    form = conventions["between"]
    df_w, df_b = within_df(curve, conventions), between_df(curve, conventions)
    first, second = within_form(curve), unit_means_form(curve, weighted=form == "size_weighted")
    if form == "harmonic":
        harmonic = curve.units / float(curve.counts @ (1.0 / curve.sizes))
        system = np.array([[df_w, 0.0], [df_b / harmonic, df_b]])
        return Pair((first, second), system, len(curve.sizes) == 1)
    system = np.array([[df_w, 0.0], expectations(curve, second)])
    system[1, 0 if form == "size_weighted" else 1] = df_b  # where the exact expectation is N - K_p
    return Pair((first, second), system, conventions["count"] == "rank")


def wansbeek_kapteyn(curve: Curve, conventions: Conventions) -> Pair:
    """Wansbeek & Kapteyn 1989: within residuals and size-weighted unit remainders, exact expectations."""
    df_w = within_df(curve, conventions)
    _require_remainders(curve)
    first, second = within_form(curve), remainder_form(curve, weighted=True)
    return Pair(
        (first, second), np.array([[df_w, 0.0], expectations(curve, second)]), conventions["count"] == "rank"
    )


def wallace_hussain(curve: Curve, conventions: Conventions) -> Pair:
    """Wallace & Hussain 1969: within and between sums of squares of pooled residuals.

    Unbalanced: Baltagi & Chang 1994. `short` takes ``E q = ((n - N) sigma_u^2, N sigma_u^2 + n sigma_a^2)``,
    without the correction for the estimated coefficients.
    """
    g = len(curve.sizes)
    if curve.n == curve.units:
        raise NotEstimableError("no unit has two rows, so nothing varies within units")
    first = pooled_form(curve, "within part of the pooled residuals", 1.0, np.zeros(g))
    second = pooled_form(curve, "between part of the pooled residuals", 0.0, np.ones(g))
    if conventions["expectation"] == "short":
        n, units = float(curve.n), float(curve.units)
        return Pair((first, second), np.array([[n - units, 0.0], [units, n]]), False)
    return Pair((first, second), exact(curve, first, second), True)


def amemiya(curve: Curve, conventions: Conventions) -> Pair:
    """Amemiya 1971 (balanced): ``sigma_u^2 = RSS_w/(n - N)``, ``sigma_a^2 = (q_b - N sigma_u^2)/n``.

    ``q_b`` is the size-weighted form in unit remainders, `remainder_form`. The use for unequal sizes is this
    project's. What is printed as Amemiya is often the unbiased form, `wansbeek_kapteyn`.
    """
    n, units = float(curve.n), float(curve.units)
    if n == units:
        raise NotEstimableError("no unit has two rows, so nothing varies within units")
    _require_remainders(curve)
    return Pair(
        (within_form(curve), remainder_form(curve, weighted=True)),
        np.array([[n - units, 0.0], [units, n]]),
        False,
    )


def nerlove(curve: Curve, conventions: Conventions) -> Pair:
    """Nerlove 1971: ``sigma_u^2 = RSS_w/n``; ``sigma_a^2`` the sample variance of estimated unit intercepts.

    Unit-constant covariates, the constant among them, are first regressed out of the intercepts, unweighted;
    that extension is this project's. Without a constant in the column space the model takes the intercepts to
    have mean zero, and so does the form.
    """
    divisor = curve.units - (1 if conventions["divisor"] == "units_minus_one" else 0)
    if curve.n == curve.units:
        raise NotEstimableError("no unit has two rows, so nothing varies within units")
    _require_remainders(curve)
    forms = (within_form(curve), remainder_form(curve, weighted=False))
    return Pair(forms, np.array([[float(curve.n), 0.0], [0.0, float(divisor)]]), False)


def pooled_minus_within(curve: Curve, conventions: Conventions) -> Pair:
    """Textbook difference: ``sigma_a^2 = RSS_pooled/(n - K) - RSS_w/(n - N - K_w)``.

    Greene, *Econometric Analysis*; from memory.
    """
    _require_remainders(curve)
    df_w, df = within_df(curve, conventions), curve.n - curve.rank
    total = pooled_form(curve, "pooled residual sum of squares", 1.0, np.ones(len(curve.sizes)))
    return Pair((within_form(curve), total), np.array([[float(df_w), 0.0], [float(df), float(df)]]), False)


def fitting_constants(curve: Curve, conventions: Conventions) -> Pair:
    """Henderson 1953, method III: the reduction due to unit intercepts after the covariates.

    Solved from ``RSS_w`` and ``RSS_pooled``, whose difference is q_b with
    ``E q_b = (N - K_c) sigma_u^2 + (n - tr[(X'X)^-1 X'ZZ'X]) sigma_a^2``.
    """
    df_w = within_df(curve, conventions)
    if curve.units <= curve.rank_constant:
        raise NotEstimableError(
            f"N = {curve.units} units for K_c = {curve.rank_constant} unit-constant directions"
        )
    total = pooled_form(curve, "pooled residual sum of squares", 1.0, np.ones(len(curve.sizes)))
    system = np.array([[df_w, 0.0], expectations(curve, total)])
    return Pair((within_form(curve), total), system, conventions["count"] == "rank")


def minque(curve: Curve, conventions: Conventions) -> Pair:
    """Rao 1971: minimum-norm quadratic unbiased estimation at a prior ratio."""
    return minque_pair(curve, float(str(conventions["prior"])))


def minque_pair(curve: Curve, prior: float) -> Pair:
    """Return the MINQUE forms ``y'P_0 P_0 y`` and ``y'P_0 ZZ'P_0 y`` at ``V_0 = I + prior ZZ'``.

    ``P_0 = V_0^-1 - V_0^-1 X (X'V_0^-1 X)^-1 X'V_0^-1``; in residuals of GLS at the prior, D is ``V_0^-2``
    and ``V_0^-1 ZZ'V_0^-1``.
    """
    if curve.units <= curve.rank_constant or curve.n == curve.units:
        raise NotEstimableError(
            "within or between variation is used up, so the two components cannot be separated"
        )
    shrink = 1.0 / (1.0 + curve.sizes * prior)
    root = curve.gls_root(prior)
    first = Form(f"identity form at prior {prior:g}", 1.0, shrink**2, root, root.T, root.T, shrink)
    second = Form(f"unit form at prior {prior:g}", 0.0, curve.sizes * shrink**2, root, root.T, root.T, shrink)
    return Pair((first, second), exact(curve, first, second), True)


def _require_remainders(curve: Curve) -> None:
    if curve.units <= curve.rank_constant:
        raise NotEstimableError(
            f"N = {curve.units} units for K_c = {curve.rank_constant} unit-constant directions"
        )


QUADRATIC: dict[str, Callable[[Curve, Conventions], Pair]] = {
    "swamy_arora": swamy_arora,
    "wansbeek_kapteyn": wansbeek_kapteyn,
    "wallace_hussain": wallace_hussain,
    "amemiya": amemiya,
    "nerlove": nerlove,
    "pooled_minus_within": pooled_minus_within,
    "fitting_constants": fitting_constants,
    "minque": minque,
}
"""Each quadratic route by key; a new one is a function here and a line in the conventions table."""
