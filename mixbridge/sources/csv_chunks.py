"""Delimited text larger than memory, read some lines at a time."""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import pandas as pd

from mixbridge.errors import DataError
from mixbridge.sources.chunks import CHUNK_ROWS, Chunk, identity_of_files
from mixbridge.sources.csv_keys import KeyTexts
from mixbridge.sources.files import CsvSource

__all__ = ["CsvChunks"]


@dataclass(frozen=True, slots=True)
class CsvChunks:
    """The rows of a delimited text file.

    A key is read as text first and becomes an integer or a date only if it can in all lines, as for a file
    that is read whole; that is found out in a pass over the file.

    Parameters
    ----------
    source : CsvSource
        The file, its separator and its header.
    rows : int
        Rows of a chunk.
    note : str, optional
        Nothing unless stated.
    known : dict
        Keys that were looked at already.
    """

    source: CsvSource
    rows: int = CHUNK_ROWS
    note: str | None = None
    known: dict[str, KeyTexts] = field(default_factory=dict, repr=False, compare=False)

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return self.source.names

    @property
    def identity(self) -> str:
        """Name, size and time of the file."""
        return identity_of_files([Path(self.source.path)])

    def look_at_keys(self, keys: Sequence[str]) -> int:
        """Pass over the file to find out what the keys are; return the number of rows read.

        Parameters
        ----------
        keys : sequence of str
            Unit, then period: of the periods the distinct texts are kept, of units only where that cannot be avoided.
        """
        if all(key in self.known for key in keys):
            return 0
        found = {key: KeyTexts(fractions=place > 0) for place, key in enumerate(keys)}
        rows = self._look(found, keys)
        undecided = {key: texts for key, texts in found.items() if texts.undecided}
        if undecided:
            for texts in undecided.values():
                texts.keep_all()
            rows += self._look(undecided, keys)
        for key, texts in found.items():
            texts.settle()
            self.known[key] = texts
        return rows

    def _look(self, found: dict[str, KeyTexts], keys: Sequence[str]) -> int:
        rows = 0
        for chunk in self._read(keys):
            rows += len(chunk.frame)
            for key, texts in found.items():
                texts.add(chunk.frame[key])
        return rows

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the columns.

        Raises
        ------
        DataError
            If the lines are no table, naming the chunk.
        """
        self.look_at_keys(keys)
        for chunk in self._read(keys):
            read = {key: self.known[key].read(chunk.frame[key]) for key in keys}
            yield Chunk(chunk.frame[list(columns)].assign(**read), chunk.place)

    def _read(self, keys: Sequence[str]) -> Iterator[Chunk]:
        """Parse the lines; all columns, since only then are lines with too many fields noticed."""
        number, place = 0, str(self.source.path)
        try:
            with pd.read_csv(
                self.source.path,
                sep=self.source.separator,
                index_col=False,
                dtype=dict.fromkeys(keys, "str"),
                encoding="utf-8-sig",
                low_memory=False,
                chunksize=self.rows,
            ) as reader:
                while True:
                    place = f"{self.source.path}, lines from {number * self.rows + 2}"
                    try:
                        with warnings.catch_warnings():
                            warnings.simplefilter("error", pd.errors.ParserWarning)
                            frame = reader.get_chunk()
                    except StopIteration:
                        return
                    yield Chunk(frame, place)
                    number += 1
        except (pd.errors.ParserError, pd.errors.ParserWarning, UnicodeDecodeError, ValueError) as error:
            raise DataError(f"{place} cannot be read as a table: {error}") from error
