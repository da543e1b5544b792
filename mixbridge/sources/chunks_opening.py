"""Choose the chunked source for what the user hands over."""

from __future__ import annotations

import os
from collections.abc import Iterable
from pathlib import Path

import pandas as pd

from mixbridge.errors import DataError, OptionError
from mixbridge.sources.arrow import import_pyarrow
from mixbridge.sources.arrow_chunks import DatasetChunks
from mixbridge.sources.chunks import CHUNK_ROWS, ChunkedSource, FrameChunks
from mixbridge.sources.csv_chunks import CsvChunks
from mixbridge.sources.files import CsvSource, ParquetSource, read_table
from mixbridge.sources.parquet_chunks import open_parquet_chunks
from mixbridge.sources.spool import spool

__all__ = ["open_chunks"]


def open_chunks(data: object, rows: int = CHUNK_ROWS) -> ChunkedSource:  # noqa: PLR0911  (one return per kind reads best)
    """Return the chunked source for a file, a folder, a dataset, a function or a stream.

    Parameters
    ----------
    data : object
        A Parquet file, a folder of them (partitioned by ``name=value`` too), a text file, a
        ``pyarrow.dataset.Dataset``, a function that returns frames, or something that can be read once: an
        iterable of frames, an object with an Arrow stream. A frame is a stream of one part.
    rows : int
        Most rows of a chunk; what yields frames decides for itself.
    """
    if rows < 1:
        raise OptionError(f"chunk_rows={rows!r}: a chunk has at least one row.")
    if isinstance(data, CsvSource):
        return CsvChunks(data, rows)
    if isinstance(data, ParquetSource):
        return open_parquet_chunks([data.path], rows)
    if isinstance(data, ChunkedSource):
        return data
    if isinstance(data, str | os.PathLike):
        return _open_path(Path(data), rows)
    if isinstance(data, pd.DataFrame):
        whole = data
        return FrameChunks.of(lambda: (whole.iloc[at : at + rows] for at in range(0, len(whole), rows)))
    if callable(data):
        return FrameChunks.of(data)
    if type(data).__module__.startswith("pyarrow") and hasattr(data, "get_fragments"):
        return DatasetChunks(data, rows)
    if hasattr(data, "__arrow_c_stream__") or isinstance(data, Iterable):
        return spool(data, rows)
    raise DataError(
        f"data is a {type(data).__name__}, which cannot be read in chunks; needed is a Parquet or CSV file, a "
        "folder of Parquet files, an Arrow dataset or stream, a function that returns frames, or an iterable "
        "of frames."
    )


def _open_path(place: Path, rows: int) -> ChunkedSource:
    """Open a file, or the Parquet files of a folder in the order of their names."""
    if not place.is_dir():
        return open_chunks(read_table(place), rows)
    files = sorted(path for path in place.rglob("*") if path.suffix.lower() in (".parquet", ".pq"))
    if not files:
        raise DataError(f"The folder {place} holds no file ending in .parquet or .pq.")
    if any("=" in part for path in files for part in path.relative_to(place).parts[:-1]):
        dataset = import_pyarrow("A partitioned folder", "pyarrow.dataset")
        return DatasetChunks(dataset.dataset(list(map(str, files)), partitioning="hive"), rows)
    return open_parquet_chunks(files, rows)
