"""Anything that hands over an Arrow stream as a source; pyarrow is imported here and nowhere else."""

from __future__ import annotations

import importlib
from collections.abc import Sequence
from typing import Any

import pandas as pd

from mixbridge.errors import DataError

__all__ = ["ArrowSource", "import_pyarrow", "to_pandas"]


def import_pyarrow(what: str, module: str = "pyarrow") -> Any:
    """Import pyarrow, or say which extra brings it.

    Parameters
    ----------
    what : str
        What needs it, for the message.
    module : str
        The module of the package.
    """
    try:
        return importlib.import_module(module)
    except ImportError as error:
        raise DataError(
            f"{what} needs the package pyarrow, which is not installed: pip install 'mixbridge[sources]'."
        ) from error


def to_pandas(table: Any) -> pd.DataFrame:
    """Turn an Arrow table into a frame in which no integer passes through a float.

    Integers and truth values with gaps become pandas' nullable types; decimals become doubles when they are
    numbers to compute with, and stay exact when they are whole.
    """
    pa = import_pyarrow("An Arrow table")
    columns: dict[str, Any] = {}
    for name, column in zip(table.column_names, table.columns, strict=True):
        kind = column.type
        if pa.types.is_null(kind):
            columns[name] = pd.Series([None] * len(column), dtype=object)
        elif column.null_count and (pa.types.is_integer(kind) or pa.types.is_boolean(kind)):
            title = (
                "boolean"
                if pa.types.is_boolean(kind)
                else str(kind).replace("uint", "UInt").replace("int", "Int")
            )
            nullable = pd.api.types.pandas_dtype(title)
            columns[name] = column.to_pandas(types_mapper={kind: nullable}.get)
        elif not column.null_count and (pa.types.is_float64(kind) or pa.types.is_int64(kind)):
            columns[name] = column.to_numpy()  # the same as below, without making a series of it
        elif pa.types.is_decimal(kind):
            columns[name] = column.to_pandas() if kind.scale <= 0 else column.cast(pa.float64()).to_pandas()
        else:
            columns[name] = column.to_pandas()
    return pd.DataFrame(columns, copy=False)


class ArrowSource:
    """Columns of an Arrow stream.

    The stream is read once, batch by batch, and only the columns asked for are kept.

    Parameters
    ----------
    data : object
        Anything with ``__arrow_c_stream__``: an Arrow table or reader, a frame of another library, a query
        result.
    """

    __slots__ = ("_reader",)

    def __init__(self, data: Any) -> None:
        pa = import_pyarrow(f"Reading a {type(data).__name__} through its Arrow stream")
        try:
            self._reader = pa.RecordBatchReader.from_stream(data)
        except (pa.ArrowException, TypeError) as error:
            raise DataError(
                f"The Arrow stream of the {type(data).__name__} is not a table of named columns: {error}"
            ) from error

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return tuple(self._reader.schema.names)

    @property
    def index_names(self) -> tuple[object, ...]:
        """Nothing: Arrow rows have no labels but their position."""
        return ()

    def frame(self, columns: Sequence[str], keys: Sequence[str] = ()) -> pd.DataFrame:
        """Read the stream to its end and return the columns; rows are labelled by position from 0."""
        pa = import_pyarrow("An Arrow stream")
        wanted = list(columns)
        try:
            batches = [batch.select(wanted) for batch in self._reader]
        except pa.ArrowException as error:
            raise DataError(
                f"The Arrow stream broke off or was read before: {error}. A one-shot stream can be read "
                "once; hand over a table, or make the stream again."
            ) from error
        fields = [self._reader.schema.field(name) for name in wanted]
        return to_pandas(pa.Table.from_batches(batches, schema=pa.schema(fields)))
