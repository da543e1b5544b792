"""`adopt`: cross-check a fit that another program made."""

from __future__ import annotations

from typing import TYPE_CHECKING

from mixbridge.study.crosscheck import crosscheck

if TYPE_CHECKING:
    from mixbridge.reconcile.adopt import Adopted
    from mixbridge.study.record import Study

__all__ = ["adopt"]


def adopt(
    result: object, *, unit: str | None = None, period: str | None = None, worse: float = 1e-3
) -> Adopted[Study]:
    """Take a fitted statsmodels result, find its data, formula and unit, and cross-check that fit.

    Parameters
    ----------
    result : object
        A mixed model with one random intercept, or an OLS, GLS or exchangeable GEE result (with `unit`).
    unit : str, optional
        Column of the grouping factor, where the result does not know it.
    period : str, optional
        Column that orders the rows of a unit.
    worse : float
        Deviance above the bounded optimum from which the fit counts as stuck.

    Returns
    -------
    Adopted
        Whether it is the optimum, which convention its standard errors are, and the study of the same rows.
    """
    from mixbridge.reconcile.adopt import adopt_result

    return adopt_result(result, crosscheck, unit=unit, period=period, worse=worse)
