"""A digest of what columns mean beyond their names: levels of categories, and what transforms learned."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np

from mixbridge.panel.categories import Coded
from mixbridge.panel.factors import Evaluated, Plain, Stored
from mixbridge.panel.record import HeldPanel, Panel
from mixbridge.panel.streaming_learn import Lesson
from mixbridge.panel.streaming_panel import StreamedPanel
from mixbridge.panel.streaming_walk import Plan

__all__ = ["coding_of", "digest", "lesson_coding"]


def coding_of(panel: Panel) -> str | None:
    """Return the coding of a panel that holds its rows or reads them in chunks; None for others.

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
    if isinstance(panel, StreamedPanel):
        return lesson_coding(panel.names, panel.plan, panel.lesson)
    if isinstance(panel, HeldPanel):
        return digest(panel.names, panel.design.factors)
    return None


def lesson_coding(names: Iterable[str], plan: Plan, lesson: Lesson) -> str:
    """Return the coding of columns whose levels and states were learned while the rows were read.

    Parameters
    ----------
    names : iterable of str
        Design columns.
    plan : Plan
    lesson : Lesson
    """
    states = lesson.stages[-1].states if lesson.stages else {}
    found = [
        lesson.levels[factor].coded if factor in lesson.levels else states.get(factor)
        for factor in plan.formula.factors
    ]
    return digest(names, found)


def digest(
    names: Iterable[str], factors: Iterable[Coded | Stored | Evaluated | Plain | Mapping[str, Any] | None]
) -> str:
    """Return the coding of columns.

    Parameters
    ----------
    names : iterable of str
        Design columns.
    factors : iterable
        Of the formula, in order: as in a design, or the state of a factor; None for a column as it is.
    """
    parts = [list(names), *(_entry(factor) for factor in factors)]
    return hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()[:16]


def _entry(factor: Coded | Stored | Evaluated | Plain | Mapping[str, Any] | None) -> list[Any]:
    if isinstance(factor, Coded):
        levels = [repr(level.item() if isinstance(level, np.generic) else level) for level in factor.levels]
        return ["levels", levels, _plain(factor.contrast)]
    if isinstance(factor, Stored) and len(factor.values):
        return ["rows", hashlib.sha256(np.ascontiguousarray(factor.values).tobytes()).hexdigest()]
    state = factor.state if isinstance(factor, Evaluated) else factor
    learned = state.get("transforms", {}) if isinstance(state, Mapping) else {}
    return ["state", _plain(learned)] if learned else ["column"]


def _plain(value: Any) -> Any:
    """Return a state as JSON values: numbers in exact form, objects by what they hold."""
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray) and not value.ndim:
        value = value[()]
    if isinstance(value, np.generic):  # sums in extended precision depend on the chunks in their last digits
        value = float(value) if isinstance(value, np.longdouble) else value.item()
    if isinstance(value, list | tuple | np.ndarray):
        return [_plain(item) for item in value]
    if value is None or isinstance(value, bool | int | float | str):
        return repr(value)
    if isinstance(value, type):
        return value.__name__
    held = getattr(value, "__dict__", None) or {}
    return [type(value).__name__, {key: _plain(item) for key, item in sorted(held.items())}]
