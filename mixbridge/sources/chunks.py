"""What a source of rows in chunks can do, and the one made of frames."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import Protocol, runtime_checkable

import pandas as pd

from mixbridge.errors import DataError

__all__ = [
    "CHUNK_ROWS",
    "Chunk",
    "ChunkedSource",
    "FrameChunks",
    "drawn_anywhere",
    "identity_of",
    "identity_of_files",
    "missing_columns",
    "rows_in",
]

CHUNK_ROWS = 131072
"""Rows of a chunk unless stated."""


@dataclass(frozen=True, slots=True, eq=False)
class Chunk:
    """Some rows, and where they come from.

    Parameters
    ----------
    frame : pandas.DataFrame
        The columns asked for.
    place : str
        File and row group, or the number of the frame, as messages name it.
    """

    frame: pd.DataFrame
    place: str


@runtime_checkable
class ChunkedSource(Protocol):
    """Rows that come in chunks and can be read again from the start."""

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns, in order."""
        ...

    @property
    def note(self) -> str | None:
        """What was done to make the rows readable more than once, or None."""
        ...

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the rows from the start.

        Parameters
        ----------
        columns : sequence of str
            Names among `names`, each once.
        keys : sequence of str
            Those of `columns` that identify the unit and then the period: read so that no two different keys
            become one.
        """
        ...


def drawn_anywhere(source: ChunkedSource) -> bool:
    """Whether chunks may be drawn in another thread than the caller's: a source says so by `anywhere`."""
    return bool(getattr(source, "anywhere", False))


def rows_in(source: ChunkedSource) -> int | None:
    """Return the number of all rows, where a source knows it without reading them: it has `rows_total` then."""
    total: int | None = getattr(source, "rows_total", None)
    return total


def identity_of(source: ChunkedSource) -> str | None:
    """Return what changes when the rows do, where a source knows: it has `identity` then."""
    identity: str | None = getattr(source, "identity", None)
    return identity


def identity_of_files(paths: Sequence[Path]) -> str:
    """Return names, sizes and times of last change of files as text."""
    found = [(str(path), path.stat()) for path in paths]
    return "\n".join(f"{name} {stat.st_size} {stat.st_mtime_ns}" for name, stat in found)


def missing_columns(wanted: Sequence[str], present: Sequence[object], place: str) -> None:
    """Refuse a part of the data that lacks a column which the first part has."""
    gone = [name for name in wanted if name not in present]
    if gone:
        raise DataError(
            f"{place} has no column {', '.join(map(repr, gone))}, which the parts before it have: the columns "
            "change within the data. Give all parts the same columns."
        )


@dataclass(frozen=True, slots=True)
class FrameChunks:
    """Frames that a function makes afresh each time it is called.

    Parameters
    ----------
    make : callable
        Returns the frames, the same ones each time.
    names : tuple
        Names of the columns of the first frame.
    note : str, optional
        Nothing unless stated.
    """

    make: Callable[[], Iterable[pd.DataFrame]]
    names: tuple[object, ...]
    note: str | None = None

    @classmethod
    def of(cls, make: Callable[[], Iterable[pd.DataFrame]]) -> FrameChunks:
        """Look at the first frame for the names of the columns."""
        first = list(islice(iter(make()), 1))
        if not first:
            raise DataError("The data have no rows: the function given as data yields no frame.")
        if not isinstance(first[0], pd.DataFrame):
            raise DataError(
                f"The function given as data yields a {type(first[0]).__name__}; needed are pandas DataFrames."
            )
        return cls(make, tuple(first[0].columns))

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Yield the columns of each frame."""
        for number, frame in enumerate(self.make()):
            missing_columns(columns, list(frame.columns), f"frame {number}")
            yield Chunk(frame[list(columns)], f"frame {number}")
