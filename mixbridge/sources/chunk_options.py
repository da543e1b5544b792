"""How rows are read in chunks, and whether they are."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from pathlib import Path

import pandas as pd

from mixbridge.errors import OptionError
from mixbridge.sources.chunks import CHUNK_ROWS, ChunkedSource
from mixbridge.sources.files import CsvSource, ParquetSource

__all__ = ["IN_ONE_PIECE", "RECORDS", "ChunkOptions", "Progress", "comes_in_chunks"]

IN_ONE_PIECE = {".csv": 2**30, ".parquet": 2**28, ".pq": 2**28}
"""Bytes of a file up to which it is read in one piece unless chunks are asked for; Parquet is compressed."""
RECORDS = 2**27
"""Bytes of unit records that are kept of sorted rows unless asked for."""


Progress = Callable[[int, int | None], object]
"""Takes the rows read so far in a pass, and how many there are, where that is known."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ChunkOptions:
    """How rows are read in chunks.

    Parameters
    ----------
    rows : int
        Most rows of a chunk, where the source does not decide.
    workers : int, optional
        Threads that are busy with rows, the caller's own among them; two unless given, one on a machine with one
        processor. Results do not depend on it.
    memory_limit : int
        Bytes that the moments of the units may take; a run that would take more is refused, with the estimate,
        before they are taken.
    sorted_by_unit : bool, optional
        True declares that rows are sorted by unit, keys never falling: that is verified while reading. False takes
        them as unsorted. Unless given, it is found out.
    unit_records : bool, optional
        Whether the counts and means of every unit are kept, which predicted effects and cluster-robust covariances
        start from. False keeps closed moments only and takes rows sorted by unit. Unless given, they are kept, but of
        rows sorted by unit no more than `RECORDS` bytes: beyond that memory does not grow with the number of units.
    spill : bool or path
        Whether rows may be sorted by unit in temporary files where nothing else helps: units that do not fit
        into `memory_limit`, rows that are not in the order of units and periods although periods are named. A path
        is the folder to make them in. The files are removed when the study is no longer in use, or on an error.
    checkpoint : path, optional
        A folder in which the pass that takes the moments saves its state now and then, to go on from there if it was
        interrupted.
    checkpoint_seconds : float
        Least time between two such saves.
    progress : callable, optional
        Called with the rows read in this pass, and how many there are or None, after each chunk.
    """

    rows: int = CHUNK_ROWS
    workers: int | None = None
    memory_limit: int = 2**32
    sorted_by_unit: bool | None = None
    unit_records: bool | None = None
    spill: bool | str | os.PathLike[str] = False
    checkpoint: str | os.PathLike[str] | None = None
    checkpoint_seconds: float = 30.0
    progress: Progress | None = None

    def __post_init__(self) -> None:
        """Check the options."""
        for name in ("rows", "memory_limit", "workers"):
            value = getattr(self, name)
            if value is None and name == "workers":
                continue
            if isinstance(value, bool) or not isinstance(value, int) or value < 1:
                raise OptionError(f"{name}={value!r} is not allowed; allowed: a whole number from 1 on.")
        for name in ("sorted_by_unit", "unit_records"):
            value = getattr(self, name)
            if value is not None and not isinstance(value, bool):
                raise OptionError.not_among(name, value, (True, False, None))
        if not isinstance(self.spill, bool | str | os.PathLike):
            raise OptionError(f"spill={self.spill!r} is not allowed; allowed: True, False, or a folder.")
        if not (self.checkpoint is None or isinstance(self.checkpoint, str | os.PathLike)):
            raise OptionError(f"checkpoint={self.checkpoint!r} is not allowed; allowed: a folder.")
        if not self.checkpoint_seconds >= 0:
            raise OptionError(
                f"checkpoint_seconds={self.checkpoint_seconds!r} is not allowed; allowed: a number from 0 on."
            )
        if not (self.progress is None or callable(self.progress)):
            raise OptionError(f"progress={self.progress!r} is not allowed; allowed: a function.")
        if self.unit_records is False and self.sorted_by_unit is False and self.spill is False:
            raise OptionError(
                "unit_records=False takes rows sorted by unit, and sorted_by_unit=False says that they are not. Leave "
                "one of them out, or allow spill=True to have them sorted."
            )

    @property
    def threads(self) -> int:
        """Number of threads."""
        return min(2, os.cpu_count() or 1) if self.workers is None else self.workers


def comes_in_chunks(data: object) -> bool:  # noqa: PLR0911  (one return per kind reads best)
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
    if isinstance(data, ChunkedSource):
        return True
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
