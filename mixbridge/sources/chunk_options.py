"""How rows are read in chunks, and whether they are."""

from __future__ import annotations

import os
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import pandas as pd

from mixbridge.errors import OptionError
from mixbridge.sources.chunks import CHUNK_ROWS
from mixbridge.sources.files import CsvSource, ParquetSource

__all__ = ["IN_ONE_PIECE", "ChunkOptions", "comes_in_chunks"]

IN_ONE_PIECE = {".csv": 2**30, ".parquet": 2**28, ".pq": 2**28}
"""Bytes of a file up to which it is read in one piece unless chunks are asked for; Parquet is compressed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ChunkOptions:
    """How rows are read in chunks.

    Parameters
    ----------
    rows : int
        Most rows of a chunk, where the source does not decide.
    memory_limit : int
        Bytes that the moments of the units may take; a run that would take more is refused before it starts.
    """

    rows: int = CHUNK_ROWS
    memory_limit: int = 2**32

    def __post_init__(self) -> None:
        """Check the options."""
        for name in ("rows", "memory_limit"):
            value = getattr(self, name)
            if isinstance(value, bool) or not isinstance(value, int) or value < 1:
                raise OptionError(f"{name}={value!r} is not allowed; allowed: a whole number from 1 on.")


def comes_in_chunks(data: object) -> bool:
    """Whether data are read in chunks unless the caller says: what is not one table, and large files.

    Parameters
    ----------
    data : object
        What `mixbridge.crosscheck` takes.
    """
    if isinstance(data, pd.DataFrame | dict):
        return False
    if isinstance(data, CsvSource | ParquetSource):
        return _is_large(Path(data.path))
    if isinstance(data, str | os.PathLike):
        path = Path(data)
        return path.is_dir() or _is_large(path)
    if callable(data) or (type(data).__module__.startswith("pyarrow") and hasattr(data, "get_fragments")):
        return True
    if hasattr(data, "__arrow_c_stream__"):
        return not hasattr(data, "__len__") and not hasattr(data, "num_rows")
    return isinstance(data, Iterable)


def _is_large(path: Path) -> bool:
    limit = IN_ONE_PIECE.get(path.suffix.lower())
    return limit is not None and path.is_file() and path.stat().st_size > limit
