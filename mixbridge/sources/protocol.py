"""What a source of rows can do."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol, runtime_checkable

import pandas as pd

__all__ = ["Source"]


@runtime_checkable
class Source(Protocol):
    """Rows that can be asked for some of their columns.

    The column names are known before any row is read, so that a misspelled name is reported without reading.
    """

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns, in order, repeated names included."""
        ...

    @property
    def index_names(self) -> tuple[object, ...]:
        """Names of what labels the rows without being a column (levels of an index), often empty."""
        ...

    def frame(self, columns: Sequence[str], keys: Sequence[str] = ()) -> pd.DataFrame:
        """Return a frame with these columns.

        Parameters
        ----------
        columns : sequence of str
            Names among `names`, each once.
        keys : sequence of str
            Those of `columns` that identify the unit and then the period: read so that no two different keys
            become one.
        """
        ...
