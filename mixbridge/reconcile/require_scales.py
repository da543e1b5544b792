"""Three scales of a gap: outcome units against a margin, standard errors, and its own sampling noise.

Two routes on the same rows differ even where both are right, because they weight the same rows differently. The
sampling noise of their *difference*, under the fitted model, says whether a gap is of the size that such weighting
gives. It assumes the model that an audit questions: a gap beyond its noise speaks against the shared model, a gap
within it does not speak for it.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from mixbridge.errors import OptionError

__all__ = ["NOISE_CAUTION", "gap_scales"]

NOISE_CAUTION = (
    "The sampling noise of a gap is taken under the fitted model, with unit effects unrelated to the covariates and "
    "one variance of errors: it assumes what the audit questions. A gap within its noise is no evidence for these "
    "assumptions."
)
"""Beside every figure that divides a gap by its sampling noise."""


def gap_scales(
    table: pd.DataFrame,
    *,
    noise: Mapping[tuple[str, str], float] | None = None,
    margin: float | Mapping[str, float] | None = None,
) -> pd.DataFrame:
    """Add the other two scales to a ledger.

    Parameters
    ----------
    table : DataFrame
        A ledger: ``gap`` is in units of the coefficient, ``gap_in_se`` in standard errors of the primary route.
    noise : mapping of (str, str) to float, optional
        (term, route) -> standard deviation of the gap to the primary route under the fitted model.
    margin : float or mapping of str to float, optional
        Largest gap that does not matter, in units of the coefficient; by term, or one for all.

    Returns
    -------
    DataFrame
        The ledger with ``noise_sd``, ``gap_in_noise``, ``margin``, ``gap_in_margin`` and ``within_margin`` (missing
        where no margin was given). A gap whose noise is zero to rounding, where an identity makes the two routes
        agree, has no ``gap_in_noise``.

    Raises
    ------
    OptionError
        If a margin is not a positive number, or names a term that the table does not have.
    """
    terms = dict.fromkeys(table["term"])
    margins = _margins(margin, list(terms))
    keys = list(zip(table["term"], table["route"], strict=True))
    spread = np.array([np.nan if noise is None else float(noise.get(key, np.nan)) for key in keys])
    limit = table["term"].map(margins).to_numpy(dtype=float)
    gap = table["gap"].to_numpy(dtype=float)
    none = ~(spread > 1e-9 * table["standard_error"].to_numpy(dtype=float))
    known = np.isfinite(limit) & np.isfinite(gap)
    return table.assign(
        noise_sd=spread,
        gap_in_noise=np.where(none, np.nan, gap / np.where(none, 1.0, spread)),
        margin=limit,
        gap_in_margin=gap / limit,
        within_margin=pd.Series(np.abs(gap) <= limit, index=table.index, dtype="boolean").where(known),
    )


def _margins(margin: float | Mapping[str, float] | None, terms: list[str]) -> dict[str, float]:
    if margin is None:
        return dict.fromkeys(terms, np.nan)
    given = dict(margin) if isinstance(margin, Mapping) else dict.fromkeys(terms, margin)
    for term, value in given.items():
        if term not in terms:
            raise OptionError.not_among("margin: term", term, terms)
        number = isinstance(value, (int, float)) and not isinstance(value, bool)
        if not (number and 0.0 < value < np.inf):
            raise OptionError(
                f"margin={value!r} for {term!r} is not allowed; allowed: a positive number in units of the coefficient."
            )
    return {term: float(given.get(term, np.nan)) for term in terms}
