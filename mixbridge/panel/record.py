"""The panel: validated rows, ready to be turned into moments."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import OptionError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.design import Design
from mixbridge.panel.factors import Numeric

__all__ = ["Panel"]


@dataclass(frozen=True, slots=True, eq=False)
class Panel:
    """The rows used, their units and periods, and the recipe of their design columns.

    Blocks are read from the data when they are asked for; data changed in place in between would be
    read as changed (pandas prevents that for frames from version 3 on).

    Parameters
    ----------
    formula : str
        As given.
    outcome : str
        Name of the left side.
    names : tuple of str
        Names of the design columns.
    terms : mapping of str to slice
        Columns of each term.
    constant : int or None
        Place of the intercept column in `names`.
    codes : numpy.ndarray of int
        Unit of each row used, 0 to N-1, rows in the order of the data.
    unit_keys : pandas.Index
        Key of each unit, sorted.
    unit_name : str
        Column of the units.
    period_name : str or None
        Column of the periods.
    period_ordinals : numpy.ndarray of int64 or None
        Position of each row's period on an equally spaced scale; None if there is no period or no such scale.
    period_note : str or None
        How periods were read, or why they have no order.
    row_labels : pandas.Index
        Index labels of the rows used.
    accounting : Accounting
        What became of every row.
    """

    formula: str
    outcome: str
    names: tuple[str, ...]
    terms: Mapping[str, slice]
    constant: int | None
    codes: npt.NDArray[np.intp]
    unit_keys: pd.Index
    unit_name: str
    period_name: str | None
    period_ordinals: npt.NDArray[np.int64] | None
    period_note: str | None
    row_labels: pd.Index
    accounting: Accounting
    design: Design = field(repr=False)
    response: Numeric = field(repr=False)

    @property
    def n(self) -> int:
        """Number of rows used."""
        return len(self.codes)

    @property
    def N(self) -> int:
        """Number of units."""
        return len(self.unit_keys)

    def blocks(
        self, rows: int = 8192
    ) -> Iterator[tuple[int, npt.NDArray[np.float64], npt.NDArray[np.float64]]]:
        """Yield the design block by block, so that the whole matrix never exists.

        Parameters
        ----------
        rows : int
            Rows per block.

        Yields
        ------
        start : int
            Position of the block's first row.
        X : numpy.ndarray
            Design columns, shape (rows, len(names)), C-contiguous.
        y : numpy.ndarray
            Outcome, shape (rows,).
        """
        if rows < 1:
            raise OptionError(f"rows={rows!r}: a block has at least one row.")
        for start in range(0, self.n, rows):
            stop = min(start + rows, self.n)
            yield start, self.design.block(start, stop), self._outcome(start, stop)

    def matrix(self) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
        """Return the whole design matrix and the outcome; for small data."""
        return self.design.block(0, self.n), self._outcome(0, self.n)

    def _outcome(self, start: int, stop: int) -> npt.NDArray[np.float64]:
        return np.ascontiguousarray(self.response.block(start, stop)[:, 0])
