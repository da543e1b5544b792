"""A panel with values of units as further columns, looked up for each block of rows."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.record import Block, Panel

__all__ = ["WidenedPanel"]

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class WidenedPanel:
    """The rows of a panel with further columns that are constant within units.

    Parameters
    ----------
    given : Panel
    values : numpy.ndarray of shape (N, q) or None
        By unit code; None where they were not kept, and no rows can be given.
    added : tuple of str
        Names of the q columns.
    """

    given: Panel
    values: FloatArray | None
    added: tuple[str, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the design columns, the added ones last."""
        return (*self.given.names, *self.added)

    @property
    def terms(self) -> Mapping[str, slice]:
        """Columns of each term; an added column is a term of its own."""
        p = len(self.given.names)
        own = {name: slice(p + j, p + j + 1) for j, name in enumerate(self.added)}
        return MappingProxyType({**self.given.terms, **own})

    @property
    def formula(self) -> str:
        """As in the given panel."""
        return self.given.formula

    @property
    def outcome(self) -> str:
        """As in the given panel."""
        return self.given.outcome

    @property
    def constant(self) -> int | None:
        """As in the given panel."""
        return self.given.constant

    @property
    def codes(self) -> npt.NDArray[np.intp]:
        """As in the given panel."""
        return self.given.codes

    @property
    def unit_keys(self) -> pd.Index:
        """As in the given panel."""
        return self.given.unit_keys

    @property
    def unit_name(self) -> str:
        """As in the given panel."""
        return self.given.unit_name

    @property
    def period_name(self) -> str | None:
        """As in the given panel."""
        return self.given.period_name

    @property
    def period_ordinals(self) -> npt.NDArray[np.int64] | None:
        """As in the given panel."""
        return self.given.period_ordinals

    @property
    def period_note(self) -> str | None:
        """As in the given panel."""
        return self.given.period_note

    @property
    def row_labels(self) -> pd.Index:
        """As in the given panel."""
        return self.given.row_labels

    @property
    def accounting(self) -> Accounting:
        """As in the given panel."""
        return self.given.accounting

    @property
    def source_note(self) -> str | None:
        """As in the given panel."""
        return self.given.source_note

    @property
    def n(self) -> int:
        """As in the given panel."""
        return self.given.n

    @property
    def N(self) -> int:
        """As in the given panel."""
        return self.given.N

    def blocks_with_codes(self, rows: int = 8192) -> Iterator[Block]:
        """Yield unit codes, design and outcome block by block."""
        values = self._kept()
        for codes, x, y in self.given.blocks_with_codes(rows):
            yield codes, np.hstack([x, values[codes]]), y

    def blocks(self, rows: int = 8192) -> Iterator[tuple[int, FloatArray, FloatArray]]:
        """Yield position, design and outcome block by block."""
        start = 0
        for _, x, y in self.blocks_with_codes(rows):
            yield start, x, y
            start += len(y)

    def matrix(self) -> tuple[FloatArray, FloatArray]:
        """Return the whole design matrix and the outcome; for small data."""
        x, y = self.given.matrix()
        return np.hstack([x, self._kept()[self.given.codes]]), y

    def _kept(self) -> FloatArray:
        if self.values is None:
            raise DataError(
                "this question needs rows with the added columns, whose values by unit were not kept: the study "
                "has its closed moments only. Ask it of a study whose units fit into memory."
            )
        return self.values
