"""Parquet files read row group by row group."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from mixbridge.errors import DataError
from mixbridge.sources.arrow import import_pyarrow, to_pandas
from mixbridge.sources.chunks import CHUNK_ROWS, Chunk, identity_of_files, missing_columns

__all__ = ["ParquetChunks", "open_parquet_chunks", "rows_of_files"]

_MANY = 10_000
"""Files whose ends are not read only to know how many rows there will be."""


@dataclass(frozen=True, slots=True)
class ParquetChunks:
    """The rows of Parquet files, in the order of the files and of their row groups.

    Parameters
    ----------
    paths : tuple of pathlib.Path
        The files.
    names : tuple
        The columns of the first file.
    rows : int
        Most rows of a chunk; a chunk never reaches over a row group.
    note : str, optional
        Nothing unless the file is a temporary one.
    """

    paths: tuple[Path, ...]
    names: tuple[object, ...]
    rows: int = CHUNK_ROWS
    note: str | None = None

    @property
    def anywhere(self) -> bool:
        """Files may be read in any thread."""
        return True

    @property
    def rows_total(self) -> int | None:
        """Number of rows, as the files say; None if there are very many files or one cannot be read."""
        return rows_of_files(self.paths)

    @property
    def identity(self) -> str:
        """Names, sizes and times of the files."""
        return identity_of_files(self.paths)

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the columns; only those asked for are decoded.

        Raises
        ------
        DataError
            If a file lacks a column or cannot be read, naming the file and the row group.
        """
        return self.chunks_after(0, columns, keys)

    def chunks_after(self, skip: int, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the columns, without so many chunks at the beginning; row groups that hold no others are not read."""
        pa = import_pyarrow("A Parquet file")
        parquet = import_pyarrow("A Parquet file", "pyarrow.parquet")
        wanted = list(columns)
        for path in self.paths:
            place = str(path)
            try:
                with parquet.ParquetFile(path) as file:
                    missing_columns(wanted, file.schema_arrow.names, place)
                    for group in range(file.num_row_groups):
                        place = f"{path}, row group {group}"
                        whole = -(-file.metadata.row_group(group).num_rows // self.rows)
                        if whole <= skip:
                            skip -= whole
                            continue
                        batches = file.iter_batches(
                            batch_size=self.rows, row_groups=[group], columns=wanted, use_threads=False
                        )
                        for batch in batches:
                            if skip:
                                skip -= 1
                                continue
                            table = pa.Table.from_batches([batch]).select(wanted)
                            yield Chunk(to_pandas(table), place)
            except (pa.ArrowException, OSError) as error:
                raise DataError(f"{place} cannot be read as Parquet: {error}") from error


def rows_of_files(paths: Sequence[Path]) -> int | None:
    """Return the number of rows of Parquet files; None if there are very many files or one cannot be read."""
    if len(paths) > _MANY:
        return None
    pa = import_pyarrow("A Parquet file")
    parquet = import_pyarrow("A Parquet file", "pyarrow.parquet")
    try:
        return sum(int(parquet.read_metadata(path).num_rows) for path in paths)
    except (pa.ArrowException, OSError):  # said when the file is reached
        return None


def open_parquet_chunks(paths: Sequence[Path], rows: int = CHUNK_ROWS) -> ParquetChunks:
    """Read the column names of the first of some Parquet files.

    Parameters
    ----------
    paths : sequence of pathlib.Path
        At least one file.
    rows : int
        Most rows of a chunk.
    """
    pa = import_pyarrow("A Parquet file")
    parquet = import_pyarrow("A Parquet file", "pyarrow.parquet")
    try:
        with parquet.ParquetFile(paths[0]) as file:
            return ParquetChunks(tuple(paths), tuple(file.schema_arrow.names), rows)
    except (pa.ArrowException, OSError) as error:
        raise DataError(f"{paths[0]} cannot be read as Parquet: {error}") from error
