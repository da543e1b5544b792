"""Expected information of the variance components by literal traces, and the REML equations."""

from __future__ import annotations

import numpy as np

from .dense import Dense
from .fit import dense_panel


def _sensitivities(panel: Dense, unit: float, idiosyncratic: float, kind: str) -> np.ndarray:
    psi = panel.X.dtype.type(unit) / panel.X.dtype.type(idiosyncratic)
    if kind == "reml":
        return panel.gls_projection(psi) / idiosyncratic
    if kind == "ml":
        root = panel.inverse_root(psi)
        return root @ root / idiosyncratic
    raise ValueError(kind)


def information_covariance(
    X: np.ndarray,
    y: np.ndarray,
    units: np.ndarray,
    unit_variance: float,
    idiosyncratic_variance: float,
    kind: str,
    *,
    exact: bool = False,
) -> np.ndarray:
    """Return the inverse expected information, order (unit, idiosyncratic).

    ML: I_ij = tr(V^-1 V_i V^-1 V_j) / 2; the block with beta is zero, so profiling beta out changes nothing.
    REML: the same with R = V^-1 - V^-1 X (X'V^-1 X)^+ X'V^-1 in place of V^-1.
    V_unit = ZZ', V_idiosyncratic = I.
    """
    panel, _ = dense_panel(X, y, units, exact=exact)
    R = _sensitivities(panel, unit_variance, idiosyncratic_variance, kind)
    parts = [R @ panel.ZZ, R]
    information = np.array([[(a * b.T).sum() / 2 for b in parts] for a in parts], dtype=panel.X.dtype)
    a, b, d = information[0, 0], information[0, 1], information[1, 1]
    return (np.array([[d, -b], [-b, a]]) / (a * d - b * b)).astype(np.float64)


def reml_first_order(
    X: np.ndarray,
    y: np.ndarray,
    units: np.ndarray,
    unit_variance: float,
    idiosyncratic_variance: float,
    *,
    exact: bool = False,
) -> tuple[float, float, float, float]:
    """Return y'RZZ'Ry, tr RZZ', y'RRy, tr R: equal in pairs at an interior REML optimum."""
    panel, _ = dense_panel(X, y, units, exact=exact)
    R = _sensitivities(panel, unit_variance, idiosyncratic_variance, "reml")
    r = R @ panel.y
    z = panel.Z.T @ r
    return float(z @ z), float(np.trace(R @ panel.ZZ)), float(r @ r), float(np.trace(R))
