"""How large the reduced form and its restrictions would be, said before anything is estimated."""

from __future__ import annotations

from mixbridge.correlated.means import varying_columns
from mixbridge.correlated.period_table import period_table
from mixbridge.correlated.reduced_form import WHAT, require_balanced
from mixbridge.moments import Moments, OpenMoments
from mixbridge.panel import Panel

__all__ = ["reduced_form_size"]


def reduced_form_size(panel: Panel, opened: OpenMoments, moments: Moments) -> dict[str, int]:
    """Count units, coefficients and parameters.

    With K columns that vary both within units and between units in a period, K_c unit-constant columns besides the
    constant and T periods, the reduced form has ``T (1 + K_c + T K)`` coefficients, and the model one parameter for
    each column of the formula and ``T K`` for the projection. Columns that turn out to be combinations of others make
    both smaller.

    Parameters
    ----------
    panel, opened, moments
        Of one study.

    Returns
    -------
    dict
        ``units``, ``periods``, ``coefficients`` (moments) and ``parameters``, both at most. Optimal weights need more
        units than coefficients, and many more to be trusted.

    Raises
    ------
    IdentificationError, OptionError
        If the panel is not balanced or has no ordered periods.
    """
    require_balanced(panel, opened)
    varying = varying_columns(moments)
    table = period_table(panel, opened, varying, WHAT)
    free = int((~table.same_for_all).sum())
    constant = len(panel.names) - len(varying) - (panel.constant is not None)
    periods = int(table.periods.size)
    return {
        "units": len(opened.keys),
        "periods": periods,
        "coefficients": periods * (1 + constant + periods * free),
        "parameters": len(panel.names) + periods * free,
    }
