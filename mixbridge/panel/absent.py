"""Panels whose rows are not held together, or not at hand at all."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.panel.accounting import Accounting
from mixbridge.panel.record import Block

__all__ = ["Apart", "RowlessPanel"]

FloatArray = npt.NDArray[np.float64]


class Apart:
    """What cannot be asked of rows that are not held together: their order, and all of them at once."""

    __slots__ = ()

    @property
    def why_apart(self) -> str:
        """Why, and what to do."""
        return (
            "the rows are read in chunks and never held together, which this question needs. Pass the data, or "
            "a sample of whole units, as one frame."
        )

    @property
    def codes(self) -> npt.NDArray[np.intp]:
        """Refused."""
        raise DataError(self.why_apart)

    @property
    def row_labels(self) -> pd.Index:
        """Refused."""
        raise DataError(self.why_apart)

    @property
    def period_ordinals(self) -> None:
        """Nothing: the periods of all rows are never held."""
        return

    def matrix(self) -> tuple[FloatArray, FloatArray]:
        """Refuse to hold all rows."""
        raise DataError(self.why_apart)


@dataclass(frozen=True, slots=True, eq=False)
class RowlessPanel(Apart):
    """What is known of a panel whose rows are not at hand: its moments were taken elsewhere.

    Parameters
    ----------
    formula, outcome, names, terms, constant, unit_name, period_name, accounting, n, N
        As in `mixbridge.panel.HeldPanel`.
    source_note : str
        Where the moments come from.
    """

    formula: str
    outcome: str
    names: tuple[str, ...]
    terms: Mapping[str, slice]
    constant: int | None
    unit_name: str
    period_name: str | None
    accounting: Accounting
    n: int
    N: int
    source_note: str | None

    @property
    def why_apart(self) -> str:
        """Why, and what to do."""
        return (
            "this study was made from moments: its rows are not at hand, and this question needs them. Ask it "
            "where the rows are."
        )

    @property
    def unit_keys(self) -> pd.Index:
        """Refused."""
        raise DataError(self.why_apart)

    @property
    def period_note(self) -> str | None:
        """Why periods have no order."""
        return None if self.period_name is None else "the rows and their periods are not at hand"

    def blocks(self, rows: int = 8192) -> Iterator[tuple[int, FloatArray, FloatArray]]:
        """Refuse to read rows."""
        raise DataError(self.why_apart)

    def blocks_with_codes(self, rows: int = 8192) -> Iterator[Block]:
        """Refuse to read rows."""
        raise DataError(self.why_apart)
