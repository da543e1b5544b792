"""CSV and Parquet files as sources."""

from __future__ import annotations

import csv
import os
import warnings
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from mixbridge.errors import DataError
from mixbridge.sources.arrow import import_pyarrow, to_pandas

__all__ = ["CsvSource", "ParquetSource", "read_table"]

_INTEGER = r"-?(?:0|[1-9]\d*)"
_INTEGER_OR_WHOLE = r"-?(?:0|[1-9]\d*)(?:\.0*)?"
_DECIMAL = r"-?(?:0|[1-9]\d*)(?:\.\d+)?"
_ISO_DATE = r"\d{4}-\d{2}(?:-\d{2}(?:[T ].*)?)?"
_LARGEST = 18  # every integer of so many digits fits in 64 bits


def read_key(text: pd.Series, *, fractions: bool) -> pd.Series:
    """Turn a key read as text into integers or dates where no key changes, else leave it text.

    ``007`` and ``7`` are two keys, so a column with either stays text; whole numbers of any length never pass
    through a float.

    Parameters
    ----------
    text : pandas.Series
        Text with missing values.
    fractions : bool
        Whether decimal fractions become floats: as periods they do, because they have an order; as units not.
    """
    present = text.dropna()
    if present.empty:
        return text
    for pattern in (_INTEGER, _INTEGER_OR_WHOLE):
        if present.str.fullmatch(pattern).all():
            digits = text.str.replace(r"\.0*$", "", regex=True)
            if present.str.len().max() <= _LARGEST and not (digits == "-0").any():
                return digits.astype("Int64")
            return text
    if fractions and present.str.fullmatch(_DECIMAL).all():
        numbers = text.astype(np.float64)
        return numbers if numbers.nunique() == present.nunique() else text
    if present.str.fullmatch(_ISO_DATE).all():
        dates = pd.to_datetime(text, format="ISO8601", errors="coerce")
        if dates.isna().sum() == text.isna().sum() and dates.nunique() == present.nunique():
            return dates
    return text


@dataclass(frozen=True, slots=True)
class CsvSource:
    """Columns of a delimited text file.

    Parameters
    ----------
    path : pathlib.Path
        The file; a compressed one is recognised by its ending.
    separator : str
        What stands between fields.
    header : tuple of str
        The names in the first line.
    """

    path: Path
    separator: str
    header: tuple[str, ...]

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return self.header

    @property
    def index_names(self) -> tuple[object, ...]:
        """Nothing: rows are labelled by their position from 0."""
        return ()

    def frame(self, columns: Sequence[str], keys: Sequence[str] = ()) -> pd.DataFrame:
        """Read the columns; keys are read as text first, see `read_key`.

        All columns are parsed, since only then are lines with too many fields noticed.
        """
        try:
            with warnings.catch_warnings():
                warnings.simplefilter(
                    "error", pd.errors.ParserWarning
                )  # fields beyond the header are not cut off
                data = pd.read_csv(
                    self.path,
                    sep=self.separator,
                    index_col=False,
                    dtype=dict.fromkeys(keys, "str"),
                    encoding="utf-8-sig",
                    low_memory=False,
                )
        except (pd.errors.ParserError, pd.errors.ParserWarning, UnicodeDecodeError, ValueError) as error:
            raise DataError(f"{self.path} cannot be read as a table: {error}") from error
        read = {key: read_key(data[key], fractions=place > 0) for place, key in enumerate(keys)}
        return data[list(columns)].assign(**read)


@dataclass(frozen=True, slots=True)
class ParquetSource:
    """Columns of a Parquet file; only those asked for are read.

    Parameters
    ----------
    path : pathlib.Path
        The file.
    header : tuple of str
        The names in its schema.
    """

    path: Path
    header: tuple[str, ...]

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return self.header

    @property
    def index_names(self) -> tuple[object, ...]:
        """Nothing: rows are labelled by their position from 0."""
        return ()

    def frame(self, columns: Sequence[str], keys: Sequence[str] = ()) -> pd.DataFrame:
        """Read the columns."""
        pa = import_pyarrow("A Parquet file")
        parquet = import_pyarrow("A Parquet file", "pyarrow.parquet")

        try:
            with parquet.ParquetFile(self.path) as file:
                return to_pandas(file.read(columns=list(columns)).select(list(columns)))
        except (pa.ArrowException, OSError) as error:
            raise DataError(f"{self.path} cannot be read as a Parquet file: {error}") from error


def read_table(path: str | os.PathLike[str]) -> CsvSource | ParquetSource:
    """Open a CSV or Parquet file: names now, columns when they are asked for.

    Parameters
    ----------
    path : path
        A file ending in ``.parquet`` or ``.pq``, or a text file with a header line and fields separated by
        commas, semicolons or tabs (the one most frequent in the header).

    Returns
    -------
    CsvSource or ParquetSource
        What `mixbridge.crosscheck` takes as data.
    """
    place = Path(path)
    if not place.is_file():
        raise DataError(f"There is no file {place}." + (" It is a folder." if place.is_dir() else ""))
    if place.suffix.lower() in (".parquet", ".pq"):
        pa = import_pyarrow("A Parquet file")
        parquet = import_pyarrow("A Parquet file", "pyarrow.parquet")

        try:
            with parquet.ParquetFile(place) as file:
                return ParquetSource(place, tuple(file.schema_arrow.names))
        except (pa.ArrowException, OSError) as error:
            raise DataError(f"{place} cannot be read as a Parquet file: {error}") from error
    return _open_csv(place)


def _open_csv(place: Path) -> CsvSource:
    """Read the header line of a delimited text file."""
    try:
        # Read as one field: the line itself, through whatever compression the ending says.
        line = pd.read_csv(
            place, sep="\x00", header=None, nrows=1, dtype="str", encoding="utf-8-sig", quoting=csv.QUOTE_NONE
        ).iloc[0, 0]
    except pd.errors.EmptyDataError as error:
        raise DataError(
            f"{place} is empty; needed is a header line with column names and a row per line."
        ) from error
    except (UnicodeDecodeError, ValueError, OSError) as error:
        raise DataError(
            f"{place} cannot be read as UTF-8 text ({error}). Save it as CSV in UTF-8, or as Parquet."
        ) from error
    separator = max(",;\t", key=str(line).count)
    return CsvSource(place, separator, tuple(next(csv.reader([str(line)], delimiter=separator))))
