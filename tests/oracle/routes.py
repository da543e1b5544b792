"""First stage of each route: the quadratic forms and the linear map from them to the variance components.

Every form is y'Ay with A = F'F and F written out; q is |Fy|^2. `used` are the expectations the route solves
with, rows by form, columns (idiosyncratic, unit); a route with other divisors states its map itself. Maps are
2 x 2 with rows (unit variance, idiosyncratic variance).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .dense import Dense
from .linear import solve_two


@dataclass(frozen=True)
class Degrees:
    """Numbers of coefficients that degrees of freedom subtract: ranks, or numbers of columns."""

    K: int
    K_w: int
    K_p: int

    @property
    def K_c(self) -> int:
        return self.K - self.K_w


@dataclass(frozen=True)
class FirstStage:
    """Forms, map and degrees of freedom of sigma_u^2 (nan where it is not one form over a number)."""

    factors: tuple[np.ndarray, ...]
    to_components: np.ndarray | None
    df: float
    reason: str = ""


def degrees(panel: Dense, count: str) -> Degrees:
    """Count ranks or columns."""
    if count == "rank":
        return Degrees(panel.K, panel.K_w, panel.K_p)
    if count == "columns":
        p = panel.X.shape[1]
        return Degrees(p, int(p - panel.constant_in_units.sum()), p)
    raise ValueError(count)


def literal_expectation(panel: Dense, factor: np.ndarray) -> tuple[np.floating, np.floating]:
    """Return (tr A, tr AZZ') for A = F'F, as the sums of squares of F and of FZ: nothing cancels."""
    return (factor**2).sum(), ((factor @ panel.Z) ** 2).sum()


def from_expectations(used: np.ndarray) -> np.ndarray | None:
    """Invert expectations (idiosyncratic, unit) into the map to (unit, idiosyncratic)."""
    inverse = solve_two(used)
    return None if inverse is None else inverse[::-1]


def row(panel: Dense, *values: object) -> np.ndarray:
    return np.array(values, dtype=panel.X.dtype)


def none(reason: str) -> FirstStage:
    return FirstStage((), None, float("nan"), reason)


def needs_within(panel: Dense, k: Degrees) -> str:
    left = min(panel.n - panel.N - k.K_w, panel.n - panel.N - panel.K_w)
    return "" if left >= 1 else f"n - N - K_w = {left}"


def swamy_arora(panel: Dense, k: Degrees, between: str) -> FirstStage:
    """Within RSS and a between RSS."""
    if reason := needs_within(panel, k):
        return none(reason)
    if panel.N - k.K_p < 1:
        return none(f"N - K_p = {panel.N - k.K_p}")
    df = panel.n - panel.N - k.K_w
    within = panel.within_residual
    if between == "size_weighted":
        factor = panel.P - panel.between.projector
        unit = literal_expectation(panel, factor)[1]
        used = np.array([row(panel, df, 0), row(panel, panel.N - k.K_p, unit)])
        return FirstStage((within, factor), from_expectations(used), df)
    small = np.eye(panel.N, dtype=panel.X.dtype) - panel.between_unweighted.projector
    factor = small @ panel.averaging
    if between == "unweighted":
        idiosyncratic = literal_expectation(panel, factor)[0]
        used = np.array([row(panel, df, 0), row(panel, idiosyncratic, panel.N - k.K_p)])
        return FirstStage((within, factor), from_expectations(used), df)
    if between == "harmonic":
        one = panel.X.dtype.type(1)
        T_h = panel.N / (1 / panel.sizes).sum()
        to_components = np.array(
            [row(panel, -1 / (T_h * df), one / (panel.N - k.K_p)), row(panel, one / df, 0)]
        )
        return FirstStage((within, factor), to_components, df)
    raise ValueError(between)


def remainder_form(panel: Dense) -> np.ndarray:
    """(P - P_S)(I - X (X'QX)^+ X'Q): unit remainders, unit-constant part of X regressed out by size."""
    return (panel.P - panel.unit_constant.projector) @ panel.remainder


def wansbeek_kapteyn(panel: Dense, k: Degrees) -> FirstStage:
    if reason := needs_within(panel, k):
        return none(reason)
    factor = remainder_form(panel)
    df = panel.n - panel.N - k.K_w
    used = np.array([row(panel, df, 0), row(panel, *literal_expectation(panel, factor))])
    return FirstStage((panel.within_residual, factor), from_expectations(used), df)


def amemiya(panel: Dense, k: Degrees) -> FirstStage:
    if reason := needs_within(panel, Degrees(panel.K, panel.K_w, panel.K_p)):
        return none(reason)
    one = panel.X.dtype.type(1)
    n, N = panel.n, panel.N
    to_components = np.array(
        [row(panel, -one * N / ((n - N) * one * n), one / n), row(panel, one / (n - N), 0)]
    )
    return FirstStage((panel.within_residual, remainder_form(panel)), to_components, n - N)


def wallace_hussain(panel: Dense, k: Degrees, expectation: str) -> FirstStage:
    """Within and between forms in pooled OLS residuals."""
    factors = (panel.Q @ panel.M, panel.P @ panel.M)
    one = panel.X.dtype.type(1)
    n, N = panel.n, panel.N
    if n == N:
        return none("n - N = 0")
    if expectation == "exact":
        used = np.array([row(panel, *literal_expectation(panel, F)) for F in factors])
        return FirstStage(factors, from_expectations(used), float("nan"))
    if expectation == "short":
        to_components = np.array(
            [row(panel, -one * N / ((n - N) * one * n), one / n), row(panel, one / (n - N), 0)]
        )
        return FirstStage(factors, to_components, n - N)
    raise ValueError(expectation)


def nerlove(panel: Dense, k: Degrees, divisor: str) -> FirstStage:
    """Within RSS over n; sample variance of unit intercepts, unit-constant part of X out, unweighted.

    With the constant in that part the residual intercepts have mean zero. Without a constant in the model its
    intercepts have mean zero by assumption, so their mean square is about zero too.
    """
    if reason := needs_within(panel, Degrees(panel.K, panel.K_w, panel.K_p)):
        return none(reason)
    one = panel.X.dtype.type(1)
    eye = np.eye(panel.N, dtype=panel.X.dtype)
    out = eye - panel.unit_constant_unweighted.projector
    factor = out @ panel.averaging @ panel.remainder
    over = {"units_minus_one": panel.N - 1, "units": panel.N}[divisor]
    if over == 0:
        return none("N - 1 = 0")
    to_components = np.array([row(panel, 0, one / over), row(panel, one / panel.n, 0)])
    return FirstStage((panel.within_residual, factor), to_components, panel.n)


def pooled_minus_within(panel: Dense, k: Degrees) -> FirstStage:
    if reason := needs_within(panel, k):
        return none(reason)
    if (
        panel.K - panel.K_w >= panel.N
    ):  # both residual forms are then one: no unit variance in their difference
        return none("N = K_c")
    if panel.n - k.K < 1:
        return none("n - K < 1")
    one = panel.X.dtype.type(1)
    df = panel.n - panel.N - k.K_w
    to_components = np.array([row(panel, -one / df, one / (panel.n - k.K)), row(panel, one / df, 0)])
    return FirstStage((panel.within_residual, panel.M), to_components, df)


def fitting_constants(panel: Dense, k: Degrees) -> FirstStage:
    if reason := needs_within(panel, k):
        return none(reason)
    if panel.N - k.K_c < 1:
        return none(f"N - K_c = {panel.N - k.K_c}")
    df = panel.n - panel.N - k.K_w
    factor = panel.M - panel.within_residual  # a projection: the unit space outside X
    used = np.array([row(panel, df, 0), row(panel, panel.N - k.K_c, literal_expectation(panel, factor)[1])])
    return FirstStage((panel.within_residual, factor), from_expectations(used), df)


def minque(panel: Dense, k: Degrees, prior: float) -> FirstStage:
    """Forms y'RRy and y'RZZ'Ry with R the GLS projection at V0 = I + prior ZZ'."""
    R = panel.gls_projection(panel.X.dtype.type(prior))
    factors = (R, panel.Z.T @ R)
    used = np.array([row(panel, *literal_expectation(panel, F)) for F in factors])
    return FirstStage(factors, from_expectations(used), float("nan"))
