"""A pandas frame as a source."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import pandas as pd

from mixbridge.errors import DataError

__all__ = ["FrameSource"]


@dataclass(frozen=True, slots=True)
class FrameSource:
    """Columns of a pandas frame, handed on without a copy.

    Parameters
    ----------
    data : pandas.DataFrame
        The frame. Its index labels the rows in messages.
    """

    data: pd.DataFrame

    def __post_init__(self) -> None:
        """Refuse names of several levels."""
        if self.data.columns.nlevels > 1:
            raise DataError(
                f"The frame has column names of {self.data.columns.nlevels} levels; a formula needs plain "
                "names. Flatten them first, for example data.columns = ['_'.join(map(str, c)) for c in "
                "data.columns]."
            )

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return tuple(self.data.columns)

    @property
    def index_names(self) -> tuple[object, ...]:
        """Names of the levels of the index."""
        return tuple(name for name in self.data.index.names if name is not None)

    def frame(self, columns: Sequence[str], keys: Sequence[str] = ()) -> pd.DataFrame:
        """Return the columns as a frame that shares memory with the data as far as pandas allows."""
        return pd.DataFrame({name: self.data[name] for name in columns}, index=self.data.index, copy=False)
