"""Delimited text larger than memory, read some lines at a time."""

from __future__ import annotations

import warnings
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

import pandas as pd

from mixbridge.errors import DataError
from mixbridge.sources.chunks import CHUNK_ROWS, Chunk
from mixbridge.sources.files import CsvSource, read_key

__all__ = ["CsvChunks"]

Known = dict[str, tuple[pd.Index, pd.Series]]
"""The distinct texts of each key, and what they are read as, a missing one last."""


@dataclass(frozen=True, slots=True)
class CsvChunks:
    """The rows of a delimited text file.

    A key is read as text first and becomes an integer or a date only if it can in all lines, as for a file
    that is read whole; the distinct keys are gathered for that in a pass over the file.

    Parameters
    ----------
    source : CsvSource
        The file, its separator and its header.
    rows : int
        Rows of a chunk.
    note : str, optional
        Nothing unless stated.
    known : dict
        Keys that were gathered already.
    """

    source: CsvSource
    rows: int = CHUNK_ROWS
    note: str | None = None
    known: dict[tuple[str, ...], Known] = field(default_factory=dict, repr=False, compare=False)

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return self.source.names

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the columns.

        Raises
        ------
        DataError
            If the lines are no table, naming the chunk.
        """
        names = tuple(keys)
        if names not in self.known:
            self.known[names] = self._gather(names)
        known = self.known[names]
        for chunk in self._read(keys):
            read = {
                key: values.iloc[texts.get_indexer(pd.Index(chunk.frame[key], dtype=object))].set_axis(
                    chunk.frame.index
                )
                for key, (texts, values) in known.items()
            }
            yield Chunk(chunk.frame[list(columns)].assign(**read), chunk.place)

    def _gather(self, keys: Sequence[str]) -> Known:
        """Pass over the file for the distinct texts of each key."""
        found: dict[str, pd.Series] = {key: pd.Series([], dtype="str") for key in keys}
        for chunk in self._read(keys) if keys else ():
            for key in keys:
                found[key] = pd.Series(
                    pd.concat([found[key], chunk.frame[key].dropna().drop_duplicates()]).unique(), dtype="str"
                )
        known = {}
        for place, (key, texts) in enumerate(found.items()):
            with_gap = pd.concat([texts, pd.Series([None], dtype="str")], ignore_index=True)
            known[key] = pd.Index(texts, dtype=object), read_key(with_gap, fractions=place > 0)
        return known

    def _read(self, keys: Sequence[str]) -> Iterator[Chunk]:
        """Parse the lines; all columns, since only then are lines with too many fields noticed."""
        number, place = 0, str(self.source.path)
        try:
            with (
                warnings.catch_warnings(),
                pd.read_csv(
                    self.source.path,
                    sep=self.source.separator,
                    index_col=False,
                    dtype=dict.fromkeys(keys, "str"),
                    encoding="utf-8-sig",
                    low_memory=False,
                    chunksize=self.rows,
                ) as reader,
            ):
                warnings.simplefilter("error", pd.errors.ParserWarning)
                while True:
                    place = f"{self.source.path}, lines from {number * self.rows + 2}"
                    try:
                        frame = reader.get_chunk()
                    except StopIteration:
                        return
                    yield Chunk(frame, place)
                    number += 1
        except (pd.errors.ParserError, pd.errors.ParserWarning, UnicodeDecodeError, ValueError) as error:
            raise DataError(f"{place} cannot be read as a table: {error}") from error
