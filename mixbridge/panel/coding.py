"""A digest of what columns mean beyond their names: levels of categories, and what transforms learned."""

from __future__ import annotations

import hashlib
import json
from typing import Any

import numpy as np

from mixbridge.panel.categories import Coded
from mixbridge.panel.factors import Evaluated, Stored
from mixbridge.panel.record import HeldPanel, Panel

__all__ = ["coding_of"]


def coding_of(panel: Panel) -> str | None:
    """Return the coding of a panel whose rows are held; None for others.

    Columns of two panels with the same names and the same coding may be pooled. The digest holds the levels of each
    category in order with its contrast, what each stateful transform learned, and, for terms that look at all rows at
    once (splines), their values: such terms are never the same on other rows.

    Parameters
    ----------
    panel : Panel

    Returns
    -------
    str or None
        16 hexadecimal digits.
    """
    if not isinstance(panel, HeldPanel):
        return None
    parts: list[Any] = [list(panel.names)]
    for factor in panel.design.factors:
        if isinstance(factor, Coded):
            parts.append(["levels", [repr(level) for level in factor.levels], repr(factor.contrast)])
        elif isinstance(factor, Stored):
            parts.append(["rows", hashlib.sha256(np.ascontiguousarray(factor.values).tobytes()).hexdigest()])
        elif isinstance(factor, Evaluated):
            parts.append(["state", _plain(factor.state)])
        else:
            parts.append(["column"])
    return hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()[:16]


def _plain(value: Any) -> Any:
    """Return a state as JSON values: numbers in exact form, objects by what they hold."""
    if isinstance(value, dict):
        return {str(key): _plain(item) for key, item in value.items() if str(key) != "eval_env"}
    if isinstance(value, list | tuple | np.ndarray):
        return [_plain(item) for item in value] if np.ndim(value) else repr(value)
    if value is None or isinstance(value, bool | int | float | str | np.number):
        return repr(value)
    held = getattr(value, "__dict__", None) or {}
    return [type(value).__name__, {key: _plain(item) for key, item in sorted(held.items())}]
