"""Read a fitted statsmodels result: which model it is, its rows, and what it found. Nothing is judged here."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.errors import OptionError

__all__ = ["Readout", "read_result"]

FloatArray = NDArray[np.float64]
SCOPE = "adopt takes mixed models with one random intercept, OLS, GLS with exchangeable errors within units, and GEE"


@dataclass(frozen=True, slots=True, eq=False)
class Readout:
    """A fitted model as its result describes it.

    Attributes
    ----------
    kind : str
        In words.
    route : {"ml", "reml", "pooled", "gls", "gee"}
    formula : str or None
    frame : DataFrame or None
        The data that the formula was given.
    rows : Index or None
        Labels of the rows used.
    x, y : ndarray
        Design and outcome of the rows used.
    names : tuple of str
        Columns of the design.
    outcome : str
    groups : ndarray or None
        Key of the unit of each row used.
    coefficients, standard_errors : ndarray of shape (p,)
    covariance : str
        What the result calls its covariance.
    unit_variance, idiosyncratic_variance, ratio : float
        NaN where the result has none.
    log_likelihood : float
        NaN where it is not one of the random-intercept model.
    converged : bool or None
        What the result says; None where it says nothing.
    effects : Mapping or None
        Predicted unit effects by key.
    """

    kind: str
    route: Literal["ml", "reml", "pooled", "gls", "gee"]
    formula: str | None
    frame: pd.DataFrame | None
    rows: pd.Index | None
    x: FloatArray
    y: FloatArray
    names: tuple[str, ...]
    outcome: str
    groups: NDArray[Any] | None
    coefficients: FloatArray
    standard_errors: FloatArray
    covariance: str
    unit_variance: float = np.nan
    idiosyncratic_variance: float = np.nan
    ratio: float = np.nan
    log_likelihood: float = np.nan
    converged: bool | None = None
    effects: Mapping[Any, float] | None = None


def read_result(result: object, groups: NDArray[Any] | None) -> Readout:
    """Read a result.

    Parameters
    ----------
    result : object
        A fitted statsmodels result.
    groups : ndarray or None
        Key of the unit of each row used; what the model itself holds unless given. GLS needs it to read its matrix.

    Returns
    -------
    Readout

    Raises
    ------
    OptionError
        If the model is outside the scope; the message says which part of it.
    """
    from statsmodels.genmod.generalized_estimating_equations import GEEResults  # noqa: PLC0415
    from statsmodels.regression.linear_model import RegressionResults  # noqa: PLC0415
    from statsmodels.regression.mixed_linear_model import MixedLMResults  # noqa: PLC0415

    inner = getattr(result, "_results", result)
    if isinstance(inner, MixedLMResults):
        return _mixed(inner)
    if isinstance(inner, GEEResults):
        return _gee(inner)
    if isinstance(inner, RegressionResults):
        return _regression(inner, groups)
    raise OptionError(f"a {type(result).__name__} cannot be adopted: {SCOPE}.")


def _common(result: Any) -> dict[str, Any]:
    model = result.model
    return {
        "formula": getattr(model, "formula", None),
        "frame": getattr(model.data, "frame", None),
        "rows": None if model.data.row_labels is None else pd.Index(model.data.row_labels),
        "x": np.asarray(model.exog, dtype=float),
        "y": np.asarray(model.endog, dtype=float).ravel(),
        "names": tuple(map(str, model.exog_names)),
        "outcome": str(model.endog_names),
    }


def _mixed(result: Any) -> Readout:
    model = result.model
    if model.exog_vc is not None and len(model.exog_vc.names):
        raise OptionError(
            f"the model has variance components ({', '.join(map(str, model.exog_vc.names))}) besides its groups; "
            f"{SCOPE}."
        )
    if model.k_re != 1:
        raise OptionError(
            f"the model has {model.k_re} random effects per group, random slopes among them; {SCOPE}."
        )
    if not (np.asarray(model.exog_re) == 1.0).all():
        raise OptionError(
            f"the one random effect multiplies a column that is not constant: a random slope; {SCOPE}."
        )
    if result.method not in ("ML", "REML"):
        raise OptionError(f"the model was fitted by {result.method!r}; needed is ML or REML.")
    fixed = model.k_fe
    unit, rest = float(np.asarray(result.cov_re)[0, 0]), float(result.scale)
    return Readout(
        kind=f"mixed model with one random intercept, {result.method}",
        route="reml" if result.method == "REML" else "ml",
        groups=np.asarray(model.groups),
        coefficients=np.asarray(result.fe_params, dtype=float),
        standard_errors=np.asarray(result.bse, dtype=float)[:fixed],
        covariance="from the Hessian of the likelihood",
        unit_variance=unit,
        idiosyncratic_variance=rest,
        ratio=unit / rest if rest > 0.0 else np.nan,
        log_likelihood=float(result.llf),
        converged=bool(result.converged),
        effects={key: float(np.asarray(value)[0]) for key, value in result.random_effects.items()}
        if unit > 0
        else None,
        **_common(result),
    )


def _gee(result: Any) -> Readout:
    from statsmodels.genmod import cov_struct, families  # noqa: PLC0415

    model = result.model
    if not isinstance(model.family, families.Gaussian) or not isinstance(
        model.family.link, families.links.Identity
    ):
        raise OptionError(
            "the estimating equations have another family than normal with identity link; out of scope."
        )
    if getattr(model, "weights", None) is not None or _nonzero(getattr(model, "offset", None)):
        raise OptionError("the estimating equations have weights or an offset; out of scope.")
    structure = model.cov_struct
    if isinstance(structure, cov_struct.Independence):
        rho = 0.0
    elif isinstance(structure, cov_struct.Exchangeable):
        rho = float(structure.dep_params)
    else:
        raise OptionError(
            f"the working correlation is {type(structure).__name__}; {SCOPE} with Exchangeable."
        )
    if rho < 0.0:
        raise OptionError(
            f"the working correlation is {rho:.4g}: a negative one lies outside the random-intercept model."
        )
    total = float(result.scale)
    return Readout(
        kind="estimating equations, "
        + ("independence" if rho == 0.0 else "exchangeable working correlation"),
        route="gee",
        groups=np.asarray(model.groups),
        coefficients=np.asarray(result.params, dtype=float),
        standard_errors=np.asarray(result.bse, dtype=float),
        covariance=str(result.cov_type),
        unit_variance=rho * total,
        idiosyncratic_variance=(1.0 - rho) * total,
        ratio=rho / (1.0 - rho),
        converged=bool(result.converged),
        **_common(result),
    )


def _nonzero(value: object) -> bool:
    return value is not None and bool(np.any(np.asarray(value, dtype=float) != 0.0))


def _regression(result: Any, groups: NDArray[Any] | None) -> Readout:
    from statsmodels.regression.linear_model import GLS, GLSAR, OLS  # noqa: PLC0415

    model = result.model
    if isinstance(model, GLSAR) or not isinstance(model, (OLS, GLS)):
        raise OptionError(f"a {type(model).__name__} model cannot be adopted: {SCOPE}.")
    read: dict[str, Any] = {
        "groups": groups,
        "coefficients": np.asarray(result.params, dtype=float),
        "standard_errors": np.asarray(result.bse, dtype=float),
        "covariance": str(result.cov_type),
        **_common(result),
    }
    if isinstance(model, OLS):
        return Readout(
            kind="ordinary least squares",
            route="pooled",
            unit_variance=0.0,
            idiosyncratic_variance=float(result.scale),
            ratio=0.0,
            log_likelihood=float(result.llf),
            **read,
        )
    ratio, size = _exchangeable(np.asarray(model.sigma, dtype=float), groups)
    rest = float(result.scale) * size
    return Readout(
        kind="generalised least squares",
        route="gls",
        unit_variance=rest * ratio,
        idiosyncratic_variance=rest,
        ratio=ratio,
        **read,
    )


def _exchangeable(sigma: FloatArray, groups: NDArray[Any] | None) -> tuple[float, float]:
    """Return ψ and the factor of a matrix ``factor (I + psi ZZ')``; refuses any other."""
    if groups is None:
        raise OptionError("generalised least squares needs unit=, to read its error matrix by units.")
    if sigma.ndim != 2:
        raise OptionError(
            "the error matrix is diagonal or a number: weights are outside the scope; pass an OLS result."
        )
    same = groups[:, None] == groups[None, :]
    off = same & ~np.eye(len(groups), dtype=bool)
    both = float(sigma[off].mean()) if off.any() else 0.0
    factor = float(np.diag(sigma).mean()) - both
    made = both * same + factor * np.eye(len(groups))
    # entries given as decimals carry a rounding each; anything else is another structure
    if factor <= 0.0 or both < 0.0 or np.abs(sigma - made).max() > 1e-10 * np.abs(sigma).max():
        raise OptionError(
            "the error matrix is not one variance with one non-negative covariance within units and none between them."
        )
    return both / factor, factor
