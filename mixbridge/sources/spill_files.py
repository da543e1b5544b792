"""Rows dealt to temporary files by a number, then sorted within each file."""

from __future__ import annotations

import shutil
import tempfile
import weakref
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.sources.arrow import import_pyarrow, to_pandas
from mixbridge.sources.chunks import Chunk

__all__ = ["PART", "Pile", "SortedFiles"]

IntArray = npt.NDArray[np.intp]
Dealer = Callable[[pd.DataFrame, int, int], IntArray]
"""Takes rows, the number of files and how often the rows were dealt before; returns the file of each row."""
Sorter = Callable[[list[pd.DataFrame]], tuple[pd.DataFrame, IntArray]]
"""Takes the rows of a file in pieces; returns them as one, and the order they are to have."""

PART = 2**26
"""Bytes of the rows that are sorted in memory at once."""
_MOST_FILES = 256
_DEEP = 2
"""Times that the rows of a file that turns out too large are dealt again."""
_WHAT = "Sorting rows in temporary files"


class Pile:
    """Files that rows are dealt to.

    Parameters
    ----------
    folder : pathlib.Path
        Where to make them.
    bytes_expected : int
        Of all rows; decides on the number of files.
    part : int
        Bytes that one file should have.
    dealer : callable
    depth : int
        How often the rows were dealt before.
    """

    def __init__(self, folder: Path, bytes_expected: int, part: int, dealer: Dealer, depth: int = 0) -> None:
        self.folder, self.part, self.dealer, self.depth = folder, part, dealer, depth
        self.parts = max(1, min(_MOST_FILES, -(-bytes_expected // part)))
        self._arrow = import_pyarrow(_WHAT)
        self._ipc = import_pyarrow(_WHAT, "pyarrow.ipc")
        self._schema: Any = None
        self._round = -1
        self._files: list[list[Path]] = [[] for _ in range(self.parts)]
        self._writers: dict[int, Any] = {}

    def deal(self, frame: pd.DataFrame) -> None:
        """Append rows to the file of each."""
        part = self.dealer(frame, self.parts, self.depth)
        order = np.argsort(part, kind="stable")
        try:
            table = self._arrow.Table.from_pandas(frame.iloc[order], preserve_index=False)
        except (self._arrow.ArrowException, OverflowError, TypeError) as error:
            raise DataError(
                f"Rows cannot be written to temporary files: {error}. Store such a column as text, or as numbers of 64 "
                "bits."
            ) from error
        table = table.replace_schema_metadata(None)
        if self._schema is None or not table.schema.equals(self._schema):
            self.close()
            self._schema, self._round = table.schema, self._round + 1
        start = 0
        for number, count in enumerate(np.bincount(part, minlength=self.parts).tolist()):
            if count:
                self._writer(number).write_table(table.slice(start, count))
                start += count

    def _writer(self, number: int) -> Any:
        if number not in self._writers:
            path = self.folder / f"rows-{self.depth}-{number}-{self._round}.arrow"
            self._files[number].append(path)
            self._writers[number] = self._ipc.new_stream(str(path), self._schema)
        return self._writers[number]

    def close(self) -> None:
        """End the files."""
        for writer in self._writers.values():
            writer.close()
        self._writers = {}

    def sort(self, sorter: Sorter, rows: int, label: str = "") -> Iterator[Path]:
        """Sort file after file; yield the sorted ones, and remove the others.

        Parameters
        ----------
        sorter : callable
        rows : int
            Most rows of a piece of a sorted file.
        label : str
            Begins the names of the sorted files.
        """
        self.close()
        for number, files in enumerate(self._files):
            if not files:
                continue
            size = sum(path.stat().st_size for path in files)
            if size > 2 * self.part and self.depth < _DEEP:
                inner = self.folder / f"again-{label}{number}"
                inner.mkdir()
                again = Pile(inner, size, self.part, self.dealer, self.depth + 1)
                for piece in self._pieces(files):
                    again.deal(piece)
                _remove(files)
                yield from again.sort(sorter, rows, f"{label}{number}-")
                continue
            frame, order = sorter(list(self._pieces(files)))
            _remove(files)
            path = self.folder / f"sorted-{label}{number}.arrow"
            table = self._arrow.Table.from_pandas(frame.iloc[order], preserve_index=False)
            del frame, order
            with self._ipc.new_file(str(path), table.schema.remove_metadata()) as writer:
                writer.write_table(table.replace_schema_metadata(None), max_chunksize=rows)
            yield path

    def _pieces(self, files: Sequence[Path]) -> Iterator[pd.DataFrame]:
        """Read files of one number back, some batches at a time."""
        for path in files:
            with self._arrow.OSFile(str(path)) as file, self._ipc.open_stream(file) as reader:
                batches, held = [], 0
                for batch in reader:
                    batches.append(batch)
                    held += batch.nbytes
                    if held > self.part // 4:
                        yield to_pandas(self._arrow.Table.from_batches(batches))
                        batches, held = [], 0
                if batches:
                    yield to_pandas(self._arrow.Table.from_batches(batches))


class SortedFiles:
    """Rows in which those of a unit lie together, kept in temporary files for as long as this object lives.

    Parameters
    ----------
    folder : path or None
        Where to make a folder for them; the system's place for temporary files unless given.
    bytes_expected : int
        Of all rows.
    note : str
        What was done, as printed.
    """

    anywhere = True

    def __init__(self, folder: object, bytes_expected: int, note: str) -> None:
        place = None if folder is None else str(folder)
        try:
            self.folder = Path(tempfile.mkdtemp(prefix="mixbridge-", dir=place))
        except OSError as error:
            raise DataError(f"No temporary folder can be made in {place}: {error}.") from error
        self.remove = weakref.finalize(self, shutil.rmtree, self.folder, ignore_errors=True)
        self.note = note
        self.names: tuple[object, ...] = ()
        self.rows_total = 0
        self._paths: list[Path] = []
        free = shutil.disk_usage(self.folder).free
        if 1.25 * bytes_expected > free:
            self.remove()
            raise DataError(
                f"Sorting the rows in temporary files takes about {1.25 * bytes_expected / 2**30:,.1f} GiB, and the "
                f"disk of {self.folder.parent} has {free / 2**30:,.1f} GiB left. Name a folder on a larger disk with "
                "ChunkOptions(spill=folder)."
            )

    def fill(self, pile: Pile, sorter: Sorter, rows: int) -> None:
        """Take the rows of a pile, sorted."""
        ipc, arrow = import_pyarrow(_WHAT, "pyarrow.ipc"), import_pyarrow(_WHAT)
        for path in pile.sort(sorter, rows):
            with arrow.OSFile(str(path)) as file, ipc.open_file(file) as reader:
                self.names = tuple(reader.schema.names)
                self.rows_total += sum(reader.get_batch(i).num_rows for i in range(reader.num_record_batches))
            self._paths.append(path)

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the columns, file by file.

        Raises
        ------
        DataError
            If a file cannot be read.
        """
        ipc, arrow = import_pyarrow(_WHAT, "pyarrow.ipc"), import_pyarrow(_WHAT)
        for path in self._paths:
            place = f"{path}, piece 0"
            try:
                with arrow.OSFile(str(path)) as file, ipc.open_file(file) as reader:
                    for number in range(reader.num_record_batches):
                        place = f"{path}, piece {number}"
                        table = arrow.Table.from_batches([reader.get_batch(number)])
                        yield Chunk(to_pandas(table.select(list(columns))), place)
            except (arrow.ArrowException, OSError) as error:
                raise DataError(f"{place} cannot be read: {error}") from error


def _remove(files: Sequence[Path]) -> None:
    for path in files:
        path.unlink()
