"""Choose the adapter for what the user hands over."""

from __future__ import annotations

import os

import pandas as pd

from mixbridge.errors import DataError
from mixbridge.sources.arrow import ArrowSource
from mixbridge.sources.files import read_table
from mixbridge.sources.frame import FrameSource
from mixbridge.sources.protocol import Source

__all__ = ["open_source"]


def open_source(data: object) -> Source:
    """Return the source for a frame, a source, a path, or an object with an Arrow stream.

    Parameters
    ----------
    data : object
        A pandas frame, anything with ``__arrow_c_stream__``, a path of a CSV or Parquet file, or a source.
    """
    if isinstance(data, pd.DataFrame):
        return FrameSource(data)
    if isinstance(data, Source):
        return data
    if isinstance(data, str | os.PathLike):
        return read_table(data)
    if hasattr(data, "__arrow_c_stream__"):
        return ArrowSource(data)
    raise DataError(
        f"data is a {type(data).__name__}; needed is a pandas DataFrame, an object with an Arrow stream, or "
        "the path of a CSV or Parquet file. A dict of columns becomes a frame by pandas.DataFrame(data)."
    )
