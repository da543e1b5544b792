"""Differences of consecutive periods, from rows that are held or that come in order."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from mixbridge.moments.factors import factor_from_rows, stack_factors
from mixbridge.panel import Panel
from mixbridge.panel.absent import RowlessPanel
from mixbridge.panel.pushed import PushedPanel
from mixbridge.panel.streaming import StreamedPanel
from mixbridge.panel.widened import WidenedPanel
from mixbridge.routes import Differences, differences_of
from mixbridge.routes.quadratic import NotEstimableError

__all__ = ["Gather", "differences_for"]

Gather = Callable[[int | None], Differences]
"""Takes the period steps of a difference, or None for the smallest seen."""


def differences_for(panel: Panel) -> Gather | str:
    """Return what gathers the differences of a panel, or why there are none.

    Parameters
    ----------
    panel : Panel

    Returns
    -------
    callable or str
    """
    if panel.period_name is None:
        return "no period given, so rows have no order to difference in; name the column with period="
    if isinstance(panel, RowlessPanel):
        return "the moments do not hold the order of the rows"
    streamed = panel.given if isinstance(panel, WidenedPanel) else panel
    while isinstance(streamed, WidenedPanel):
        streamed = streamed.given
    if isinstance(streamed, StreamedPanel | PushedPanel):
        return _streamed(streamed, panel)
    ordinals = panel.period_ordinals
    if ordinals is None:
        return panel.period_note or "periods have no order"

    def gather(step: int | None) -> Differences:
        x, y = panel.matrix()
        return differences_of(x, y, panel.codes, ordinals, step)

    return gather


def _streamed(source: StreamedPanel | PushedPanel, panel: Panel) -> Gather | str:
    if source.order.reason is not None:
        return source.order.reason
    jumps = source.order.jumps
    p = len(source.names)
    wide = np.r_[np.arange(p), len(panel.names)]

    def gather(step: int | None) -> Differences:
        if not jumps:
            raise NotEstimableError("no unit has two rows to difference")
        used = min(jumps) if step is None else step
        if not jumps.get(used):
            raise NotEstimableError(f"no two rows of a unit are {used} period steps apart")
        factor = np.zeros((p + 1, p + 1))
        for rows in source.difference_rows(used):
            factor = stack_factors(factor, factor_from_rows(rows))
        # what was added does not vary within units: its differences are zero
        padded = np.zeros((p + 1, len(panel.names) + 1))
        padded[:, wide] = factor
        return Differences(padded, jumps[used], used, sum(jumps.values()) - jumps[used])

    return gather
