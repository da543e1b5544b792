"""What a panel is, and the one whose rows are at hand."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import OptionError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.design import Design
from mixbridge.panel.factors import Numeric

__all__ = ["Block", "HeldPanel", "Panel"]

FloatArray = npt.NDArray[np.float64]
CodeArray = npt.NDArray[np.intp]
Block = tuple[CodeArray, FloatArray, FloatArray]
"""Unit codes of some rows, their design columns and their outcome."""


class Panel(Protocol):
    """What every panel knows: validated columns, units and periods, and an account of every row.

    `HeldPanel` describes each attribute. A panel whose rows are not held together raises a DataError where the
    rows in order are asked for (`codes`, `row_labels`, `matrix`), one without rows also at `blocks`.
    """

    @property
    def formula(self) -> str: ...  # noqa: D102
    @property
    def outcome(self) -> str: ...  # noqa: D102
    @property
    def names(self) -> tuple[str, ...]: ...  # noqa: D102
    @property
    def terms(self) -> Mapping[str, slice]: ...  # noqa: D102
    @property
    def constant(self) -> int | None: ...  # noqa: D102
    @property
    def codes(self) -> CodeArray: ...  # noqa: D102
    @property
    def unit_keys(self) -> pd.Index: ...  # noqa: D102
    @property
    def unit_name(self) -> str: ...  # noqa: D102
    @property
    def period_name(self) -> str | None: ...  # noqa: D102
    @property
    def period_ordinals(self) -> npt.NDArray[np.int64] | None: ...  # noqa: D102
    @property
    def period_note(self) -> str | None: ...  # noqa: D102
    @property
    def row_labels(self) -> pd.Index: ...  # noqa: D102
    @property
    def accounting(self) -> Accounting: ...  # noqa: D102
    @property
    def source_note(self) -> str | None: ...  # noqa: D102
    @property
    def n(self) -> int: ...  # noqa: D102
    @property
    def N(self) -> int: ...  # noqa: D102
    def blocks(self, rows: int = 8192) -> Iterator[tuple[int, FloatArray, FloatArray]]: ...  # noqa: D102
    def blocks_with_codes(self, rows: int = 8192) -> Iterator[Block]: ...  # noqa: D102
    def matrix(self) -> tuple[FloatArray, FloatArray]: ...  # noqa: D102


@dataclass(frozen=True, slots=True, eq=False)
class HeldPanel:
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

    @property
    def source_note(self) -> str | None:
        """What was done to read the rows: nothing here."""
        return None

    def blocks_with_codes(self, rows: int = 8192) -> Iterator[Block]:
        """Yield unit codes, design and outcome block by block, as `mixbridge.moments.collect` takes them."""
        for start, x, y in self.blocks(rows):
            yield self.codes[start : start + len(y)], x, y

    def matrix(self) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
        """Return the whole design matrix and the outcome; for small data."""
        return self.design.block(0, self.n), self._outcome(0, self.n)

    def _outcome(self, start: int, stop: int) -> npt.NDArray[np.float64]:
        return np.ascontiguousarray(self.response.block(start, stop)[:, 0])
