"""A stream that can be read once is written to a temporary Parquet file."""

from __future__ import annotations

import shutil
import tempfile
import weakref
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import pandas as pd

from mixbridge.errors import DataError
from mixbridge.sources.arrow import import_pyarrow
from mixbridge.sources.chunks import CHUNK_ROWS, Chunk
from mixbridge.sources.parquet_chunks import ParquetChunks, open_parquet_chunks

__all__ = ["SpooledChunks", "spool"]


class SpooledChunks:
    """The rows of a stream, kept in a temporary file for as long as this object lives.

    Parameters
    ----------
    file : ParquetChunks
        The temporary file.
    folder : pathlib.Path
        Where it lies; removed with this object.
    """

    def __init__(self, file: ParquetChunks, folder: Path) -> None:
        self._file = file
        self.remove = weakref.finalize(self, shutil.rmtree, folder, ignore_errors=True)

    @property
    def anywhere(self) -> bool:
        """The file may be read in any thread."""
        return True

    @property
    def rows_total(self) -> int | None:
        """Number of rows."""
        return self._file.rows_total

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return self._file.names

    @property
    def note(self) -> str | None:
        """Says that the stream was spooled."""
        return self._file.note

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the columns from the temporary file."""
        return self._file.chunks(columns, keys)


def spool(stream: Any, rows: int = CHUNK_ROWS) -> SpooledChunks:
    """Write a stream to a temporary Parquet file.

    Parameters
    ----------
    stream : iterable of pandas.DataFrame, or object with ``__arrow_c_stream__``
        Read to its end, once.
    rows : int
        Most rows of a chunk.

    Raises
    ------
    DataError
        If the stream breaks off, or its columns or their types change on the way, naming the part.
    """
    folder = Path(tempfile.mkdtemp(prefix="mixbridge-"))
    try:
        parts, files = _write(stream, folder)
        file = open_parquet_chunks(files, rows)
    except BaseException:
        shutil.rmtree(folder, ignore_errors=True)
        raise
    note = f"the stream can be read once; its {parts} parts were written to a temporary Parquet file"
    return SpooledChunks(replace(file, note=note), folder)


def _write(stream: Any, folder: Path) -> tuple[int, list[Path]]:
    """Write the parts of a stream; return how many there were, and the files.

    A column without a value so far has no type; the part that brings one begins a new file.
    """
    pa = import_pyarrow("A stream that can be read once")
    parquet = import_pyarrow("A stream that can be read once", "pyarrow.parquet")
    files: list[Path] = []
    writer, number, schema = None, -1, None
    try:
        for number, table in enumerate(_tables(stream, pa)):
            known = table.schema.remove_metadata() if schema is None else _typed(schema, table.schema, pa)
            if writer is None or known != schema:
                if writer is not None:
                    writer.close()
                schema = known
                files.append(folder / f"rows-{len(files)}.parquet")
                writer = parquet.ParquetWriter(files[-1], schema)
            writer.write_table(_as(table, schema, number, pa))
    except (pa.ArrowException, OSError) as error:
        raise DataError(f"The stream broke off after part {number}: {error}") from error
    finally:
        if writer is not None:
            writer.close()
    if not files:
        raise DataError("The data have no rows: the stream is empty.")
    return number + 1, files


def _typed(schema: Any, newer: Any, pa: Any) -> Any:
    """Return a schema in which columns without a type so far have that of a later part."""
    for place, field in enumerate(schema):
        at = newer.get_field_index(field.name)
        if pa.types.is_null(field.type) and at >= 0 and not pa.types.is_null(newer.field(at).type):
            schema = schema.set(place, newer.field(at).remove_metadata())
    return schema


def _tables(stream: Any, pa: Any) -> Iterator[Any]:
    """Yield Arrow tables."""
    if hasattr(stream, "__arrow_c_stream__"):
        reader = pa.RecordBatchReader.from_stream(stream)
        for batch in reader:
            yield pa.Table.from_batches([batch])
        return
    parts: Iterable[Any] = stream
    for number, frame in enumerate(parts):
        if isinstance(frame, pa.RecordBatch):
            yield pa.Table.from_batches([frame])
        elif isinstance(frame, pa.Table):
            yield frame
        elif isinstance(frame, pd.DataFrame):
            yield pa.Table.from_pandas(frame, preserve_index=False)
        else:
            raise DataError(
                f"Part {number} of the data is a {type(frame).__name__}; needed are pandas DataFrames or Arrow "
                "tables."
            )


def _as(table: Any, schema: Any, number: int, pa: Any) -> Any:
    """Return a part in the types of the first one, where no value changes."""
    if set(table.schema.names) != set(schema.names):
        raise DataError(
            f"Part {number} of the data has the columns {', '.join(table.schema.names)}; the first part has "
            f"{', '.join(schema.names)}. Give all parts the same columns."
        )
    try:
        return table.select(schema.names).cast(schema)
    except pa.ArrowException as error:
        raise DataError(
            f"The types of part {number} of the data do not fit those of the first part: {error}. Give a column "
            "the same type in all parts."
        ) from error
