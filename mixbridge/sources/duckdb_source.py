"""A DuckDB relation as a source: of rows, and of the answers to queries over it.

DuckDB is imported only where one of its relations is handed over.
"""

from __future__ import annotations

import importlib
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from mixbridge.errors import DataError
from mixbridge.sources.arrow import import_pyarrow, to_pandas
from mixbridge.sources.chunks import CHUNK_ROWS, Chunk

__all__ = ["ROWS", "RelationSource", "is_relation", "quoted"]

ROWS = "mixbridge_rows"
"""What the relation is called in a query over it."""


def is_relation(data: object) -> bool:
    """Whether data are a DuckDB relation, found out without importing DuckDB."""
    return type(data).__module__.partition(".")[0] in ("duckdb", "_duckdb") and all(
        hasattr(data, name) for name in ("query", "columns", "types")
    )


def quoted(name: str) -> str:
    """Return the name of a column as SQL takes it, whatever is in it."""
    return '"' + name.replace('"', '""') + '"'


@dataclass(frozen=True, slots=True, eq=False)
class RelationSource:
    """A DuckDB relation, which is computed anew each time it is read.

    Parameters
    ----------
    relation : duckdb.DuckDBPyRelation
    rows : int
        Most rows of a chunk.
    note : str, optional
        What was done with it, as printed.
    """

    relation: Any
    rows: int = CHUNK_ROWS
    note: str | None = None

    @property
    def names(self) -> tuple[object, ...]:
        """Names of all columns."""
        return tuple(self.relation.columns)

    @property
    def types(self) -> dict[str, str]:
        """Type of each column, in DuckDB's words."""
        return {
            name: str(kind.id) for name, kind in zip(self.relation.columns, self.relation.types, strict=True)
        }

    @contextmanager
    def _answer(self, sql: str) -> Iterator[Any]:
        """Open the answer to a query as a reader of Arrow batches; the connection is busy until it is closed."""
        errors: Any = importlib.import_module("duckdb").Error
        try:
            answer = self.relation.query(ROWS, sql)
            reader = (getattr(answer, "to_arrow_reader", None) or answer.fetch_record_batch)(self.rows)
            try:
                yield reader
            finally:
                reader.close()
        except errors as error:
            raise DataError(
                f"The database cannot answer a query over the relation: {error}. A relation is read several times; "
                "one that is made from a stream is not."
            ) from error

    def table(self, sql: str) -> Any:
        """Return the answer to a query over the relation, which is called `ROWS` in it, as one Arrow table."""
        with self._answer(sql) as reader:
            return reader.read_all()

    def stream(self, sql: str) -> Iterator[Any]:
        """Yield the answer to a query as Arrow record batches."""
        with self._answer(sql) as reader:
            yield from reader

    def chunks(self, columns: Sequence[str], keys: Sequence[str] = ()) -> Iterator[Chunk]:
        """Read the rows from the start."""
        pa = import_pyarrow("A DuckDB relation")
        listed = ", ".join(quoted(name) for name in columns)
        seen = 0
        for batch in self.stream(f"SELECT {listed} FROM {ROWS}"):
            yield Chunk(to_pandas(pa.Table.from_batches([batch])), f"the rows from {seen} on")
            seen += batch.num_rows
