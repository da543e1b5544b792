"""Arrow datasets, partitioned folders among them, read fragment by fragment."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from mixbridge.errors import DataError
from mixbridge.sources.arrow import import_pyarrow, to_pandas
from mixbridge.sources.chunks import CHUNK_ROWS, Chunk, identity_of_files, missing_columns

__all__ = ["DatasetChunks"]


@dataclass(frozen=True, slots=True)
class DatasetChunks:
    """The rows of a ``pyarrow.dataset.Dataset``.

    Parameters
    ----------
    dataset : pyarrow.dataset.Dataset
        The columns that a partitioned folder holds in its folder names are columns like any other.
    rows : int
        Most rows of a chunk.
    note : str, optional
        Nothing unless stated.
    """

    dataset: Any
    rows: int = CHUNK_ROWS
    note: str | None = None

    @property
    def anywhere(self) -> bool:
        """Fragments may be read in any thread."""
        return True

    @property
    def identity(self) -> str | None:
        """Names, sizes and times of the files, where the dataset is made of files on this machine."""
        paths = [Path(file) for file in getattr(self.dataset, "files", [])]
        return identity_of_files(paths) if paths and all(path.is_file() for path in paths) else None

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return tuple(self.dataset.schema.names)

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the columns.

        Raises
        ------
        DataError
            If a fragment cannot be read, naming it; of Parquet files also the row group.
        """
        pa = import_pyarrow("An Arrow dataset")
        wanted = list(columns)
        for number, fragment in enumerate(self.dataset.get_fragments()):
            place = str(getattr(fragment, "path", f"fragment {number}"))
            try:
                folders = self._in_folder_names(fragment)
                missing_columns(wanted, [*fragment.physical_schema.names, *folders], place)
                for part, where in _parts(fragment, place):
                    place = where
                    batches = part.to_batches(
                        schema=self.dataset.schema, columns=wanted, batch_size=self.rows, use_threads=False
                    )
                    for batch in batches:
                        yield Chunk(to_pandas(pa.Table.from_batches([batch]).select(wanted)), place)
            except (pa.ArrowException, OSError) as error:
                raise DataError(f"{place} cannot be read: {error}") from error

    def _in_folder_names(self, fragment: Any) -> list[str]:
        """Return the columns that the name of the fragment's folder gives."""
        dataset = import_pyarrow("An Arrow dataset", "pyarrow.dataset")
        return list(dataset.get_partition_keys(fragment.partition_expression))


def _parts(fragment: Any, place: str) -> Iterator[tuple[Any, str]]:
    """Split a Parquet fragment by row groups, so that a message can name one."""
    if not hasattr(fragment, "split_by_row_group"):
        yield fragment, place
        return
    for part in fragment.split_by_row_group():
        groups = ", ".join(str(group.id) for group in part.row_groups)
        yield part, f"{place}, row group {groups}"
