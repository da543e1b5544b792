"""Moments of a panel whose rows are read in chunks: in the pass that reads them first, where that is possible."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from mixbridge.moments.closed import LOSS_LIMIT, Moments, close
from mixbridge.moments.factors import factor_from_products
from mixbridge.moments.growing import LEVEL_LOSS, Growing
from mixbridge.moments.opened import OpenMoments, within_factor
from mixbridge.moments.sorted_classes import SortedClasses, SortedFactor
from mixbridge.panel.streaming_panel import StreamedPanel
from mixbridge.sources.checkpoint import State

__all__ = ["Gathering", "collect_streamed"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.intp]

_WHAT = "moments"
_BY_UNIT = "moments, measured unit by unit"
_AGAIN = "within factor of nearly collinear columns"


class Gathering:
    """Takes moments of rows as they pass by: per unit, or by unit size where units come one after the other."""

    def __init__(self) -> None:
        self.rows = 0
        self.by_unit = False
        self.taker: Growing | SortedClasses | None = None
        self._sorted = False

    def begin(self, *, sorted_units: bool) -> None:
        """Start, or start anew."""
        self.rows, self.taker, self._sorted = 0, None, sorted_units

    def add(self, codes: IntArray, z: FloatArray) -> None:
        """Take in rows; units are numbered by order of first appearance."""
        if self.taker is None:
            self.taker = self._blank(z.shape[1])
        self.taker.add(codes, z)
        self.rows += codes.size

    def _blank(self, width: int) -> Growing | SortedClasses:
        return SortedClasses(width) if self._sorted else Growing(width, by_unit=self.by_unit)

    def state(self) -> State:
        """Return what was taken, to be saved."""
        taker = {} if self.taker is None else self.taker.state()
        return {"rows": self.rows, "width": 0 if self.taker is None else self.taker.width, "taker": taker}

    def restore(self, state: State) -> None:
        """Go on from a state, after `begin`."""
        self.rows = state["rows"]
        if state["width"]:
            self.taker = self._blank(state["width"])
            self.taker.restore(state["taker"])


def collect_streamed(panel: StreamedPanel, gathered: Gathering) -> tuple[OpenMoments | None, Moments]:
    """Take open and closed moments of a panel whose rows are read in chunks.

    Parameters
    ----------
    panel : StreamedPanel
    gathered : Gathering
        What was taken while the panel was built; if that is not all rows, they are read once more.

    Returns
    -------
    OpenMoments or None, and Moments
        None where the units were not kept.
    """
    if gathered.rows != panel.n or gathered.taker is None:
        _gather(panel, gathered, _WHAT)
    columns = (*panel.names, panel.outcome)
    opened, moments = None, None
    if isinstance(gathered.taker, SortedClasses):
        moments = _closed(panel, gathered.taker, columns)
    else:
        opened = _opened(panel, gathered, columns)
        moments = close(opened)
    gathered.taker = None
    panel.rows_read.moments_taken()
    return opened, moments


def _gather(panel: StreamedPanel, gathered: Gathering, what: str) -> None:
    """Take the moments in a pass of their own."""
    gathered.begin(sorted_units=panel.known is None)
    for codes, z in panel.laid_out(what, gathered):
        gathered.add(codes, z)


def _opened(panel: StreamedPanel, gathered: Gathering, columns: tuple[str, ...]) -> OpenMoments:
    """Return the moments by unit; rows are read once more where products do not hold the digits."""
    level, opened = _finished(panel, gathered, columns)
    if level and opened.loss.max() > LEVEL_LOSS:
        del opened
        gathered.by_unit = True
        _gather(panel, gathered, _BY_UNIT)
        _, opened = _finished(panel, gathered, columns)
    if opened.loss.max() > LOSS_LIMIT or factor_from_products(opened.within) is None:
        opened = opened.with_factor(within_factor(panel.blocks_with_codes(), opened))
    return opened


def _finished(
    panel: StreamedPanel, gathered: Gathering, columns: tuple[str, ...]
) -> tuple[bool, OpenMoments]:
    """Return whether rows were measured from one number, and their moments."""
    taker, gathered.taker = gathered.taker, None
    assert isinstance(taker, Growing), "there are rows, and their units are kept"
    assert panel.known is not None, "units in any order are kept"
    level = taker.anchors is None
    return level, taker.finish(panel.known.codes, panel.known.keys, columns, panel.constant)


def _closed(panel: StreamedPanel, taker: SortedClasses, columns: tuple[str, ...]) -> Moments:
    taker.close_last()
    factor = None
    if taker.needs_rows:
        again = SortedFactor(taker.width)
        for codes, z in panel.laid_out(_AGAIN):
            again.add(codes, z)
        factor = again.factor
    return taker.finish(columns, panel.constant, factor)
