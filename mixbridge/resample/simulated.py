"""Quantiles and tail shares of simulated values, with what simulation cannot tell said or refused."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.errors import IdentificationError, OptionError

__all__ = ["BEYOND", "Share", "check_confidence", "finite", "quantiles", "share_at_least"]

FloatArray = NDArray[np.float64]

BEYOND = 10
"""Fewest replicates beyond a quantile: the share beyond it is then known to about a third of itself, ``1/sqrt(10)``."""


@dataclass(frozen=True, slots=True)
class Share:
    """A share of replicates.

    Attributes
    ----------
    value : float
        ``(1 + count) / (1 + used)`` where it is a p-value, ``count / used`` else.
    error : float
        Monte Carlo standard error.
    used : int
        Replicates with a value.
    """

    value: float
    error: float
    used: int


def check_confidence(confidence: float) -> None:
    """Refuse a level that is not between 0 and 1."""
    if isinstance(confidence, bool) or not isinstance(confidence, (int, float)) or not 0.0 < confidence < 1.0:
        raise OptionError(f"confidence={confidence!r} is not allowed; allowed: a number between 0 and 1.")


def finite(values: FloatArray, what: str) -> FloatArray:
    """Return the finite values; refuses if there are none.

    Parameters
    ----------
    values : ndarray of shape (R,)
    what : str
        What they are, for the message.

    Returns
    -------
    ndarray
    """
    kept = values[np.isfinite(values)]
    if kept.size == 0:
        raise IdentificationError(f"no replicate gives {what}.")
    return kept


def quantiles(values: FloatArray, levels: Sequence[float], what: str) -> FloatArray:
    """Return quantiles, the k-th smallest of R values standing for the level ``k/(R + 1)``.

    Parameters
    ----------
    values : ndarray of shape (R,)
        Those that are not finite are left out.
    levels : sequence of float
        Between 0 and 1.
    what : str
        What the values are, for messages.

    Returns
    -------
    ndarray of shape (len(levels),)

    Raises
    ------
    OptionError
        If fewer than `BEYOND` replicates lie beyond one of the quantiles.
    """
    for level in levels:
        if isinstance(level, bool) or not isinstance(level, (int, float)) or not 0.0 < level < 1.0:
            raise OptionError(f"level={level!r} is not allowed; allowed: a number between 0 and 1.")
    kept = finite(values, what)
    tail = min(min(level, 1.0 - level) for level in levels)
    needed = int(np.ceil(BEYOND / tail - 1e-6))
    if kept.size < needed:
        raise OptionError(
            f"{kept.size} replicates with {what} are too few for a quantile at {tail:.4g} from the end: "
            f"{BEYOND} replicates beyond it need {needed} in all. Ask for more replicates or a lower level."
        )
    return np.asarray(np.quantile(kept, levels, method="weibull"))


def share_at_least(values: FloatArray, observed: float, what: str) -> Share:
    """Return the share of values at least as large as the observed one, the observed one counted with them.

    With one added to both counts, a test by this share has at most its level over repeated simulation too (Barnard
    1963).

    Parameters
    ----------
    values : ndarray of shape (R,)
        NaN is left out; infinite values count.
    observed : float
    what : str
        What the values are, for messages.

    Returns
    -------
    Share
    """
    kept = values[~np.isnan(values)]
    if kept.size == 0:
        raise IdentificationError(f"no replicate gives {what}.")
    value = (1.0 + float((kept >= observed).sum())) / (1.0 + kept.size)
    return Share(value, float(np.sqrt(value * (1.0 - value) / kept.size)), int(kept.size))
