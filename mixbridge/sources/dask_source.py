"""A Dask DataFrame as a source; Dask is imported only where one is handed over."""

from __future__ import annotations

import importlib
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import pandas as pd

from mixbridge.errors import DataError
from mixbridge.sources.chunks import Chunk

__all__ = ["DaskSource", "computed", "delayed", "is_dask", "kept", "tree"]

WIDTH = 8
"""Results merged by one task of a tree."""


def is_dask(data: object) -> bool:
    """Whether data are a Dask DataFrame, found out without importing Dask."""
    return type(data).__module__.partition(".")[0] in ("dask", "dask_expr") and all(
        hasattr(data, name) for name in ("to_delayed", "npartitions", "columns")
    )


def delayed(function: Callable[..., Any], *given: Any) -> Any:
    """Return a function as a lazy task of Dask; `given` are its first arguments, sent as they are."""
    dask: Any = importlib.import_module("dask")
    return dask.delayed(partial(function, *given) if given else function, pure=False, traverse=False)


def computed(*tasks: Any) -> tuple[Any, ...]:
    """Let Dask compute lazy tasks with the scheduler in force, and fetch what they return."""
    dask: Any = importlib.import_module("dask")
    found: tuple[Any, ...] = dask.compute(*tasks)
    return found


def kept(tasks: Sequence[Any]) -> list[Any]:
    """Let Dask compute lazy tasks and keep what they return where it is: on the workers of a cluster, else here."""
    dask: Any = importlib.import_module("dask")
    return list(dask.persist(*tasks))


def tree(function: Callable[[list[Any]], Any], items: Sequence[Any]) -> Any:
    """Merge lazy results a few at a time, in an order that depends on their number only.

    Parameters
    ----------
    function : callable
        Takes a list of results in order and returns one of the same kind.
    items : sequence of dask.delayed.Delayed
        At least one.
    """
    level = list(items)
    while True:
        level = [delayed(function)(level[at : at + WIDTH]) for at in range(0, len(level), WIDTH)]
        if len(level) == 1:
            return level[0]


@dataclass(frozen=True, slots=True, eq=False)
class DaskSource:
    """The partitions of a Dask DataFrame.

    Parameters
    ----------
    frame : dask.dataframe.DataFrame
    note : str, optional
        What was done with it, as printed.
    """

    frame: Any
    note: str | None = None

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return tuple(self.frame.columns)

    @property
    def index_names(self) -> tuple[object, ...]:
        """Names of what labels the rows without being a column."""
        return tuple(name for name in self.frame.index._meta.names if name is not None)

    def parts(self, columns: Sequence[str]) -> list[tuple[Any, str]]:
        """Return each partition as a lazy frame of some columns, and its name in messages.

        Parameters
        ----------
        columns : sequence of str
            Only these are read where the source of the partitions can skip the others.
        """
        lazy = self.frame[list(columns)].to_delayed()
        return [(part, f"partition {number}") for number, part in enumerate(lazy)]

    def each(self, function: Callable[..., Any], columns: Sequence[str], *given: Any) -> list[Any]:
        """Call ``function(*given, place, frame)`` on every partition where it lies, and fetch what it returns.

        Parameters
        ----------
        function : callable
            Returns something small.
        columns : sequence of str
        *given
            Sent along.
        """
        calls = [delayed(function, *given, place)(part) for part, place in self.parts(columns)]
        return list(computed(*calls))

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Fetch one partition after the other into this process."""
        for part, place in self.parts(columns):
            frame = part.compute()
            if not isinstance(frame, pd.DataFrame):
                raise DataError(f"{place} is a {type(frame).__name__}; needed are pandas DataFrames.")
            yield Chunk(frame, place)
